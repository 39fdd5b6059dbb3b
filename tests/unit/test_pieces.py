"""Kept pieces: back bit for bit or not at all, whatever happens to files, folders and processes."""

import io
import logging
import os
import signal
import subprocess
import sys
import time
import zipfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from levelnet import pieces
from levelnet.pieces import (
    FolderPieces,
    MemoryPieces,
    code_digest,
    content_key,
    default_cache_folder,
)

# The folder lives as long as the test; what earlier examples left in it is part of the trial.
SAME_FOLDER = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
ARRAYS = {"ln_rate": np.linspace(-3.0, 5.0, 7).reshape(1, 7), "file": np.array(2.5)}


def _same(got, expected):
    """Same names, shapes and bits."""
    assert got is not None
    assert list(got) == list(expected)
    for name, array in expected.items():
        assert got[name].dtype == np.float64
        assert got[name].shape == np.shape(array)
        assert got[name].tobytes() == np.asarray(array, np.float64).tobytes()


def _only_file(folder: Path) -> Path:
    (file,) = folder.iterdir()
    return file


@pytest.fixture(params=["memory", "folder"])
def kept(request, tmp_path):
    return MemoryPieces() if request.param == "memory" else FolderPieces(tmp_path / "a" / "b")


def test_absent_piece_is_none(kept):
    assert kept.get("nothing") is None


def test_round_trip(kept):
    kept.put("key", ARRAYS)
    kept.put("other", {})
    _same(kept.get("key"), ARRAYS)
    _same(kept.get("other"), {})


@SAME_FOLDER
@given(
    key=st.text(st.characters(codec="utf-8")),
    arrays=st.dictionaries(
        st.text(st.characters(codec="utf-8", exclude_characters="\0")),
        hnp.arrays(np.float64, hnp.array_shapes(min_dims=0, min_side=0)),
        max_size=3,
    ),
)
def test_any_names_and_bits_come_back(kept, key, arrays):
    kept.put(key, arrays)
    _same(kept.get(key), arrays)


def test_kept_arrays_are_the_callers_own(kept):
    array = np.zeros(3)
    kept.put("key", {"a": array})
    array[0] = 1.0
    kept.get("key")["a"][1] = 1.0
    _same(kept.get("key"), {"a": np.zeros(3)})


def test_array_name_that_a_file_cannot_hold(tmp_path):
    with pytest.raises(ValueError, match="NUL"):
        FolderPieces(tmp_path).put("key", {"a\0b": np.zeros(1)})


def test_equal_content_gives_equal_bytes(tmp_path):
    for name in ("one", "two"):
        FolderPieces(tmp_path / name).put("key", ARRAYS)
    one, two = (_only_file(tmp_path / name).read_bytes() for name in ("one", "two"))
    assert one == two


# Damage.


@SAME_FOLDER
@given(data=st.data())
def test_one_changed_byte_is_noticed_and_replaced(tmp_path, data):
    kept = FolderPieces(tmp_path)
    kept.put("key", ARRAYS)
    file = _only_file(tmp_path)
    content = bytearray(file.read_bytes())
    position = data.draw(st.integers(0, len(content) - 1))
    content[position] ^= data.draw(st.integers(1, 255))
    file.write_bytes(content)
    assert kept.get("key") is None
    kept.put("key", ARRAYS)
    _same(kept.get("key"), ARRAYS)


@SAME_FOLDER
@given(data=st.data())
def test_truncated_or_lengthened_file_is_noticed(tmp_path, data):
    kept = FolderPieces(tmp_path)
    kept.put("key", ARRAYS)
    file = _only_file(tmp_path)
    content = file.read_bytes()
    cut = content[: data.draw(st.integers(0, len(content) - 1))]
    longer = content + data.draw(st.binary(min_size=1, max_size=50))
    for changed in (cut, longer):
        file.write_bytes(changed)
        assert kept.get("key") is None


@SAME_FOLDER
@given(content=st.binary(max_size=300))
def test_foreign_content_is_absent(tmp_path, content):
    kept = FolderPieces(tmp_path)
    kept.put("key", ARRAYS)
    _only_file(tmp_path).write_bytes(content)
    assert kept.get("key") is None


def test_file_of_another_key_is_absent(tmp_path):
    kept = FolderPieces(tmp_path)
    kept.put("one", ARRAYS)
    one = _only_file(tmp_path)
    kept.put("two", {"a": np.ones(2)})
    (two,) = set(tmp_path.iterdir()) - {one}
    one.replace(two)
    assert kept.get("two") is None


