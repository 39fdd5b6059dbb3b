"""The layers of the package, held by contracts in pyproject.toml, and the rules of kernel files."""

from __future__ import annotations

import ast
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "levelnet"
KERNEL_FILES = sorted(
    path
    for path in (PACKAGE / "kernels").glob("*.py")
    if path.stem not in {"__init__", "blas", "compile"}
)
RUN = (
    "import sys; from importlinter.cli import lint_imports;"
    " sys.exit(lint_imports(config_filename='pyproject.toml', no_cache=True, no_logo=True))"
)


def lint(folder: Path) -> tuple[int, str]:
    """Run the contracts on the copy of the project in `folder`; give the exit code and the text."""
    done = subprocess.run(
        [sys.executable, "-c", RUN],
        cwd=folder,
        env={"PYTHONPATH": str(folder), "PATH": "", "COLUMNS": "200"},
        capture_output=True,
        text=True,
        check=False,
    )
    return done.returncode, done.stdout + done.stderr


@pytest.fixture
def copy(tmp_path: Path) -> Path:
    """Copy the package, so that a test may break it."""
    shutil.copytree(PACKAGE, tmp_path / "levelnet", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copy(ROOT / "pyproject.toml", tmp_path)
    return tmp_path


def test_contracts_are_kept() -> None:
    code, text = lint(ROOT)
    assert code == 0, text
    # All of them ran: none was dropped or renamed unseen.
    assert re.search(r"Contracts: 6 kept, 0 broken", text), text


@pytest.mark.parametrize(
    ("file", "line", "contract"),
    [
        ("numerics/__init__.py", "import levelnet.history", "Imports go downwards"),
        ("store/__init__.py", "import levelnet.report", "Imports go downwards"),
        ("drawer.py", "", "Imports go downwards"),
        ("network/__init__.py", "import numba", "Only kernels import numba"),
        ("report/__init__.py", "import h5py", "Only store imports h5py"),
        ("cli/__init__.py", "import matplotlib", "Only report imports matplotlib"),
        ("tables.py", "import h5py", "Files and figures cannot be reached"),
        ("kernels/intruder.py", "from . import radial", "Kernel files do not see each other"),
    ],
)
def test_contracts_catch(copy: Path, file: str, line: str, contract: str) -> None:
    with (copy / "levelnet" / file).open("a", encoding="utf-8") as stream:
        stream.write(f"\n{line}\n")
    code, text = lint(copy)
    assert code == 1, text
    assert re.search(re.escape(contract) + r".* BROKEN", text), text


def imported_names(path: Path) -> set[str]:
    """Name what the file imports, as "module" or "module:name"; relative ones keep their dots."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            module = "." * node.level + (node.module or "")
            found.update(f"{module}:{alias.name}" for alias in node.names)
    return found


@pytest.mark.parametrize("path", KERNEL_FILES, ids=lambda path: path.stem)
def test_kernel_files_import_only_numpy_math_and_the_decorator(path: Path) -> None:
    # The folder of compiled code is named by the text of all kernel files and of nothing else: a
    # constant or a function from elsewhere would leave old numbers in it. Types of arguments carry
    # none. Which kernel files may see each other is said in pyproject.toml.
    plain = {"numpy", "math", "__future__:annotations", "typing:Any", "typing:NamedTuple"}
    plain |= {".compile:kernel", ".compile:inlined", ".compile:borrowed"}
    types = {"..arrays:FloatArray", "..arrays:IntArray", "numpy.typing:NDArray"}
    kernels = tuple(f".{one.stem}:" for one in KERNEL_FILES)
    others = {one for one in imported_names(path) if not one.startswith((*kernels, ".blas:"))}
    assert others <= plain | types


@pytest.mark.parametrize("path", KERNEL_FILES, ids=lambda path: path.stem)
def test_kernels_take_no_options(path: Path) -> None:
    # One decorator, no options at the call site: every kernel is compiled in the same way.
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.FunctionDef):
            assert [ast.unparse(one) for one in node.decorator_list] in (
                [],
                ["kernel"],
                ["inlined"],
            ), node.name


def test_the_caller_of_blas_imports_the_compiler_and_nothing_of_ours() -> None:
    found = imported_names(PACKAGE / "kernels" / "blas.py")
    modules = {one.split(":")[0].split(".")[0] for one in found}
    assert modules == {"__future__", "functools", "importlib", "re", "typing"} | {
        "llvmlite",
        "numba",
        "numpy",
    }


def test_kernel_files_are_found() -> None:
    assert KERNEL_FILES
