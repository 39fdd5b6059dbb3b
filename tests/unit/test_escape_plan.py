"""Which variants a study of the escape runs: each once, and the right one for each question.

Expected is what the settings of [lines] mean by the README: closed form.
"""

from __future__ import annotations

import itertools

import pytest

from levelnet.errors import InputError
from levelnet.escape.lines import Lines
from levelnet.studies.escape_plan import (
    SWITCHES,
    Plan,
    Variant,
    escape_plan,
    transfer_lines,
    variant_setup,
)
from tests.small_runs import small_setup

ORDERS = (
    None,
    ("scattering", "raman", "excited_two_photon", "feedback", "stimulated", "absorption"),
    ("stimulated", "feedback", "raman", "absorption", "scattering", "excited_two_photon"),
)


def plan(order: tuple[str, ...] | None = None) -> Plan:
    setup = small_setup(6, lines={"lyman_lines": 3, "hydrogen": "open"})
    return escape_plan(setup, order)


def switches_on(lines: Lines) -> set[str]:
    """Switches of a variant, read off its settings."""
    assert lines.hydrogen == "transfer"
    assert lines.transfer is not None
    found = {name for name in SWITCHES if getattr(lines.transfer, name, False)}
    if lines.two_photon != "spontaneous":
        found.add("stimulated")
    if lines.two_photon == "distorted":
        found.add("absorption")
    return found


@pytest.mark.parametrize("order", ORDERS)
def test_every_question_has_its_variant(order: tuple[str, ...] | None) -> None:
    made = plan(order)
    on = [
        switches_on(one.lines) if one.lines.hydrogen == "transfer" else None
        for one in made.variants
    ]
    every = set(SWITCHES)
    assert made.switches == (order or tuple(SWITCHES))
    assert on[made.base] == set()
    assert on[made.reference] == every
    for k, name in enumerate(made.switches):
        alone, left = {name}, every - {name}
        if name == "absorption":
            alone = {"stimulated", "absorption"}
        if name == "stimulated":
            left = every - {"stimulated", "absorption"}
        assert on[made.alone[k]] == alone
        assert on[made.removed[k]] == left
        assert on[made.cumulative[k]] == set(made.switches[: k + 1])
    assert made.cumulative[-1] == made.reference
    assert [one or set() for one in on] == [set(one) for one in made.switched_on]
    assert made.coarser is not None
    assert switches_on(made.coarser.lines) == every


@pytest.mark.parametrize("order", ORDERS)
def test_no_variant_is_run_twice(order: tuple[str, ...] | None) -> None:
    variants = plan(order).variants
    for one, other in itertools.combinations(variants, 2):
        assert one.lines != other.lines
        assert one.name != other.name


def test_default_order_needs_few_runs() -> None:
    made = plan()
    # Base, reference, six alone and six removed, of them two that the cumulative sets are too;
    # the sets of three and four.
    fields = [one for one in made.variants if one.lines.hydrogen == "transfer"]
    assert len(fields) == 16
    assert len(made.treatments) == len(made.variants) - 16 == 7


def test_what_is_no_switch_is_kept() -> None:
    lines = {"hydrogen": "transfer", "lyman_lines": 4, "transfer": {"frequency_step": 5e-4}}
    setup = small_setup(6, lines=lines)
    for one in escape_plan(setup).variants:
        assert one.lines.lyman_lines == 4
        if one.lines.transfer is not None:
            assert one.lines.transfer.frequency_step == 5e-4
    full = transfer_lines(setup.lines, frozenset(SWITCHES))
    assert full == setup.lines
    coarser = escape_plan(setup).coarser
    assert coarser is not None
    assert coarser.lines.transfer is not None
    assert coarser.lines.transfer.frequency_step == 1e-3


@pytest.mark.parametrize(
    ("order", "message"),
    [
        (("stimulated",), "each switch once is needed: stimulated, absorption, feedback"),
        ((*SWITCHES, "raman"), "each switch once is needed"),
        ((*list(SWITCHES)[:-1], "recoil"), '"recoil" is no switch; they are stimulated, '),
        (tuple(reversed(SWITCHES)), "absorption comes with stimulated, so after it"),
    ],
)
def test_orders_that_are_none(order: tuple[str, ...], message: str) -> None:
    with pytest.raises(InputError, match=message):
        plan(order)


def test_variant_that_does_not_fit_is_named() -> None:
    setup = small_setup(13, lines={"lyman_lines": 12})
    lines = Lines(hydrogen="sobolev_feedback", lyman_lines=12)
    one = Variant("Sobolev with feedback", lines)
    with pytest.raises(InputError, match=r"Sobolev with feedback: .*12 lines with feedback"):
        variant_setup(setup, one)
