"""Cells of a file that say nothing: declared as voids, or undeclared but void by habit."""

from collections.abc import Iterator
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
    tile: Tile, raw: NDArray[Any], heights: Heights
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

    Yields
    ------
    value : float
        The value in units of the file.
    void : numpy.ndarray of bool
        The cells that hold it.

    Notes
    -----
    A sea floor may well be 9999 m deep, or the step of the cells so fine that the value is a
    common height. Then more cells are near the value than exactly at it, and they are heights.
    """
    known = ~np.isnan(heights)
    if raw.dtype.kind == "f":
        lowest = (raw <= _LOWEST) & np.isfinite(raw) & known
        if lowest.any():
            yield float(raw[lowest][0]), lowest
    found = {value: (raw == raw.dtype.type(value)) & known for value in _habitual(raw.dtype)}
    counts = {value: int(np.count_nonzero(void)) for value, void in found.items()}
    for value, void in found.items():
        if counts[value] == 0:
            continue
        margin = _NEAR * abs(value)
        near = (raw >= value - margin) & (raw <= value + margin) & known
        voids = sum(n for other, n in counts.items() if abs(other - value) <= margin)
        if int(np.count_nonzero(near)) - voids <= counts[value]:
            yield value, void


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
