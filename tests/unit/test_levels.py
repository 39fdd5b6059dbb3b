"""A study of levels on small atoms: what it shares, what it refuses, what it says."""

from __future__ import annotations

import dataclasses
from concurrent.futures import Executor
from concurrent.futures.process import BrokenProcessPool
from typing import Any

import numpy as np
import pytest

from levelnet.cli.level_output import level_summary
from levelnet.distilled.nodes import process_pool
from levelnet.errors import InputError, Outcome, SolveError
from levelnet.history.integrate import output_redshifts
from levelnet.history.run import solve
from levelnet.history.setup import Accuracy, Setup
from levelnet.pieces import MemoryPieces
from levelnet.studies.level_checks import (
    check_held_out,
    check_limit,
    enough_resolved,
    resolved_text,
    shell_changes,
)
from levelnet.studies.level_records import Question
from levelnet.studies.level_requirement import (
    check_covered,
    demands,
    demands_text,
    depths_asked,
)
from levelnet.studies.levels import (
    check_ladder,
    default_rungs,
    level_study,
    n_held_out,
)
from levelnet.studies.requirement import Requirement, parse_requirement
from levelnet.studies.rung import rung_setup, study_setup
from levelnet.studies.verdict import population_changes, rung_errors, verdict, verdict_text
from tests.same_records import assert_same
from tests.small_levels import RUNGS, level_setup, small_study
from tests.small_runs import small_setup


def test_rungs_are_histories_of_their_own() -> None:
    # Against the whole solver at the study's accuracy: x_e, T_m, populations and milestones.
    study = small_study()
    assert study.rungs.n_max.tolist() == list(RUNGS)
    rung = 3
    setup = rung_setup(study_setup(level_setup()), RUNGS[rung], None, 1e-8)
    history = solve(setup)
    assert np.array_equal(study.redshift, history.redshift)
    same = study.rungs.free_electron_fraction[rung]
    assert same == pytest.approx(history.free_electron_fraction, rel=1e-14)
    same = study.rungs.matter_temperature_k[rung]
    assert same == pytest.approx(history.matter_temperature_k, rel=1e-14)
    rows = [int(np.flatnonzero(history.redshift == z)[0]) for z in study.population_redshift]
    low = history.populations("H I")[rows][:, : len(study.level_n)]
    # Of neutral hydrogen at 1e-4, stepping at other outputs leaves 2e-11.
    np.testing.assert_allclose(study.rungs.population[rung], low, rtol=1e-10)
    levels = history.levels("H I")
    assert np.array_equal(levels.n[: len(study.level_n)], study.level_n)
    assert np.array_equal(levels.l[: len(study.level_l)], study.level_l)
    assert study.level_n.max() == 4
    for name, value in zip(study.observable_names, study.rungs.observable[rung], strict=True):
        if name == "last_scattering_redshift":
            assert value == pytest.approx(history.milestones.last_scattering_redshift, rel=1e-12)


def test_more_levels_recombine_more() -> None:
    # Grin & Hirata 2010; Chluba, Vasil & Dursi 2010: x_e falls with n_max at every redshift.
    study = small_study()
    late = study.redshift < 1500.0
    assert np.all(np.diff(study.rungs.free_electron_fraction[:, late], axis=0) < 0.0)
    assert np.all(
        study.limit.free_electron_fraction.value[late]
        < study.rungs.free_electron_fraction[-1, late]
    )


def test_populations_approach_those_of_the_longest_rung() -> None:
    changes = population_changes(small_study())
    assert np.all(np.diff(changes) < 0.0)
    assert changes[-1] == 0.0


