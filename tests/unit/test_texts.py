"""Text files of a user: read whole, or refused in one line.

What is expected is the project's own contract.
"""

from __future__ import annotations

import os
import time
import tomllib
import tracemalloc
from pathlib import Path

import pytest

from levelnet.errors import InputError
from levelnet.history.setup import load_setup
from levelnet.studies.requirement import load_requirement
from levelnet.texts import MOST_PARTS, parse_toml, read_bytes, read_text
from tests.small_runs import small_setup


def test_file_is_read_whole(tmp_path: Path) -> None:
    path = tmp_path / "a.txt"
    path.write_bytes("Größe\n".encode())
    assert read_bytes(path, 8) == path.read_bytes()  # 8 bytes, as many as allowed
    assert read_text(str(path), 8) == "Größe\n"
    path.write_bytes(b"\xef\xbb\xbfz")
    assert read_text(path, 100) == "z"


@pytest.mark.parametrize(
    ("most", "size"),
    [(7, "7 bytes"), (2000, "2 kB"), (16_000_000, "16 MB"), (1_500_000, "1.5 MB")],
)
def test_too_large(tmp_path: Path, most: int, size: str) -> None:
    path = tmp_path / "large.txt"
    with path.open("wb") as file:
        file.truncate(most + 1)
    with pytest.raises(InputError) as caught:
        read_text(path, most)
    assert str(caught.value) == f"{path}: over {size}"


def test_missing_folder_and_null(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"none\.txt: cannot be read: No such file or directory"):
        read_text(tmp_path / "none.txt", 10)
    with pytest.raises(InputError, match="cannot be read: Is a directory"):
        read_text(tmp_path, 10)
    with pytest.raises(InputError, match="cannot be read: embedded null"):
        read_text("a\0b", 10)


def test_pipe_is_not_waited_for(tmp_path: Path) -> None:
    # Nobody writes into it: opening it would wait for ever.
    path = tmp_path / "pipe"
    os.mkfifo(path)
    with pytest.raises(InputError, match="pipe: cannot be read: not a plain file"):
        read_text(path, 10)


@pytest.mark.parametrize(("encoding", "name"), [("utf-8", "UTF-8"), ("ascii", "plain ASCII")])
def test_not_text(tmp_path: Path, encoding: str, name: str) -> None:
    path = tmp_path / "binary.txt"
    path.write_bytes(b"\x89HDF\xff")
    with pytest.raises(InputError) as caught:
        read_text(path, 10, encoding)
    assert str(caught.value) == f"{path}: not {name} text"


def parts(count: int, part: str = "a", mark: str = ".") -> str:
    return mark.join([part] * count)


# Small texts over which a parser takes gigabytes, minutes or its stack; most have 50 to 200 kB.
HOSTILE = {
    "dotted key": parts(24_000) + " = 1",
    "quoted": parts(24_000, '"a"') + " = 1",
    "quoted and spaced": parts(24_000, "'a'", " . ") + " = 1",
    "after strings": f'a = """x\\""" " """\n{parts(24_000)} = 1',
    "in a table": f"a = [ {{ {parts(24_000)} = 1 }} ]",
    "header": f"[{parts(5000)}]",
    "headers of lists": f"[[{parts(5000)}]]",
    "key below header": f"[{parts(20)}]\n{parts(20)} = 1",
    "lists": "a = " + "[" * 40 + "]" * 40,
    "tables": "a = " + "{ a = " * 40 + "1" + "}" * 40,
    "tables of dotted keys": "a = " + ("{" + parts(20) + " = ") * 3 + "1" + "}" * 3,
    "hexadecimal": "a = 0x" + "f" * 9000,
    "short hexadecimal": "a = 0x" + "f" * 17,
    "decimal": "a = 1" + "0" * 400,
    "many keys": "".join(f"a{k} = 1\n" for k in range(20_000)),
    "many tables": "".join(f"[a{k}]\n" for k in range(20_000)),
    "long key": "a" * 900_000 + " = 1",
    "long quoted key twice": 2 * ('"' + "a" * 900_000 + '" = 1\n'),
    "open string": 'a = """\n' + '\\"""\n' * 50_000,
}


@pytest.mark.parametrize("text", HOSTILE.values(), ids=HOSTILE)
def test_toml_that_blows_up_is_refused_at_once(text: str) -> None:
    before = time.process_time()
    tracemalloc.start()
    try:
        with pytest.raises(InputError) as caught:
            parse_toml(text, "a.toml")
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert time.process_time() - before < 10.0
    assert peak < 30e6
    assert str(caught.value).startswith("a.toml: ")
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 1000


@pytest.mark.parametrize("text", ["\n" * 2_100_000, "x" * 20_000_001])
def test_too_much_toml(text: str) -> None:
    with pytest.raises(InputError, match=r"^a\.toml: .*over 20*0 "):
        parse_toml(text, "a.toml")


@pytest.mark.parametrize(
    "text",
    [
        f'title = "{parts(100)}"\nb = [{parts(100, "1.5", ", ")}]',
        f"'{parts(100)}' = 1 # {parts(100)}",
        f'a = \'\'\'{parts(100)} \' \'\' \n\'\'\'\'\'\nb = """{parts(100)} " "" \\""""""',
        f"{parts(MOST_PARTS)} = 1\n",
        "a = " + "[" * (MOST_PARTS - 1) + "1" + "]" * (MOST_PARTS - 1),
        f"a = [{'[1.0, 2.0],' * 1000}]\nb = -9223372036854775808\nc = 0x7fffffffffffffff",
        "\n".join(f"[t{k}]\n{parts(9)} = {k}" for k in range(500)),
    ],
)
def test_toml_within_the_bounds_is_what_the_library_reads(text: str) -> None:
    assert parse_toml(text, "a.toml") == tomllib.loads(text)


def test_a_byte_order_mark_is_no_part_of_toml(tmp_path: Path) -> None:
    setup = small_setup(4)
    (tmp_path / "a.toml").write_bytes(b"\xef\xbb\xbf" + setup.to_toml().encode())
    assert load_setup(tmp_path / "a.toml") == setup
    asked = 'title = "t"\n[observables]\n"z_*" = 1e-4\n'
    (tmp_path / "r.toml").write_bytes(b"\xef\xbb\xbf" + asked.encode())
    assert load_requirement(tmp_path / "r.toml").title == "t"
