"""Messages to stderr: notices, warnings, errors, and a progress bar when a person is looking."""

from __future__ import annotations

import sys
import threading
import time
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, TextIO

from ..errors import AccuracyWarning

if TYPE_CHECKING:
    from rich.progress import Progress

_PATIENCE_S = 2.0  # shorter work needs no bar


def one_line(text: str) -> str:
    """Fold `text` into one line, as :func:`harmless`."""
    return harmless(" ".join(text.split()))


def harmless(text: str) -> str:
    """Show what a terminal could obey by its code in place of sending it; lines stay lines."""
    return "".join(_shown(letter) for letter in text)


def _shown(letter: str) -> str:
    # Half a surrogate stands for a byte of a file name; the stream itself knows what to do with it.
    fine = letter.isprintable() or letter == "\n" or 0xDC80 <= ord(letter) <= 0xDCFF
    return letter if fine else letter.encode("unicode_escape").decode("ascii")


class Terminated(KeyboardInterrupt):
    """SIGTERM came: like Ctrl-C, with an exit code of its own."""


def end_workers() -> None:
    """Kill the worker processes, which would otherwise be waited for until their tasks are done."""
    if processes := sys.modules.get("multiprocessing"):
        for one in processes.active_children():
            one.kill()


class Console:
    """Where a command speaks to the person; results go to stdout and not through here.

    Parameters
    ----------
    quiet : bool
        No notices and no progress; errors and warnings stay.
    """

    def __init__(self, quiet: bool = False) -> None:
        self.quiet = quiet
        self.ending: type[KeyboardInterrupt] | None = None

    def notice(self, text: str) -> None:
        """Say something that is neither result nor complaint."""
        if not self.quiet:
            self._say(text)

    def warn(self, text: str) -> None:
        """Say that something may not be right."""
        self._say(f"warning: {text}")

    def error(self, text: str, kind: str = "error: ") -> None:
        """Say why the command ends."""
        self._say(f"{kind}{text}")

    def _say(self, text: str) -> None:
        # One write per line, so that a bar drawn by another thread cannot split it.
        sys.stderr.write(f"levelnet: {one_line(text)}\n")
        sys.stderr.flush()

    @contextmanager
    def one_line_warnings(self) -> Iterator[None]:
        """Show each different warning once, as one line without the place in the code."""
        said: set[str] = set()

        def show(
            message: Warning | str,
            category: type[Warning],
            filename: str,
            lineno: int,
            file: TextIO | None = None,
            line: str | None = None,
        ) -> None:
            text = one_line(str(message))
            if text not in said:
                said.add(text)
                own = issubclass(category, AccuracyWarning)
                self.warn(text if own else f"{category.__name__}: {text}")

        with warnings.catch_warnings():
            warnings.simplefilter("always", AccuracyWarning)
            warnings.showwarning = show
            yield

    @contextmanager
    def progress(self) -> Iterator[ProgressBar]:
        """Give a ``progress(stage, fraction)`` callable; its bar appears after two seconds."""
        bar = ProgressBar(self, shown=not self.quiet and sys.stderr.isatty())
        try:
            yield bar
        finally:
            bar.close()


class ProgressBar:
    """Callable ``(stage, fraction)``: draws a bar on stderr once the work has taken two seconds."""

    def __init__(self, console: Console, shown: bool) -> None:
        self._console = console
        self._lock = threading.Lock()
        self._bar: Progress | None = None
        self._task: Any = None
        self._state = ("starting", 0.0)
        self._closed = False
        self._timer: threading.Timer | None = None
        self.started = time.monotonic()
        if shown:
            # By timer, so that a long first stage that reports nothing shows up too.
            self._timer = threading.Timer(_PATIENCE_S, self._open)
            self._timer.daemon = True
            self._timer.start()

    def __call__(self, stage: str, fraction: float) -> None:
        """Note that `stage` is done to `fraction`, 0 to 1."""
        if self._console.ending is not None:
            raise self._console.ending
        with self._lock:
            self._state = (stage, fraction)
            if self._bar is not None:
                self._draw()

    def _open(self) -> None:
        from rich.console import Console as RichConsole
        from rich.progress import (
            BarColumn,
            Progress,
            TaskProgressColumn,
            TextColumn,
            TimeElapsedColumn,
            TimeRemainingColumn,
        )

        with self._lock:
            if self._closed:
                return
            # rich honours NO_COLOR and dumb terminals by itself.
            self._bar = Progress(
                TextColumn("{task.description}"),
                BarColumn(),
                TaskProgressColumn(),
                TimeElapsedColumn(),
                TextColumn("left"),
                TimeRemainingColumn(),
                console=RichConsole(stderr=True),
                transient=True,
            )
            self._bar.start()
            self._draw()

    def _draw(self) -> None:
        assert self._bar is not None
        stage, fraction = self._state
        task = self._task
        if task is None or self._bar.tasks[0].description != stage:
            # A new task per stage: the time left is that of the stage.
            if task is not None:
                self._bar.remove_task(task)
            self._task = self._bar.add_task(stage, total=1.0)
        self._bar.update(self._task, completed=min(max(fraction, 0.0), 1.0))

    def close(self) -> None:
        """Take the bar away."""
        if self._timer is not None:
            self._timer.cancel()
        with self._lock:
            self._closed = True
            if self._bar is not None:
                self._bar.stop()
                self._bar = None
