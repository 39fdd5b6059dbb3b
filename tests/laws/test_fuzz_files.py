"""Over ten thousand damaged files: one clear line or the sound values, never a crash or a hang.

Each file is read by a process that lives as long as it survives, under 2 GiB of memory. Half of
the damage stands under a right seal, as only a hostile hand leaves it, so that HDF5 itself meets
it. The bars are those of the project; nothing here is a frozen number.
"""

from __future__ import annotations

import collections
import dataclasses
import random
import zlib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from levelnet.store.digest import content_digest
from levelnet.store.kinds import LAYOUTS
from levelnet.store.read import _MAKERS, read_content
from levelnet.store.schema import Content, Stored
from levelnet.store.write import save
from tests.damage_judge import MOST_BYTES, Judge
from tests.damaged_files import (
    SEAL_LENGTH,
    damage_hdf5,
    damaged_bytes,
    damaged_text,
    sealed_again,
)
from tests.sample_files import PIECE_KEY, RESULTS, TEXTS, piece

# Per kind of file: in all 13 x 800 of results, 8 x 400 of texts and 400 pieces: over 13,000.
PLAIN, SEALED, EDITED, FORGED, TEXT = 480, 130, 130, 60, 400


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("fuzz")


@pytest.fixture(scope="module")
def lasting() -> Iterator[Judge]:
    """One process for all files: a start of Python and its libraries costs as much as 500 files."""
    one = Judge()
    yield one
    one.close()


@pytest.fixture
def judge(lasting: Judge) -> Judge:
    """The process, a new one where an earlier test has killed, hung or filled it."""
    lasting.renew()
    return lasting


def sample(kind: str, folder: Path) -> Path:
    """Write the sound file of a kind, once."""
    path = folder / f"{kind.replace(' ', '-')}-sound"
    if not path.exists():
        (RESULTS | TEXTS)[kind](path)
    return path


def dice(kind: str) -> random.Random:
    return random.Random(zlib.crc32(kind.encode()))


def by_bytes(whole: bytes, path: Path, at: random.Random) -> str:
    path.write_bytes(damaged_bytes(whole, at))
    return "bytes"


def under_right_seal(whole: bytes, path: Path, at: random.Random) -> str:
    path.write_bytes(damaged_bytes(whole[:-SEAL_LENGTH], at))
    sealed_again(path)
    return "bytes under a right seal"


def by_hdf5(whole: bytes, path: Path, at: random.Random) -> str:
    path.write_bytes(whole[:-SEAL_LENGTH])
    how = damage_hdf5(path, at)
    sealed_again(path)
    return how


@pytest.mark.slow
@pytest.mark.parametrize("kind", RESULTS)
@pytest.mark.parametrize(
    ("damage", "count"), [(by_bytes, PLAIN), (under_right_seal, SEALED), (by_hdf5, EDITED)]
)
def test_damaged_results(
    damage: Callable[[bytes, Path, random.Random], str],
    count: int,
    kind: str,
    folder: Path,
    judge: Judge,
) -> None:
    sound = sample(kind, folder)
    whole, at, path = sound.read_bytes(), dice(kind), folder / "damaged.h5"
    digest = read_content(sound).attributes["digest"]
    assert judge.ask(kind="hdf5", path=str(sound), digest=digest) == "same"
    found: collections.Counter[str] = collections.Counter()
    for case in range(count):
        how = damage(whole, path, at)
        answer = judge.ask(kind="hdf5", path=str(path), digest=digest, command=case % 25 == 0)
        found[answer] += 1
        assert answer in {"same", "refused"}, f"{how}, {case}: {answer}"
    assert judge.peak < MOST_BYTES
    # Under a wrong seal nothing is believed; under a right one, what says nothing may change.
    assert found["refused"] > (0.6 * count if damage is not by_bytes else count - 1)


