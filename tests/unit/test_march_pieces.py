"""A long march of a resolved field: cut anywhere, killed anywhere, the same bits in the end.

What is expected is computed here, by the march in one piece.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from levelnet import EffectiveTable, distill, history_from_table, solve
from levelnet.arrays import FloatArray
from levelnet.cli.main import main
from levelnet.history import field, march
from levelnet.history.cost import estimate, march_seconds
from levelnet.history.result import History
from levelnet.history.setup import Setup
from levelnet.kernels import transfer as kernel
from levelnet.pieces import FolderPieces, MemoryPieces
from tests.field_steps import COARSE_STEP, atom, path_of
from tests.same_records import assert_same
from tests.small_runs import COSMOLOGY, small_setup

LINES = {"hydrogen": "transfer", "lyman_lines": 2, "transfer": {"frequency_step": 1e-3}}


def run() -> Setup:
    return small_setup(5, 1000.0, 6, lines=LINES)


class Steps:
    """Counts the steps that the kernel takes, and its calls."""

    def __init__(self) -> None:
        self.calls, self.done, self._real = 0, 0, kernel.march

    def __call__(self, *given: Any) -> int:
        begin, end = given[3]
        self.calls, self.done = self.calls + 1, self.done + end - begin
        return self._real(*given)


@pytest.fixture
def steps(monkeypatch: pytest.MonkeyPatch) -> Steps:
    counted = Steps()
    monkeypatch.setattr(kernel, "march", counted)
    return counted


def in_stretches(patch: pytest.MonkeyPatch, stretch_s: float, call_s: float) -> None:
    """Take every march for a long one, and cut it so."""
    patch.setattr(field, "_LONG_S", 0.0)
    patch.setattr(march, "_STRETCH_S", stretch_s)
    patch.setattr(march, "_CALL_S", call_s)


@pytest.fixture(scope="module")
def plain() -> History:
    """The march of one call, and that of its companion of one call."""
    with pytest.MonkeyPatch.context() as patch:
        counted = Steps()
        patch.setattr(kernel, "march", counted)
        patch.setattr(march, "_CALL_S", 1e9)
        history = solve(run())
        assert counted.calls == 2
    return history


@pytest.fixture(scope="module")
def table() -> EffectiveTable:
    return distill(run(), tolerance=1e-6, certify=False)


class Dying(MemoryPieces):
    """Ends the work after so many stretches are kept."""

    def __init__(self, left: int) -> None:
        super().__init__()
        self.left = left

    def put(self, key: str, arrays: Mapping[str, FloatArray]) -> None:
        super().put(key, arrays)
        if "carried" in arrays:
            self.left -= 1
            if self.left == 0:
                raise KeyboardInterrupt

    @property
    def stretches(self) -> list[str]:
        return [key for key, arrays in self._kept.items() if "carried" in arrays]


def assert_same_history(one: History, other: History) -> None:
    for name in ("diagnostics", "field", "channels", "lines"):
        assert_same(getattr(one, name), getattr(other, name))
    for name in ("free_electron_fraction", "matter_temperature_k"):
        assert getattr(one, name).tobytes() == getattr(other, name).tobytes()
    for first, second in zip(one.species, other.species, strict=True):
        assert first.population.tobytes() == second.population.tobytes()


@pytest.mark.parametrize("ends", [(12,), (1, 2, 12), (5, 11, 12), tuple(range(1, 13))])
def test_kernel_goes_on_where_it_was(ends: tuple[int, ...]) -> None:
    """Also with a new room: nothing but the field and what is carried goes over."""
    one = atom("all", COARSE_STEP)
    path = path_of(one)
    wanted = np.array([1, 5, 5, 12])
    way = march.Way(one.cells, path, np.array([path.start, -1.7, -0.02]), 12, 5, wanted)
    tracks = []
    for cuts in ((12,), ends):
        track, room = march.make_track(way), march.make_room(one.cells)
        carried, begin = np.zeros(kernel.N_CARRIED), 0
        for end in cuts:
            fresh = march.make_room(one.cells)
            fresh.field[:], fresh.boltzmann[:] = room.field, room.boltzmann
            room = fresh
            status = kernel.march(
                *(one.cells, path, way.first, (begin, end), way.stride, wanted, (1e-9, 20)),
                *(room, carried, track),
            )
            assert status == kernel.DONE
            begin = end
        tracks.append((*track, room.field, room.boltzmann, carried))
    assert tracks[0][5][kernel.STEPS] == 12.0
    for whole, cut in zip(*tracks, strict=True):
        assert np.any(whole != 0.0)
        assert whole.tobytes() == cut.tobytes()


def test_killed_after_every_stretch(
    plain: History, steps: Steps, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each run keeps one stretch more and is killed: no step is taken twice."""
    in_stretches(monkeypatch, 0.007, 1e-3)
    deaths, pieces = 0, Dying(1)
    while True:
        pieces.left = 1
        try:
            found = solve(run(), pieces=pieces)
            break
        except KeyboardInterrupt:
            deaths += 1
            assert len(pieces.stretches) == deaths
    assert deaths >= 5
    whole = sum(len(pieces._kept[key]["state"]) - 1 for key in pieces.stretches)
    assert steps.done == whole
    assert_same_history(plain, found)
    # All is there: nothing is marched again.
    pieces.left = 0
    assert_same_history(plain, solve(run(), pieces=pieces))
    assert steps.done == whole