def _archive(compression: int, **members: bytes) -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", compression) as archive:
        for name, data in members.items():
            archive.writestr(f"{name}.npy", data)
    return buffer.getvalue()


def _npy(array: np.ndarray, pickled: bool = False) -> bytes:
    buffer = io.BytesIO()
    np.save(buffer, array, allow_pickle=pickled)
    return buffer.getvalue()


def _declaring(shape: str) -> bytes:
    return _npy(np.zeros(2)).replace(b"(2,), ", shape.encode().ljust(6))


@pytest.mark.parametrize(
    "content",
    [
        b"",
        b"no archive",
        _archive(zipfile.ZIP_DEFLATED, a=_npy(np.zeros(1_000_000))),
        _archive(zipfile.ZIP_STORED, a=b"no array"),
        _archive(zipfile.ZIP_STORED, a=_npy(np.array([{1}], object), pickled=True)),
        _archive(zipfile.ZIP_STORED, a=_npy(np.zeros(3, "<f4"))),
        _archive(zipfile.ZIP_STORED, a=_declaring("(9**9,)")),
        _archive(zipfile.ZIP_STORED, a=_declaring("(9000,)")),
    ],
)
def test_nonsense_under_a_right_checksum_is_absent(tmp_path, content):
    """As another hand could put it there."""
    folder = FolderPieces(tmp_path)
    folder.put("k", {"a": np.zeros(2)})
    _only_file(tmp_path).write_bytes(pieces._HEADER + pieces._checksum("k", content) + content)
    assert folder.get("k") is None


def test_folder_or_pipe_in_place_of_the_file_is_absent(tmp_path):
    kept = FolderPieces(tmp_path)
    for make in (Path.mkdir, os.mkfifo):
        kept.put("key", ARRAYS)
        file = _only_file(tmp_path)
        file.unlink()
        make(file)
        assert kept.get("key") is None
        kept.put("key", ARRAYS)  # replaces a pipe; a folder stays, and is no error
        assert [one.name for one in tmp_path.iterdir()] == [file.name]
        if file.is_dir():
            file.rmdir()
    _same(kept.get("key"), ARRAYS)


# Folders and disks.


def test_folder_that_cannot_be_made_means_no_cache(tmp_path, caplog):
    (tmp_path / "file").write_text("not a folder")
    kept = FolderPieces(tmp_path / "file" / "cache")
    with caplog.at_level(logging.DEBUG, "levelnet.pieces"):
        kept.put("key", ARRAYS)
    assert kept.get("key") is None
    assert [record.levelname for record in caplog.records] == ["DEBUG"]
    assert "not kept" in caplog.text


def _run(code: str, *arguments: object) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-W", "error", "-c", code, *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)


def test_unwritable_folder_means_no_cache(tmp_path):
    tmp_path.chmod(0o555)
    # Root may write anywhere: step down to a user without rights first.
    done = _run(
        "import os, sys, numpy as np\n"
        "from levelnet.pieces import FolderPieces\n"
        "if os.geteuid() == 0: os.seteuid(65534)\n"
        "FolderPieces(sys.argv[1]).put('key', {'a': np.ones(3)})\n"
        "print(FolderPieces(sys.argv[1]).get('key'))",
        tmp_path,
    )
    tmp_path.chmod(0o755)
    assert (done.stdout, done.stderr, done.returncode) == ("None\n", "", 0)
    assert list(tmp_path.iterdir()) == []


def test_full_disk_means_no_cache_and_no_litter(tmp_path):
    # A limit on the size of files makes write fail half-way, as a full disk does.
    kept = FolderPieces(tmp_path)
    kept.put("key", {"a": np.zeros(3)})
    done = _run(
        "import resource, sys, numpy as np\n"
        "from levelnet.pieces import FolderPieces\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (10000, 10000))\n"
        "FolderPieces(sys.argv[1]).put('key', {'a': np.ones(100000)})\n"
        "print(len(FolderPieces(sys.argv[1]).get('key')['a']))",
        tmp_path,
    )
    assert (done.stdout, done.stderr, done.returncode) == ("3\n", "", 0)
    _only_file(tmp_path)  # the old piece, and no temporary file


def test_interrupt_leaves_no_temporary_file(tmp_path, monkeypatch):
    def interrupt(descriptor):
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    with pytest.raises(KeyboardInterrupt):
        FolderPieces(tmp_path).put("key", ARRAYS)
    assert list(tmp_path.iterdir()) == []


# Bounds.