def forged(content: Content, at: random.Random) -> Content:
    """Give another content, to which a right digest will be added."""
    if at.random() < 0.2:
        name = at.choice([one for one in content.attributes if not one.startswith("layout")])
        value = at.choice(("", "x", "[" * 5000, "9" * 5000, str(content.attributes[name])[:-5]))
        return dataclasses.replace(content, attributes=content.attributes | {name: value})
    path = at.choice(sorted(content.variables))
    stored: Any = content.variables[path]
    odd: tuple[Any, ...]
    if isinstance(stored.values, tuple):
        odd = ("", "x", "\x1b[2J\n", "y" * 10_000, "2p", "-1", "nan")
        values = [at.choice((one, at.choice(odd))) for one in stored.values]
        changed = Stored(stored.dimensions, stored.attributes, tuple(values))
    else:
        odd = (0, 1, -1, 2**31, -(2**63), 2**62)
        if stored.values.dtype.kind == "f":
            odd = (*odd[:3], np.nan, np.inf, -np.inf, 1e308, 5e-324, -0.0)
        numbers = np.array(stored.values)
        numbers[np.random.default_rng(at.randrange(9)).random(numbers.shape) < at.random()] = (
            at.choice(odd)
        )
        changed = Stored(stored.dimensions, stored.attributes, numbers)
    return dataclasses.replace(content, variables=content.variables | {path: changed})


@pytest.mark.slow
@pytest.mark.parametrize("kind", RESULTS)
def test_right_digest_over_nonsense(kind: str, folder: Path, judge: Judge) -> None:
    content, at, path = read_content(sample(kind, folder)), dice(kind), folder / "forged.h5"
    for case in range(FORGED):
        other = forged(content, at)
        other.attributes["digest"] = content_digest(other)
        with path.open("w+b") as raw:
            save(other, raw)
        sealed_again(path)
        answer = judge.ask(kind="hdf5", path=str(path), digest="", believe=True)
        assert answer in {"made", "refused"}, f"{case}: {answer}"
    assert judge.peak < MOST_BYTES


@pytest.mark.slow
@pytest.mark.parametrize("kind", TEXTS)
def test_damaged_texts(kind: str, folder: Path, judge: Judge) -> None:
    """A text of a user has no digest; what is still in order may be read."""
    sound = sample(kind, folder)
    whole, at, path = sound.read_bytes(), dice(kind), folder / f"damaged-{kind}"
    assert judge.ask(kind=kind, path=str(sound)) == "made"
    for case in range(TEXT):
        path.write_bytes(damaged_text(whole, at))
        answer = judge.ask(kind=kind, path=str(path))
        assert answer in {"made", "refused"}, f"{case}: {answer}: {path.read_bytes()[:500]!r}"
    assert judge.peak < MOST_BYTES


@pytest.mark.slow
def test_damaged_pieces_of_a_cache(folder: Path, judge: Judge) -> None:
    path = piece(folder / "cache")
    whole, at = path.read_bytes(), dice("piece")
    right = judge.ask(kind="piece", path=str(path), key=PIECE_KEY)
    assert len(right) == 64
    for case in range(TEXT):
        path.write_bytes(damaged_bytes(whole, at))
        answer = judge.ask(kind="piece", path=str(path), key=PIECE_KEY)
        assert answer == "refused", f"{case}: {answer}"
    path.write_bytes(whole)
    assert judge.ask(kind="piece", path=str(path), key=PIECE_KEY) == right
    assert judge.peak < MOST_BYTES


@pytest.mark.slow
def test_bomb_of_zeros(folder: Path, judge: Judge) -> None:
    """A sound file of a few megabytes whose arrays would take 1.3e9 bytes."""
    content, path = read_content(sample(LAYOUTS[0].name, folder)), folder / "bomb.h5"
    for name, stored in content.variables.items():
        if name.startswith("history/") and stored.dimensions == ("redshift",):
            zeros = np.zeros(13_000_000)
            content.variables[name] = Stored(stored.dimensions, stored.attributes, zeros)
    content.attributes["digest"] = content_digest(content)
    with path.open("w+b") as raw:
        save(content, raw)
    sealed_again(path)
    assert path.stat().st_size < 20_000_000
    assert judge.ask(kind="hdf5", path=str(path), digest="", command=True) == "refused"
    assert judge.peak < MOST_BYTES


@pytest.mark.slow
def test_every_layout_has_a_sample(folder: Path) -> None:
    found = {read_content(sample(kind, folder)).attributes["layout"] for kind in RESULTS}
    assert found == {one.name for one in LAYOUTS}


def test_every_layout_has_its_maker() -> None:
    assert [kind for kind, _ in _MAKERS.values()] == list(LAYOUTS)
    assert list(_MAKERS) == [one.name for one in LAYOUTS]
