"""The answer of several observers together, gathered one by one."""

from __future__ import annotations

from threading import Lock
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.constants import COUNT_NODATA, NODATA, UNRESOLVED, WHO_OBSERVERS
from viewshed.kernels import gather

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from viewshed.visibility import Visibility

__all__ = ["Combination"]

#: Layers beside `visible`, in the order of the kernel's flags, with type and empty value.
_KEPT: tuple[tuple[str, type, float], ...] = (
    ("count", np.uint16, COUNT_NODATA),
    ("count-unresolved", np.uint16, COUNT_NODATA),
    ("who", np.uint32, 0),
    ("clearance", np.float32, np.nan),
    ("needed-height", np.float32, np.nan),
)
#: Rows that one call of the kernel merges.
_STRIP_ROWS = 1024


class Combination:
    """Layers of several observers on one grid.

    Observers for whom a cell is no data have no word on it. Else a cell is visible if any sees it,
    unresolved if any is unresolved, hidden if none. Clearance is the greatest and needed height
    the least that is known.

    Parameters
    ----------
    shape : tuple of int
        Rows and columns of the grid.
    layers : sequence of str
        Layers to keep beside `visible`.
    empty : callable
        What makes arrays, by shape and type.
    """

    def __init__(
        self,
        shape: tuple[int, int],
        layers: tuple[str, ...],
        *,
        empty: Callable[..., NDArray[Any]] = np.empty,
    ) -> None:
        self.visible = _filled(empty(shape, np.uint8), NODATA)
        self._keep = np.array([name in layers for name, _, _ in _KEPT], dtype=np.uint8)
        self._arrays: dict[str, NDArray[Any]] = {
            name: _filled(empty(shape if kept else (1, 1), dtype), nothing)
            for (name, dtype, nothing), kept in zip(_KEPT, self._keep, strict=True)
        }
        self._lock = Lock()

    def add(self, seen: Visibility, row0: int, col0: int, number: int) -> None:
        """Add an observer; in any order, and from any thread.

        Parameters
        ----------
        seen : Visibility
            What it sees.
        row0, col0 : int
            Where its first cell lies in the grid.
        number : int
            Which observer it is, from 0: its bit in `who`.
        """
        rows = seen.visible.shape[0]
        nothing = np.zeros((1, 1), dtype=np.float32)
        clear = nothing if seen.clearance is None else seen.clearance
        need = nothing if seen.needed_height is None else seen.needed_height
        bit = np.uint32(1 << (number % WHO_OBSERVERS))
        for start in range(0, rows, _STRIP_ROWS):
            part = slice(start, start + _STRIP_ROWS)
            with self._lock:
                gather.merge(
                    seen.visible[part],
                    clear if clear is nothing else clear[part],
                    need if need is nothing else need[part],
                    row0 + start,
                    col0,
                    bit,
                    self._keep,
                    self.visible,
                    *self._arrays.values(),
                )

    def layers(self) -> dict[str, NDArray[Any]]:
        """Give the layers kept, `visible` first; what is not known is NaN."""
        for name in ("clearance", "needed-height"):
            if self._keep[[kept for kept, _, _ in _KEPT].index(name)]:
                for start in range(0, self.visible.shape[0], _STRIP_ROWS):
                    part = slice(start, start + _STRIP_ROWS)
                    self._arrays[name][part][self.visible[part] == UNRESOLVED] = np.nan
        kept = (name for (name, _, _), keep in zip(_KEPT, self._keep, strict=True) if keep)
        return {"visible": self.visible, **{name: self._arrays[name] for name in kept}}


def _filled(array: NDArray[Any], value: float) -> NDArray[Any]:
    """Fill an array strip by strip."""
    for start in range(0, array.shape[0], _STRIP_ROWS):
        array[start : start + _STRIP_ROWS] = value
    return array
