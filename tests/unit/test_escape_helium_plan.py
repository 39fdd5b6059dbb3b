"""Which variants a study of the lines of He I runs: each once, the right one for each question.

Expected is what the settings of [helium] and [lines] mean by the README: closed form.
"""

from __future__ import annotations

import itertools

import pytest

from levelnet.errors import InputError
from levelnet.studies.escape import escape_plans
from levelnet.studies.escape_helium_plan import HELIUM_SWITCHES, helium_plan
from levelnet.studies.escape_plan import Plan, Variant, variant_setup
from tests.small_helium import helium_setup
from tests.small_runs import small_setup

NEEDS = {"wings": {"continuum"}, "diffusion": {"continuum", "wings"}}
NEEDED_BY = {"continuum": {"wings", "diffusion"}, "wings": {"diffusion"}}


def plan(order: tuple[str, ...] | None = None) -> Plan:
    lines = {"hydrogen": "transfer", "helium": "continuum"}
    return helium_plan(helium_setup(5, lines=lines, grid={"redshift_end": 400.0}), order)


def switches_on(one: Variant) -> set[str]:
    """Switches of a variant, read off its settings."""
    lines, continuum = one.lines, one.lines.helium_continuum
    assert lines.hydrogen == "sobolev"
    assert lines.transfer is None
    found = {"intercombination"} if one.intercombination_rate_per_s else set()
    if lines.helium_higher_lines == "feedback":
        found.add("higher_lines")
    if lines.helium == "sobolev_feedback" or (continuum and continuum.feedback):
        found.add("feedback")
    if continuum:
        found.add("continuum")
        found |= {"wings"} if continuum.redistribution == "partial" else set()
        found |= {"diffusion"} if continuum.diffusion else set()
    return found


ORDERS = (
    None,
    ("feedback", "continuum", "higher_lines", "wings", "intercombination", "diffusion"),
)


@pytest.mark.parametrize("order", ORDERS)
def test_every_question_has_its_variant(order: tuple[str, ...] | None) -> None:
    made = plan(order)
    on = [switches_on(one) for one in made.variants]
    every = set(HELIUM_SWITCHES)
    assert made.switches == (order or tuple(HELIUM_SWITCHES))
    assert made.species == "He I"
    assert on[made.base] == set()
    assert on[made.reference] == every
    for k, name in enumerate(made.switches):
        assert on[made.alone[k]] == {name} | NEEDS.get(name, set())
        assert on[made.removed[k]] == every - {name} - NEEDED_BY.get(name, set())
        assert on[made.cumulative[k]] == set(made.switches[: k + 1])
    assert made.cumulative[-1] == made.reference


def test_no_variant_is_run_twice_and_every_treatment_is_there() -> None:
    made = plan()
    for one, other in itertools.combinations(made.variants, 2):
        assert one[1:] != other[1:]
        assert one.name != other.name
    assert len(made.variants) == 23
    assert made.reference not in made.treatments
    named = [made.variants[k].lines for k in made.treatments]
    assert {one.helium for one in named} == {"sobolev", "sobolev_feedback", "continuum"}
    continuum = [one.helium_continuum for one in named if one.helium_continuum]
    assert {one.redistribution for one in continuum} == {"doppler", "complete", "partial"}
    assert {one.diffusion for one in continuum} == {True, False}
    every = {one.lines.helium_higher_lines for one in made.variants}
    assert every == {"closed", "free", "feedback"}
    rates = {one.intercombination_rate_per_s for one in made.variants}
    assert rates == {0.0, 177.6}
    setup = helium_setup(5)
    assert variant_setup(setup, made.variants[made.base]).helium.intercombination_rate_per_s == 0.0


def test_both_atoms_are_compared_where_both_recombine() -> None:
    grid = {"redshift_end": 400.0}
    both = escape_plans(helium_setup(5, grid=grid))
    assert [one.species for one in both] == ["H I", "He I"]
    # Hydrogen's variants keep what the setup says of helium.
    chosen = helium_setup(5, lines={"helium": "continuum"}, grid=grid)
    assert {one.lines.helium for one in escape_plans(chosen)[0].variants} == {"continuum"}
    assert [one.species for one in escape_plans(helium_setup(5, grid=grid), "helium")] == ["He I"]
    assert [one.species for one in escape_plans(small_setup(5, 400.0))] == ["H I"]


def test_what_makes_no_sense_is_refused() -> None:
    with pytest.raises(InputError, match=r"helium\.n_max = 0: helium has no lines to compare"):
        helium_plan(small_setup(5))
    with pytest.raises(InputError, match="diffusion comes with wings, so after it"):
        plan(("intercombination", "continuum", "diffusion", "wings", "feedback", "higher_lines"))
    with pytest.raises(InputError, match='"raman" is no switch; they are intercombination'):
        plan(("raman",))
