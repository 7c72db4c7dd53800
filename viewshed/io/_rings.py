"""Patches of equal cells as polygons whose edges are edges of cells.

The cells are gone through by strips of rows, three times: patches are joined, measured, and the
corners of their rings are found. So memory holds a strip, a few numbers a patch and the corners.
"""

import zlib
from collections.abc import Callable, Iterator
from typing import Any, NamedTuple, Protocol

import numpy as np
import shapely
from numpy.typing import NDArray

from viewshed.constants import NODATA
from viewshed.errors import DataError
from viewshed.grid import CellAreas, FloatArray, Grid
from viewshed.io._batches import CORNERS, batches
from viewshed.kernels import rings as k

#: Cells that a kernel goes through at a time, so that Ctrl-C is heard.
_CELLS_A_CALL = 1 << 22
#: Corners that become polygons at a time, but for a single polygon that has more.
_CORNERS_A_BATCH = CORNERS
#: Most corners whose nodes are told apart by 32 bits.
_MOST_NARROW = 2**31 - 1


#: A strip, its first row, the codes of states, and the runs of the last two rows.
Strip = tuple[
    NDArray[np.uint8],
    int,
    NDArray[np.uint8],
    NDArray[np.int32],
    NDArray[np.uint8],
    NDArray[np.int32],
    NDArray[np.int64],
]


class Rows(Protocol):
    """States of cells that are read by slices of rows, like an array."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Number of rows and columns."""

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of the cells."""

    def __getitem__(self, rows: slice, /) -> NDArray[Any]:
        """Give some rows."""


class Found(NamedTuple):
    """The 4-connected patches of an array, in the order of their first cells.

    Attributes
    ----------
    numbers : numpy.ndarray, shape (m,)
        Number of the patch of each label, in the order in which the kernels meet them.
    code : numpy.ndarray, shape (n,)
        What the cells of each patch hold.
    cells : numpy.ndarray, shape (n,)
        Cells of each patch.
    area : numpy.ndarray, shape (n,)
        True area of each patch [m2].
    corners : numpy.ndarray, shape (n,)
        Corners of the rings of each patch.
    """

    numbers: NDArray[np.int32]
    code: NDArray[np.uint8]
    cells: NDArray[np.int64]
    area: FloatArray
    corners: NDArray[np.int64]


class Sweep:
    """The strips of an array, and the last row of the strip before, for the kernels.

    Parameters
    ----------
    states : Rows
        States of the cells, uint8.
    code_of : numpy.ndarray, shape (256,)
        Code of each state; cells of code 0 are in no patch.
    rest : callable, optional
        Called after each strip.
    """

    def __init__(
        self, states: Rows, code_of: NDArray[np.uint8], rest: Callable[[], None] | None = None
    ) -> None:
        self.states = states
        self.rows, self.cols = states.shape
        self._code_of = code_of
        self._rest = rest
        self._sums: dict[int, int] = {}
        self._step = max(1, _CELLS_A_CALL // self.cols)
        self._room = np.empty((min(self._step, self.rows), self.cols), np.uint8)
        runs = (2, self.cols + 1)
        self._starts, self._codes = np.empty(runs, np.int32), np.empty(runs, np.uint8)
        self._names, self._count = np.empty(runs, np.int32), np.empty(2, np.int64)

    def strips(self) -> Iterator[Strip]:
        """Give each strip, its first row and what the kernels need with them.

        Raises
        ------
        DataError
            If a strip is not what it was the time before.
        """
        self._start()
        for first in range(0, self.rows, self._step):
            strip = self._room[: min(self._step, self.rows - first)]
            strip[...] = self.states[first : first + len(strip)]
            found = zlib.crc32(strip.data)
            if self._sums.setdefault(first, found) != found:
                msg = f"the states changed in row {first} or later while they were read; run again"
                raise DataError(msg)
            yield self._with_runs(strip, first)
            if self._rest is not None:
                self._rest()

    def end(self) -> Strip:
        """Give a row without any patch as the last strip, which closes all rings."""
        return self._with_runs(np.full((1, self.cols), NODATA, np.uint8), self.rows)

    def _start(self) -> None:
        """Let the row above the first one be without any patch."""
        self._starts[1, :2] = 0, self.cols
        self._codes[1, :2] = 0
        self._names[1, :2] = k.NONE
        self._count[1] = 1

    def _with_runs(self, strip: NDArray[np.uint8], first: int) -> Strip:
        runs = (self._starts, self._codes, self._names, self._count)
        return strip, first, self._code_of, *runs


def find_patches(sweep: Sweep, areas: CellAreas) -> Found:
    """Find the patches of cells that hold the same code.

    Parameters
    ----------
    sweep : Sweep
        The cells.
    areas : CellAreas
        True areas of the cells.

    Returns
    -------
    Found
        The patches.
    """
    labels = np.empty(0, np.int32)
    used = 0
    for strip in sweep.strips():
        room = used + strip[0].size
        if room > labels.size:
            grown = np.empty(max(room, 3 * used // 2), np.int32)
            grown[:used] = labels[:used]
            labels = grown
        used = int(k.join(*strip, labels, used))
    n = int(k.number(labels, used))
    found = Found(
        labels[:used].copy(),
        np.zeros(n, np.uint8),
        np.zeros(n, np.int64),
        np.zeros(n),
        np.zeros(n, np.int64),
    )
    col_sums = np.zeros((areas.col_factors.shape[0], sweep.cols + 1))
    np.cumsum(areas.col_factors, axis=1, out=col_sums[:, 1:])
    met = 0
    sums = (areas.row_factors, col_sums, found.code, found.cells, found.area, found.corners)
    for strip in sweep.strips():
        met = k.measure(*strip, found.numbers, met, *sums)
    k.measure(*sweep.end(), found.numbers, met, *sums)
    return found


def outlines(sweep: Sweep, found: Found, order: NDArray[np.intp], grid: Grid) -> NDArray[Any]:
    """Give the polygons of some patches.

    Parameters
    ----------
    sweep : Sweep
        The cells.
    found : Found
        Their patches.
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
    nodes, down_ranks = _trace(sweep, found, order)
    first, rank, length = _link(nodes, down_ranks)
    rings = np.argsort(rank, kind="stable")
    ring_at = np.concatenate([[0], np.cumsum(length[rings] + 1, dtype=np.int64)])
    polygon_at = np.searchsorted(rank[rings], np.arange(order.size + 1))
    t = grid.transform
    backward = t.a * t.e - t.b * t.d > 0.0  # a mirrored grid turns all rings round
    made = np.empty(order.size, object)
    for begin, end in batches(ring_at[polygon_at], _CORNERS_A_BATCH):
        a, b = polygon_at[[begin, end]]
        corners = np.empty((ring_at[b] - ring_at[a], 2))
        k.fill(nodes, rings[a:b], first, length, backward, corners)
        for part in _parts(corners):
            part[:, 0], part[:, 1] = grid.xy(part[:, 0] - 0.5, part[:, 1] - 0.5)
        ends = (ring_at[a : b + 1] - ring_at[a], polygon_at[begin : end + 1] - a)
        made[begin:end] = shapely.from_ragged_array(shapely.GeometryType.POLYGON, corners, ends)
    return made


