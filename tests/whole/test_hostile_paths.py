"""Every command given names that are no files: one clear line, exit code 2, nothing waits."""

from __future__ import annotations

import os
import shutil
import socket
from collections.abc import Iterator
from pathlib import Path

import pytest

from levelnet.cli.main import main
from levelnet.store import write
from tests.invented_history import history_with_field
from tests.small_runs import small_setup

READ = (
    *("folder", "/dev/zero", "/dev/null", "fifo", "loop", "dangling", "missing", "socket", ""),
    *("plain/x", "../../../../nowhere/x", "a" * 300, "x/" * 2500, "n\0ul", "empty", "endless"),
    *("deep", "header", "hexadecimal", "far", "\x1b[31m", "new\nline", "\u202egnp.exe"),
)
WRITTEN = (
    *("folder", "/dev/null", "/dev/full", "fifo", "loop", "missing/out.h5", "plain/out.h5", "/"),
    *("../../../../nowhere/x/out.h5", "a" * 300, "x/" * 2500, "socket", "n\0ul", "new\nline/x"),
)
FOLDERS = ("fifo", "loop", "dangling/x", "plain", "plain/x", "a" * 300, "x/" * 2500, "n\0ul")
READERS = (
    *("solve IN", "solve IN --dry-run", "levels IN", "escape IN", "weigh IN", "distill IN"),
    *("solve IN --plan", "levels IN --plan", "escape IN --plan", "weigh IN --plan"),
    *("distill IN --plan", "sweep IN", "sweep IN --plan", "sweep good.csv --setup IN"),
    *("show IN", "history IN", "report IN", "report good.h5 IN"),
    *("levels good.toml --requirement IN", "escape good.toml --requirement IN"),
    "weigh good.toml --uncertainties IN",
)
WRITERS = (
    *("solve good.toml -o OUT", "levels good.toml -o OUT", "escape good.toml -o OUT"),
    *("weigh good.toml -o OUT", "distill good.toml -o OUT", "show good.h5 --csv OUT"),
    *("sweep good.csv -o OUT", "report good.h5 -o OUT"),
)
DRAWERS = (
    *("show good.h5 --plot OUT", "levels good.toml --plot OUT", "escape good.toml --plot OUT"),
    *("weigh good.toml --plot OUT", "demo -o OUT"),
)


@pytest.fixture(scope="module")
def odd(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Make a folder with a good setup, a good result, and whatever may stand under a name."""
    folder = tmp_path_factory.mktemp("odd")
    (folder / "good.toml").write_text(small_setup(4, 400.0, 8).to_toml(), encoding="utf-8")
    (folder / "good.csv").write_text("cosmology.hubble_km_s_mpc\n68\n")
    write(history_with_field(), folder / "good.h5")
    (folder / "folder").mkdir()
    (folder / "plain").write_text("x")
    (folder / "empty").touch()
    (folder / "deep").write_text(".".join("a" * 2000) + " = 1\n")
    (folder / "header").write_text(f"[{'.'.join('a' * 5000)}]\n")
    (folder / "hexadecimal").write_text(f"[hydrogen]\nn_max = 0x{'f' * 9000}\n")
    (folder / "far").write_text(f"[combine]\nx.y = {{ from = 3, to = 1{'0' * 400}, count = 3 }}\n")
    with (folder / "endless").open("wb") as file:  # a hole of a tebibyte behind a right start
        file.write(b"\x89HDF\r\n\x1a\n")
        file.truncate(1 << 40)
    os.mkfifo(folder / "fifo")
    (folder / "loop").symlink_to("loop")
    (folder / "dangling").symlink_to("nowhere")
    here = os.getcwd()
    os.chdir(folder)  # the name of a socket must be short
    with socket.socket(socket.AF_UNIX) as one:
        one.bind("socket")
        yield folder
    os.chdir(here)
    shutil.rmtree(folder)


def refused(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    code = main(words)
    out, err = capsys.readouterr()
    assert (code, out) == (2, ""), err
    assert err.startswith("levelnet: error: ")
    assert err.endswith("\n")
    assert err[:-1].isprintable(), err  # one line, and nothing that a terminal would obey


def filled(command: str, place: str, name: str) -> list[str]:
    return [name if word == place else word for word in command.split()]


@pytest.mark.parametrize("command", READERS)
def test_what_is_no_file_is_not_read(
    command: str, odd: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    before = sorted(os.listdir(odd))
    for name in READ:
        refused(filled(command, "IN", name), capsys)
    assert sorted(os.listdir(odd)) == before


@pytest.mark.parametrize("command", [*WRITERS, *(f"{one} --force" for one in WRITERS)])
def test_no_file_is_written_where_none_can_be(
    command: str, odd: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    before = sorted(os.listdir(odd))
    for name in WRITTEN:
        refused(filled(command, "OUT", name), capsys)
    assert sorted(os.listdir(odd)) == before


@pytest.mark.parametrize("command", DRAWERS)
def test_no_figures_where_no_folder_can_be(
    command: str, odd: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for name in FOLDERS:
        refused(filled(command, "OUT", name), capsys)


@pytest.mark.parametrize("command", ["solve good.toml", "show good.h5 --csv"])
def test_the_file_that_is_read_is_never_written(
    command: str, odd: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    words = command.split()
    before = (odd / words[1]).read_bytes()
    (odd / "alias").unlink(missing_ok=True)
    (odd / "alias").symlink_to(words[1])
    for name in (words[1], f"./{words[1]}", f"folder/../{words[1]}", "alias"):
        option = [] if words[0] == "show" else ["-o"]
        refused([*words, *option, name, "--force"], capsys)
    assert (odd / words[1]).read_bytes() == before
