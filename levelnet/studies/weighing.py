"""What a weighing gives back: the derivative of each target by the logarithm of every rate."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.levels import LevelSet
from ..errors import InputError, Outcome
from ..history.setup import Setup
from ..markup import html_table
from .budget_record import ErrorBudget
from .helium_weighing import HeliumWeights, IonWeights, first_of
from .targets import parse_target

if TYPE_CHECKING:
    import xarray


@dataclass(frozen=True, slots=True, eq=False)
class Weighing:
    """Sensitivities of scalars of one history to every rate; n_targets is the first axis.

    Every derivative is d ln J / d ln (rate), dimensionless. A rate and its inverse obey detailed
    balance, so that both scale together.

    Attributes
    ----------
    setup : Setup
        What was asked.
    outcome : Outcome
        How the history ended.
    targets, units : tuple of str, length n_targets
        The scalars J, such as "x_e(900)", and their units ("1" where there is none).
    value : ndarray, shape (n_targets,)
        J, in units of `units`.
    levels : LevelSet
        Every level of hydrogen.
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions in `levels` of both ends of every dipole transition between excited levels.
    lines : tuple of str, length n_lines
        Lines to the ground state that exchange photons: "2p-1s", ...
    line_upper : ndarray of int, shape (n_lines,)
        Positions in `levels` of their upper levels.
    parameters : tuple of str, length n_parameters
        Parameters of the cosmology, named as in the setup.
    bound_bound : ndarray, shape (n_targets, n_transitions), dimensionless
        By the strength of each dipole transition.
    bound_free : ndarray, shape (n_targets, n_levels), dimensionless
        By each level's cross section: recombination and photoionization together.
    escape : ndarray, shape (n_targets, n_lines), dimensionless
        By the rate at which photons of each line escape.
    two_photon, compton : ndarray, shape (n_targets,), dimensionless
        By the 2s-1s rate, and by the Compton rate that couples T_m to T_r.
    parameter : ndarray, shape (n_targets, n_parameters), dimensionless
        By the ln of each parameter of the cosmology, the others held; dark energy closes the
        budget.
    helium : HeliumWeights or None
        By the rates of He I; None where helium is inert.
    helium_ion : IonWeights or None
        By those of He II; None where it recombines in Saha equilibrium too.
    budget : ErrorBudget or None
        What uncertain rates make of these targets, and of further ones such as a band of x_e(z),
        where that was asked for.
    notes : tuple of str
        What to know before relying on it: of the history, and of the uncertainties of the budget.
    """

    setup: Setup
    outcome: Outcome
    targets: tuple[str, ...]
    units: tuple[str, ...]
    value: FloatArray
    levels: LevelSet
    upper: IntArray
    lower: IntArray
    lines: tuple[str, ...]
    line_upper: IntArray
    parameters: tuple[str, ...]
    bound_bound: FloatArray
    bound_free: FloatArray
    escape: FloatArray
    two_photon: FloatArray
    compton: FloatArray
    parameter: FloatArray
    helium: HeliumWeights | None = None
    helium_ion: IonWeights | None = None
    budget: ErrorBudget | None = None
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count = len(self.targets)
        for name in ("value", "two_photon", "compton"):
            frozen_array(self, name, (count,))
        for name in ("upper", "lower"):
            frozen_array(self, name, (len(self.upper),), np.int64)
        frozen_array(self, "line_upper", (len(self.lines),), np.int64)
        frozen_array(self, "bound_bound", (count, len(self.upper)))
        frozen_array(self, "bound_free", (count, len(self.levels)))
        frozen_array(self, "escape", (count, len(self.lines)))
        frozen_array(self, "parameter", (count, len(self.parameters)))

    def index(self, target: str) -> int:
        """Position of `target` along the first axis."""
        name = target if target in self.targets else parse_target(target).name
        if name not in self.targets:
            raise InputError(f'target "{target}": weighed were {", ".join(self.targets)}')
        return self.targets.index(name)

    def to_xarray(self) -> xarray.Dataset:
        """Derivatives over target and level, line or parameter (needs the xarray extra).

        Those by single transitions, `bound_bound`, stay out: n_max^3/3 numbers for each target.
        """
        import xarray

        levels = self.levels
        arrays: dict[str, Any] = {
            "value": ("target", self.value),
            "two_photon": ("target", self.two_photon),
            "compton": ("target", self.compton),
            "bound_free": (("target", "level"), self.bound_free),
            "escape": (("target", "line"), self.escape),
            "cosmology": (("target", "parameter"), self.parameter),
        }
        coordinates: dict[str, Any] = {
            "target": list(self.targets),
            "line": list(self.lines),
            "parameter": list(self.parameters),
            "n": ("level", levels.n),
            "l": ("level", levels.l),
        }
        return xarray.Dataset(arrays, coords=coordinates)

    def _repr_html_(self) -> str:
        """Show the targets and what they hang on most in a notebook."""
        rows = []
        for target, unit, value in zip(self.targets, self.units, self.value, strict=True):
            weights = self.processes(target)
            most = max(weights, key=lambda name: abs(weights[name]))
            shown = f"{value:.7g} {'' if unit == '1' else unit}".rstrip()
            rows.append((target, shown, f"{most} {weights[most]:+.3g}"))
        head = ("target J", "value", "largest d ln J / d ln R")
        return html_table(f"Weighing: {self.outcome.value}", head, rows)

    def first(self, count: int) -> Weighing:
        """The same for the first `count` targets alone."""
        by_target = ("value", "bound_bound", "bound_free", "escape", "two_photon", "compton")
        cut = {name: getattr(self, name)[:count] for name in (*by_target, "parameter")}
        return replace(
            self,
            targets=self.targets[:count],
            units=self.units[:count],
            helium=first_of(self.helium, count),
            helium_ion=first_of(self.helium_ion, count),
            **cut,
        )

    def processes(self, target: str) -> dict[str, float]:
        """Derivative by a common factor on each process, and on Lyman-alpha's escape alone.

        That of a line that is closed is 0.
        """
        at = self.index(target)
        return {
            "two_photon": float(self.two_photon[at]),
            "bound_bound": float(self.bound_bound[at].sum()),
            "bound_free": float(self.bound_free[at].sum()),
            "lyman_alpha": float(self.escape[at, self.levels.n[self.line_upper] == 2].sum()),
            "escape": float(self.escape[at].sum()),
            "compton": float(self.compton[at]),
        }
