"""The one place that sets numba's options.

Floating point stays strict (no ``fastmath``): serial, parallel and reference answers agree to the
bit only if sums keep their order and products are not fused.
"""

from __future__ import annotations

import logging
import warnings
from typing import TYPE_CHECKING, Any, TypeVar

import numba

from viewshed.errors import ViewshedWarning

if TYPE_CHECKING:
    from collections.abc import Callable

F = TypeVar("F", bound="Callable[..., Any]")

#: Kernels own no memory, so their arrays need no reference counts; counting them, an atomic
#: operation at each inner call, was measured at a third of a sweep.
OPTIONS: dict[str, Any] = {
    "nogil": True,
    "error_model": "numpy",
    "fastmath": False,
    "_nrt": False,
}

_log = logging.getLogger("viewshed")
_announced: set[Any] = set()


def kernel(function: F) -> F:
    """Compile `function` on first use, cached on disk where the cache folder can be written."""
    try:
        return numba.njit(cache=True, **OPTIONS)(function)  # type: ignore[no-any-return]
    except RuntimeError:  # no writable place for the cache
        warnings.warn(
            "no folder for compiled kernels can be written, so they are compiled anew each time; "
            "set NUMBA_CACHE_DIR to one that can",
            ViewshedWarning,
            stacklevel=2,
        )
        return numba.njit(**OPTIONS)(function)  # type: ignore[no-any-return]


def inline(function: F) -> F:
    """Compile `function` for use inside a kernel of the same file."""
    return numba.njit(inline="never", **OPTIONS)(function)  # type: ignore[no-any-return]


def exact_max(function: F) -> F:
    """Compile a loop that compares numbers, none of them NaN, and adds nothing up.

    The order of comparing changes nothing then, so that the compiler may take several at once.
    """
    options = {**OPTIONS, "fastmath": {"nnan", "nsz"}}
    return numba.njit(inline="never", **options)(function)  # type: ignore[no-any-return]


def announce(dispatcher: Any) -> None:
    """Say so, once, when the next call of a kernel will have to compile it."""
    if dispatcher in _announced or dispatcher.overloads or _is_cached(dispatcher):
        return
    _announced.add(dispatcher)
    kept = " and is kept for the next run" if hasattr(dispatcher._cache, "_cache_file") else ""
    _log.warning("compiling the kernels: this takes about half a minute%s", kept)


def _is_cached(dispatcher: Any) -> bool:
    """Whether the disk holds this kernel for this source, numba and processor."""
    try:
        index = dispatcher._cache._cache_file._load_index()
        machine = dispatcher.targetctx.codegen().magic_tuple()
    except (AttributeError, OSError):
        return False
    return any(machine in key for key in index)
