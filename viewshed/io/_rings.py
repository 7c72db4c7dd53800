"""Patches of equal cells as polygons whose edges are edges of cells."""

from collections.abc import Iterator
from typing import Any, NamedTuple

import numpy as np
import shapely
from numpy.typing import NDArray

from viewshed.grid import CellAreas, FloatArray, Grid
from viewshed.kernels import rings as k

#: Cells that a kernel goes through at a time, so that Ctrl-C is heard.
_CELLS_A_CALL = 1 << 22


class Found(NamedTuple):
    """The 4-connected patches of an array, in the order of their first cells.

    Attributes
    ----------
    patches : numpy.ndarray, shape (rows + 2, cols + 2)
        Number of the patch of each cell, -1 for none, with a rim of one cell.
    code : numpy.ndarray, shape (n,)
        What the cells of each patch hold.
    cells : numpy.ndarray, shape (n,)
        Cells of each patch.
    area : numpy.ndarray, shape (n,)
        True area of each patch [m2].
    """

    patches: NDArray[np.int32]
    code: NDArray[np.uint8]
    cells: NDArray[np.int64]
    area: FloatArray


def find_patches(codes: NDArray[np.uint8], areas: CellAreas) -> Found:
    """Find the patches of cells that hold the same code.

    Parameters
    ----------
    codes : numpy.ndarray, shape (rows, cols)
        A code of each cell; cells with 0 are in no patch.
    areas : CellAreas
        True areas of the cells.

    Returns
    -------
    Found
        The patches.
    """
    rows, cols = codes.shape
    patches = np.full((rows + 2, cols + 2), k.NONE, np.int32)
    labels = np.empty(0, np.int32)
    used = 0
    for first, last in _strips(rows, cols):
        room = used + (last - first) * cols
        if room > labels.size:
            grown = np.empty(max(room, 3 * used // 2), np.int32)
            grown[:used] = labels[:used]
            labels = grown
        used = int(k.join(codes, patches, labels, used, first, last))
    count = int(k.number(labels, used))
    found = Found(patches, np.zeros(count, np.uint8), np.zeros(count, np.int64), np.zeros(count))
    col_sums = np.zeros((areas.col_factors.shape[0], cols + 1))
    np.cumsum(areas.col_factors, axis=1, out=col_sums[:, 1:])
    sums = (areas.row_factors, col_sums, found.code, found.cells, found.area)
    for first, last in _strips(rows, cols):
        k.measure(codes, patches, labels, *sums, first, last)
    return found


def outlines(found: Found, order: NDArray[np.intp], grid: Grid) -> NDArray[Any]:
    """Give the polygons of some patches.

    Parameters
    ----------
    found : Found
        The patches of an array.
    order : numpy.ndarray, shape (n,)
        Numbers of the patches that are wanted, in the order in which they are wanted.
    grid : Grid
        Where the cells are.

    Returns
    -------
    numpy.ndarray, shape (n,)
        A `shapely.Polygon` of each, outer ring anticlockwise. Corners of rings are corners of
        cells at which the ring turns; equal corners have equal coordinates to the last bit.
    """
    wanted = np.zeros(found.code.size, np.bool_)
    wanted[order] = True
    corners, ring_patch, ring_end = _trace(found.patches, wanted)
    rank = np.empty(found.code.size, np.int64)
    rank[order] = np.arange(order.size)
    by_rank = np.argsort(rank[ring_patch], kind="stable")
    start = np.concatenate([[0], ring_end[:-1]])[by_rank]
    length = np.diff(ring_end, prepend=0)[by_rank]
    t = grid.transform
    if t.a * t.e - t.b * t.d > 0.0:  # a mirrored grid turns all rings round
        source = _spread(start + length - 1, length, -1)
    else:
        source = _spread(start, length, 1)
    row, col = corners[source].T
    x, y = grid.xy(row - 0.5, col - 0.5)
    rings = np.concatenate([[0], np.cumsum(length)])
    polygons = np.searchsorted(rank[ring_patch[by_rank]], np.arange(order.size + 1))
    coordinates = np.stack([x, y], axis=1)
    made: NDArray[Any] = shapely.from_ragged_array(
        shapely.GeometryType.POLYGON, coordinates, (rings, polygons)
    )
    return made


def _trace(
    patches: NDArray[np.int32], wanted: NDArray[np.bool_]
) -> tuple[NDArray[np.int32], NDArray[np.int32], NDArray[np.int64]]:
    """Give the closed rings of wanted patches: corners, patch of each ring, end of each ring."""
    rows, cols = patches.shape[0] - 2, patches.shape[1] - 2
    strips = list(_strips(rows, cols))
    count = sum(int(k.count_corners(patches, wanted, *strip)) for strip in strips)
    most = count // 4  # rings, each with four corners or more and one to close it
    corners = np.empty((count + most, 2), np.int32)
    ring_patch, ring_end = np.empty(most, np.int32), np.empty(most, np.int64)
    walked = np.zeros((rows, cols), np.uint8)
    rings = 0
    for strip in strips:
        rings = int(k.trace(patches, wanted, walked, corners, ring_patch, ring_end, rings, *strip))
    return corners, ring_patch[:rings], ring_end[:rings]


def _spread(first: NDArray[np.int64], length: NDArray[np.int64], step: int) -> NDArray[np.int64]:
    """Count on from each `first` in steps, `length` times."""
    before = np.cumsum(length) - length
    spread: NDArray[np.int64] = np.repeat(first - step * before, length)
    spread += step * np.arange(spread.size)
    return spread


def _strips(rows: int, cols: int) -> Iterator[tuple[int, int]]:
    step = max(1, _CELLS_A_CALL // cols)
    for first in range(0, rows, step):
        yield first, min(rows, first + step)
