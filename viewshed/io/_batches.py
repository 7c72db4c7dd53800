"""Polygons cut into batches of about as many corners, so that work on one takes little memory."""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

#: Corners of a batch.
CORNERS = 1 << 20


def batches(at: NDArray[np.int64], most: int = CORNERS) -> Iterator[tuple[int, int]]:
    """Cut a row of polygons into batches.

    Parameters
    ----------
    at : numpy.ndarray, shape (n + 1,)
        How many corners stand before each polygon, and their number.
    most : int, optional
        Corners of a batch, but for a single polygon that has more.

    Yields
    ------
    tuple of int
        The first polygon of a batch and the one after its last.
    """
    begin = 0
    while begin < at.size - 1:
        end = int(np.searchsorted(at, at[begin] + most, "right")) - 1
        end = max(end, begin + 1)
        yield begin, end
        begin = end
