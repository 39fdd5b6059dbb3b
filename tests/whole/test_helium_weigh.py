"""Weighing helium: against differences of the same history and of whole runs, and what is refused.

Differences on the same steps are closed form up to rounding: the derivative of what was computed.
"""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache
from typing import Any

import numpy as np
import pytest

from levelnet.arrays import FloatArray
from levelnet.atomic.helium_transitions import helium_transitions
from levelnet.errors import InputError
from levelnet.history.run import solve
from levelnet.network.transitions import transitions
from levelnet.studies.budget import error_budget, load_uncertainties, uncertainties_in
from levelnet.studies.frozen import freeze
from levelnet.studies.helium_groups import helium_shares
from levelnet.studies.targets import parse_target
from levelnet.studies.weigh import reach, weigh
from levelnet.studies.weigh_budget import budget_notes, weigh_with_budget
from levelnet.studies.weighing import Weighing
from tests.helium_differences import (
    GRID,
    LINES,
    TARGETS,
    frozen_helium,
    helium_cross_sections,
    helium_slope,
    helium_strengths,
    lit_setup,
    log_scalars,
    with_absorption,
    with_ion,
    with_ladders,
    with_strength,
    with_two_photon,
)
from tests.small_runs import COSMOLOGY

# Rounding of ln J, 1e-14, over the step of 0.02, twice as much left of Richardson's sum.
NOISE = 2e-12
WITH_FIELDS = "continuum"


@lru_cache(maxsize=4)
def weighing(kind: str) -> Weighing:
    return weigh(lit_setup(kind), TARGETS)


def compare(computed: Any, difference: FloatArray, what: str, relative: float = 1e-6) -> None:
    for name, ours, theirs in zip(TARGETS, computed, difference, strict=True):
        assert ours == pytest.approx(theirs, rel=relative, abs=NOISE), (what, name)


def at_ends(kind: str, line: str) -> Any:
    """The equations of helium, and where a line stands."""
    run = frozen_helium(kind)
    helium = run.equations.helium
    assert helium is not None
    return run, helium, helium.first.lines.names.index(line)


@pytest.mark.parametrize("kind", ["sobolev", pytest.param(WITH_FIELDS, marks=pytest.mark.slow)])
def test_intercombination_and_two_photon_rates(kind: str) -> None:
    run, helium, line = at_ends(kind, "2 3P1-1 1S")
    ours = weighing(kind).helium
    assert ours is not None
    by_strength = helium_slope(
        lambda h: log_scalars(run, helium=with_strength(helium, line, math.exp(h)))
    )
    compare(ours.strength[:, line], by_strength, "A of 2 3P1")
    by_decay = helium_slope(
        lambda h: log_scalars(run, helium=with_two_photon(helium, "first", math.exp(h)))
    )
    compare(ours.two_photon, by_decay, "two photons")
    # Above what rounding hides, and downwards: faster recombination, fewer electrons.
    assert ours.strength[0, line] < -1e-3


@pytest.mark.slow
@pytest.mark.parametrize("kind", [WITH_FIELDS, "complete", "feedback"])
def test_lines_and_fields_that_are_remembered(kind: str) -> None:
    run, helium, _ = at_ends(kind, "2 1P-1 1S")
    ours = weighing(kind).helium
    assert ours is not None
    for line, name in enumerate(ours.lines):
        if not np.abs(ours.strength[:2, line]).max() > 1e-6:
            continue
        by_strength = helium_slope(
            lambda h, line=line: log_scalars(run, helium=with_strength(helium, line, math.exp(h)))
        )
        compare(ours.strength[:, line], by_strength, f"A of {name}")
    factors = np.ones(len(ours.lines))

    def escaped(h: float) -> FloatArray:
        first = dataclasses.replace(helium.first, escape_factor=factors * math.exp(h))
        return log_scalars(run, helium=dataclasses.replace(helium, first=first))

    compare(ours.escape.sum(axis=1), helium_slope(escaped), "escape")
    by_absorption = helium_slope(
        lambda h: log_scalars(run, helium=with_absorption(helium, math.exp(h)))
    )
    compare(ours.absorption, by_absorption, "absorption")
    assert (np.abs(ours.absorption).max() > 1e-3) == (kind != "feedback")


