"""Text files of a user: read whole, or refused in one line.

What is expected is the project's own contract.
"""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from levelnet.errors import InputError
from levelnet.texts import read_bytes, read_text


def test_file_is_read_whole(tmp_path: Path) -> None:
    path = tmp_path / "a.txt"
    path.write_bytes("Größe\n".encode())
    assert read_bytes(path, 8) == path.read_bytes()  # 8 bytes, as many as allowed
    assert read_text(str(path), 8) == "Größe\n"
    path.write_bytes(b"\xef\xbb\xbfz")
    assert read_text(path, 100, "utf-8-sig") == "z"


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