def test_oldest_pieces_go_first(tmp_path):
    size = len(pieces._pack("0", {"a": np.zeros(1000)}))
    kept = FolderPieces(tmp_path, max_bytes=3 * size)
    foreign = tmp_path / "notes.txt"
    foreign.write_bytes(b"x" * 10 * size)
    for count, key in enumerate("01234"):
        before = set(tmp_path.iterdir())
        kept.put(key, {"a": np.full(1000, float(count))})
        for file in set(tmp_path.iterdir()) - before:
            os.utime(file, (1e9 + count, 1e9 + count))
    assert [kept.get(key) is not None for key in "01234"] == [False, False, True, True, True]
    assert foreign.exists()  # not ours: neither counted nor removed


def test_newest_piece_stays_even_where_clocks_disagree(tmp_path):
    size = len(pieces._pack("0", {"a": np.zeros(1000)}))
    kept = FolderPieces(tmp_path, max_bytes=size)
    kept.put("0", {"a": np.zeros(1000)})
    future = time.time() + 1e6
    os.utime(_only_file(tmp_path), (future, future))
    kept.put("1", {"a": np.zeros(1000)})
    assert kept.get("0") is None
    assert kept.get("1") is not None


def test_piece_larger_than_the_bound_is_not_kept(tmp_path):
    kept = FolderPieces(tmp_path, max_bytes=1000)
    kept.put("small", {"a": np.zeros(10)})
    kept.put("large", {"a": np.zeros(1000)})
    assert kept.get("large") is None
    assert kept.get("small") is not None


def test_left_over_temporary_files_are_swept_after_a_day(tmp_path):
    old, young, foreign = (tmp_path / n for n in ("a.piece-part", "b.piece-part", "c.part"))
    for file, hours in ((old, 25), (young, 23), (foreign, 1000)):
        file.write_bytes(b"half a piece")
        os.utime(file, (time.time() - 3600 * hours,) * 2)
    FolderPieces(tmp_path).put("key", ARRAYS)
    assert [file.exists() for file in (old, young, foreign)] == [False, True, True]


# Several processes.

WRITER = """
import sys, numpy as np
from levelnet.pieces import FolderPieces
kept = FolderPieces(sys.argv[1], max_bytes=1_100_000)
mark = float(sys.argv[2])
print("ready", flush=True)
for count in range(int(sys.argv[3])):
    kept.put("shared", {"a": np.full(100_000, mark)})
    kept.put(f"{mark} {count}", {"a": np.full(1000, mark)})
    got = kept.get("shared")
    assert got is not None and len(set(got["a"])) == 1, got
"""


def _writers(folder, marks, rounds):
    return [
        subprocess.Popen(
            [sys.executable, "-W", "error", "-c", WRITER, folder, str(mark), str(rounds)],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        for mark in marks
    ]


def test_concurrent_writers_never_mix(tmp_path):
    for process in _writers(tmp_path, (1, 2, 3), 40):
        _, complaints = process.communicate(timeout=60)
        assert (process.returncode, complaints) == (0, "")
    assert set(FolderPieces(tmp_path).get("shared")["a"]) <= {1.0, 2.0, 3.0}
    assert not list(tmp_path.glob("*.piece-part"))
    assert sum(file.stat().st_size for file in tmp_path.iterdir()) <= 1_100_000


@pytest.mark.parametrize("delay_s", [0.0, 0.003, 0.01, 0.03])
def test_killed_writer_leaves_a_whole_piece(tmp_path, delay_s):
    kept = FolderPieces(tmp_path)
    kept.put("shared", {"a": np.zeros(5)})
    (process,) = _writers(tmp_path, (7,), 10**6)
    with process:
        assert process.stdout.readline() == "ready\n"
        time.sleep(delay_s)
        process.send_signal(signal.SIGKILL)
    assert process.returncode == -signal.SIGKILL
    assert set(kept.get("shared")["a"]) in ({0.0}, {7.0})
    kept.put("shared", ARRAYS)
    _same(kept.get("shared"), ARRAYS)


def test_killed_before_the_move_keeps_the_old_piece(tmp_path):
    kept = FolderPieces(tmp_path)
    kept.put("key", ARRAYS)
    done = _run(
        "import os, signal, sys, numpy as np\n"
        "from levelnet.pieces import FolderPieces\n"
        "os.fsync = lambda _: os.kill(os.getpid(), signal.SIGKILL)\n"
        "FolderPieces(sys.argv[1]).put('key', {'a': np.ones(9)})",
        tmp_path,
    )
    assert done.returncode == -signal.SIGKILL
    assert len(list(tmp_path.glob("*.piece-part"))) == 1
    _same(kept.get("key"), ARRAYS)


# Where the cache is, and its keys.


@pytest.mark.parametrize(
    ("own", "xdg", "expected"),
    [
        ("/c/own", "/c/xdg", "/c/own"),
        ("~/own", None, "/h/own"),
        ("", "/c/xdg", "/c/xdg/levelnet"),
        (None, "/c/xdg", "/c/xdg/levelnet"),
        (None, "relative", "/h/.cache/levelnet"),
        (None, "", "/h/.cache/levelnet"),
        (None, None, "/h/.cache/levelnet"),
    ],
)
def test_default_folder(monkeypatch, own, xdg, expected):
    monkeypatch.setenv("HOME", "/h")
    for name, value in (("LEVELNET_CACHE", own), ("XDG_CACHE_HOME", xdg)):
        if value is None:
            monkeypatch.delenv(name, raising=False)
        else:
            monkeypatch.setenv(name, value)
    assert default_cache_folder() == Path(expected)


def test_without_a_home_nothing_is_kept(monkeypatch):
    for name in ("LEVELNET_CACHE", "XDG_CACHE_HOME"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setattr(os.path, "expanduser", lambda path: path)  # what it does without a home
    kept = FolderPieces(default_cache_folder())
    kept.put("key", ARRAYS)
    assert kept.get("key") is None
    assert not Path("~").exists()


PARTS = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False) | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=3).map(tuple),
    max_leaves=6,
)


