"""The median of more numbers than need be kept: they are counted by their bits, in two rounds."""

from collections.abc import Callable, Iterable

import numpy as np
from numpy.typing import NDArray

Parts = Callable[[], Iterable[NDArray[np.float32]]]

_HALF = 1 << 16


def median(parts: Parts, count: int) -> float:
    """Give the median of numbers that come in parts.

    Parameters
    ----------
    parts : callable
        Gives the parts, none of them with NaN, each time it is called.
    count : int
        How many numbers they hold in all, at least one.

    Returns
    -------
    float
        The median; of an even count the mean of the two in the middle, in single precision.
    """
    high = np.zeros(_HALF, dtype=np.int64)
    for part in parts():
        high += np.bincount(_keys(part) >> 16, minlength=_HALF)
    ends = np.cumsum(high)
    ranks = np.array([(count - 1) // 2, count // 2])
    tops = np.searchsorted(ends, ranks, side="right")
    low = {int(top): np.zeros(_HALF, dtype=np.int64) for top in tops}
    for part in parts():
        keys = _keys(part)
        for top in low:
            low[top] += np.bincount(keys[keys >> 16 == top] & (_HALF - 1), minlength=_HALF)
    middle = [
        (int(top) << 16) + int(np.searchsorted(np.cumsum(low[int(top)]), rank - before, "right"))
        for top, rank, before in zip(tops, ranks, ends[tops] - high[tops], strict=True)
    ]
    return float(np.mean(_numbers(np.array(middle, dtype=np.uint32))))


def _keys(numbers: NDArray[np.float32]) -> NDArray[np.uint32]:
    """Give whole numbers in the same order."""
    bits = np.ascontiguousarray(numbers).view(np.uint32)
    return bits ^ np.where(bits >> 31, np.uint32(0xFFFFFFFF), np.uint32(0x80000000))


def _numbers(keys: NDArray[np.uint32]) -> NDArray[np.float32]:
    """Turn keys back."""
    bits = keys ^ np.where(keys >> 31, np.uint32(0x80000000), np.uint32(0xFFFFFFFF))
    return bits.view(np.float32)
