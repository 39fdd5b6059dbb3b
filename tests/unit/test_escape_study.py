"""The study of the escape: its histories, and what it makes of them.

Verdicts are held against curves invented for it, where the answer can be read off.
"""

from __future__ import annotations

import dataclasses
import pickle
from collections.abc import Callable
from concurrent.futures import Executor, Future
from typing import Any

import numpy as np
import pytest

from levelnet.errors import InputError, SolveError
from levelnet.history.run import solve
from levelnet.history.setup import Accuracy
from levelnet.studies.escape import run_plan
from levelnet.studies.escape_notes import demands_text, verdict_texts
from levelnet.studies.escape_plan import variant_setup
from levelnet.studies.escape_verdict import (
    escape_demands,
    escape_verdict,
    largest_difference,
    switch_effects,
    worse_than_absent,
)
from levelnet.studies.requirement import parse_requirement
from tests.invented_escape import cheap_plan, cheap_study, with_differences
from tests.same_records import assert_same
from tests.small_runs import small_setup

ASKED = (300.0, 1500.0)


class Pickling(Executor):
    """Does at once what a worker process would, with all that is sent there and back."""

    def submit(self, task: Callable[..., Any], *arguments: Any, **options: Any) -> Future[Any]:
        sent, inputs = pickle.loads(pickle.dumps((task, arguments)))
        found: Future[Any] = Future()
        found.set_result(pickle.loads(pickle.dumps(sent(*inputs))))
        return found


def test_histories_are_those_of_solve() -> None:
    # Other kept levels and another grid, so equal to the tolerance of the runs, 1e-6, not the bit.
    study = cheap_study()
    plan = cheap_plan(study.setup)
    for k in (study.reference, 1):
        history = solve(variant_setup(study.setup, plan.variants[k]))
        assert np.array_equal(history.redshift, study.redshift)
        np.testing.assert_allclose(
            study.variants.free_electron_fraction[k], history.free_electron_fraction, rtol=2e-6
        )
        shares = history.channels.cumulative_share[-1]
        np.testing.assert_allclose(study.variants.cumulative_share[k], shares, atol=1e-5)
        names = study.observable_names
        last = study.variants.observable[k, names.index("last_scattering_redshift")]
        assert last == pytest.approx(history.milestones.last_scattering_redshift, rel=1e-6)
    assert study.channels.names == history.channels.names


def test_workers_give_the_same_bits() -> None:
    setup = small_setup(5, 600.0, 6, lines={"lyman_lines": 2})
    plan = cheap_plan(setup)
    said: list[tuple[str, float]] = []
    here = run_plan(setup, plan)
    there = run_plan(setup, plan, executor=Pickling(), progress=lambda *one: said.append(one))
    assert_same(here, there)
    assert said[0] == ("variants", 0.0)
    assert said[-1][1] == pytest.approx(1.0)


def test_coarser_run_is_the_error_of_the_reference() -> None:
    setup = small_setup(5, 600.0, 6, lines={"lyman_lines": 2})
    plan = cheap_plan(setup)
    study = run_plan(setup, plan._replace(coarser=plan.variants[1]))
    assert len(study.variants.name) == len(plan.variants)
    x_e = study.variants.free_electron_fraction
    expected = np.abs(x_e[1] / x_e[study.reference] - 1.0) + 1e-6  # the tolerance
    assert study.reference_error.free_electron_fraction == pytest.approx(expected, rel=1e-12)
    plain = run_plan(setup, plan).reference_error
    assert np.all(plain.free_electron_fraction == 1e-6)


def test_failure_names_the_variant() -> None:
    setup = small_setup(5, 600.0, 6, lines={"lyman_lines": 2})
    setup = dataclasses.replace(setup, accuracy=Accuracy(max_steps=10))
    with pytest.raises(SolveError, match="Sobolev: the step limit was reached"):
        run_plan(setup, cheap_plan(setup))


def test_effects_are_ratios_of_histories() -> None:
    study = cheap_study()
    _, base, stimulated, feedback, everything = study.variants.free_electron_fraction
    found = switch_effects(study)
    for values, expected in (
        (found.first, (stimulated / base, feedback / base)),
        (found.last, (everything / feedback, everything / stimulated)),
        (found.in_order, (stimulated / base, everything / stimulated)),
    ):
        np.testing.assert_allclose(values, np.array(expected) - 1.0, rtol=0.0, atol=1e-15)
    # Stimulated decay speeds recombination up, feedback slows it down.
    middle = int(np.argmin(np.abs(study.redshift - 1100.0)))
    assert found.first[0, middle] < -1e-3
    assert found.first[1, middle] > 1e-4