@given(PARTS, PARTS)
def test_keys_are_equal_where_parts_are(one, two):
    # repr is exact for these types and tells 1, 1.0, True and "1" apart, and 0.0 from -0.0.
    assert (content_key(one) == content_key(two)) == (repr(one) == repr(two))


def test_key_of_arrays():
    array = np.array([1.0, 2.0, 3.0, 4.0])
    reference = content_key("name", array)
    assert content_key("name", array.copy()) == reference
    assert content_key("name", np.repeat(array, 2)[::2]) == reference
    moved = array.copy()
    moved[2] = np.nextafter(3.0, 4.0)
    others = (moved, array.reshape(2, 2), array.astype(np.int64), array.astype(np.float32))
    keys = {content_key("name", other) for other in others}
    assert len(keys | {reference}) == 5
    assert content_key(np.float64(0.1), np.int64(3)) == content_key(0.1, 3)


def test_key_does_not_run_parts_together():
    assert content_key("ab", "c") != content_key("a", "bc")
    assert content_key(("a",), "b") != content_key("a", ("b",))


@pytest.mark.parametrize("part", [{}, object(), 1j, np.array([None]), np.array(["a"])])
def test_key_refuses_what_it_cannot_write_exactly(part):
    with pytest.raises(TypeError, match="part of a key"):
        content_key(part)


@pytest.fixture
def package(tmp_path, monkeypatch):
    (tmp_path / "kernels").mkdir()
    for name in ("kernels/a.py", "kernels/b.py", "constants.py"):
        (tmp_path / name).write_text(f"# {name}")
        os.utime(tmp_path / name, (1e9, 1e9))
    monkeypatch.setattr(pieces, "_PACKAGE", tmp_path)
    code_digest.cache_clear()
    yield tmp_path
    code_digest.cache_clear()


def _fresh_digest(*parts: str) -> str:
    code_digest.cache_clear()
    return code_digest(parts)


def test_code_digest_follows_the_source(package):
    before = _fresh_digest("kernels", "constants")
    assert _fresh_digest("kernels", "constants") == before
    assert _fresh_digest("kernels") != before
    for change in ("text", "name"):
        if change == "text":
            (package / "kernels/b.py").write_text("# changed")
            os.utime(package / "kernels/b.py", (1e9, 1e9))
        else:
            (package / "kernels/b.py").rename(package / "kernels/c.py")
        after = _fresh_digest("kernels", "constants")
        assert after != before
        before = after


def test_code_changed_while_running_shares_no_cache(package):
    (package / "constants.py").touch()
    assert _fresh_digest("constants") != _fresh_digest("constants")


def test_code_digest_is_computed_once(package):
    before = code_digest(("constants",))
    (package / "constants.py").write_text("# changed")
    assert code_digest(("constants",)) == before


def test_code_digest_without_source_is_an_error(package):
    with pytest.raises(FileNotFoundError):
        code_digest(("kernel",))


def test_code_digest_is_the_same_in_another_process():
    code_digest.cache_clear()
    here = code_digest(("pieces", "constants"))
    done = _run(
        "from levelnet.pieces import code_digest; print(code_digest(('pieces', 'constants')))"
    )
    assert (done.stdout.strip(), done.stderr) == (here, "")