def test_bits_do_not_depend_on_workers_or_pieces() -> None:
    # A short history: it is the bits that count here.
    setup, rungs, pieces = small_setup(4, 1100.0, 4), (4, 5, 6, 7), MemoryPieces()
    told: list[float] = []
    alone = level_study(setup, rungs, pieces=pieces, progress=lambda stage, part: told.append(part))
    with process_pool(2) as executor:
        assert_same(alone, level_study(setup, rungs, executor=executor, workers=2))
    assert_same(alone, level_study(setup, rungs, pieces=pieces))
    assert told == sorted(told)
    assert told[0] == 0.0
    assert told[-1] == pytest.approx(1.0)


def test_foreseen_rung_knows_nothing_of_it() -> None:
    study = small_study()
    assert study.held_out is not None
    assert study.held_out.n_max.tolist() == [13]
    foreseen = study.held_out.foreseen.free_electron_fraction
    actual = study.rungs.free_electron_fraction[-1:]
    assert np.all(np.abs(np.log(foreseen.value / actual)) <= foreseen.relative_error)
    late = study.redshift < 1500.0
    assert not np.any(foreseen.value[:, late] == actual[:, late])


@pytest.mark.parametrize(("rungs", "held"), [(1, 0), (4, 0), (5, 0), (6, 1), (7, 2), (12, 2)])
def test_how_many_are_held_out(rungs: int, held: int) -> None:
    assert n_held_out(rungs) == held


def test_noise_is_measured_and_small() -> None:
    # Differences of rungs are far better known than rungs; both than the tolerance of 1e-8.
    noise = small_study().noise
    assert 0.0 < noise.common < 1e-7
    assert np.all(noise.free_electron_fraction < 1e-8)
    assert np.all(noise.free_electron_fraction >= 1e-15)


def test_accuracy_is_that_of_the_study_or_better() -> None:
    assert small_study().setup.accuracy.relative == 1e-8
    better = dataclasses.replace(level_setup(), accuracy=Accuracy(relative=5e-9))
    assert rung_setup(better, 4, None, 5e-9).accuracy.relative == 5e-9


@pytest.mark.parametrize(
    ("n_max", "expected"),
    [(200, (25, 35, 50, 71, 100, 141, 200)), (30, (4, 5, 7, 11, 15, 21, 30)), (5, (4, 5))],
)
def test_default_ladder(n_max: int, expected: tuple[int, ...]) -> None:
    assert default_rungs(n_max) == expected


@pytest.mark.parametrize(
    ("rungs", "resolve", "message"),
    [
        ((20,), (), "a ladder with 1 rung allows no extrapolation; 4 or more"),
        ((20, 30, 40), (), "a ladder with 3 rungs allows"),
        ((20, 30, 30, 40), (), "rungs = 20, 30, 30, 40: each must be larger than the one before"),
        ((30, 20, 40, 50), (), "each must be larger"),
        ((3, 4, 5, 6), (), r"the lowest allowed is 4 \(populations of every \(n, l\) to n = 4"),
        ((4, 5, 6, 999_999), (), "rungs = 4, 5, 6, 999999: allowed are 4 to 1000"),
        ((4, 5, 6, 8), (8,), "resolve = 8: must be below the longest rung, n_max = 8"),
        ((4, 5, 6, 8), (3,), r"resolve = 3: the lowest allowed is 4 \(populations"),
        ((4, 5, 6, 8), (6, 5), "resolve = 6, 5: each must be larger"),
    ],
)
def test_ladders_that_tell_nothing(
    rungs: tuple[int, ...], resolve: tuple[int, ...], message: str
) -> None:
    with pytest.raises(InputError, match=message):
        level_study(level_setup(), rungs, resolve=resolve)


def test_lines_must_not_change_from_rung_to_rung() -> None:
    def setup(lines: dict[str, Any]) -> Setup:
        return small_setup(20, lines=lines)

    with pytest.raises(InputError, match='lyman_lines = "all": every rung would open'):
        check_ladder(setup({"lyman_lines": "all"}), (10, 12, 14, 16))
    with pytest.raises(InputError, match=r"lowest allowed is 11 \(10 Lyman lines are open\)"):
        check_ladder(setup({"lyman_lines": 10}), (10, 12, 14, 16))
    check_ladder(setup({"lyman_lines": 9}), (10, 12, 14, 16))