@pytest.mark.slow
@pytest.mark.parametrize("kind", [WITH_FIELDS])
def test_a_line_that_sets_widths_and_a_cross_section(kind: str) -> None:
    run, helium, _ = at_ends(kind, "2 1P-1 1S")
    ours, atoms = weighing(kind).helium, run.integrated.helium
    assert ours is not None and atoms is not None
    ladders, levels = atoms.first, atoms.first.levels
    found = helium_transitions(ladders.lines)
    ends = levels.index(2, 1, 0), levels.index(2, 0, 0)
    (k,) = np.flatnonzero((found.upper == ends[0]) & (found.lower == ends[1])).tolist()
    by_line = helium_slope(
        lambda h: log_scalars(
            run,
            helium=with_ladders(helium, helium_strengths(ladders, found.place[[k]], math.exp(h))),
        )
    )
    compare(ours.bound_bound[:, k], by_line, "2 1P-2 1S")
    # Through the part of absorbed photons that is lost to other levels: the larger, the slower.
    assert ours.bound_bound[1, k] < -1e-3


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["sobolev", WITH_FIELDS])
def test_common_factors_on_levels_and_lines(kind: str) -> None:
    run, helium, _ = at_ends(kind, "2 1P-1 1S")
    ours, atoms = weighing(kind).helium, run.integrated.helium
    assert ours is not None and atoms is not None
    ladders = atoms.first
    place, everything = helium_transitions(ladders.lines).place, np.arange(1, len(ladders.levels))
    for name, make, which in (
        ("bound_bound", helium_strengths, place),
        ("bound_free", helium_cross_sections, everything),
    ):
        difference = helium_slope(
            lambda h, make=make, which=which: log_scalars(
                run, helium=with_ladders(helium, make(ladders, which, math.exp(h)))
            )
        )
        compare(getattr(ours, name).sum(axis=1), difference, name)
    shares = helium_shares(ours, 1)
    lines = sum(one for name, one in shares.items() if "cross" not in name)
    assert lines == pytest.approx(ours.bound_bound[1].sum(), rel=1e-12)


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["sobolev", WITH_FIELDS])
def test_parameters_of_the_cosmology(kind: str) -> None:
    ours, run = weighing(kind), frozen_helium(kind)
    for name in (
        "baryon_density_h2",
        "matter_density_h2",
        "cmb_temperature_k",
        "helium_mass_fraction",
    ):
        value = getattr(COSMOLOGY, name)
        difference = helium_slope(
            lambda h, name=name, value=value: log_scalars(
                run,
                cosmology=dataclasses.replace(COSMOLOGY, **{name: value * math.exp(h)}),
            ),
            # T moves the ions of Saha equilibrium by 50 times its own change.
            {"cmb_temperature_k": 1e-4}.get(name, 5e-3),
        )
        at = ours.parameters.index(name)
        for k, target in enumerate(TARGETS):
            assert ours.parameter[k, at] == pytest.approx(difference[k], rel=1e-6, abs=1e-9), target


