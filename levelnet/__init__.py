"""levelnet: level populations of hydrogen through cosmological recombination.

The public names are imported when they are first used, so that ``import levelnet`` stays fast.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from .atomic.bound_bound import einstein_a
    from .atomic.bound_free import (
        photoionization_cross_section,
        photoionization_rate,
        recombination_coefficient,
    )
    from .atomic.second_order import (
        lyman_resonances,
        raman_spectrum_per_s_hz,
        second_order_matrix_element,
        two_photon_spectrum_per_s_hz,
    )
    from .atomic.two_photon import two_photon_profile, two_photon_rate
    from .background import Cosmology, from_astropy, with_expansion
    from .distilled.build import distill
    from .distilled.effective import EffectiveRates, effective_rates
    from .distilled.ensemble import Ensemble, ensemble
    from .distilled.fast import FastHistory
    from .distilled.history import history_from_table
    from .distilled.local import LocalRates, rate_of_change
    from .distilled.table import EffectiveTable
    from .errors import AccuracyWarning, InputError, LevelnetError, Outcome, SolveError
    from .escape.sobolev import escape_probability
    from .history.result import History
    from .history.run import solve
    from .history.setup import Setup, load_setup
    from .report.plot import plot
    from .store.read import read
    from .store.write import write
    from .studies.escape import escape_study
    from .studies.escape_records import EscapeStudy
    from .studies.level_records import LevelStudy
    from .studies.levels import level_study
    from .studies.sweep import sweep
    from .studies.sweep_cases import Cases, vary
    from .studies.sweep_files import load_sweep
    from .studies.sweep_record import Sweep
    from .studies.weigh import weigh
    from .studies.weighing import Weighing

__version__ = "0.1.0"

_HOMES = {
    "AccuracyWarning": "errors",
    "Cases": "studies.sweep_cases",
    "Cosmology": "background",
    "EffectiveRates": "distilled.effective",
    "EffectiveTable": "distilled.table",
    "Ensemble": "distilled.ensemble",
    "EscapeStudy": "studies.escape_records",
    "FastHistory": "distilled.fast",
    "History": "history.result",
    "InputError": "errors",
    "LevelStudy": "studies.level_records",
    "LevelnetError": "errors",
    "LocalRates": "distilled.local",
    "Outcome": "errors",
    "Setup": "history.setup",
    "SolveError": "errors",
    "Sweep": "studies.sweep_record",
    "Weighing": "studies.weighing",
    "distill": "distilled.build",
    "effective_rates": "distilled.effective",
    "einstein_a": "atomic.bound_bound",
    "ensemble": "distilled.ensemble",
    "escape_probability": "escape.sobolev",
    "escape_study": "studies.escape",
    "from_astropy": "background",
    "history_from_table": "distilled.history",
    "level_study": "studies.levels",
    "load_setup": "history.setup",
    "load_sweep": "studies.sweep_files",
    "lyman_resonances": "atomic.second_order",
    "photoionization_cross_section": "atomic.bound_free",
    "photoionization_rate": "atomic.bound_free",
    "plot": "report.plot",
    "raman_spectrum_per_s_hz": "atomic.second_order",
    "rate_of_change": "distilled.local",
    "read": "store.read",
    "recombination_coefficient": "atomic.bound_free",
    "second_order_matrix_element": "atomic.second_order",
    "solve": "history.run",
    "sweep": "studies.sweep",
    "two_photon_profile": "atomic.two_photon",
    "two_photon_rate": "atomic.two_photon",
    "two_photon_spectrum_per_s_hz": "atomic.second_order",
    "vary": "studies.sweep_cases",
    "weigh": "studies.weigh",
    "with_expansion": "background",
    "write": "store.write",
}

__all__ = [
    "AccuracyWarning",
    "Cases",
    "Cosmology",
    "EffectiveRates",
    "EffectiveTable",
    "Ensemble",
    "EscapeStudy",
    "FastHistory",
    "History",
    "InputError",
    "LevelStudy",
    "LevelnetError",
    "LocalRates",
    "Outcome",
    "Setup",
    "SolveError",
    "Sweep",
    "Weighing",
    "__version__",
    "distill",
    "effective_rates",
    "einstein_a",
    "ensemble",
    "escape_probability",
    "escape_study",
    "from_astropy",
    "history_from_table",
    "level_study",
    "load_setup",
    "load_sweep",
    "lyman_resonances",
    "photoionization_cross_section",
    "photoionization_rate",
    "plot",
    "raman_spectrum_per_s_hz",
    "rate_of_change",
    "read",
    "recombination_coefficient",
    "second_order_matrix_element",
    "solve",
    "sweep",
    "two_photon_profile",
    "two_photon_rate",
    "two_photon_spectrum_per_s_hz",
    "vary",
    "weigh",
    "with_expansion",
    "write",
]


def __getattr__(name: str) -> object:
    """Import the home of a public name on first use."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value: object = getattr(import_module(f".{_HOMES[name]}", __name__), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """Public names, imported or not."""
    return sorted({*globals(), *__all__})
