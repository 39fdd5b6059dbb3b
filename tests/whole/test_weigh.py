"""Weighing against differences of the same history and of whole runs, and what it refuses."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
import pytest

from levelnet.errors import AccuracyWarning, InputError, Outcome, SolveError
from levelnet.history import cost
from levelnet.history.run import solve
from levelnet.network.transitions import transitions
from levelnet.studies import weigh_budget
from levelnet.studies.budget import uncertainties_in
from levelnet.studies.weigh import bytes_per_target, weigh
from levelnet.studies.weigh_budget import weigh_with_budget
from levelnet.studies.weighing import Weighing
from tests.frozen_differences import (
    TARGETS,
    ScaledSobolev,
    frozen_run,
    log_scalars,
    slope,
    with_cross_sections,
    with_strengths,
)
from tests.small_runs import small_setup

# Differences of ln J carry the rounding of J, 1e-13, over the step of 0.02; line strengths hold
# more of it, for they sum flows that near equilibrium are small differences.
NOISE = {name: 2e-8 if name.startswith("line") else 1e-11 for name in TARGETS}
NOISE["line(3d-2p)"] = 1e-6


@lru_cache(maxsize=2)
def weighing(n_max: int = 8, end: float = 20.0) -> Weighing:
    return weigh(small_setup(n_max, end), TARGETS)


def compare(computed: Any, difference: Any, what: object) -> None:
    for name, ours, theirs in zip(TARGETS, computed, difference, strict=True):
        assert ours == pytest.approx(theirs, rel=1e-6, abs=NOISE[name]), (what, name)


def line_slope(place: Any, n_max: int = 8, end: float = 20.0) -> Any:
    run = frozen_run(n_max, end)[1]
    ladder = run.integrated.ladder
    return slope(
        lambda h: log_scalars(run, ladder=with_strengths(ladder, place, math.exp(h))),
    )


def continuum_slope(levels: Any, n_max: int = 8, end: float = 20.0) -> Any:
    run = frozen_run(n_max, end)[1]
    ladder = run.integrated.ladder
    return slope(
        lambda h: log_scalars(run, ladder=with_cross_sections(ladder, levels, math.exp(h))),
    )


def test_two_photon_escape_and_compton() -> None:
    ours, run = weighing(), frozen_run()[1]
    equations = run.equations
    rate = equations.two_photon_rate_per_s
    by_rate = slope(lambda h: log_scalars(run, two_photon_rate_per_s=rate * math.exp(h)))
    compare(ours.two_photon, by_rate, "two-photon")
    by_escape = slope(lambda h: log_scalars(run, treatment=ScaledSobolev(math.exp(h))))
    compare(ours.escape[:, 0], by_escape, "escape")
    scales = equations.scales
    by_compton = slope(
        lambda h: log_scalars(run, scales=dataclasses.replace(scales, compton_rate=math.exp(h)))
    )
    compare(ours.compton, by_compton, "compton")


@pytest.mark.parametrize(
    "name",
    [
        "baryon_density_h2",
        "matter_density_h2",
        "cmb_temperature_k",
        "helium_mass_fraction",
        "effective_neutrinos",
    ],
)
def test_parameters(name: str) -> None:
    ours, run = weighing(), frozen_run()[1]
    cosmology = run.setup.cosmology
    value = getattr(cosmology, name)

    def moved(h: float) -> Any:
        changed = dataclasses.replace(cosmology, **{name: value * math.exp(h)})
        return log_scalars(run, cosmology=changed)

    # T moves x_e by 13 times its own change: a smaller step.
    steps = {"cmb_temperature_k": 1e-3, "helium_mass_fraction": 5e-3}
    difference = slope(moved, steps.get(name, 0.02))
    for k, target in enumerate(TARGETS):
        computed = ours.parameter[k, ours.parameters.index(name)]
        # What rounding leaves in the differences; T_r moves the start of line strengths by 1e-6.
        noise = {"line(3d-2p)": 2e-3 if name == "cmb_temperature_k" else 2e-6}.get(target, 2e-8)
        noise = max(noise, 2e-6 if name == "cmb_temperature_k" and "line" in target else 0.0)
        assert computed == pytest.approx(difference[k], rel=1e-6, abs=noise), target


def strong(ours: Weighing, least: float) -> np.ndarray:
    plain = [k for k, name in enumerate(TARGETS) if not name.startswith("line")]
    return np.flatnonzero(np.abs(ours.bound_bound[plain]).max(axis=0) > least)


def test_a_few_lines_and_levels() -> None:
    ours, found = weighing(), transitions(frozen_run()[1].integrated.ladder)
    chosen = strong(ours, 1e-5)
    for k in chosen[:: max(1, len(chosen) // 2)][:2]:
        compare(ours.bound_bound[:, k], line_slope(found.place[[k]]), int(k))
    for level in (1, 5):
        compare(ours.bound_free[:, level], continuum_slope(np.array([level])), level)
    assert not ours.bound_free[:, 0].any()  # recombination to the ground state is not in


def test_sums_equal_derivatives_by_a_common_factor() -> None:
    ours, ladder = weighing(), frozen_run()[1].integrated.ladder
    found = transitions(ladder)
    compare(ours.bound_bound.sum(axis=1), line_slope(found.place), "bound-bound")
    everything = np.arange(1, len(ladder.levels))
    compare(ours.bound_free.sum(axis=1), continuum_slope(everything), "bound-free")
    for name in TARGETS:
        processes = ours.processes(name)
        at = TARGETS.index(name)
        assert processes["bound_bound"] == pytest.approx(ours.bound_bound[at].sum(), rel=1e-14)
        assert processes["lyman_alpha"] == processes["escape"]


@pytest.mark.slow
@pytest.mark.parametrize(("end", "count"), [(20.0, 25), (5.0, 5)])
def test_forty_rates_and_groups_of_the_rest(end: float, count: int) -> None:
    # z = 5 is T_r = 16 K: held pairs and the elimination without symmetry are in it.
    ours, ladder = weighing(10, end), frozen_run(10, end)[1].integrated.ladder
    found, draw = transitions(ladder), np.random.default_rng(20261201)
    chosen = strong(ours, 1e-5)
    for k in draw.choice(chosen, count, replace=False):
        compare(ours.bound_bound[:, k], line_slope(found.place[[k]], 10, end), int(k))
    for level in draw.choice(np.arange(1, len(ladder.levels)), 3 * count // 5, replace=False):
        levels = np.array([level])
        compare(ours.bound_free[:, level], continuum_slope(levels, 10, end), int(level))
    weak = np.setdiff1d(np.arange(len(found.place)), chosen)
    for _ in range(count // 5):
        group = draw.choice(weak, len(weak) // 2, replace=False)
        difference = line_slope(found.place[group], 10, end)
        computed = ours.bound_bound[:, group].sum(axis=1)
        for at, name in enumerate(TARGETS):
            assert computed[at] == pytest.approx(difference[at], rel=1e-6, abs=NOISE[name])


def test_whole_shells_weigh_what_their_levels_weigh_together() -> None:
    # With populations statistical by a network of whole shells, the sum over all rates is the same
    # kind of number: here it is held by a common factor on every line, in whole runs.
    name = "x_e(900)"
    # It ends soon after: what comes later cannot weigh.
    grid = {"redshift_start": 1800.0, "redshift_end": 850.0, "redshifts": (1800.0, 900.0, 850.0)}
    setup = small_setup(
        hydrogen={"n_max": 12, "resolve_l_to": 6}, accuracy={"relative": 1e-9}, grid=grid
    )
    ours = weigh(setup, [name])

    def log_x(row: str) -> float:
        found = solve(dataclasses.replace(setup, rates={"rows": (row,)}))
        return math.log(float(found.free_electron_fraction[1]))

    for process, selector in (("bound_bound", "bound_bound,*,*"), ("bound_free", "bound_free,*,")):
        step = 0.01
        rows = [f"{selector},{math.exp(h)!r},,test" for h in (-step, step)]
        difference = (log_x(rows[1]) - log_x(rows[0])) / (2.0 * step)
        assert ours.processes(name)[process] == pytest.approx(difference, rel=2e-5), process
    assert ours.levels.shell.sum() == 6
    assert ours.bound_free[0, ours.levels.shell].all()


@pytest.mark.parametrize(
    ("target", "complaint"),
    [
        ("line(9d-2p)", "resolved in l up to n = 4"),
        ("line(3p-1s)", "that line is closed"),
        ("x_e(10)", "below grid.redshift_end"),
        ("optical_depth(5)", "starts at grid.redshift_end"),
        ("optical_depth(20)", "starts at grid.redshift_end"),
        ("nonsense", "not known"),
    ],
)
def test_targets_that_cannot_be(target: str, complaint: str) -> None:
    with pytest.raises(InputError, match=complaint):
        weigh(small_setup(4), [target])


def test_what_cannot_be_weighed() -> None:
    with pytest.raises(InputError, match="name at least one"):
        weigh(small_setup(4), [])
    with pytest.raises(InputError, match="interpolate"):
        weigh(small_setup(4, accuracy={"interpolate": False}), ["z_*"])
    with pytest.raises(SolveError):
        weigh(small_setup(4, accuracy={"max_steps": 10}), ["z_*"])


def test_budget_in_parts_is_the_budget(monkeypatch: pytest.MonkeyPatch) -> None:
    setup, targets = small_setup(5), ["z_*", "x_e(900)"]
    band = ["x_e(900)", "x_e(700)", "x_e(500)", "x_e(300)"]
    rows = uncertainties_in(setup)
    whole = weigh_with_budget(setup, targets, band, rows)
    assert whole.targets == ("last_scattering_redshift", "x_e(900)")
    memory = 2.5 * bytes_per_target(setup) / 0.3
    monkeypatch.setattr(weigh_budget, "available_memory_bytes", lambda: memory)
    parts = weigh_with_budget(setup, targets, band, rows)
    assert whole.budget is not None and parts.budget is not None
    assert parts.budget.targets == whole.budget.targets
    assert len(whole.budget.targets) == 5
    # Other step ends are asked for in each part, so the steps differ by their own error.
    np.testing.assert_allclose(parts.budget.sigma, whole.budget.sigma, rtol=1e-5)


def test_too_many_targets_for_the_memory(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 4e8)
    weigh(small_setup(4), ["z_*"])
    many = [f"x_e({z})" for z in range(200, 1700)]
    with pytest.raises(InputError, match="of memory needed"):
        weigh(small_setup(60), many)


def test_changed_constants_further_lines_and_names_of_helium() -> None:
    # Whole runs, constants changed and two Lyman lines open; first differences of second order.
    cosmology = dataclasses.replace(
        small_setup(5).cosmology, helium_mass_fraction=None, helium_nucleon_fraction=0.2454
    )
    setup = small_setup(
        cosmology=cosmology,
        hydrogen={"n_max": 5},
        lines={"lyman_lines": 2},
        physics={"fine_structure_change": 0.05, "electron_mass_change": -0.03},
        accuracy={"relative": 1e-8},
        grid={"redshift_start": 1800.0, "redshift_end": 850.0, "redshifts": (1800.0, 900.0, 850.0)},
    )
    ours = weigh(setup, ["x_e(900)"])

    def log_x(**change: Any) -> float:
        found = solve(dataclasses.replace(setup, **change))
        return math.log(float(found.free_electron_fraction[1]))

    def difference(make: Callable[[float], dict[str, Any]], step: float = 0.01) -> float:
        low, high = (log_x(**make(math.exp(h))) for h in (-step, step))
        return (high - low) / (2.0 * step)

    def by_row(selector: str) -> float:
        return difference(lambda factor: {"rates": {"rows": (f"{selector},{factor!r},,test",)}})

    names = [f"{n}{'spdfg'[l]}" for n, l in zip(ours.levels.n, ours.levels.l, strict=True)]
    line = [
        k
        for k, (a, b) in enumerate(zip(ours.upper, ours.lower, strict=True))
        if (names[a], names[b]) == ("4d", "3p")
    ]
    computed = {
        "escape,3p,": ours.escape[0, ours.lines.index("3p-1s")],
        "bound_bound,4d,3p": ours.bound_bound[0, line[0]],
        "compton,,": ours.compton[0],
    }
    for selector, value in computed.items():
        assert value == pytest.approx(by_row(selector), rel=1e-4, abs=2e-8), selector
    assert ours.levels.n[ours.line_upper].tolist() == [2, 3]
    assert ours.levels.l[ours.line_upper].tolist() == [1, 1]
    assert "helium_mass_fraction" not in ours.parameters
    value = ours.parameter[0, ours.parameters.index("helium_nucleon_fraction")]
    expected = difference(
        lambda factor: {
            "cosmology": dataclasses.replace(cosmology, helium_nucleon_fraction=0.2454 * factor)
        }
    )
    assert value == pytest.approx(expected, rel=1e-4)


def test_parameters_that_are_zero_have_no_logarithm() -> None:
    cosmology = dataclasses.replace(small_setup(4).cosmology, helium_mass_fraction=0.0)
    ours = weigh(small_setup(4, cosmology=cosmology), "z_*")
    assert "helium_mass_fraction" not in ours.parameters
    assert "baryon_density_h2" in ours.parameters
    assert ours.index("z_*") == 0


@pytest.mark.parametrize("lines", [{"hydrogen": "closed"}, {}], ids=["closed", "no two photons"])
def test_outcome_is_that_of_the_history(lines: dict[str, str]) -> None:
    # Without one of the two ways to the ground state the levels are not quasi-steady any more.
    rate = 8.2246 if lines else 0.0
    hydrogen = {"n_max": 5, "two_photon_rate_per_s": rate}
    setup = small_setup(hydrogen=hydrogen, lines=lines)
    with pytest.warns(AccuracyWarning):
        history = solve(setup)
    assert weigh(setup, ["x_e(300)"]).outcome is history.outcome is Outcome.QUASI_STEADY_LOST


@pytest.mark.parametrize("targets", [[900], []])
def test_targets_that_are_no_text(targets: Any) -> None:
    with pytest.raises(InputError, match="name at least one"):
        weigh(small_setup(4), targets)
    with pytest.raises(InputError, match="a Setup is needed"):
        weigh("setup.toml", ["z_*"])  # type: ignore[arg-type]


def test_a_treatment_of_ones_own() -> None:
    setup = small_setup(5)
    twice = weigh(setup, "x_e(900)", line_treatment=ScaledSobolev(2.0))
    rows = {"rows": ("escape,2p,,2.0,,test",)}
    plain = weigh(dataclasses.replace(setup, rates=rows), "x_e(900)")
    assert twice.value[0] == pytest.approx(plain.value[0], rel=1e-9)
    assert twice.two_photon[0] == pytest.approx(plain.two_photon[0], rel=1e-7)
    assert twice.escape[0, 0] == pytest.approx(plain.escape[0, 0], rel=1e-7)
