"""Cells of a file that say nothing: declared as voids, or undeclared but void by habit."""

from collections.abc import Callable, Iterable, Iterator
from math import isfinite, isinf, isnan
from typing import Any

import numpy as np
from numpy.typing import NDArray

from viewshed.io.mosaic import Heights, Tile

#: Values that mean a void by habit, also where a file forgets to declare them.
HABITUAL = (-9999.0, -32768.0, -32767.0, -99999.0)
#: Magnitude beyond which a height equals a huge nodata value that was rounded.
_HUGE = 1e30
#: From here down a float is the lowest of its type, however it was rounded.
_LOWEST = -3.4e38
#: How near to a value, as a share of it, others show that it is one of many heights.
_NEAR = 0.01

BoolArray = NDArray[np.bool_]


def declared(raw: NDArray[Any], nodata: float | None) -> BoolArray | None:
    """Tell which cells hold the declared nodata value.

    Parameters
    ----------
    raw : numpy.ndarray
        Cells as they are in the file.
    nodata : float or None
        The value that the file declares.

    Returns
    -------
    numpy.ndarray of bool or None
        True for a void; None where no cell can be one.
    """
    if nodata is None or isnan(nodata):
        return None
    if raw.dtype.kind in "iu":
        limits = np.iinfo(raw.dtype)
        if not isfinite(nodata) or nodata != int(nodata) or not limits.min <= nodata <= limits.max:
            return None
        return np.asarray(raw == raw.dtype.type(int(nodata)))
    with np.errstate(over="ignore"):
        void = raw == raw.dtype.type(nodata)
    if abs(nodata) >= _HUGE and not isinf(nodata):
        void |= (raw * np.sign(nodata) >= _HUGE) & np.isfinite(raw)
    return np.asarray(void)


def may_hold_undeclared(tile: Tile, low: float, high: float) -> bool:
    """Tell from the bounds of known heights [m] whether undeclared voids may be among them."""
    if low <= -_HUGE or high >= _HUGE:
        return True
    with np.errstate(over="ignore"):
        metres = [
            float(np.float32((value * tile.scale + tile.offset) * tile.height_factor))
            for value in _habitual(np.dtype(tile.dtype))
        ]
    return any(low <= height <= high for height in metres)


def undeclared(
    tile: Tile,
    raw: NDArray[Any],
    heights: Heights,
    is_habit: Callable[[Tile, float], bool],
) -> Iterator[tuple[float, BoolArray]]:
    """Find cells that hold a habitual void value which the file does not declare.

    Parameters
    ----------
    tile : Tile
        Where they are from.
    raw : numpy.ndarray
        Cells as they are in the file.
    heights : numpy.ndarray, float32
        The same in metres, NaN for voids that are known already [m].
    is_habit : callable
        Tells whether a value means a void in the whole of a tile, see `speaks_of_voids`.

    Yields
    ------
    value : float
        The value in units of the file.
    void : numpy.ndarray of bool
        The cells that hold it.
    """
    known = ~np.isnan(heights)
    if raw.dtype.kind == "f":
        lowest = (raw <= _LOWEST) & np.isfinite(raw) & known
        if lowest.any():
            yield float(raw[lowest][0]), lowest
    for value in _habitual(raw.dtype):
        void = (raw == raw.dtype.type(value)) & known
        if void.any() and is_habit(tile, value):
            yield value, void


def speaks_of_voids(tile: Tile, value: float, strips: Iterable[NDArray[Any]]) -> bool:
    """Tell from all cells of a tile whether a habitual value means a void in it.

    Parameters
    ----------
    tile : Tile
        The tile.
    value : float
        The value in units of the file.
    strips : iterable of numpy.ndarray
        All its cells as they are in the file.

    Returns
    -------
    bool
        Whether at least as many cells hold it as hold other heights within a hundredth of it.

    Notes
    -----
    A sea floor may well be 9999 m deep, or the step of the cells so fine that the value is a
    common height. Then more cells are near the value than exactly at it, and they are heights.
    """
    exact = near = 0
    margin = _NEAR * abs(value)
    for raw in strips:
        others = [other for other in _habitual(raw.dtype) if abs(other - value) <= margin]
        around = (raw >= value - margin) & (raw <= value + margin)
        for other in others:
            at_it = raw == raw.dtype.type(other)
            around &= ~at_it
            exact += int(np.count_nonzero(at_it)) if other == value else 0
        void = declared(raw, tile.nodata)
        if void is not None:
            around &= ~void
        near += int(np.count_nonzero(around))
    return near <= exact


def _habitual(dtype: np.dtype[Any]) -> tuple[float, ...]:
    """Give the habitual void values that cells of a type can hold."""
    if dtype.kind == "f":
        return HABITUAL
    limits = np.iinfo(dtype)
    if dtype.itemsize < 2:
        return ()
    if dtype.kind == "u":
        return (65535.0,) if dtype.itemsize == 2 else ()
    fitting = [value for value in HABITUAL if limits.min <= value]
    return tuple(dict.fromkeys([*fitting, float(limits.min)]))