def test_whole_shells_of_the_setup_are_refused() -> None:
    setup = small_setup(20, hydrogen={"resolve_l_to": 12})
    with pytest.raises(InputError, match=r"resolve_l_to = 12: the study sets it itself; leave it"):
        level_study(setup, (4, 5, 6, 8))
    check_ladder(small_setup(20, hydrogen={"resolve_l_to": 20}), (20, 30, 40, 50))


def test_too_large_for_memory_is_said_before_work(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("levelnet.history.cost.available_memory_bytes", lambda: 2e9)
    with pytest.raises(InputError, match=r"n_max = 1000: about .* of memory needed"):
        level_study(level_setup(), (4, 6, 8, 1000))
    with pytest.raises(InputError, match=r"n_max = 7: .* needed by 1000 workers, "):
        level_study(level_setup(), (4, 5, 6, 7), workers=1000)


def test_step_limit_is_a_failure_of_the_rung() -> None:
    setup = dataclasses.replace(level_setup(), accuracy=Accuracy(max_steps=10))
    with pytest.raises(SolveError, match=r"rung n_max = \d+: the step limit was reached") as caught:
        level_study(setup, (4, 5, 6, 7))
    assert caught.value.outcome is Outcome.STEP_LIMIT


class Dying(Executor):
    """An executor whose processes die."""

    def submit(self, *arguments: Any, **options: Any) -> Any:
        raise BrokenProcessPool("gone")


def test_dead_worker_is_one_line() -> None:
    with pytest.raises(SolveError, match="a worker process died while it ran one of the rungs"):
        level_study(level_setup(), (4, 5, 6, 7), executor=Dying())


def test_verdict_is_about_the_worst_redshift() -> None:
    # By hand from the limit in the study: on a rung the error with its bar is |ln(x/limit)| + bar.
    study = small_study()
    limit, x_e = study.limit.free_electron_fraction, study.rungs.free_electron_fraction
    inside = (study.redshift >= 900.0) & (study.redshift <= 1600.0)
    sizes = (np.abs(np.log(x_e / limit.value)) + limit.relative_error)[:, inside]
    worst = sizes.max(axis=1)
    assert rung_errors(study, 900.0, 1600.0) == pytest.approx(worst, rel=1e-12)
    for rung in range(1, len(RUNGS)):
        found = verdict(study, 1.0001 * worst[rung], 900.0, 1600.0)
        assert found.n_max == RUNGS[rung]
        assert not found.beyond
        assert found.error == pytest.approx(worst[rung], rel=1e-12)
        assert found.redshift == study.redshift[inside][np.argmax(sizes[rung])]
        assert verdict(study, 0.9999 * worst[rung], 900.0, 1600.0).n_max == RUNGS[rung] + 1
    found = verdict(study, 0.3, 900.0, 1600.0)
    assert found.n_max == RUNGS[0]
    text = verdict_text(found, RUNGS[-1])
    assert text.startswith("for 30 % in x_e at 900 < z < 1600: n_max = ")
    tight = verdict_text(verdict(study, 1e-7, 200.0, 1600.0), RUNGS[-1])
    assert "not known from these rungs" in tight


@pytest.mark.parametrize(
    ("within", "low", "high", "message"),
    [
        (0.0, 200.0, 1600.0, "within = 0: allowed"),
        (2.0, 200.0, 1600.0, "within = 2: allowed"),
        (float("nan"), 200.0, 1600.0, "within = nan"),
        (1e-3, 1600.0, 200.0, "the lower redshift comes first"),
        (1e-3, 20.0, 30.0, "do not cover that; they run from 200 to 1800"),
        (1e-3, 100.0, 1600.0, "between = 100, 1600: the outputs of the setup do not cover that"),
        (1e-3, 200.0, 1800.5, "do not cover that"),
        (1e-3, 900.0, float("nan"), "the lower redshift comes first"),
        (1e-3, 900.0, 900.001, "no redshift of the study lies there"),
    ],
)
def test_verdicts_that_make_no_sense(within: float, low: float, high: float, message: str) -> None:
    with pytest.raises(InputError, match=message):
        verdict(small_study(), within, low, high)


def test_whole_shells_have_rungs_of_their_own() -> None:
    # Against the whole solver; l-resolution matters, more so late (Grin & Hirata 2010; Chluba,
    # Vasil & Dursi 2010), and whole shells take x_e down, since they let every atom of a shell
    # reach p levels.
    study = level_study(level_setup(6), (4, 6, 8, 11), resolve=(5, 8))
    resolved = study.resolved
    assert resolved is not None
    assert resolved.n_max.tolist() == [11, 11]
    assert resolved.resolve_l_to.tolist() == [5, 8]
    history = solve(rung_setup(study_setup(level_setup(6)), 11, 5, 1e-8))
    seen = resolved.free_electron_fraction[0]
    assert seen == pytest.approx(history.free_electron_fraction, rel=1e-12)
    few, many = shell_changes(study, 200.0, 1600.0)
    for within, top, words in (
        (1.01 * abs(few), 5, r"l resolved to n = 5 (of 5, 8 tried, at n_max = 11) is enough"),
        (1.01 * abs(many), 8, "l resolved to n = 8 (of 5, 8 tried, at n_max = 11) is enough"),
        (0.99 * abs(many), None, "none of those tried is enough (l resolved to n = 5, 8, at n_max"),
    ):
        assert enough_resolved(study, within, 200.0, 1600.0) == top
        assert words in resolved_text(study, within, 200.0, 1600.0)
    assert few < many < 0.0
    assert shell_changes(study, 1000.0, 1600.0)[0] > few
    assert shell_changes(small_study(), 200.0, 1600.0).size == 0


def test_optical_depths_are_observables() -> None:
    setup = small_setup(4, 200.0, 6)
    study = level_study(setup, (4, 5, 6, 7), optical_depth_to=(1000.0, 9000.0))
    assert study.observable_names[-2:] == ("optical_depth(1000)", "optical_depth(9000)")
    assert np.all(np.diff(study.rungs.observable[:, -2]) < 0.0)
    # Above the history there is none, and no law of it.
    assert np.all(np.isnan(study.rungs.observable[:, -1]))
    assert np.isnan(study.limit.observable.value[-1])
    assert study.limit.observable.fitted[-1] == 0


@pytest.mark.parametrize(
    "redshifts", [(1800.0, 200.0), (1800.0, 1090.0, 1089.0, 200.0), tuple(range(200, 1801, 2))]
)
def test_grid_of_a_study_has_no_gaps(redshifts: tuple[float, ...]) -> None:
    setup = small_setup(4, grid={"redshift_start": 1900.0, "redshifts": redshifts})
    dense = study_setup(setup, (500.0, 1850.0, 20.0))
    grid = output_redshifts(dense).tolist()
    # What the setup delivers is kept to the bit, and so is what is asked inside it.
    assert {*map(float, redshifts), 500.0} <= set(grid)
    assert (grid[0], grid[-1]) == (1800.0, 200.0)
    steps = -np.diff(np.log1p(grid))
    assert np.all(steps > 0.0)
    assert np.all(steps <= 0.03 * (1.0 + 1e-9))
    assert study_setup(dense) is dense
    # Three hundredths of a unit of ln(1 + z), 2.2 in all, and one cut more at each output.
    assert len(grid) <= len(redshifts) + 1 + 75


def test_answers_do_not_depend_on_the_outputs_of_the_setup() -> None:
    # Verdict and findings of three outputs and of two hundred.
    asked = requirement(
        "[observables]\nz_drag = 1e-2\n'x_e(700)' = 0.1\n'T_m(250)' = 1e-3\n"
        "[[ranges]]\nquantity = 'x_e'\nredshift = [230.0, 1500.0]\nrelative = 0.3\n"
        "[response]\nlimit_sigma = 1.0\n[response.rows]\nnames = ['a']\n"
        "redshift = [300.0, 900.0, 1400.0]\nkernels = [[0.0], [1.0], [0.0]]\n"
        "covariance = [[1e-4]]\n"
    )
    few, many = (
        level_study(level_setup(count), (4, 6, 8, 11, 15), also_at=(210.0, 1600.0))
        for count in (3, 200)
    )
    one, other = (verdict(study, 0.3, 210.0, 1600.0) for study in (few, many))
    assert one.n_max == other.n_max
    assert one.error == pytest.approx(other.error, rel=1e-6)
    assert one.redshift == other.redshift == 210.0
    first, second = (demands(study, asked) for study in (few, many))
    assert first.n_max == second.n_max
    for some, others in zip(first.rungs, second.rungs, strict=True):
        for finding, same in zip(some, others, strict=True):
            assert finding.name == same.name
            assert finding.passed == same.passed
            assert finding.error == pytest.approx(same.error, rel=1e-3), finding.name


def test_bar_of_the_limit_is_held_against_the_correction() -> None:
    study = small_study()
    found = check_limit(study)
    assert (found.low, found.high, found.n_without_law) == (200.0, 1600.0, 0)
    limit = study.limit.free_electron_fraction
    row = int(np.flatnonzero(study.redshift == found.redshift)[0])
    correction = abs(np.log(limit.value[row] / study.rungs.free_electron_fraction[-1, row]))
    assert found.bar_over_correction == pytest.approx(limit.relative_error[row] / correction)
    # Points without a law are left out and counted.
    fitted = np.where(study.redshift == found.redshift, 0, limit.fitted)
    without = dataclasses.replace(limit, fitted=fitted)
    bare = dataclasses.replace(
        study, limit=dataclasses.replace(study.limit, free_electron_fraction=without)
    )
    less = check_limit(bare)
    assert less.n_without_law == 1
    assert less.n_redshift == found.n_redshift
    assert less.bar_over_correction < found.bar_over_correction
    # Early corrections, a thousandth of the late ones, are left out whether or not one more is.
    assert 0 < found.n_far_below == less.n_far_below < found.n_redshift
    held = check_held_out(study)
    assert held is not None
    assert held.largest_miss_over_bar.shape == (1,)
    assert held.largest_miss_over_bar[0] <= 1.0
    assert 0.0 < held.largest_bar_over_correction[0] < np.inf
    assert check_held_out(dataclasses.replace(study, held_out=None)) is None


def test_corrections_far_below_what_is_asked_are_left_out_of_the_figure() -> None:
    """Closed form: bars of 3e-12, 2e-5 and 1e-4 on corrections of 1e-12, 1e-4 and 1e-3 of x_e."""
    study = small_study()
    redshift = study.redshift
    early, middle = redshift > 1300.0, (redshift <= 1300.0) & (redshift > 800.0)
    correction = np.select([early, middle], [1e-12, 1e-4], 1e-3)
    bar = np.select([early, middle], [3e-12, 2e-5], 1e-4)
    limit = study.limit.free_electron_fraction
    value = study.rungs.free_electron_fraction[-1] * np.exp(-correction)
    made = dataclasses.replace(
        limit, value=value, relative_error=bar, fitted=np.ones_like(limit.fitted)
    )
    whole = dataclasses.replace(study.limit, free_electron_fraction=made)
    asked = (redshift >= 200.0) & (redshift <= 1600.0)
    for within, least, share, far in (
        (None, 1.1e-6, 0.2, asked & early),
        (1e-3, 1e-6, 0.2, asked & early),
        (0.2, 2e-4, 0.1, asked & (early | middle)),
        (1.0, 1e-3, 0.1, asked & (early | middle)),
    ):
        question = None if within is None else Question(within, 200.0, 1600.0)
        found = check_limit(dataclasses.replace(study, limit=whole, question=question))
        assert found.least == pytest.approx(least)
        assert found.bar_over_correction == pytest.approx(share, rel=1e-4)
        assert found.n_far_below == np.sum(far)
    tiny = dataclasses.replace(made, value=study.rungs.free_electron_fraction[-1] * (1.0 - 1e-7))
    tiny = dataclasses.replace(tiny, relative_error=np.full_like(bar, 1e-8))
    whole = dataclasses.replace(study.limit, free_electron_fraction=tiny)
    asked_1 = dataclasses.replace(study, limit=whole, question=Question(1e-3, 200.0, 1600.0))
    found = check_limit(asked_1)
    assert np.isnan(found.bar_over_correction) and found.n_far_below == np.sum(asked)
    text = level_summary(asked_1, verdict(asked_1, 1e-3, 200.0, 1600.0))
    assert "below 1e-06 of x_e wherever a law is fitted, far below what is asked" in text


def requirement(text: str) -> Requirement:
    return parse_requirement(text)


def test_smallest_n_max_for_a_requirement() -> None:
    # A range alone must give what the verdict on x_e gives, at the outputs it shares.
    study = small_study()
    low, high = float(study.redshift[-2]), float(study.redshift[3])
    part = f"[[ranges]]\nquantity = 'x_e'\nredshift = [{low}, {high}]\nrelative = 0.9\n"
    found = demands(study, requirement(part))
    assert found.n_max == verdict(study, 0.9, low, high).n_max == 9
    passed = [rung[0].passed for rung in found.rungs]
    assert passed == (rung_errors(study, low, high) <= 0.9).tolist()
    assert demands_text(found, RUNGS[-1]).startswith("for the requirement: n_max = 9")
    # Two demands: the harder one decides, whichever it is.
    for allowed, n_max in (("1e-3", 27), ("1e-1", 9)):  # frozen: the law at small n proves nothing
        drag = f"[observables]\nz_drag = {allowed}\n"
        alone = demands(study, requirement(drag)).n_max
        assert alone is not None
        assert demands(study, requirement(drag + part)).n_max == max(alone, 9) == n_max
    out_of_reach = demands(study, requirement("[observables]\nk_D = 1e-9\n"))
    assert out_of_reach.n_max is None
    assert "not known from these rungs" in demands_text(out_of_reach, RUNGS[-1])


def test_requirement_must_be_covered() -> None:
    redshift = small_study().redshift
    check_covered(requirement("[observables]\n'x_e(900)' = 1e-3\nz_drag = 1e-3\n"), redshift)
    with pytest.raises(InputError, match=r"x_e\(100\) lies outside the redshifts of the study"):
        check_covered(requirement("[observables]\n'x_e(100)' = 1e-3\n"), redshift)
    for depth in (100, 200, 5000):  # at the end of the grid there is nothing to integrate
        with pytest.raises(InputError, match=rf"optical_depth\({depth}\) lies outside"):
            check_covered(requirement(f"[observables]\n'tau({depth})' = 1e-3\n"), redshift)
    assert depths_asked(requirement("[observables]\n'tau(900)' = 1e-3\nr_s = 0.1\n")) == (900.0,)


def test_notes_say_which_lines_escape() -> None:
    notes = " ".join(small_study().notes)
    assert "Lyman-alpha alone" in notes
    assert "no statement about a CMB spectrum" in notes
    assert "the outputs end at" not in notes
    late = dataclasses.replace(small_study(), redshift=small_study().redshift + 200.0)
    assert "the outputs end at z = 400: z_*, k_D, z_drag" in " ".join(late.notes)
