"""Plans: the runs of each command counted, shared among processes, refused where memory is short.

Counts are closed forms; that times are right to a factor of two or three was measured by hand.
"""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path
from typing import Any

import pytest

from levelnet.cli.main import main
from levelnet.errors import InputError
from levelnet.history import cost
from levelnet.history.cost import Cost, estimate, node_seconds
from levelnet.pieces import MemoryPieces
from levelnet.studies import first_use
from levelnet.studies.escape import escape_plans
from levelnet.studies.plans import (
    make_plan,
    plan_distill,
    plan_escape,
    plan_levels,
    plan_solve,
    plan_weigh,
)
from levelnet.studies.sweep import compute_missing
from levelnet.studies.sweep_cases import vary
from levelnet.studies.sweep_plan import plan_sweep
from levelnet.studies.weigh_budget import parts_of
from tests.small_helium import helium_setup
from tests.small_runs import small_setup
from tests.whole.test_command_line import GOOD


def test_processes_share_time_and_each_has_its_memory() -> None:
    setups = [small_setup(n) for n in (10, 20, 30)]
    costs = [Cost(1e6, 1.0), Cost(3e6, 2.0), Cost(2e6, 6.0)]
    one, two = (make_plan("x", setups, costs, workers) for workers in (1, 2))
    assert (one.memory_bytes, one.seconds, one.processor_seconds) == (3e6, 9.0, 9.0)
    # The longest cannot be shared.
    assert (two.memory_bytes, two.seconds, two.processor_seconds) == (5e6, 6.0, 9.0)
    assert make_plan("x", setups, costs, 8).memory_bytes == 6e6
    assert one.runs == two.runs == 3


def test_a_reduced_network_and_fewer_populations_cost_less() -> None:
    setup = small_setup(100)
    whole, none = estimate(setup), estimate(setup, 0)
    assert whole.seconds - none.seconds == pytest.approx(50 * node_seconds(setup))
    assert none.memory_bytes < whole.memory_bytes
    assert estimate(setup, 0, reduced=True).seconds < none.seconds - 30 * node_seconds(setup)


def test_runs_of_each_command() -> None:
    setup = small_setup(30)
    assert plan_solve(setup).runs == 1
    assert plan_levels(setup, (10, 15, 20, 30), (10,), (), 1).runs == 4 + 1 + 2
    assert plan_levels(setup, (10, 15, 20, 30), (), (), 1).seconds > plan_solve(setup).seconds
    of_field = small_setup(30, 200.0)
    with_field = plan_escape(of_field, escape_plans(of_field), (), 2)
    assert with_field.runs > 20
    assert with_field.seconds > 10.0
    table, quick = plan_distill(setup, 1e-8, True, 1), plan_distill(setup, 1e-8, False, 1)
    assert table.runs == 2 * quick.runs + 32
    with pytest.raises(InputError, match="tolerance = 1: allowed are"):
        plan_distill(setup, 1.0, True, 1)
    assert plan_weigh(setup, 3, 24).runs == 1


def test_helium_is_in_the_plan_of_each_command() -> None:
    setup = helium_setup(4)
    inert = dataclasses.replace(setup, helium=type(setup.helium)(), lines=type(setup.lines)())
    both, alone = escape_plans(setup), escape_plans(setup, "helium")
    assert len(both) == 2
    of_both, of_one = (plan_escape(setup, plans, (), 1) for plans in (both, alone))
    assert of_both.runs == of_one.runs + plan_escape(setup, both[:1], (), 1).runs
    rungs = (4, 5, 6, 8)
    ladder = plan_levels(setup, rungs, (), (), 1, "helium")
    assert ladder.runs == plan_levels(setup, rungs, (), (), 1).runs
    assert plan_solve(setup).seconds > plan_solve(inert).seconds
    table, plain = plan_distill(setup, 1e-8, True, 1), plan_distill(inert, 1e-8, True, 1)
    assert table.seconds > plain.seconds + 20.0  # its histories step through helium
    assert estimate(setup, 0, reduced=True).seconds < estimate(setup, 0).seconds


def test_parts_of_a_weighing(monkeypatch: pytest.MonkeyPatch) -> None:
    from levelnet.studies import weigh, weigh_budget

    setup = small_setup(10)
    room = 5.5 * weigh.bytes_per_target(setup) / 0.3
    monkeypatch.setattr(weigh_budget, "available_memory_bytes", lambda: room)
    assert parts_of(setup, 3, 10) == [5, 5, 3]
    assert parts_of(setup, 7, 3) == [7, 3]
    assert parts_of(setup, 2, 0) == [2]


def test_a_sweep_counts_what_is_missing_and_each_atom_once() -> None:
    grid = {"redshift_start": 1500.0, "redshift_end": 800.0, "n_redshifts": 5}
    cases = vary(small_setup(4, grid=grid), {"cosmology.hubble_km_s_mpc": [66.0, 68.0, 70.0]})
    kept = MemoryPieces()
    plan = plan_sweep(cases, range(3), 1, kept)
    first, other = (estimate(cases.setups[0], 0, reduced=one).seconds for one in (False, True))
    assert plan.seconds - plan.first_use_s == pytest.approx(first + 2.0 * other)
    compute_missing(cases, [0, 1, 2], kept)
    done = plan_sweep(cases, range(3), 1, kept)
    assert done.seconds == 0.0
    assert done.what == "sweep of 3 cases, 3 of them there already,"


