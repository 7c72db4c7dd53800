"""Heights of one grid at the posts of another.

Where a post lies in the other grid is worked out exactly by PROJ on a few points of a block and
interpolated between them; the error of that is measured on other points, and where it is too large
every post is worked out. Heights are bilinear between four posts, as everywhere in this package, or
the mean of such heights over a cell. What touches a void is void, and nothing is known beyond the
outermost posts.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.polynomial.chebyshev import chebpts1, chebvander
from numpy.typing import NDArray

from viewshed import geodesy
from viewshed.grid import FloatArray, Grid

#: Where posts lie: rows and columns of one grid to rows and columns of the other.
Place = Callable[[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]
#: Box of whole rows and columns: first row, first column, rows, columns.
Box = tuple[int, int, int, int]

#: A place this near to a post is that post [cells].
_SAME_POST = 1e-6
#: Largest error of an interpolated place [cells].
_WANTED_ERROR = 1e-6
#: Nodes along each side of a block where places are worked out, and points where they are checked.
_NODES, _CHECKS = 10, 7
#: Points along each side of a box on which its outline in the other grid is looked for.
_OUTLINE = 33


@dataclass(frozen=True)
class IndexMap:
    """Where the posts of one grid lie in another.

    Parameters
    ----------
    source : Grid
        The grid whose posts are asked for.
    goal : Grid
        The grid in whose rows and columns the answer is told.
    """

    source: Grid
    goal: Grid

    def exact(self, rows: Any, cols: Any) -> tuple[FloatArray, FloatArray]:
        """Work out places, NaN where there is none; rows and columns broadcast."""
        x, y = self.source.xy(rows, cols)
        start, end = (geodesy.crs_from_user(g.crs_wkt) for g in (self.source, self.goal))
        if not geodesy.is_same_place(start, end):
            x, y = geodesy.transform_points(x, y, start, end)
            lost = ~(np.isfinite(x) & np.isfinite(y))
            x, y = (np.where(lost, np.nan, v) for v in (x, y))
        frame = geodesy.frame_of(end)
        if frame.is_lonlat:
            turn, (left, _, right, _) = 360.0 / frame.degrees_per_unit, self.goal.bounds
            x = x + turn * np.round(((left + right) / 2.0 - x) / turn)
        return self.goal.rowcol(x, y)

    def steps(self, row: float, col: float) -> FloatArray:
        """Give [[rows a row, rows a column], [columns a row, columns a column]] at a place."""
        r, c = self.exact([row - 0.5, row + 0.5, row, row], [col, col, col - 0.5, col + 0.5])
        return np.array([[r[1] - r[0], r[3] - r[2]], [c[1] - c[0], c[3] - c[2]]])

    def lattice(self, box: Box, points: int = _OUTLINE) -> tuple[FloatArray, FloatArray]:
        """Work out places of points spread over the posts of a box, its corners included."""
        row, col, rows, cols = box
        down = np.linspace(row, row + rows - 1, points)
        right = np.linspace(col, col + cols - 1, points)
        return self.exact(down[:, None], right[None, :])

    def place(self, box: Box) -> Place:
        """Give a quick way to the places of the posts in and around a box."""
        row, col, rows, cols = box
        middle = (row + (rows - 1) / 2.0, col + (cols - 1) / 2.0)
        half = (rows / 2.0 + 0.5, cols / 2.0 + 0.5)
        nodes = chebpts1(_NODES)
        basis = np.linalg.inv(chebvander(nodes, _NODES - 1))
        there = self.exact(middle[0] + half[0] * nodes[:, None], middle[1] + half[1] * nodes)
        weights = [basis @ values @ basis.T for values in there]

        def quick(down: FloatArray, right: FloatArray) -> tuple[FloatArray, FloatArray]:
            by_row = chebvander((down - middle[0]) / half[0], _NODES - 1)
            by_col = chebvander((right - middle[1]) / half[1], _NODES - 1)
            r, c = (by_row @ w @ by_col.T for w in weights)
            return r, c

        def slow(down: FloatArray, right: FloatArray) -> tuple[FloatArray, FloatArray]:
            return self.exact(down[:, None], right[None, :])

        checks = np.linspace(-1.0, 1.0, _CHECKS)
        asked = (middle[0] + half[0] * checks, middle[1] + half[1] * checks)
        wrong = [np.abs(q - s) for q, s in zip(quick(*asked), slow(*asked), strict=True)]
        return quick if np.all(np.array(wrong) <= _WANTED_ERROR) else slow


def box_round(
    row: FloatArray, col: FloatArray, margin: float, shape: tuple[int, int]
) -> Box | None:
    """Give the part of a grid that holds places with a margin [cells]; None where none does."""
    ends = []
    for values, size in zip((row, col), shape, strict=True):
        known = values[np.isfinite(values)]
        if not known.size:
            return None
        first = max(0.0, np.floor(known.min() - margin))
        last = min(size - 1.0, np.ceil(known.max() + margin))
        if last < first:
            return None
        ends.append((int(first), int(last - first) + 1))
    return ends[0][0], ends[1][0], ends[0][1], ends[1][1]


def bilinear(values: FloatArray, row: FloatArray, col: FloatArray) -> FloatArray:
    """Give heights between four posts, NaN where one of those that count is void or missing.

    Parameters
    ----------
    values : numpy.ndarray, shape (rows, cols), float64
        Heights [m].
    row, col : numpy.ndarray
        Places in them, also outside.

    Returns
    -------
    numpy.ndarray
        Heights [m].
    """
    rows, cols = values.shape
    last_row, last_col = rows - 1 + _SAME_POST, cols - 1 + _SAME_POST
    inside = (row >= -_SAME_POST) & (row <= last_row) & (col >= -_SAME_POST) & (col <= last_col)
    is_whole = bool(inside.all())
    if not is_whole:
        row, col = np.where(inside, row, 0.0), np.where(inside, col, 0.0)
    i, j = (row + _SAME_POST).astype(np.intp), (col + _SAME_POST).astype(np.intp)
    v, u = row - i, col - j
    v[v < _SAME_POST] = 0.0
    u[u < _SAME_POST] = 0.0
    flat, at = values.ravel(), i * cols + j
    beside, below = (u > 0.0).astype(np.intp), (v > 0.0) * np.intp(cols)  # 0: the post itself
    sides = []
    for _ in range(2):
        left = flat.take(at)
        sides.append(left + (flat.take(at + beside) - left) * u)
        at += below
    heights: FloatArray = sides[0] + (sides[1] - sides[0]) * v
    if not is_whole:
        heights[~inside] = np.nan
    return heights


def block_means(values: NDArray[Any], size: int) -> FloatArray:
    """Give means of square blocks of cells, NaN where a block holds a void."""
    rows, cols = (n // size for n in values.shape)
    cut = values[: rows * size, : cols * size].reshape(rows, size, cols * size)
    strips = cut.sum(axis=1, dtype=np.float64)
    total = np.zeros((rows, cols))
    for col in range(size):
        total += strips[:, col::size]
    return total / size**2