@pytest.mark.slow
def test_the_second_ion_and_what_hangs_on_all_electrons() -> None:
    """x_e where He III recombines; the damping scale, which sees helium before z_*."""
    targets = ("x_e(5500)", "T_m(800)", "damping_per_mpc", "optical_depth(3000)")
    parsed = [parse_target(name) for name in targets]
    grid = {"redshift_start": 6000.0, "redshift_end": 800.0, "redshifts": (6000.0, 800.0)}
    setup = lit_setup("sobolev", 3, 1e-4, grid=grid)
    run = freeze(setup, *reach(setup, parsed), lambda stage, fraction: None)
    ours, atoms, helium = weigh(setup, targets), run.integrated.helium, run.equations.helium
    assert ours.helium_ion is not None and atoms is not None and atoms.second is not None
    assert helium is not None
    place = transitions(atoms.second).place
    none, every = np.zeros(0, int), np.arange(1, len(atoms.second.levels))
    ion = ours.helium_ion
    for name, computed, make in (
        ("two_photon", ion.two_photon, lambda f: with_two_photon(helium, "second", f)),
        ("bound_bound", ion.bound_bound.sum(axis=1), lambda f: with_ion(run, f, place, none)),
        ("bound_free", ion.bound_free.sum(axis=1), lambda f: with_ion(run, f, none, every)),
    ):
        difference = helium_slope(
            lambda h, make=make: log_scalars(run, parsed, helium=make(math.exp(h)))
        )
        np.testing.assert_allclose(computed, difference, rtol=2e-6, atol=1e-11, err_msg=name)
    assert ion.two_photon[0] < -1e-5
    value = COSMOLOGY.helium_mass_fraction
    assert value is not None
    difference = helium_slope(
        lambda h: log_scalars(
            run,
            parsed,
            cosmology=dataclasses.replace(COSMOLOGY, helium_mass_fraction=value * math.exp(h)),
        ),
        5e-3,
    )
    computed = ours.parameter[:, ours.parameters.index("helium_mass_fraction")]
    np.testing.assert_allclose(computed, difference, rtol=1e-6)


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["sobolev", WITH_FIELDS])
def test_against_whole_runs(kind: str) -> None:
    """Rows of overrides and `solve`: one rate, then all together by a common factor.

    Steps of their own leave 1e-8 of x_e at most, over twice the step of 0.01.
    """
    grid = GRID | {"redshifts": (2600.0, 1800.0, 1700.0)}
    setup = lit_setup(kind, relative=1e-7, grid=grid)
    ours = weigh(setup, "x_e(1800)").helium
    assert ours is not None
    rows = {
        "bound_bound,He I 2 3P1,1 1S": ours.strength[0, ours.lines.index("2 3P1-1 1S")],
        "two_photon,He I 2 1S,": ours.two_photon[0],
        "escape,He I *,": ours.escape[0].sum(),
        "bound_free,He I *,": ours.bound_free[0].sum(),
        "bound_bound,He I *,He I *": ours.bound_bound[0].sum(),
    }
    if kind == WITH_FIELDS:
        rows["absorption,,"] = ours.absorption[0]

    def log_x(step: float, chosen: list[str]) -> float:
        changed = tuple(f"{row},{math.exp(step)!r},,test" for row in chosen)
        found = solve(dataclasses.replace(setup, rates={"rows": changed}))
        return math.log(float(found.free_electron_fraction[1]))

    first = next(iter(rows))
    for chosen in ([first], list(rows)):
        computed = sum(rows[row] for row in chosen)
        difference = (log_x(0.01, chosen) - log_x(-0.01, chosen)) / 0.02
        assert computed == pytest.approx(difference, rel=1e-3, abs=1e-6), chosen


@pytest.mark.slow
def test_published_size_of_the_intercombination_rate() -> None:
    """Published: its uncertainty is about 1e-3 of x_e (Switzer & Hirata 2008, PRD 77, 083008).

    Rates in use went from 176.4 to 233 per s (from memory), 0.27 in ln from 177.6.
    """
    for kind in ("sobolev", WITH_FIELDS):
        helium = weighing(kind).helium
        assert helium is not None
        moved = helium.strength[:2, helium.lines.index("2 3P1-1 1S")] * math.log(233.0 / 177.6)
        assert -2e-3 < moved.min() < -3e-4


def test_budget_of_helium() -> None:
    setup = lit_setup(WITH_FIELDS)
    rows = uncertainties_in(setup)
    budget = error_budget(weighing(WITH_FIELDS), rows)
    groups = [one.group for one in budget.ranked("x_e(1800)")]
    assert groups[0] == "diffusion in the 584 A line"
    # By hand: sigma of the published rates times the derivative.
    helium = weighing(WITH_FIELDS).helium
    assert helium is not None
    at = budget.groups.index("He I intercombination rate")
    by_rate = helium.strength[:, helium.lines.index("2 3P1-1 1S")]
    np.testing.assert_allclose(budget.contribution[:, at], 0.0068 * by_rate, rtol=1e-14)
    assert 1e-4 < budget.sigma[1] < 1e-2
    # Without helium, and with other treatments of its lines, its rows are not in.
    inert = uncertainties_in(dataclasses.replace(setup, helium={"n_max": 0}, lines={}))
    assert not any("He" in one.selector.text for one in inert)
    plain = {one.selector.text for one in uncertainties_in(lit_setup("sobolev"))}
    assert not {"absorption", "escape He I 2 1P"} & plain
    assert "two_photon He I 2 1S" in plain
    assert len(load_uncertainties()) == len(rows)


