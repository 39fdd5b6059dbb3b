"""What long work keeps on its way: records to the bit, populations, the sum of a weighing."""

from __future__ import annotations

from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pytest

from levelnet.arrays import FloatArray
from levelnet.errors import Outcome
from levelnet.history import level_pieces, outputs
from levelnet.history.result import Channels, RadiationField
from levelnet.history.run import solve
from levelnet.pieces import FolderPieces, MemoryPieces, ResultFolder, array_text, text_array
from levelnet.studies import rung, weigh_pieces
from levelnet.studies import weigh as weigh_module
from levelnet.studies.levels import level_study
from levelnet.studies.record_pieces import recalled
from levelnet.studies.rung import compute_rung
from tests.same_records import assert_same
from tests.small_runs import small_setup


class Sample(NamedTuple):
    """One of each kind of field."""

    numbers: FloatArray
    names: tuple[str, ...]
    nothing: tuple[str, ...]
    text: str
    outcome: Outcome
    channels: Channels
    field: RadiationField | None


def sample(field: RadiationField | None) -> Sample:
    share = np.array([[0.25, 0.75]])
    channels = Channels(("2s-1s", "\u00e9"), share, share, share)
    numbers = np.array([[1.0, np.nan], [-0.0, 5e-324]])
    return Sample(numbers, ("a", ""), (), "", Outcome.STEP_LIMIT, channels, field)


FIELD = RadiationField(np.array([900.0]), np.array([5.1, 5.2]), np.array([[0.0, 1.0]]))


@pytest.mark.parametrize("field", [None, FIELD])
def test_records_come_back_to_the_bit(field: RadiationField | None, tmp_path: Path) -> None:
    one, asked = sample(field), 0

    def compute() -> Sample:
        nonlocal asked
        asked += 1
        return one

    pieces = FolderPieces(tmp_path)
    for _ in range(3):
        found = recalled(pieces, "key", Sample, compute)
        assert found.numbers.tobytes() == one.numbers.tobytes()
        assert found[1:5] == one[1:5]
        assert_same(one.channels, found.channels)
        assert (found.field is None) == (field is None)
        if field is not None:
            assert_same(field, found.field)
    assert asked == 1
    assert recalled(None, "key", Sample, compute) is one
    assert asked == 2


@pytest.mark.parametrize(
    "spoil",
    [
        {"/text": np.array([-1.0])},
        {"/text": np.array([255.0])},
        {"/outcome": text_array("NO_SUCH")},
        {"/channels/share": np.zeros((3, 3))},
    ],
)
def test_a_piece_of_another_kind_is_computed_again(spoil: dict[str, FloatArray]) -> None:
    pieces = MemoryPieces()
    recalled(pieces, "key", Sample, lambda: sample(None))
    kept = pieces.get("key")
    assert kept is not None
    pieces.put("key", kept | spoil)
    other = sample(FIELD)
    assert recalled(pieces, "key", Sample, lambda: other) is other
    pieces.put("key", {})
    assert recalled(pieces, "key", Sample, lambda: other) is other


def test_text_in_pieces() -> None:
    for text in ("", "z_* = 1089\n", "\u03b1\0b"):
        assert array_text(text_array(text)) == text
    for wrong in (np.array([256.0]), np.array([np.nan]), np.zeros((2, 2))):
        with pytest.raises(ValueError, match="no text"):
            array_text(wrong)


