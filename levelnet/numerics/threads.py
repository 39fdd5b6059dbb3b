"""One BLAS thread while levelnet computes, however many of its calculations run at once."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from threadpoolctl import threadpool_limits

_lock = threading.Lock()
_inside = 0
_limits: Any = None


@contextmanager
def one_blas_thread() -> Iterator[None]:
    """Limit BLAS to one thread; the first in sets the limit, the last out restores what was.

    The blocks are small, and threads that spin on shared cores cost more than they give.
    """
    global _inside, _limits  # noqa: PLW0603 (the limit is the process's own)
    with _lock:
        if _inside == 0:
            _limits = threadpool_limits(limits=1, user_api="blas")
        _inside += 1
    try:
        yield
    finally:
        with _lock:
            _inside -= 1
            if _inside == 0:
                _limits.restore_original_limits()
