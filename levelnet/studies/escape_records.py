"""What a study of the escape of line photons gives back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..arrays import FloatArray, IntArray, frozen_array
from ..errors import Outcome
from ..history.result import Channels, RadiationField
from ..history.setup import Setup
from ..markup import html_table
from ..texts import parse_toml
from .level_records import Question

if TYPE_CHECKING:
    import xarray


@dataclass(frozen=True, slots=True, eq=False)
class Variants:
    """Histories that differ in their lines only; the variants are the first axis.

    Attributes
    ----------
    name : tuple of str, length n_variants
        What each is called.
    lines : tuple of str, length n_variants
        Its table [lines] as TOML.
    intercombination_rate_per_s : ndarray, shape (n_variants,), s^-1
        Rate of 2 3P1 -> 1 1S of He I; NaN where helium is inert.
    outcome : tuple of str, length n_variants
        Name of the Outcome of each.
    switched_on : ndarray of int, shape (n_variants, n_switches)
        1 for each switch that is on; 0 in treatments without a field.
    free_electron_fraction : ndarray, shape (n_variants, n_redshift), dimensionless
        n_e/n_H.
    matter_temperature_k : ndarray, shape (n_variants, n_redshift), K
        T_m.
    observable : ndarray, shape (n_variants, n_observables)
        Numbers that an observer sees, in their own units; NaN where the grid does not reach them.
    cumulative_share : ndarray, shape (n_variants, n_channels), dimensionless
        Each channel's part of all net recombinations down to the last redshift.
    """

    name: tuple[str, ...]
    lines: tuple[str, ...]
    intercombination_rate_per_s: FloatArray
    outcome: tuple[str, ...]
    switched_on: IntArray
    free_electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    observable: FloatArray
    cumulative_share: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count = len(self.name)
        frozen_array(self, "switched_on", (count, *self.switched_on.shape[1:]), int)
        for name in (
            "intercombination_rate_per_s",
            "free_electron_fraction",
            "matter_temperature_k",
            "observable",
            "cumulative_share",
        ):
            frozen_array(self, name, (count, *getattr(self, name).shape[1:]))

    def chosen(self, variant: int) -> dict[str, Any]:
        """Table [lines] of a variant by its position."""
        return parse_toml(self.lines[variant], f"lines of variant {variant}")


@dataclass(frozen=True, slots=True, eq=False)
class Switches:
    """What is switched on and off in the reference; arrays have shape (n_switches,).

    Attributes
    ----------
    name : tuple of str
        In the order in which they are added.
    base : int
        Position, among the variants, of the reference with every switch off.
    alone : ndarray of int
        Positions of the base with one switch on (and what it needs).
    removed : ndarray of int
        Positions of the reference with one switch off (and what needs it).
    cumulative : ndarray of int
        Positions of the base with this and all switches before it; the last is the reference.
    """

    name: tuple[str, ...]
    base: int
    alone: IntArray
    removed: IntArray
    cumulative: IntArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        for name in ("alone", "removed", "cumulative"):
            frozen_array(self, name, (len(self.name),), int)


@dataclass(frozen=True, slots=True, eq=False)
class NumericalError:
    """Relative numerical errors of the reference, never negative.

    Attributes
    ----------
    free_electron_fraction, matter_temperature_k : ndarray, shape (n_redshift,), dimensionless
        What its frequency step and its tolerance leave.
    observable : ndarray, shape (n_observables,), dimensionless
        The same; NaN where the grid does not reach the event.
    """

    free_electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    observable: FloatArray

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for name in ("free_electron_fraction", "matter_temperature_k", "observable"):
            frozen_array(self, name, getattr(self, name).shape)


@dataclass(frozen=True, slots=True, eq=False)
class EscapeStudy:
    """How far each treatment of the line photons is from the one with all physics that is known.

    Attributes
    ----------
    setup : Setup
        The setup of the reference.
    outcome : Outcome
        How the reference ended; that of each variant stands in `variants`.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Descending.
    observable_names, observable_units : tuple of str, length n_observables
        "1" stands for no unit.
    variants : Variants
        All histories.
    treatments : ndarray of int, shape (n_treatments,)
        Positions of the treatments without a field, from the simplest on.
    reference : int
        Position of the reference.
    switches : Switches
        What is switched on and off in it.
    reference_error : NumericalError
        What numerics leave in the reference.
    channels : Channels
        How atoms reached the ground state in the reference.
    field : RadiationField or None
        The field of the reference, if it resolves one.
    question : Question or None
        What the study was asked, if it was.
    helium : EscapeStudy or None
        The same of the lines of He I on the same grid, where helium recombines.
    """

    setup: Setup
    outcome: Outcome
    redshift: FloatArray
    observable_names: tuple[str, ...]
    observable_units: tuple[str, ...]
    variants: Variants
    treatments: IntArray
    reference: int
    switches: Switches
    reference_error: NumericalError
    channels: Channels
    field: RadiationField | None = None
    question: Question | None = None
    helium: EscapeStudy | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count, n_variants = len(self.redshift), len(self.variants.name)
        frozen_array(self, "redshift", (count,))
        frozen_array(self, "treatments", (len(self.treatments),), int)
        named = [self.reference, self.switches.base, *self.treatments.tolist()]
        for places in (self.switches.alone, self.switches.removed, self.switches.cumulative):
            named += places.tolist()
        if not all(0 <= one < n_variants for one in named):
            raise ValueError(f"positions of variants must be 0 to {n_variants - 1}")
        if self.variants.free_electron_fraction.shape[1] != count:
            raise ValueError(f"variants: {count} redshifts are needed")

    @property
    def species(self) -> str:
        """Whose lines the variants differ in: "H I" or "He I"."""
        chosen = [self.variants.chosen(k) for k in range(len(self.variants.name))]
        count = {name: len({one.get(name) for one in chosen}) for name in ("hydrogen", "helium")}
        return "He I" if count["helium"] > 1 and count["hydrogen"] == 1 else "H I"

    @property
    def notes(self) -> tuple[str, ...]:
        """What a user must know before relying on the result."""
        from .escape_notes import escape_notes

        return escape_notes(self)

    def to_xarray(self) -> xarray.Dataset:
        """Every variant over redshift (needs the xarray extra)."""
        import xarray

        variants = self.variants
        arrays: dict[str, Any] = {
            "free_electron_fraction": (("variant", "redshift"), variants.free_electron_fraction),
            "matter_temperature_k": (("variant", "redshift"), variants.matter_temperature_k),
            "observable": (("variant", "observable_name"), variants.observable),
        }
        coordinates: dict[str, Any] = {
            "variant": list(variants.name),
            "redshift": self.redshift,
            "observable_name": list(self.observable_names),
        }
        return xarray.Dataset(arrays, coords=coordinates)

    def _repr_html_(self) -> str:
        """Show how far each variant is off in a notebook."""
        from .escape_notes import asked_range
        from .escape_verdict import largest_difference

        low, high = asked_range(self)
        rows = []
        for k, name in enumerate(self.variants.name):
            if k != self.reference:
                one = largest_difference(self, k, low, high)
                rows.append((name, f"{100.0 * one.value:+.3g} %", f"{one.redshift:.0f}"))
        caption = f"{repr(self)[1:-1]}; x_e off the reference at {low:g} <= z <= {high:g}"
        return html_table(caption, ("variant", "largest", "at z"), rows)

    def __repr__(self) -> str:
        """One line: how many variants, and the outcome."""
        return f"<EscapeStudy of {len(self.variants.name)} variants: {self.outcome.value}>"
