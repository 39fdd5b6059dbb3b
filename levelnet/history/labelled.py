"""Results as xarray Datasets that say their units, what they are, and what made them."""

from __future__ import annotations

from collections.abc import Iterable
from importlib import import_module
from typing import TYPE_CHECKING, Any

from ..atomic.helium_levels import HeliumLevels

if TYPE_CHECKING:
    import xarray

    from .result import History, RadiationField, SpeciesPopulations

HISTORY_LABELS = {
    "redshift": ("1", "redshift, descending"),
    "free_electron_fraction": ("1", "free electrons per hydrogen nucleus"),
    "ionized_hydrogen_fraction": ("1", "ionized part of the hydrogen nuclei"),
    "neutral_hydrogen_fraction": ("1", "neutral part of the hydrogen nuclei"),
    "neutral_helium_fraction": ("1", "neutral part of the helium nuclei"),
    "singly_ionized_helium_fraction": ("1", "singly ionized part of the helium nuclei"),
    "doubly_ionized_helium_fraction": ("1", "doubly ionized part of the helium nuclei"),
    "matter_temperature_k": ("K", "matter temperature"),
    "radiation_temperature_k": ("K", "radiation temperature"),
    "hydrogen_density_cm3": ("cm-3", "number density of all hydrogen nuclei"),
    "hubble_rate_per_s": ("s-1", "expansion rate"),
    "cosmic_time_s": ("s", "time since the Big Bang"),
    "optical_depth": ("1", "Thomson optical depth from the lowest output redshift up"),
    "visibility": (
        "megaparsec-1",
        "visibility function (d tau / d eta) exp(-tau) per comoving length",
    ),
}
"""Unit, as files write it, and long name of every array over redshift, and of it."""

_LABELS = HISTORY_LABELS | {
    "photon_energy_ev": ("eV", "photon energy"),
    "log_distortion": ("1", "ln of the occupation number over that of the blackbody at T_r"),
}


def labelled(name: str, dimensions: str | tuple[str, ...], values: Any) -> Any:
    """One variable of a Dataset with its attributes; a name of a history or of a field."""
    units, long_name = _LABELS[name]
    return dimensions, values, {"units": units, "long_name": long_name}


def made_by() -> dict[str, str]:
    """What every Dataset says of itself: the version of the program."""
    # By its name, since nothing down here may import the top of the package.
    return {"levelnet_version": import_module("levelnet").__version__}


def over_redshift(record: object, names: Iterable[str]) -> dict[str, Any]:
    """Arrays of a record over its redshifts, redshift among them, by their names."""
    return {name: labelled(name, "redshift", getattr(record, name)) for name in names}


def history_dataset(history: History) -> xarray.Dataset:
    """Everything of a history over redshift: arrays, populations, channels; see `History`."""
    import xarray

    from .result import HISTORY_ARRAYS

    found = over_redshift(history, ("redshift", *HISTORY_ARRAYS))
    for one in history.species:
        found |= _populations(one)
    found |= _channels(history)
    if history.field is not None:
        # At redshifts of its own: the Dataset of the field itself is `field.to_xarray()`.
        found |= _field(history.field, "field_redshift")
    attributes = {
        "title": history.setup.title,
        "setup_digest": history.setup.digest,
        "setup": history.setup.to_toml(),
        "outcome": history.outcome.value,
        "notes": "\n".join(history.notes),
        **made_by(),
    }
    return xarray.Dataset(found, attrs=attributes).set_coords(["redshift", *_coordinates(found)])


def field_dataset(field: RadiationField) -> xarray.Dataset:
    """The radiation field over redshift and photon energy."""
    import xarray

    return xarray.Dataset(_field(field, "redshift"), attrs=made_by())


def _field(field: RadiationField, redshift: str) -> dict[str, Any]:
    units, long_name = HISTORY_LABELS["redshift"]
    return {
        redshift: (redshift, field.redshift, {"units": units, "long_name": long_name}),
        "photon_energy_ev": labelled(
            "photon_energy_ev", "photon_energy_ev", field.photon_energy_ev
        ),
        "log_distortion": labelled(
            "log_distortion", (redshift, "photon_energy_ev"), field.log_distortion
        ),
    }


def _populations(species: SpeciesPopulations) -> dict[str, Any]:
    """Populations of one species and the quantum numbers of its levels; "H I" ends in "_h_i"."""
    end = species.name.lower().replace(" ", "_")
    level, levels = f"level_{end}", species.levels
    found: dict[str, Any] = {
        f"population_{end}": (
            ("redshift", level),
            species.population,
            {"units": "1", "long_name": f"atoms of {species.name} in a level per hydrogen nucleus"},
        ),
        f"log_departure_{end}": (
            ("redshift", level),
            species.log_departure,
            {"units": "1", "long_name": f"ln of the departure coefficient of {species.name}"},
        ),
        f"n_{end}": (level, levels.n, {"units": "1", "long_name": "principal quantum number"}),
        f"l_{end}": (
            level,
            levels.l,
            {"units": "1", "long_name": "angular quantum number; -1: a whole shell"},
        ),
        f"energy_{end}_ev": (
            level,
            levels.energy_ev,
            {"units": "eV", "long_name": "energy above the ground state"},
        ),
    }
    if isinstance(levels, HeliumLevels):
        said = {"units": "1", "long_name": "total spin: 0 singlets, 1 triplets"}
        found[f"spin_{end}"] = (level, levels.spin, said)
    return found


def _channels(history: History) -> dict[str, Any]:
    channels = history.channels
    rows = ("redshift", "channel")
    return {
        "channel": (
            "channel",
            list(channels.names),
            {"long_name": "way to the ground state of H I"},
        ),
        "channel_net_rate_per_s": (
            rows,
            channels.net_rate_per_s,
            {"units": "s-1", "long_name": "net transitions per hydrogen nucleus"},
        ),
        "channel_cumulative_share": (
            rows,
            channels.cumulative_share,
            {"units": "1", "long_name": "part of all net recombinations since the start"},
        ),
    }


def _coordinates(found: dict[str, Any]) -> list[str]:
    """Names of what labels the axes rather than being a result."""
    ends = ("n_", "l_", "energy_", "spin_")
    fixed = {"channel", "field_redshift", "photon_energy_ev"}
    return [name for name in found if name in fixed or name.startswith(ends)]
