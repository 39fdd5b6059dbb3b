"""What a study of truncations gives back: its rungs, their limit, and the check of the limit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray, IntArray, frozen_array
from ..errors import Outcome
from ..history.samples import sample_rows
from ..history.setup import Setup
from ..markup import html_table
from .convergence import LARGEST_STEP, SHORTEST_LADDER
from .helium_ladder import Atom

if TYPE_CHECKING:
    import xarray

# Outputs that end above it leave too many electrons out of the optical depth: z_* of the demo with
# n_max = 8 is 0.08 % too high with an end at 400, and 0.5 % with one at 800.
_LATEST_END = 200.0


@dataclass(frozen=True, slots=True, eq=False)
class Rungs:
    """Histories of one atom cut at several places; the rungs are the first axis.

    Attributes
    ----------
    n_max : ndarray of int, shape (n_rungs,)
        Highest n, ascending.
    resolve_l_to : ndarray of int, shape (n_rungs,)
        Highest n of hydrogen with levels resolved in l; above it stand whole shells. On a ladder of
        helium the same on each rung.
    free_electron_fraction : ndarray, shape (n_rungs, n_redshift), dimensionless
        n_e/n_H.
    matter_temperature_k : ndarray, shape (n_rungs, n_redshift), K
        T_m.
    observable : ndarray, shape (n_rungs, n_observables)
        Numbers that an observer sees, in their own units; NaN where the grid does not reach them.
    population : ndarray, shape (n_rungs, n_population_redshift, n_low_levels), dimensionless
        Atoms in the low levels per hydrogen nucleus.
    """

    n_max: IntArray
    resolve_l_to: IntArray
    free_electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    observable: FloatArray
    population: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count = len(self.n_max)
        frozen_array(self, "n_max", (count,), int)
        frozen_array(self, "resolve_l_to", (count,), int)
        for name in (
            "free_electron_fraction",
            "matter_temperature_k",
            "observable",
            "population",
        ):
            frozen_array(self, name, (count, *getattr(self, name).shape[1:]))


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """A quantity carried beyond the rungs; all arrays have one shape.

    Attributes
    ----------
    value : ndarray
        In the unit of the quantity.
    relative_error : ndarray, dimensionless
        Error bar over value: truncation, and numerical noise as the law amplifies it.
    exponent : ndarray, dimensionless
        p of the power law C (n_max + 1/2)^-p through the three longest rungs; NaN where none fits.
    fitted : ndarray of int
        1 where a law is fitted; 0 where the rungs differ by no more than noise or approach no
        limit, and `value` is that of the longest rung.
    """

    value: FloatArray
    relative_error: FloatArray
    exponent: FloatArray
    fitted: IntArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = self.value.shape
        for name in ("value", "relative_error", "exponent"):
            frozen_array(self, name, shape)
        frozen_array(self, "fitted", shape, int)


@dataclass(frozen=True, slots=True, eq=False)
class Estimates:
    """Everything carried to the same n_max.

    Attributes
    ----------
    free_electron_fraction, matter_temperature_k : Estimate, shape (n_redshift,)
        Or (n_held_out, n_redshift).
    observable : Estimate, shape (n_observables,)
        Or (n_held_out, n_observables).
    """

    free_electron_fraction: Estimate
    matter_temperature_k: Estimate
    observable: Estimate


@dataclass(frozen=True, slots=True, eq=False)
class HeldOut:
    """The longest rungs as foreseen from the others, which know nothing of them.

    Attributes
    ----------
    n_max : ndarray of int, shape (n_held_out,)
        The rungs held out of the fit.
    foreseen : Estimates
        From the shorter rungs, at each n_max.
    """

    n_max: IntArray
    foreseen: Estimates

    def __post_init__(self) -> None:
        """Make the array read-only."""
        frozen_array(self, "n_max", (len(self.n_max),), int)


@dataclass(frozen=True, slots=True, eq=False)
class Noise:
    """Upper bounds of the relative numerical errors of a study.

    They are measured: the two shortest rungs are computed again, ten times less accurately.

    Attributes
    ----------
    free_electron_fraction, matter_temperature_k : ndarray, shape (n_redshift,), dimensionless
        Error of the ratio of two rungs. Their errors are nearly equal and cancel in it.
    observable : ndarray, shape (n_observables,), dimensionless
        The same.
    common : float, dimensionless
        Largest error of x_e of a single rung, at any redshift.
    """

    free_electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    observable: FloatArray
    common: float

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for name in ("free_electron_fraction", "matter_temperature_k", "observable"):
            frozen_array(self, name, getattr(self, name).shape)


@dataclass(frozen=True, slots=True)
class Question:
    """What was asked of a study, so that a file answers as the run did.

    Attributes
    ----------
    within : float, dimensionless
        Relative error of x_e that is allowed.
    low, high : float, dimensionless
        Between which redshifts.
    requirement : tuple of str
        A requirement as lines of TOML, its response within; none where none was given.
    """

    within: float
    low: float
    high: float
    requirement: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class LevelStudy:
    """How many levels matter: a ladder of truncations and where it leads.

    Attributes
    ----------
    setup : Setup
        The setup of the longest rung, at the accuracy of the study.
    outcome : Outcome
        How the worst rung ended.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Descending.
    observable_names, observable_units : tuple of str, length n_observables
        "1" stands for no unit.
    population_redshift : ndarray, shape (n_population_redshift,), dimensionless
        Where populations are recorded.
    level_n, level_l : ndarray of int, shape (n_low_levels,)
        Quantum numbers of the low levels.
    rungs : Rungs
        The ladder of n_max.
    limit : Estimates
        All levels, from all rungs.
    noise : Noise
        Numerical errors.
    held_out : HeldOut or None
        The check of the law on the longest rungs; None where the rungs are too few for it.
    resolved : Rungs or None
        Rungs of resolve_l_to at the longest n_max.
    question : Question or None
        What the study was asked, if it was.
    """

    setup: Setup
    outcome: Outcome
    redshift: FloatArray
    observable_names: tuple[str, ...]
    observable_units: tuple[str, ...]
    population_redshift: FloatArray
    level_n: IntArray
    level_l: IntArray
    rungs: Rungs
    limit: Estimates
    noise: Noise
    held_out: HeldOut | None = None
    resolved: Rungs | None = None
    question: Question | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        frozen_array(self, "redshift", (len(self.redshift),))
        frozen_array(self, "population_redshift", (len(self.population_redshift),))
        frozen_array(self, "level_n", (len(self.level_n),), int)
        frozen_array(self, "level_l", (len(self.level_n),), int)

    @property
    def atom(self) -> Atom:
        """Whose n_max makes the rungs; on those of helium hydrogen stays as it is."""
        fixed = len(set(self.rungs.resolve_l_to.tolist())) == 1
        return "helium" if fixed else "hydrogen"

    @property
    def notes(self) -> tuple[str, ...]:
        """What a user must know before relying on the result."""
        return level_notes(self)

    def to_xarray(self) -> xarray.Dataset:
        """Rungs and limit of x_e and T_m over n_max and redshift (needs the xarray extra)."""
        import xarray

        arrays: dict[str, Any] = {}
        for name in ("free_electron_fraction", "matter_temperature_k"):
            limit: Estimate = getattr(self.limit, name)
            arrays[name] = (("n_max", "redshift"), getattr(self.rungs, name))
            arrays[f"{name}_limit"] = ("redshift", limit.value)
            arrays[f"{name}_limit_relative_error"] = ("redshift", limit.relative_error)
        arrays["observable"] = (("n_max", "observable_name"), self.rungs.observable)
        coordinates: dict[str, Any] = {
            "n_max": self.rungs.n_max,
            "redshift": self.redshift,
            "observable_name": list(self.observable_names),
        }
        return xarray.Dataset(arrays, coords=coordinates)

    def _repr_html_(self) -> str:
        """Show x_e carried to all levels in a notebook."""
        limit = self.limit.free_electron_fraction
        rows = (
            (f"{self.redshift[k]:.1f}", f"{limit.value[k]:.7g}", f"{limit.relative_error[k]:.1e}")
            for k in sample_rows(self.redshift, self.atom)
        )
        return html_table(repr(self)[1:-1], ("z", "x_e, all levels", "error bar"), rows)

    def __repr__(self) -> str:
        """One line: the rungs and the outcome."""
        rungs = ", ".join(str(n) for n in self.rungs.n_max.tolist())
        return f"<LevelStudy of {self.atom} n_max = {rungs}: {self.outcome.value}>"


def level_notes(study: LevelStudy) -> tuple[str, ...]:
    """Say what a study does and does not tell."""
    accuracy = study.setup.accuracy.relative
    left_out = "collisions, line transfer" + ", helium" * (study.atom == "hydrogen")
    return (
        _lines_note(study),
        f"error bars are those of truncation; numerical errors common to all rungs are below "
        f"{accuracy:g} by tolerance (x_e measured: {study.noise.common:.0e}); what the physics "
        f"leaves out ({left_out}) is larger and in none of them",
        "no statement about a CMB spectrum is made without a response file",
        *_ladder_notes(study.rungs.n_max, study.atom),
        *_late_end(float(study.redshift[-1])),
    )


def _lines_note(study: LevelStudy) -> str:
    """Which lines reach the ground state."""
    if study.atom == "helium":
        higher = study.setup.lines.helium_higher_lines or "closed"
        return (
            f"the ladder is that of helium; hydrogen has n_max = {study.setup.hydrogen.n_max} on "
            f'every rung. Lines n 1P-1 1S with n >= 3: "{higher}", the same lines on every rung'
        )
    count = study.setup.lines.lyman_lines
    lines = "Lyman-alpha alone" if count == 1 else f"the lowest {count} Lyman lines"
    return (
        f"{lines} and two photons reach the ground state on every rung: truncation is kept apart "
        "from the escape through high Lyman lines"
    )


def _late_end(end: float) -> tuple[str, ...]:
    """What a history that ends early does to optical depths and what follows from them."""
    if end <= _LATEST_END:
        return ()
    return (
        f"the outputs end at z = {end:g}: z_*, k_D, z_drag and optical depths count the electrons "
        f"from there up only; with redshift_end above {_LATEST_END:g} their values are off",
    )


def _ladder_notes(n_max: IntArray, atom: Atom) -> tuple[str, ...]:
    """Say so where a ladder is none of those whose error bars have been measured."""
    if atom == "helium":
        return (
            "error bars were measured on ladders of hydrogen; those of helium were held against a "
            "longer rung for one universe (n_max 4 to 12 against 20) and are a guess elsewhere",
        )
    step, longest = float(np.max(n_max[1:] / n_max[:-1])), int(n_max[-1])
    if step <= LARGEST_STEP and longest >= SHORTEST_LADDER:
        return ()
    found = f"largest step a factor {step:.3g}, longest rung {longest}"
    return (
        f"error bars are untested for this ladder ({found}): they have been held against longer "
        f"rungs for steps of a factor {LARGEST_STEP:g} or less and a longest rung of "
        f"{SHORTEST_LADDER} or more",
    )
