"""A process that reads damaged files, one after another, under a limit of memory; and its warden.

Run as a program it answers requests from stdin: one line of JSON each, both ways.
"""

from __future__ import annotations

import contextlib
import io
import json
import os
import resource
import select
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[1]
MOST_BYTES = 2 * 1024**3
PATIENCE_S = 10.0


def read_text_kind(kind: str, path: Path) -> object:
    """Read a text of a user with the function for its kind."""
    from levelnet.atomic.overrides import Rates
    from levelnet.background.expansion import read_expansion_table
    from levelnet.history.setup import load_setup
    from levelnet.studies.budget import load_uncertainties
    from levelnet.studies.requirement import load_requirement
    from levelnet.studies.response import read_response
    from levelnet.studies.sweep_files import load_sweep

    def read_rows(one: Path) -> object:
        named = one.with_suffix(".csv")  # which makes it CSV
        named.unlink(missing_ok=True)
        named.symlink_to(one)
        return load_sweep(named)

    readers: dict[str, Callable[[Path], object]] = {
        "setup": load_setup,
        "requirement": load_requirement,
        "uncertainties": load_uncertainties,
        "overrides": lambda one: Rates(overrides=str(one)).table,
        "response": read_response,
        "expansion": read_expansion_table,
        "sweep": load_sweep,
        "rows": read_rows,
    }
    return readers[kind](path)


def read_piece(path: Path, key: str) -> str:
    """Read a piece of a cache through the cache; return what came of it."""
    import hashlib

    from levelnet.pieces import FolderPieces

    found = FolderPieces(path.parent).get(key)
    if found is None:
        return "refused"
    digest = hashlib.sha256()
    for name, array in found.items():
        digest.update(f"{name} {array.shape} {array.dtype}".encode() + array.tobytes())
    return digest.hexdigest()


def read_hdf5(path: Path, digest: str, believe: bool) -> str:
    """Read a result file; say whether it is the sound one again. "made": believed, whatever."""
    from levelnet.store import read
    from levelnet.store.read import read_content

    if believe:
        read(path)
        return believed_verdict(str(path))
    if read_content(path).attributes["digest"] != digest:
        return "CHANGED"
    read(path)
    return "same"


def verdict(asked: dict[str, Any]) -> str:
    """Return "same", "made" or "refused", or anything else in words of its own."""
    from levelnet.errors import InputError

    path = Path(asked["path"])
    try:
        if asked["kind"] == "piece":
            return read_piece(path, asked["key"])
        if asked["kind"] == "hdf5":
            return read_hdf5(path, asked["digest"], asked.get("believe", False))
        read_text_kind(asked["kind"], path)
        return "made"
    except InputError as error:
        line = str(error)
        right = line.startswith(str(path)) and len(line.splitlines()) == 1 and len(line) < 5000
        return "refused" if right else f"BAD LINE {line[:300]!r}"
    except BaseException as error:
        return f"TRACEBACK {type(error).__name__}: {error}"[:300]


def command_verdict(path: str) -> str:
    """Run ``levelnet show`` on a file that is refused."""
    code, out, err = shown(path)
    right = code == 2 and err.count("\n") == 1 and err.startswith("levelnet: error: ")
    return "" if right and not out else f"COMMAND {code} {err[:300]!r}"


def believed_verdict(path: str) -> str:
    """Run ``levelnet show`` on a file that holds nonsense, which nothing can tell from sense.

    Numbers that no calculation gives may end it as an internal error: in one line all the same.
    """
    code, out, err = shown(path)
    harmless = all(letter.isprintable() or letter == "\n" for letter in out + err)
    right = code in {0, 1, 2} and "Traceback" not in err and harmless
    return "made" if right else f"COMMAND {code} {err[-300:]!r}"


def shown(path: str) -> tuple[int, str, str]:
    """Run ``levelnet show``; exit code, output and complaints."""
    from levelnet.cli.main import main

    out, err = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        code = main(["show", path])
    return code, out.getvalue(), err.getvalue()


def serve() -> None:
    """Answer until stdin ends."""
    resource.setrlimit(resource.RLIMIT_AS, (MOST_BYTES, MOST_BYTES))
    for line in sys.stdin:
        asked = json.loads(line)
        found = verdict(asked)
        if found == "refused" and asked.get("command"):
            found = command_verdict(asked["path"]) or found
        print(json.dumps({"verdict": found, "peak": peak_bytes()}), flush=True)


def peak_bytes() -> int:
    """Largest memory that this process or one of its children has had."""
    own = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    ended = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
    living = [0]
    for folder in Path("/proc/self/task").glob("*/children"):
        for child in folder.read_text().split():
            with contextlib.suppress(OSError):
                status = Path(f"/proc/{child}/status").read_text()
                living += [int(one.split()[1]) for one in status.splitlines() if "VmHWM" in one]
    return 1024 * max(own, ended, *living)


class Judge:
    """The process, as the tests see it."""

    def __init__(self) -> None:
        self._start()

    def renew(self) -> None:
        """Start anew if it has died, hung or passed its memory: one test's fault stays its own."""
        if not self._sound or self.peak >= MOST_BYTES:
            self.close()
            self._start()
        self._first = True

    def _start(self) -> None:
        paths = [str(ROOT), *os.environ.get("PYTHONPATH", "").split(os.pathsep)]
        self._process = subprocess.Popen(
            [sys.executable, "-c", "from tests.damage_judge import serve; serve()"],
            env=os.environ | {"PYTHONPATH": os.pathsep.join(paths)},
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        self.peak = 0
        self._first, self._sound = True, True

    def ask(self, **asked: Any) -> str:
        """Return the verdict on a file; words of its own where the process hangs or dies."""
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._sound = False  # until it has answered
        self._process.stdin.write(json.dumps(asked) + "\n")
        self._process.stdin.flush()
        # The first answer of a test waits for Python, or for the libraries of another kind of file.
        patience = PATIENCE_S + 50.0 * self._first
        if not select.select([self._process.stdout], [], [], patience)[0]:
            return f"HANG over {patience:g} s"
        self._first = False
        line = self._process.stdout.readline()
        if not line:
            return f"DEATH {self._process.wait()}"
        answer = json.loads(line)
        self._sound = True
        self.peak = max(self.peak, answer["peak"])
        return str(answer["verdict"])

    def close(self) -> None:
        """End the process."""
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        with contextlib.suppress(BrokenPipeError):  # it died with a question unread
            self._process.stdin.close()
        self._process.stdout.close()
        try:
            self._process.wait(10.0)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
