"""Compiled kernels on disk: damaged machine code is never run."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from typing import Any

import pytest

from levelnet.kernels import compile as compile_module

KERNEL = """
from levelnet.kernels.compile import kernel
@kernel
def twice(x):
    return 2.0 * x
"""


def loaded(folder: Path) -> Any:
    """Load the kernel as a new process would."""
    spec = importlib.util.spec_from_file_location("mine", folder / "mine.py")
    assert spec is not None
    assert spec.loader is not None
    mine = importlib.util.module_from_spec(spec)
    sys.modules["mine"] = mine
    spec.loader.exec_module(mine)
    return mine


def call(folder: Path) -> tuple[float, int]:
    """Load the kernel and call it: the result, and whether the cache served."""
    mine = loaded(folder)
    return mine.twice(21.0), sum(mine.twice.stats.cache_hits.values())


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    (tmp_path / "mine.py").write_text(KERNEL)
    monkeypatch.setattr(compile_module, "_FOLDER", str(tmp_path / "cache"))
    monkeypatch.setitem(sys.modules, "mine", None)
    assert call(tmp_path) == (42.0, 0)
    assert call(tmp_path) == (42.0, 1)
    return tmp_path


def test_what_is_kept_is_known_without_a_call(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "mine.py").write_text(KERNEL)
    monkeypatch.setattr(compile_module, "_FOLDER", str(tmp_path / "cache"))
    monkeypatch.setitem(sys.modules, "mine", None)
    kept = compile_module.is_kept
    assert not kept(loaded(tmp_path).twice)
    assert call(tmp_path) == (42.0, 0)
    assert kept(loaded(tmp_path).twice)
    assert kept(len)  # a plain function, as where compilation is switched off
    (path,) = (tmp_path / "cache").rglob("*.nbi")
    path.write_bytes(path.read_bytes()[:-1])
    assert not kept(loaded(tmp_path).twice)


@pytest.mark.parametrize("ending", ["nbi", "nbc"])
@pytest.mark.parametrize("damage", ["flip", "cut", "empty", "unsealed"])
def test_damaged_cache_is_compiled_anew(ending: str, damage: str, folder: Path) -> None:
    (path,) = (folder / "cache").rglob(f"*.{ending}")
    whole = path.read_bytes()
    flipped = bytearray(whole)
    flipped[len(whole) // 2] ^= 1
    cases = {"flip": bytes(flipped), "cut": whole[:-50], "empty": b"", "unsealed": whole[:-32]}
    path.write_bytes(cases[damage])
    assert call(folder) == (42.0, 0)
    assert call(folder) == (42.0, 1)