def test_verdict_takes_the_first_that_is_within() -> None:
    study = with_differences(
        {
            "closed": 0.4,
            "Sobolev": -0.02,
            "Sobolev, 2s decay stimulated": 0.004,
            "Sobolev with feedback": 0.001,
        }
    )
    found = escape_verdict(study, 5e-3, *ASKED)
    assert found.enough == 2
    assert found.relapse is None
    assert [one.error for one in found.candidates] == pytest.approx(
        [0.400001, 0.020001, 0.004001, 0.001001, 1e-6]
    )
    one = largest_difference(study, 1, *ASKED)
    assert one.value == pytest.approx(-0.02)
    assert abs(one.redshift - 1000.0) < 60.0
    texts = verdict_texts(study, found)
    place = f"(at z = {one.redshift:.0f})"
    assert texts[1] == f"Sobolev errs by at most 2 % in x_e between z = 300 and 1500 {place}"
    assert texts[-1].startswith(
        "for 0.5 % in x_e at 300 <= z <= 1500: Sobolev, 2s decay stimulated is enough; it errs by "
        "0.4 % at most"
    )
    # The numerical error of the reference counts: exactly what is asked is too much.
    assert escape_verdict(study, 0.004, *ASKED).enough == 3
    # What lies outside the range does not count.
    assert escape_verdict(study, 5e-3, 300.0, 800.0).enough == 0


def test_verdict_says_where_effects_cancel() -> None:
    # Plain Sobolev is near, and with more of the physics further away.
    peaks = {"closed": 0.4, "Sobolev": 1e-4, "Sobolev, 2s decay stimulated": -0.02}
    study = dataclasses.replace(with_differences(peaks), treatments=np.array([0, 1]))
    found = escape_verdict(study, 1e-3, *ASKED)
    assert found.enough == 1
    assert found.relapse == 2
    # Not where what fails has not all the physics of what passes.
    peaks["Sobolev"] = 0.02
    other = dataclasses.replace(with_differences(peaks), treatments=np.array([0, 1]))
    assert escape_verdict(other, 1e-3, *ASKED).enough == 3
    assert escape_verdict(other, 1e-3, *ASKED).relapse is None
    text = verdict_texts(study, found)[-1]
    assert "ITS EFFECTS CANCEL: Sobolev, 2s decay stimulated, which has more" in text
    assert "errs by 2 %" in text


def test_verdict_needs_the_reference_or_nothing() -> None:
    peaks = {name: 0.1 for name in cheap_study().variants.name[:-1]}
    found = escape_verdict(with_differences(peaks, 1e-4), 1e-3, *ASKED)
    assert found.enough == len(found.candidates) - 1
    assert "you need everything; the numerical error" in verdict_texts(cheap_study(), found)[-1]
    # A reference that is not known well enough is not enough either.
    study = with_differences(peaks, 2e-3)
    found = escape_verdict(study, 1e-3, *ASKED)
    assert found.enough is None
    assert (
        "none of those compared: everything comes closest with 0.2 %"
        in (verdict_texts(study, found)[-1])
    )


def test_questions_that_make_no_sense() -> None:
    with pytest.raises(InputError, match="the outputs of the setup do not cover that"):
        escape_verdict(cheap_study(), 1e-3, 100.0, 1500.0)
    with pytest.raises(InputError, match="within = 0"):
        escape_verdict(cheap_study(), 0.0, *ASKED)


def test_worse_alone_than_absent_is_found_from_the_numbers() -> None:
    peaks = {"Sobolev": 0.01, "Sobolev, 2s decay stimulated": -0.02, "Sobolev with feedback": 0.003}
    study = with_differences(peaks)
    (one,) = worse_than_absent(study, *ASKED)
    assert one.name == "Sobolev, 2s decay stimulated"
    assert (one.error, one.error_without, one.without) == pytest.approx((0.02, 0.01, "Sobolev"))
    assert study.notes[0].startswith(
        "WORSE THAN ABSENT: Sobolev, 2s decay stimulated errs by up to 2 %, Sobolev by 1 %"
    )
    peaks["Sobolev, 2s decay stimulated"] = -0.005
    assert worse_than_absent(with_differences(peaks), *ASKED) == ()


def test_requirement_is_held_against_every_candidate() -> None:
    study = cheap_study()
    text = '[observables]\nz_drag = 3e-4\n[[ranges]]\nquantity = "x_e"\nredshift = [300, 1500]\n'
    requirement = parse_requirement(text + "relative = 5e-3\n")
    met = escape_demands(study, requirement)
    assert met.candidates == study.variants.name
    place = study.observable_names.index("drag_redshift")
    seen = study.variants.observable[:, place]
    for k, findings in enumerate(met.findings):
        expected = abs(np.log(seen[k] / seen[-1])) + 1e-6
        assert findings[0].error == pytest.approx(expected, rel=1e-9)
    assert met.enough is not None
    passed = [all(one.passed for one in line) for line in met.findings]
    assert passed.index(True) == met.enough
    assert f"for the requirement: {met.candidates[met.enough]} is enough" in demands_text(met)
    strict = escape_demands(study, parse_requirement("[observables]\nz_drag = 1e-7\n"))
    assert strict.enough is None
    assert "none of those compared; numerical errors of the reference leave" in demands_text(strict)


def test_notes_tell_of_lost_levels_and_single_lines() -> None:
    study = cheap_study()
    variants = dataclasses.replace(
        study.variants, outcome=("QUASI_STEADY_LOST", *study.variants.outcome[1:])
    )
    notes = " ".join(dataclasses.replace(study, variants=variants).notes)
    assert "closed: an excited level relaxes more slowly" in notes
    assert "no feedback to compare" not in notes
    lines = dataclasses.replace(study.setup.lines, lyman_lines=1)
    single = dataclasses.replace(study, setup=dataclasses.replace(study.setup, lines=lines))
    assert "no feedback to compare" in " ".join(single.notes)
