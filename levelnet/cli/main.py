"""Entry of the command line: parser, and what becomes of every way to end."""

from __future__ import annotations

import argparse
import errno
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from types import FrameType
from typing import Any, NoReturn

from .. import __version__
from ..errors import InputError, LevelnetError
from . import (
    demo,
    distill,
    escape,
    history,
    levels,
    report,
    show,
    solve,
    sweep,
    tables,
    weigh,
)
from .console import Console, Terminated, end_workers, one_line

# Input was good, but the disk was not: a failure and no bad input.
_DISK_TROUBLE = {errno.ENOSPC, errno.EDQUOT, errno.EIO, errno.EFBIG, errno.EROFS}
OK, FAILED, BAD_INPUT, INTERRUPTED, TERMINATED = 0, 1, 2, 130, 143

_DESCRIPTION = """\
Ionization history and level populations of hydrogen through cosmological recombination.

  levelnet demo                      solve an invented scenario and draw it
  levelnet solve setup.toml          solve a setup, write setup.h5
  levelnet show setup.h5 --plot      sum up a result, draw its figures
  levelnet weigh setup.toml          weigh every rate: what each does to x_e(z)
  levelnet sweep sweep.toml          compute many setups, here or on a cluster
  levelnet distill setup.toml        distil its atom to effective rates, write setup-table.h5
  levelnet history setup-table.h5    make a history from them in milliseconds
  levelnet levels setup.toml         find out how many levels matter
  levelnet escape setup.toml         find out which treatment of the Lyman lines is good enough
  levelnet report setup.h5           set results out as one HTML page
"""
_EXIT_CODES = (
    "exit codes: 0 ok; 1 computed but not to the tolerance, or failed; 2 bad usage or input; "
    "130 interrupted; 143 terminated"
)


class _Parser(argparse.ArgumentParser):
    """A parser whose complaint is one line."""

    def error(self, message: str) -> NoReturn:
        """Say what is wrong and where help is; exit code 2."""
        self.exit(BAD_INPUT, f"levelnet: error: {one_line(message)} (see: {self.prog} --help)\n")


def build_parser() -> argparse.ArgumentParser:
    """Build the parser of all commands; imports nothing slow."""
    parser = _Parser(
        prog="levelnet",
        description=_DESCRIPTION,
        epilog=_EXIT_CODES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"levelnet {__version__}")
    commands = parser.add_subparsers(metavar="COMMAND", parser_class=_Parser)
    for module in (
        solve,
        show,
        levels,
        escape,
        weigh,
        sweep,
        distill,
        history,
        report,
        tables,
        demo,
    ):
        command = commands.add_parser(
            module.NAME,
            help=module.SUMMARY,
            description=module.DESCRIPTION,
            epilog=f"example: {module.EXAMPLE}",
            allow_abbrev=False,
        )
        module.add_arguments(command)
        command.add_argument("--json", action="store_true", help="print JSON to stdout")
        command.add_argument("--quiet", action="store_true", help="no progress and no notices")
        command.add_argument("--debug", action="store_true", help="show tracebacks of errors")
        command.set_defaults(run=module.run)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str or None
        Words after the program's name; None takes those of the process.

    Returns
    -------
    int
        Exit code: 0 ok, 1 computed but not ok or failed, 2 bad input, 130 interrupted, 143
        terminated.
    """
    for stream in (sys.stdout, sys.stderr):
        # File names and titles are the user's: a character the terminal lacks must not end the run.
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    parser = build_parser()
    options = parser.parse_args(arguments)
    if not hasattr(options, "run"):
        parser.print_help(sys.stderr)
        return BAD_INPUT
    console = Console(quiet=options.quiet)
    return _guarded(lambda: options.run(options, console), console, options.debug)


def _guarded(command: Callable[[], int], console: Console, debug: bool) -> int:
    """Run `command`; every way to fail becomes one line and an exit code."""
    try:
        with _remembered_signals(console), console.one_line_warnings():
            code = command()
            sys.stdout.flush()
        return code
    except BrokenPipeError:
        # The reader (head, a pager) has what it wanted.
        _drop_stdout()
        return OK
    except Terminated:
        console.error("terminated; no file was left half-written", kind="")
        return TERMINATED
    except KeyboardInterrupt:
        console.error("interrupted; no file was left half-written", kind="")
        return INTERRUPTED
    except Exception as error:
        if debug:
            raise
        return _report(error, console)


def _report(error: Exception, console: Console) -> int:
    if isinstance(error, LevelnetError):
        console.error(str(error))
        cause = error.__cause__
        disk = isinstance(cause, OSError) and cause.errno in _DISK_TROUBLE
        return BAD_INPUT if isinstance(error, InputError) and not disk else FAILED
    if isinstance(error, OSError):
        console.error(f"{error.filename or 'output'}: {error.strerror or error}")
        _drop_stdout()
    elif isinstance(error, MemoryError):
        console.error("out of memory; lower hydrogen.n_max or the number of redshifts")
    else:
        console.error(f"internal: {type(error).__name__}: {error} (--debug shows where)")
    return FAILED


def _drop_stdout() -> None:
    """Send what is still buffered nowhere, or the interpreter complains about it on leaving."""
    with suppress(OSError, ValueError):
        sink = os.open(os.devnull, os.O_WRONLY)
        os.dup2(sink, sys.stdout.fileno())
        os.close(sink)


@contextmanager
def _remembered_signals(console: Console) -> Iterator[None]:
    """Let Ctrl-C and SIGTERM end the command in order, its worker processes with it.

    Both are remembered: raised inside a compiler's callback, Python would drop the exception.
    """

    def remember(number: int, frame: FrameType | None) -> None:
        console.ending = Terminated if number == signal.SIGTERM else KeyboardInterrupt
        end_workers()
        raise console.ending

    # Only where a signal would end the program (a job started to ignore it goes on ignoring it),
    # and only in the main thread, where Python allows it.
    usual: dict[signal.Signals, Any] = {
        signal.SIGINT: signal.default_int_handler,
        signal.SIGTERM: signal.SIG_DFL,
    }
    found = [number for number, one in usual.items() if signal.getsignal(number) is one]
    if threading.current_thread() is not threading.main_thread():
        found = []
    for number in found:
        signal.signal(number, remember)
    try:
        yield
    finally:
        for number in found:
            signal.signal(number, usual[number])
