"""The one place that sets numba's options.

Floating point stays strict (no ``fastmath``): serial, parallel and reference answers agree to the
bit only if sums keep their order and products are not fused.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, TypeVar

import numba

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


def kernel(function: F) -> F:
    """Compile `function` on first use, cached on disk where the cache folder can be written."""
    try:
        return numba.njit(cache=True, **OPTIONS)(function)  # type: ignore[no-any-return]
    except RuntimeError:  # no writable place for the cache
        return numba.njit(**OPTIONS)(function)  # type: ignore[no-any-return]


def inline(function: F) -> F:
    """Compile `function` for use inside a kernel of the same file."""
    return numba.njit(inline="never", **OPTIONS)(function)  # type: ignore[no-any-return]
