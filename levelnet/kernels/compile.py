"""The one decorator for compiled kernels."""

from __future__ import annotations

import hashlib
import io
import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar, cast

import numba
from numba.core.caching import IndexDataCacheFile
from numba.extending import intrinsic

Function = TypeVar("Function", bound=Callable[..., Any])


def _folder_name() -> str:
    """Name of a cache folder for these texts of the kernel files: they may use each other."""
    text = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        text.update(path.read_bytes())
    return f"levelnet-{text.hexdigest()[:16]}"


# numba fills in its options as it starts.
_options: Any = numba.config
_FOLDER = os.path.join(_options.CACHE_DIR or Path(__file__).parent / "__pycache__", _folder_name())


def kernel(function: Function) -> Function:
    """Compile `function` with numba at its first call, and keep the machine code on disk.

    A kernel calls only kernels, of its own file or of another, and takes every physical constant as
    an argument: numba itself notices changes in a kernel's own file and no others, so that the
    folder on disk is named by the text of all of them. The files there end in their checksum; what
    is damaged is compiled anew.
    """
    # numba chooses the folder here; where it cannot be written it takes one of its own.
    own, _options.CACHE_DIR = _options.CACHE_DIR, _FOLDER
    try:
        return _compiled(function, cache=True)
    except RuntimeError:
        # Neither the package folder nor the user's cache folder can be written: compile each time.
        return _compiled(function, cache=False)
    finally:
        _options.CACHE_DIR = own


def is_kept(function: Callable[..., Any]) -> bool:
    """Whether machine code of a kernel is on disk, for arguments of some kind."""
    if not hasattr(
        function, "py_func"
    ):  # compilation is switched off: there is nothing to wait for
        return True
    files: Any = getattr(getattr(function, "_cache", None), "_cache_file", None)
    return files is not None and bool(files._load_index())


def inlined(function: Function) -> Function:
    """Make `function` part of every kernel that calls it, for small steps of many arguments.

    A call hands every array over as seven numbers; that costs as much as a few hundred operations.
    """
    return cast(Function, numba.njit(inline="always", error_model="numpy")(function))


def _without_owner(context: Any, builder: Any, kind: Any, value: Any) -> Any:
    types: Any = numba.types
    if isinstance(kind, types.Array):
        array = context.make_array(kind)(context, builder, value)
        array.meminfo = array.meminfo.type(None)
        return array._getvalue()
    if isinstance(kind, types.BaseTuple):
        parts = [
            _without_owner(context, builder, one, builder.extract_value(value, k))
            for k, one in enumerate(kind.types)
        ]
        return context.make_tuple(builder, kind, parts)
    return value


def _borrowed(typing_context: Any, value: Any) -> Any:
    """Give arguments of a kernel (arrays, or tuples of them) without the counting of references.

    Every call that hands over fifty arrays otherwise counts each up and down, which took a third of
    the time of a history with helium. For arguments alone: the caller keeps them alive.
    """

    def code(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return _without_owner(context, builder, signature.args[0], arguments[0])

    return value(value), code


borrowed: Callable[[Any], Any] = cast(Any, intrinsic(_borrowed))


def _compiled(function: Function, cache: bool) -> Function:
    compile_with = numba.njit(cache=cache, error_model="numpy", fastmath=False, nogil=True)
    compiled = compile_with(function)
    files = getattr(getattr(compiled, "_cache", None), "_cache_file", None)
    if isinstance(files, IndexDataCacheFile):  # not where compilation is switched off
        files.__class__ = _CheckedFiles
    return cast(Function, compiled)


_NumbaFiles: Any = IndexDataCacheFile  # numba states no types


class _CheckedFiles(_NumbaFiles):  # type: ignore[misc]
    """Files of one kernel in numba's cache, which itself would run machine code with flipped bits.

    The checksum follows the data, where numba does not look.
    """

    def _load_index(self) -> Any:
        return super()._load_index() if _is_sound(self._index_path) else {}

    def _load_data(self, name: str) -> Any:
        if not _is_sound(self._data_path(name)):
            raise FileNotFoundError(name)  # numba then compiles, as it does for a file removed
        return super()._load_data(name)

    @contextmanager
    def _open_for_write(self, filepath: str) -> Iterator[io.BytesIO]:
        with super()._open_for_write(filepath) as file:
            buffer = io.BytesIO()
            yield buffer
            data = buffer.getvalue()
            file.write(data + hashlib.sha256(data).digest())


def _is_sound(path: str) -> bool:
    try:
        content = Path(path).read_bytes()
    except OSError:
        return False
    size = hashlib.sha256().digest_size
    return hashlib.sha256(content[:-size]).digest() == content[-size:]
