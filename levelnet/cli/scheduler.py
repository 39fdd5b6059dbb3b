"""Workers of a dask.distributed scheduler: reached, watched, and left in order."""

from __future__ import annotations

import logging
import math
import re
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from importlib import import_module
from typing import TYPE_CHECKING, Any

from ..errors import InputError, LevelnetError, SolveError
from .console import Console

if TYPE_CHECKING:
    from concurrent.futures import Executor

_SCHEMES = ("tcp", "tls", "ws", "wss")
_ADDRESS = re.compile(
    rf"({'|'.join(_SCHEMES)})://(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9._-]+):(\d{{1,5}})", re.ASCII
)
_ANSWER_S = 10.0  # how long a scheduler may take to answer
_PATIENCE_S = 300.0  # how long there may be no worker
_LOOK_S = 2.0  # asked no more often
_CLOSE_S = 5.0
# What these say on their own account, tracebacks at times, is said here in one line.
_LOGGERS = (
    "distributed",
    "distributed.client",
    "distributed.core",
    "distributed.comm",
    "distributed.utils",
    "tornado.application",
)


def check_address(address: str) -> None:
    """Raise InputError if `address` cannot be that of a scheduler."""
    match = _ADDRESS.fullmatch(address)
    if match is None or not 1 <= int(match[3]) <= 65535:
        raise InputError(
            f"--scheduler {address}: no address; write scheme://host:port, such as "
            f"tcp://host:8786 (schemes {', '.join(_SCHEMES)}, ports 1 to 65535)"
        )


def dask_library() -> Any:
    """The library; InputError where it is not installed."""
    try:
        return import_module("distributed")
    except ImportError:
        raise InputError(
            "--scheduler: needs the library distributed: install levelnet[cluster]"
        ) from None


@contextmanager
def scheduler_workers(
    address: str, console: Console
) -> Iterator[tuple[Executor, Callable[[], None]]]:
    """Give the executor of a scheduler, and what looks after its workers while one waits for them.

    Parameters
    ----------
    address : str
        Of the scheduler, such as "tcp://host:8786".
    console : Console
        Is told when there are no workers.

    Raises
    ------
    InputError
        If no scheduler answers there within ten seconds.
    SolveError
        From within, by what looks: if there was no worker for five minutes.
    """
    check_address(address)
    dask = dask_library()
    with _silent_library():
        client = _connected(dask, address)
        try:
            yield client.get_executor(pure=False), _Watch(client, address, console)
        except Exception as error:
            if isinstance(error, LevelnetError) or client.status == "running":
                raise
            raise SolveError(f"the scheduler {address} was lost: {error}") from error
        finally:
            _close(client)


def _connected(dask: Any, address: str) -> Any:
    class Client(dask.Client):  # type: ignore[misc]
        """Closed where it could not start: else it is closed as it is forgotten, with a trace."""

        def start(self, **options: Any) -> None:
            try:
                super().start(**options)
            except BaseException:
                _close(self)
                raise

    try:
        return Client(address, timeout=_ANSWER_S, set_as_default=False)
    except Exception as error:  # it has many ways to say so
        text = " ".join(str(error).split()) or type(error).__name__
        raise InputError(f"--scheduler {address}: no scheduler answers there: {text}") from None


def _close(client: Any) -> None:
    with suppress(Exception):  # where the other side is gone there is nobody to take leave of
        client.close(timeout=_CLOSE_S)


class _Watch:
    """Look, when called, whether there are workers; say so if not, and give up in the end."""

    def __init__(self, client: Any, address: str, console: Console) -> None:
        self._client, self._address, self._console = client, address, console
        self._none_since: float | None = None
        self._looked = -math.inf

    def __call__(self) -> None:
        now = time.monotonic()
        if now < self._looked + _LOOK_S:
            return
        self._looked = now
        try:
            count = len(self._client.scheduler_info()["workers"])
        except Exception:  # a scheduler that is gone cancels what was asked of it
            return
        if count:
            if self._none_since is not None:
                self._console.notice(f"scheduler {self._address}: it has workers again")
            self._none_since = None
            return
        if self._none_since is None:
            self._none_since = now
            self._console.notice(
                f"scheduler {self._address}: it has no workers; waiting {_PATIENCE_S:g} s for one"
            )
        elif now - self._none_since > _PATIENCE_S:
            raise SolveError(f"the scheduler {self._address} had no workers for {_PATIENCE_S:g} s")


@contextmanager
def _silent_library() -> Iterator[None]:
    loggers = [logging.getLogger(name) for name in _LOGGERS]
    levels = [one.level for one in loggers]
    for one in loggers:
        one.setLevel(logging.CRITICAL + 1)
    try:
        yield
    finally:
        for one, level in zip(loggers, levels, strict=True):
            one.setLevel(level)