def _trace(
    sweep: Sweep, found: Found, order: NDArray[np.intp]
) -> tuple[NDArray[Any], NDArray[np.int32]]:
    """Give the corners of the rings of wanted patches, and whose those are that leave downward."""
    ranks = np.full(found.code.size, k.NONE, np.int32)
    ranks[order] = np.arange(order.size)
    ranks = ranks[found.numbers]
    corners = int(np.sum(found.corners[order]))
    kind = np.int32 if corners <= _MOST_NARROW else np.int64
    nodes, down_ranks = np.empty((corners, 3), kind), np.empty(corners // 2, np.int32)
    down, up = np.empty((2, sweep.cols + 1), np.int64)
    at, met = np.zeros(2, np.int64), 0
    for strip in sweep.strips():
        met = k.trace(*strip, ranks, met, down, up, nodes, at, down_ranks)
    k.trace(*sweep.end(), ranks, met, down, up, nodes, at, down_ranks)
    return nodes, down_ranks


def _link(
    nodes: NDArray[Any], down_ranks: NDArray[np.int32]
) -> tuple[NDArray[np.int64], NDArray[np.int32], NDArray[np.int64]]:
    """Give the rings of corners: the first one, whose it is, and how many there are."""
    most = len(nodes) // 4
    first, length = np.empty((2, most), np.int64)
    rank = np.empty(most, np.int32)
    downs = rings = 0
    for begin in range(0, len(nodes), _CORNERS_A_BATCH):
        end = min(begin + _CORNERS_A_BATCH, len(nodes))
        downs, rings = k.link(nodes, down_ranks, begin, end, downs, rings, first, rank, length)
    return first[:rings], rank[:rings], length[:rings]


def _parts(corners: FloatArray) -> Iterator[FloatArray]:
    for begin in range(0, len(corners), _CORNERS_A_BATCH):
        yield corners[begin : begin + _CORNERS_A_BATCH]
