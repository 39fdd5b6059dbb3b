"""Studies of the escape that cost little: the switches are those of treatments without a field."""

from __future__ import annotations

import dataclasses
from functools import lru_cache

import numpy as np

from levelnet.escape.lines import Lines
from levelnet.history.setup import Setup
from levelnet.studies.escape import run_plan
from levelnet.studies.escape_plan import Plan, Variant
from levelnet.studies.escape_records import EscapeStudy
from tests.small_runs import small_setup

SWITCHED = ("stimulated", "feedback")


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
