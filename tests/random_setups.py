"""Setups drawn at random over every key, whole ones and broken ones; all values are invented."""

from __future__ import annotations

from typing import Any

import numpy as np

Table = dict[str, Any]

# What may go wrong with one key, and the path that the complaint must name.
BROKEN: tuple[tuple[str, str, tuple[object, ...]], ...] = (
    ("cosmology", "hubble_km_s_mpc", (0.0, -68.0, 1e9, "fast", True, [68.0])),
    ("cosmology", "baryon_density_h2", (0.0, -1.0, 1e3)),
    ("cosmology", "matter_density_h2", (1e-9, 1e3, "much")),
    ("cosmology", "cmb_temperature_k", (0.0, 1e4)),
    ("cosmology", "helium_mass_fraction", (-0.1, 1.0, 1.2)),
    ("cosmology", "effective_neutrinos", (-1.0, 30.0)),
    ("cosmology", "unknown_key", (1.0,)),
    ("hydrogen", "n_max", (1, 0, -4, 2.5, "ten")),
    ("hydrogen", "two_photon_rate_per_s", (-1.0, 1e9)),
    ("hydrogen", "energies", ("exact", 3)),
    ("hydrogen", "resolve_l_to", (1, 5000)),
    ("hydrogen", "collisions", (True,)),
    ("helium", "n_max", (1, -2, 500, "all")),
    ("helium", "helium_ion", ("none", 2)),
    ("lines", "hydrogen", ("magic", 1)),
    ("lines", "helium", ("magic", 1)),
    ("lines", "lyman_lines", (0, 400, "some")),
    ("lines", "two_photon", ("twice",)),
    ("grid", "redshift_start", (0.0, 2e4, "early")),
    ("grid", "redshift_end", (-1.0, 9999.0)),
    ("grid", "n_redshifts", (0, 1, 10**9)),
    ("accuracy", "relative", (0.0, 1.0, 1e-14)),
    ("accuracy", "max_steps", (0, 10**9)),
    ("physics", "fine_structure_change", (2.0, -1.5)),
    ("physics", "electron_mass_change", (3.0, -1.0)),
    ("nowhere", "key", (1,)),
)


def whole_setup(rng: np.random.Generator) -> Table:
    """One that breaks no rule of the README."""
    tables = {
        "cosmology": _cosmology(rng),
        "hydrogen": _hydrogen(rng),
        "helium": {},
        "lines": {"hydrogen": _pick(rng, "closed", "open", *3 * ("sobolev", "sobolev_feedback"))},
        "grid": _grid(rng),
        "accuracy": {"relative": float(10.0 ** rng.uniform(-6.0, -3.5))},
    }
    n_max = tables["hydrogen"]["n_max"]
    resolved = tables["hydrogen"].get("resolve_l_to", n_max)
    if rng.random() < 0.2:
        tables["physics"] = {
            "fine_structure_change": float(rng.uniform(-0.1, 0.1)),
            "electron_mass_change": float(rng.uniform(-0.1, 0.1)),
        }
    if rng.random() < 0.3:
        tables["lines"]["lyman_lines"] = int(rng.integers(1, min(resolved, 11)))
    if rng.random() < 0.3:
        tables["lines"]["two_photon"] = "stimulated"
    if n_max >= 4 and rng.random() < 0.1:
        _with_field(rng, tables)
    if rng.random() < 0.3:
        _with_helium(rng, tables)
    return tables


def broken_setup(rng: np.random.Generator) -> tuple[Table, str]:
    """One with one value that must be refused, and the key that the complaint must name."""
    tables = whole_setup(rng)
    table, key, values = BROKEN[int(rng.integers(len(BROKEN)))]
    tables.setdefault(table, {})[key] = values[int(rng.integers(len(values)))]
    return tables, "nowhere" if table == "nowhere" else key


def _pick(rng: np.random.Generator, *values: str) -> str:
    return values[int(rng.integers(len(values)))]


def _cosmology(rng: np.random.Generator) -> Table:
    baryons = float(10.0 ** rng.uniform(-2.5, -1.0))
    found = {
        "hubble_km_s_mpc": float(rng.uniform(30.0, 150.0)),
        "baryon_density_h2": baryons,
        "matter_density_h2": baryons * float(rng.uniform(1.0, 10.0)),
        "cmb_temperature_k": float(rng.uniform(2.0, 3.5)),
        "helium_mass_fraction": float(rng.choice([0.0, 1e-6, 0.1, 0.245, 0.5, 0.9])),
        "effective_neutrinos": float(rng.uniform(0.0, 6.0)),
    }
    if rng.random() < 0.2:
        found["neutrino_masses_ev"] = [float(10.0 ** rng.uniform(-3.0, 0.0))]
    if rng.random() < 0.2:
        found["dark_energy_w0"] = float(rng.uniform(-1.5, -0.5))
    return found


def _hydrogen(rng: np.random.Generator) -> Table:
    n_max = int(rng.integers(2, 13))
    found: Table = {"n_max": n_max, "energies": _pick(rng, "measured", "nonrelativistic")}
    if rng.random() < 0.2:
        found["resolve_l_to"] = int(rng.integers(2, n_max + 1))
    if rng.random() < 0.2:
        found["two_photon_rate_per_s"] = float(rng.uniform(1.0, 20.0))
    return found


def _grid(rng: np.random.Generator) -> Table:
    start = float(rng.choice([1500.0, 1800.0, 3000.0, 8000.0]))
    return {
        "redshift_start": start,
        "redshift_end": float(rng.choice([0.0, 20.0, 200.0, 800.0])),
        "n_redshifts": int(rng.integers(2, 25)),
    }


def _with_field(rng: np.random.Generator, tables: Table) -> None:
    tables["hydrogen"].pop("resolve_l_to", None)
    tables["grid"]["redshift_end"] = 400.0
    tables["accuracy"]["relative"] = 1e-4
    tables["lines"].pop("two_photon", None)
    tables["lines"]["lyman_lines"] = int(rng.integers(1, 4))
    tables["lines"] |= {
        "hydrogen": "transfer",
        "transfer": {
            "frequency_step": float(rng.uniform(1e-3, 2e-3)),
            **{
                name: bool(rng.random() < 0.5)
                for name in ("feedback", "excited_two_photon", "raman", "scattering")
            },
        },
    }


def _with_helium(rng: np.random.Generator, tables: Table) -> None:
    tables["helium"] = {
        "n_max": int(rng.integers(2, 7)),
        "helium_ion": _pick(rng, "saha", "network"),
        "intercombination_rate_per_s": float(rng.choice([0.0, 177.6, 233.0])),
    }
    lines = _pick(rng, "sobolev", "sobolev_feedback", "continuum")
    tables["lines"]["helium"] = lines
    if lines == "continuum":
        tables["lines"]["helium_continuum"] = {
            "redistribution": _pick(rng, "doppler", "complete", "partial"),
            "feedback": bool(rng.random() < 0.5),
        }