def test_weighing_in_parts_keeps_helium(monkeypatch: pytest.MonkeyPatch) -> None:
    setup = lit_setup("sobolev")
    found = weigh_with_budget(setup, ["x_e(2000)"], ["x_e(1900)"], uncertainties_in(setup))
    assert found.helium is not None and found.helium_ion is not None
    assert found.helium.escape.shape == (1, 4)
    assert found.helium_ion.two_photon.shape == (1,)
    assert found.budget is not None and len(found.budget.targets) == 2


@pytest.mark.parametrize(
    ("kind", "said"),
    [
        ("sobolev", "the H I continuum inside the lines of He I, is not in it"),
        ("complete", 'the error of redistribution = "complete"'),
        (WITH_FIELDS, "stands for diffusion in the line"),
    ],
)
def test_notes_say_what_the_budget_of_helium_leaves_out(kind: str, said: str) -> None:
    setup = lit_setup(kind)
    notes = budget_notes(setup, uncertainties_in(setup))
    assert sum(said in one for one in notes) == 1
    inert = dataclasses.replace(setup, helium={"n_max": 0}, lines={})
    assert not any("He I" in one for one in budget_notes(inert, uncertainties_in(inert)))


def test_helium_in_saha_equilibrium_has_no_second_ion() -> None:
    found = weigh(lit_setup("sobolev", helium={"helium_ion": "saha"}), "x_e(2000)")
    assert found.helium is not None
    assert found.helium_ion is None


@pytest.mark.parametrize(
    ("row", "complaint"),
    [
        ("bound_bound,He I 2 3P1,1 1S", "helium, which is inert with helium.n_max = 0"),
        ("escape,He I 5 1P,", "lines to 1 1S from n 1P up to n = 2"),
        ("bound_bound,He I 7 1D,He I 2 1P", "He I with helium.n_max = 3"),
        ("escape,He II 3p,", "He II with helium.n_max = 3"),
        ("two_photon,He II 2s,", 'no levels with helium_ion = "saha"'),
        ("absorption,,", 'acts where helium recombines and lines.helium = "continuum"'),
        ("bound_bound,He I 2 1S,He I 2 1P", "upper term has the higher energy"),
        ("bound_bound,He I 2 3P1,He I 2 3S", "only lines to 1 1S tell J apart"),
        ("bound_free,He I 2 5P,", "is no pattern of terms"),
        ("bound_bound,He I 3 1P,3s", "is no pattern of terms"),
        ("bound_bound,3p,He I 2 1S", "upper is of H I"),
        ("compton,He I,", "compton has one rate"),
        ("two_photon,He I 2 3S,", "two_photon is of 2 1S alone"),
    ],
)
def test_selectors_that_select_nothing(row: str, complaint: str) -> None:
    parts: dict[str, Any] = {}
    if "inert" in complaint:
        parts = {"helium": {"n_max": 0}, "lines": {}}
    elif "saha" in complaint:
        parts = {"helium": {"helium_ion": "saha"}}

    with pytest.raises(InputError) as caught:
        setup = lit_setup("sobolev", rates={"rows": (f"{row},1.1,,test",)}, **parts)
        solve(setup)
    assert complaint in str(caught.value)
    assert len(str(caught.value).splitlines()) == 1
    assert "rates.rows, row 1" in str(caught.value)


def test_values_of_helium_are_factors() -> None:
    with pytest.raises(InputError, match="rates of He I but those of two_photon take a factor"):
        lit_setup("sobolev", rates={"rows": ("bound_bound,He I 2 1P,1 1S,,1.8e9,test",)})
    rows = ("two_photon,He I 2 1S,,,51.3,test", "two_photon,2s,,,8.2206,test")
    setup = lit_setup("sobolev", rates={"rows": rows})
    assert setup.rates.two_photon_rate_per_s(51.02, "He I") == 51.3
    assert setup.two_photon_rate_per_s == 8.2206


def test_lines_that_hydrogen_feeds_are_still_refused() -> None:
    lines = LINES["sobolev"] | {"hydrogen": "sobolev_feedback", "lyman_lines": 2}
    with pytest.raises(InputError, match="a weighing has no memory of the field"):
        weigh(lit_setup("sobolev", lines=lines), "x_e(1800)")


def test_changed_constants_are_refused_with_helium() -> None:
    with pytest.raises(InputError, match=r"\[physics\]: with levels of helium a weighing takes"):
        weigh(lit_setup("sobolev", physics={"electron_mass_change": 1e-3}), "x_e(1800)")
