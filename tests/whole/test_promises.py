"""The table of promises about cost: its machinery at tiny sizes, and what makes it fail.

What it measures is held against its promises by `python -m benchmarks.promises`, not here.
"""

from __future__ import annotations

import math

import pytest

from benchmarks.promises import elimination
from benchmarks.promises.__main__ import main
from benchmarks.promises.elimination import rows_of
from benchmarks.promises.memory import in_child
from benchmarks.promises.table import Row, lay_out, row, summary, without_figure
from benchmarks.promises.targets import TARGETS
from benchmarks.timing import clocked, matrix_product
from levelnet.network import assembly

TINY = 12
ON_ONE_ATOM = {"P1", "P2", "P3", "P4", "P5", "P7", "P8", "P11"}


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    """Few turns, with a small product between them: times are of no interest here."""
    monkeypatch.setattr(elimination, "matrix_product", lambda: matrix_product(32))
    monkeypatch.setattr(elimination, "repeats", lambda n_max: 3)


def test_every_figure_of_an_atom(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ON_ONE_ATOM:
        promise = {"P7": 1e-13, "P8": 1e-12}.get(name, 0.0 if TARGETS[name].at_least else math.inf)
        monkeypatch.setitem(TARGETS[name].promise, TINY, promise)
    rows = {one.target: one for one in rows_of(TINY, ON_ONE_ATOM)}
    assert set(rows) == ON_ONE_ATOM
    if rows["P3"].note:  # its package is nobody's dependency
        assert rows.pop("P3").note == "not installed"
    for one in rows.values():
        # Errors against splu, populations and sums are real ones, with the bounds of any size.
        assert one.is_met, one
        assert 0.0 < one.seen < math.inf, one


def test_a_spoiled_elimination_is_missed(monkeypatch: pytest.MonkeyPatch) -> None:
    """One coupling off by 1e-9: sums, sources and splu all see it, whatever the ratio."""
    plain = assembly.factor_symmetric

    def spoiled(*arguments):  # type: ignore[no-untyped-def]
        factored = plain(*arguments)
        factored.coupling[0] *= 1.0 + 1e-9
        return factored

    monkeypatch.setattr(assembly, "factor_symmetric", spoiled)
    for name, promise in (("P1", 0.0), ("P2", 0.0), ("P7", 1e-13)):
        monkeypatch.setitem(TARGETS[name].promise, TINY, promise)
    rows = rows_of(TINY, {"P1", "P2", "P7"})
    assert [one.is_met for one in rows] == [False] * 3, rows


def test_a_clock_that_is_never_called_says_so() -> None:
    with pytest.raises(RuntimeError, match="factor_symmetric was never called"):
        with clocked(assembly, "factor_symmetric"):
            pass


def test_a_missed_promise_ends_with_one(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    arguments = ["--only", "P11", "--largest", "10"]
    monkeypatch.setitem(TARGETS["P11"].promise, 10, 1e-6)
    assert main(arguments) == 0
    assert "1 of 1 met; not measured: 2 at larger sizes" in capsys.readouterr().out
    monkeypatch.setitem(TARGETS["P11"].promise, 10, 1e6)
    assert main(arguments) == 1
    printed = capsys.readouterr().out
    assert "0 of 1 met; MISSED: P11 at 10; not measured: 2 at larger sizes" in printed
    assert next(one for one in printed.splitlines() if one.startswith("P11")).endswith("MISSED")


def test_nothing_to_measure_is_said(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as refused:
        main(["--only", "P6", "--largest", "300"])
    assert refused.value.code == 2
    assert "--largest 300: P6 are for larger sizes" in capsys.readouterr().err


def test_right_side_of_each_promise() -> None:
    ours = TARGETS["P1"].promise[100]
    assert row("P1", 100, 0.0, "", 1e-13, ours).is_met
    assert not row("P1", 100, 0.0, "", 1e-13, 0.999 * ours).is_met
    most = TARGETS["P4"].promise[300]
    assert row("P4", 300, 0.0, "", 1e-13, most).is_met
    assert not row("P4", 300, 0.0, "", 1e-13, 1.001 * most).is_met


@pytest.mark.parametrize(("error", "seen"), [(2e-13, 9.0), (math.nan, 9.0), (0.0, math.nan)])
def test_fast_and_wrong_is_missed(error: float, seen: float) -> None:
    wrong = row("P1", 100, error, "sum of chances", 1e-13, seen)
    assert not wrong.is_met
    assert wrong.is_counted
    assert summary([wrong], 0)[1] == 1


def test_rows_stand_in_order_and_in_columns() -> None:
    bare = Row("P10", 173, 2e-7, "run to 1e-11", 1e-6, 7.4, "a ratio", None)
    rows = [
        bare,
        row("P2", 300, 3e-12, "splu", 1e-10, 12.0),
        without_figure("P3", 100, "not there"),
    ]
    lines = lay_out(rows).splitlines()
    assert [line.split()[0] for line in lines[1:]] == ["P2", "P3", "P10"]
    # Numbers end where their heading ends.
    end = lines[0].index("seen") + len("seen")
    assert lines[1][:end].endswith(" 12")
    assert lines[3][:end].endswith(" 7.4")
    assert lines[2].endswith("not there")
    # What makes no promise, and what was not there, is not counted.
    assert summary(rows, 0) == (
        "1 of 1 met; not measured: 0 at larger sizes, 1 for the reason given",
        0,
    )


def test_a_process_that_dies_has_missed(capsys: pytest.CaptureFixture[str]) -> None:
    peak, error = in_child(1)  # no atom of this size
    assert not row("P6", 500, error, "populations", 1e-12, peak).is_met
    assert "n_max = 1: the process ended with" in capsys.readouterr().err


def test_memory_of_a_process_of_its_own() -> None:
    peak, error = in_child(TINY)
    assert error < 1e-12
    # An interpreter with numpy, and no more than a machine has.
    assert math.isnan(peak) or 2e7 < peak < 2e9
