"""Studies of the escape that cost little: the switches are those of treatments without a field."""

from __future__ import annotations

import dataclasses
from functools import lru_cache

import numpy as np

from levelnet.escape.lines import Lines
from levelnet.history.result import Channels
from levelnet.history.setup import Setup
from levelnet.studies.escape import _assemble, run_plan
from levelnet.studies.escape_helium_plan import helium_plan
from levelnet.studies.escape_plan import Plan, Variant
from levelnet.studies.escape_records import EscapeStudy
from levelnet.studies.escape_run import VariantResult
from levelnet.studies.level_records import Question
from tests.small_runs import small_setup

SWITCHED = ("stimulated", "feedback")
_CHANNELS = ("2 1S-1 1S", "2 1P-1 1S")


def cheap_plan(setup: Setup) -> Plan:
    """Feedback and stimulation as the switches of a reference that is Sobolev with both."""

    def variant(name: str, **chosen: str) -> Variant:
        plain = Lines(hydrogen="sobolev", lyman_lines=setup.lines.lyman_lines)
        return Variant(name, dataclasses.replace(plain, **chosen))

    return Plan(
        (
            variant("closed", hydrogen="closed"),
            variant("Sobolev"),
            variant("Sobolev, 2s decay stimulated", two_photon="stimulated"),
            variant("Sobolev with feedback", hydrogen="sobolev_feedback"),
            variant("everything", hydrogen="sobolev_feedback", two_photon="stimulated"),
        ),
        switched_on=tuple(frozenset(on) for on in ((), (), SWITCHED[:1], SWITCHED[1:], SWITCHED)),
        treatments=(0, 1, 2, 3),
        base=1,
        reference=4,
        switches=SWITCHED,
        alone=(2, 3),
        removed=(3, 2),
        cumulative=(2, 4),
    )


@lru_cache(maxsize=1)
def cheap_study() -> EscapeStudy:
    """A study of a small atom, its last output at z = 200."""
    setup = small_setup(6, 200.0, 20, lines={"lyman_lines": 3})
    return run_plan(setup, cheap_plan(setup))


def with_differences(peaks: dict[str, float], own: float = 1e-6) -> EscapeStudy:
    """The cheap study with invented curves.

    Variant `name` differs from the reference by peaks[name] at one output, that nearest to z =
    1000, and not at all elsewhere; `own` is the numerical error of the reference everywhere.
    """
    study = cheap_study()
    row = int(np.argmin(np.abs(study.redshift - 1000.0)))
    fractions = np.tile(
        study.variants.free_electron_fraction[study.reference], (len(study.variants.name), 1)
    )
    for name, peak in peaks.items():
        fractions[study.variants.name.index(name), row] *= 1.0 + peak
    error = study.reference_error
    return dataclasses.replace(
        study,
        variants=dataclasses.replace(study.variants, free_electron_fraction=fractions),
        reference_error=dataclasses.replace(
            error, free_electron_fraction=np.full(len(study.redshift), own)
        ),
    )


@lru_cache(maxsize=1)
def helium_study() -> EscapeStudy:
    """Variant k is off by k times 1e-4 at z above 1000, and not at all below."""
    outer = cheap_study()
    setup = dataclasses.replace(
        outer.setup, helium=dataclasses.replace(outer.setup.helium, n_max=3)
    )
    plan, high = helium_plan(setup), outer.redshift > 1000.0
    x_e = outer.variants.free_electron_fraction[outer.reference]
    share = np.tile([0.3, 0.7], (len(x_e), 1))
    results = [
        VariantResult(
            x_e * (1.0 + 1e-4 * ((k - plan.reference) % len(plan.variants)) * high),
            outer.variants.matter_temperature_k[outer.reference],
            outer.observable_names,
            outer.observable_units,
            outer.variants.observable[outer.reference],
            Channels(_CHANNELS, 1e-15 * share, share, share),
            None,
            outer.outcome,
        )
        for k in range(len(plan.variants))
    ]
    return _assemble(setup, plan, results)


def both(question: Question | None = None) -> EscapeStudy:
    """The cheap study with that of helium in it, which is asked `question`."""
    inner = dataclasses.replace(helium_study(), question=question)
    setup = dataclasses.replace(cheap_study().setup, helium=inner.setup.helium)
    return dataclasses.replace(cheap_study(), setup=setup, helium=inner)