def test_killed_within_a_stretch(
    plain: History, steps: Steps, monkeypatch: pytest.MonkeyPatch
) -> None:
    """By whoever is told of the progress, which only grows; calls are shorter than stretches."""
    in_stretches(monkeypatch, 0.007, 1e-3)
    pieces, told = Dying(0), list[float]()

    def killing(stage: str, fraction: float) -> None:
        if stage == "radiation field":
            told.append(fraction)
            if fraction > 0.5:
                raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        solve(run(), pieces=pieces, progress=killing)
    assert len(told) > 5 and told == sorted(told) and told[0] == 0.0
    done, steps.done = steps.done, 0
    assert_same_history(plain, solve(run(), pieces=pieces, progress=lambda stage, now: None))
    # What was torn is one stretch at most.
    lengths = [len(pieces._kept[key]["state"]) - 1 for key in pieces.stretches]
    whole, longest = sum(lengths), max(lengths)
    assert 0.3 * whole < done < 0.9 * whole
    assert whole <= done + steps.done < whole + longest


def test_damaged_stretches_are_marched_again(
    plain: History, steps: Steps, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """A flipped bit, a file cut short, one removed; the others are used."""
    solve(run(), pieces=FolderPieces(tmp_path))
    reductions = set(tmp_path.iterdir())
    in_stretches(monkeypatch, 0.007, 1e9)
    steps.calls = 0
    solve(run(), pieces=FolderPieces(tmp_path))
    stretches = sorted(set(tmp_path.iterdir()) - reductions)
    assert len(stretches) == steps.calls >= 5
    good = [one.read_bytes() for one in stretches]
    middle = len(good[0]) // 2
    flipped = bytearray(good[0])
    flipped[middle] ^= 4
    stretches[0].write_bytes(flipped)
    stretches[1].write_bytes(good[1][:middle])
    stretches[2].unlink()
    steps.calls = 0
    assert_same_history(plain, solve(run(), pieces=FolderPieces(tmp_path)))
    assert steps.calls == 3
    assert [one.read_bytes() for one in stretches] == good


def test_a_stretch_of_another_shape_is_marched_again(
    plain: History, steps: Steps, monkeypatch: pytest.MonkeyPatch
) -> None:
    in_stretches(monkeypatch, 0.007, 1e9)
    pieces = Dying(0)
    solve(run(), pieces=pieces)
    first, second, *_ = pieces.stretches
    pieces._kept[first]["field"] = np.zeros(3)
    del pieces._kept[second]["carried"]
    steps.calls = 0
    assert_same_history(plain, solve(run(), pieces=pieces))
    assert steps.calls == 2


def test_another_march_has_other_stretches(monkeypatch: pytest.MonkeyPatch) -> None:
    """Another end, step or universe; another title is the same march."""
    in_stretches(monkeypatch, 0.007, 1e9)
    pieces = Dying(0)
    solve(run(), pieces=pieces)
    count = len(pieces.stretches)
    solve(small_setup(5, 1000.0, 6, lines=LINES, title="other"), pieces=pieces)
    assert len(pieces.stretches) == count
    solve(small_setup(5, 1010.0, 6, lines=LINES), pieces=pieces)
    assert len(pieces.stretches) == 2 * count
    denser = dataclasses.replace(COSMOLOGY, baryon_density_h2=0.023)
    solve(small_setup(5, 1000.0, 6, lines=LINES, cosmology=denser), pieces=pieces)
    assert len(pieces.stretches) == 3 * count
    finer = LINES | {"transfer": {"frequency_step": 1.5e-3}}
    solve(small_setup(5, 1000.0, 6, lines=finer), pieces=pieces)
    assert len(pieces.stretches) > 3 * count


def test_a_short_march_is_not_kept() -> None:
    pieces = Dying(0)
    solve(run(), pieces=pieces)
    assert pieces._kept and not pieces.stretches


def test_stretches_are_whole_strides_and_not_too_many() -> None:
    one = atom("all", COARSE_STEP)
    path = path_of(one)
    ends = list[tuple[int, float]]()
    for n_steps in (100, 10**6, 10**9):
        way = march.Way(one.cells, path, np.zeros(3), n_steps, 7, np.array([1]))
        length = march._stretch_steps(way)
        assert length % 7 == 0
        ends.append((-(-n_steps // length), way.seconds * length / n_steps))
    (few, _), (some, seconds), (most, _) = ends
    assert few == 1 and 1 < some < most <= 100
    # Own rule: 10 to 20 s by the estimate.
    assert 10.0 < seconds < 20.0


def test_levels_that_act_in_the_cells_take_time() -> None:
    """Frozen: seconds for a cell and step, measured when the estimate was made."""
    for n_levels, seen_s in ((3, 2.1e-8), (17, 1.4e-7)):
        assert march_seconds(1e4, n_levels, 1e4) == pytest.approx(1e8 * seen_s, rel=1 / 3)
    few, many = (
        estimate(small_setup(12, lines=LINES | {"transfer": {"highest_two_photon_n": n}}))
        for n in (4, 10)
    )
    assert many.seconds > few.seconds


def test_a_history_from_a_table_goes_on(
    table: EffectiveTable, monkeypatch: pytest.MonkeyPatch
) -> None:
    redshifts, pieces = (1500.0, 1200.0, 1000.0), Dying(2)
    plain = history_from_table(table, COSMOLOGY, redshifts=redshifts)
    in_stretches(monkeypatch, 0.007, 1e9)
    with pytest.raises(KeyboardInterrupt):
        history_from_table(table, COSMOLOGY, redshifts=redshifts, pieces=pieces)
    assert len(pieces.stretches) == 2
    found = history_from_table(table, COSMOLOGY, redshifts=redshifts, pieces=pieces)
    assert plain.field is not None and found.field is not None
    assert_same(plain.field, found.field)
    assert plain.free_electron_fraction.tobytes() == found.free_electron_fraction.tobytes()
    assert plain.frequency_error == found.frequency_error


def test_no_cache_keeps_no_stretch(
    table: EffectiveTable, steps: Steps, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """At the command line, both of a setup and from a table."""
    from levelnet import write

    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("LEVELNET_CACHE", str(tmp_path / "cache"))
    in_stretches(monkeypatch, 0.007, 1e9)
    Path("run.toml").write_text(run().to_toml())
    write(table, "table.h5")
    for words in (["solve", "run.toml"], ["history", "table.h5", "--redshifts", "1500", "1000"]):
        command = [*words, "--quiet", "--force", "-o", "out.h5"]
        assert main([*command, "--no-cache"]) == 0
        assert not Path("cache").exists()
        expected = Path("out.h5").read_bytes()
        assert main(command) == 0
        assert list(Path("cache").glob("*.piece"))
        calls = steps.calls
        assert main(command) == 0
        assert steps.calls == calls
        assert Path("out.h5").read_bytes() == expected
        for piece in Path("cache").iterdir():
            piece.unlink()
        Path("cache").rmdir()