def test_a_result_folder_sweeps_old_left_overs_only(tmp_path: Path) -> None:
    import os

    for name, age_s in (("a", 2 * 86400.0), ("b", 10.0)):
        path = tmp_path / f"{name}.piece-part"
        path.write_bytes(b"x")
        there = path.stat().st_mtime - age_s
        os.utime(path, (there, there))
    ResultFolder(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["b.piece-part"]


def never(*given: Any, **named: Any) -> Any:
    raise AssertionError("was computed again")


def test_finished_rungs_are_not_run_again(monkeypatch: pytest.MonkeyPatch) -> None:
    setup, pieces = small_setup(4, 1100.0, 4), MemoryPieces()
    plain = level_study(setup, (4, 5, 6, 7))
    # Killed after some rungs: those are among the pieces, the study goes on with the others.
    real, done = rung.integrate_observed, list[int]()

    def killed(one: Any, *more: Any) -> Any:
        if len(done) == 3:
            raise KeyboardInterrupt
        done.append(one.hydrogen.n_max)
        return real(one, *more)

    with monkeypatch.context() as patch:
        patch.setattr(rung, "integrate_observed", killed)
        with pytest.raises(KeyboardInterrupt):
            level_study(setup, (4, 5, 6, 7), pieces=pieces)
        left = list[int]()

        def count(one: Any, *more: Any) -> Any:
            left.append(one.hydrogen.n_max)
            return real(one, *more)

        patch.setattr(rung, "integrate_observed", count)
        assert_same(plain, level_study(setup, (4, 5, 6, 7), pieces=pieces))
        assert sorted(done + left) == [4, 4, 5, 5, 6, 7]
        patch.setattr(rung, "integrate_observed", never)
        assert_same(plain, level_study(setup, (4, 5, 6, 7), pieces=pieces))
        # Another question is another rung.
        with pytest.raises(AssertionError, match="computed again"):
            compute_rung(setup, (1100.0,), pieces)


def test_populations_of_large_atoms_are_kept(monkeypatch: pytest.MonkeyPatch) -> None:
    setup, pieces = small_setup(6, 800.0, 5), MemoryPieces()
    plain = solve(setup)
    solve(setup, pieces=pieces)
    reductions = len(pieces._kept)
    monkeypatch.setattr(level_pieces, "_LONG_S", 0.0)
    assert_same_levels(solve(setup, pieces=pieces), plain)
    assert len(pieces._kept) == reductions + 5
    monkeypatch.setattr(outputs, "factor_interior", never)
    assert_same_levels(solve(setup, pieces=pieces), plain)


def assert_same_levels(one: Any, other: Any) -> None:
    for first, second in zip(one.species, other.species, strict=True):
        assert first.population.tobytes() == second.population.tobytes()
        assert first.log_departure.tobytes() == second.log_departure.tobytes()
    assert_same(one.diagnostics, other.diagnostics)
    assert_same(one.lines, other.lines)


def test_the_sum_of_a_weighing_goes_on(monkeypatch: pytest.MonkeyPatch) -> None:
    setup, pieces = small_setup(5, 800.0, 5), MemoryPieces()
    plain = weigh_module.weigh(setup, "x_e(900)")
    monkeypatch.setattr(weigh_pieces, "_PERIOD_S", 0.0)
    real, done = weigh_module.add_node_weights, 0

    def killed(*given: Any) -> None:
        nonlocal done
        if done == 7:
            raise KeyboardInterrupt
        done += 1
        real(*given)

    with monkeypatch.context() as patch:
        patch.setattr(weigh_module, "add_node_weights", killed)
        with pytest.raises(KeyboardInterrupt):
            weigh_module.weigh(setup, "x_e(900)", pieces=pieces)
        left = 0

        def count(*given: Any) -> None:
            nonlocal left
            left += 1
            real(*given)

        patch.setattr(weigh_module, "add_node_weights", count)
        assert_same(plain, weigh_module.weigh(setup, "x_e(900)", pieces=pieces))
        whole = MemoryPieces()
        first, left = left, 0
        weigh_module.weigh(setup, "x_e(900)", pieces=whole)
        assert first + 7 == left
    # Too large to be kept: nothing is, and the bits are the same.
    monkeypatch.setattr(weigh_pieces, "_MOST_BYTES", 10.0)
    nothing = MemoryPieces()
    assert_same(plain, weigh_module.weigh(setup, "x_e(900)", pieces=nothing))
    assert not any("done" in one for one in nothing._kept.values())