def test_compilation_is_in_the_plan_where_nothing_is_kept(monkeypatch: pytest.MonkeyPatch) -> None:
    # Times are by hand (levelnet/studies/first_use.py); here: who compiles what, and how often.
    plain, helium = small_setup(8), helium_setup(4)
    field = small_setup(8, 200.0)
    monkeypatch.setattr(first_use, "is_kept", lambda kernel: True)
    kept = plan_solve(plain), plan_distill(helium, 1e-8, True, 2)
    assert all(one.first_use_of == () and one.first_use_s == 0.0 for one in kept)
    monkeypatch.setattr(first_use, "is_kept", lambda kernel: False)
    new = plan_solve(plain)
    assert new.first_use_of == ("hydrogen",)
    assert new.seconds == pytest.approx(kept[0].seconds + new.first_use_s)
    assert new.memory_bytes > kept[0].memory_bytes
    table = plan_distill(helium, 1e-8, True, 2)
    assert table.first_use_of == ("hydrogen", "helium", "tables with helium")
    assert table.seconds == pytest.approx(kept[1].seconds + table.first_use_s)
    # Both processes reduce networks, one makes the histories.
    more = table.processor_seconds - kept[1].processor_seconds
    assert table.first_use_s < more < 2.0 * table.first_use_s
    assert plan_distill(plain, 1e-8, True, 1).first_use_of == ("hydrogen", "tables")
    assert plan_distill(helium, 1e-8, False, 2).first_use_of == ("hydrogen", "helium")
    variants = plan_escape(field, escape_plans(field), (), 1)
    assert variants.first_use_of == ("hydrogen", "transfer")
    ladder = plan_levels(helium, (4, 5, 6, 8), (), (), 2, "helium")
    assert ladder.first_use_of == plan_weigh(helium, 1, 0).first_use_of == ("hydrogen", "helium")


LONG: dict[str, tuple[str, ...]] = {
    "solve": (),
    "levels": ("--rungs", "100,200,300,400"),
    "escape": (),
    "distill": (),
    "weigh": (),
}


@pytest.mark.parametrize("command", LONG)
def test_plan_prints_or_refuses_and_writes_nothing(
    command: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "big.toml").write_text(GOOD.replace("n_max = 4", "n_max = 400"))
    words = [command, "big.toml", *LONG[command], "--plan"]
    assert main(words) == 0
    said = capsys.readouterr().out
    assert "is valid; nothing was computed" in said and "\nmemory" in said and "\ntime" in said
    assert main([*words, "--json"]) == 0
    plan: dict[str, Any] = json.loads(capsys.readouterr().out)
    assert len(plan["setup_digest"]) == 16 and plan["setup_digest"] in plan["what"]
    assert plan["memory_bytes"] > 8 * 400**3 / 3
    assert 0.0 < plan["seconds"] <= plan["processor_seconds"]
    monkeypatch.setattr(first_use, "is_kept", lambda kernel: False)
    assert main(words) == 0
    assert "of it first use       on this machine: about" in capsys.readouterr().out
    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 3.2e8)
    assert main(words) == 2
    refused = capsys.readouterr()
    assert "hydrogen.n_max = 400: about" in refused.err and "320 MB available" in refused.err
    assert refused.err.count("\n") == 1 and not refused.out
    assert {path.name for path in tmp_path.iterdir()} == {"big.toml"}


NAMED = {"solve": ".h5", "levels": "-levels.h5", "escape": "-escape.h5", "distill": "-table.h5"}


@pytest.mark.parametrize("command", LONG)
def test_a_plan_refuses_the_places_that_the_run_refuses(
    command: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "good.toml").write_text(GOOD.replace("n_max = 4", "n_max = 30"))
    more = ("--rungs", "10,15,20,30") if command == "levels" else ()
    there = tmp_path / f"good{NAMED.get(command, '-weights.h5')}"
    there.write_text("mine")
    for target, said in (
        (tmp_path / "missing/x.h5", "the folder"),
        (there, "already exists; use --force to replace it"),
        (tmp_path / "good.toml", "is the file that is read"),
    ):
        assert main([command, "good.toml", *more, "--plan", "-o", str(target)]) == 2
        refused = capsys.readouterr()
        assert said in refused.err and refused.err.count("\n") == 1 and not refused.out
    if command in NAMED:  # a weighing writes nothing that is not asked for
        assert main([command, "good.toml", *more, "--plan"]) == 2
    assert main([command, "good.toml", *more, "--plan", "-o", str(there), "--force"]) == 0
    assert there.read_text() == "mine"


@pytest.mark.parametrize(
    ("words", "changed", "said"),
    [
        (("--uncertainties", "big.csv"), ("", ""), "1 MB"),
        (("--uncertainties", "none.csv"), ("", ""), "none.csv"),
        (("--of", "line(40d-2p)"), ("", ""), "up to n = 4 only"),
        (("--of", "optical_depth(100)"), ("", ""), "starts at grid.redshift_end"),
        ((), ("[grid]", '[lines]\nhydrogen = "sobolev_feedback"\n[grid]'), "no memory"),
    ],
)
def test_a_plan_refuses_the_question_that_a_weighing_refuses(
    words: tuple[str, ...],
    changed: tuple[str, str],
    said: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "good.toml").write_text(GOOD.replace(*changed) if changed[0] else GOOD)
    (tmp_path / "big.csv").write_text("x" * 1_100_000)
    complaints = set()
    for more in ((), ("--plan",)):
        assert main(["weigh", "good.toml", *words, *more]) == 2
        refused = capsys.readouterr()
        assert said in refused.err and not refused.out
        complaints.add(refused.err)
    assert len(complaints) == 1
