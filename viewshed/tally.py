"""Sums of what one observer sees: cells and true areas by state and by band of distance."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from viewshed.kernels import gather

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from viewshed.grid import CellAreas, PostMap

__all__ = ["STATE_NAMES", "Band", "Tally", "band_edges", "tally_up"]

#: Names of the states 0, 1 and 2 of a cell.
STATE_NAMES = ("hidden", "visible", "unresolved")
#: Most bands that a range is cut into.
_MOST_BANDS = 6
#: Rows that one call of the kernel adds up.
_STRIP_ROWS = 1024


@dataclass(frozen=True)
class Band:
    """What is seen between two distances.

    Attributes
    ----------
    from_m, to_m : float
        Ground distances [m]; a cell belongs if its centre is farther than the first and not
        farther than the second.
    areas_m2 : dict of str to float
        True area of the cells of each state [m2].
    """

    from_m: float
    to_m: float
    areas_m2: dict[str, float]

    @property
    def seen_share(self) -> float | None:
        """Visible area over all known area of the band; None where the band has none."""
        return seen_share(self.areas_m2)


@dataclass(frozen=True)
class Tally:
    """Sums of what one observer sees.

    Attributes
    ----------
    counts : dict of str to int
        Cells of each state.
    areas_m2 : dict of str to float
        Their true area on the ellipsoid [m2].
    bands : tuple of Band
        The same by distance, nearest first.
    farthest : tuple or None
        Row, column, distance [m] and true bearing [degrees] of the farthest visible cell.
    """

    counts: dict[str, int]
    areas_m2: dict[str, float]
    bands: tuple[Band, ...]
    farthest: tuple[int, int, float, float] | None

    @property
    def seen_share(self) -> float | None:
        """Visible area over all known area in range; None where there is none."""
        return seen_share(self.areas_m2)

    def moved(self, row_off: int, col_off: int) -> Tally:
        """Give the same sums for a grid that begins at another post."""
        if self.farthest is None:
            return self
        row, col, distance, bearing = self.farthest
        return replace(self, farthest=(row - row_off, col - col_off, distance, bearing))


def seen_share(areas_m2: dict[str, float]) -> float | None:
    """Visible part of an area that is known; None where nothing is."""
    total = sum(areas_m2.values())
    return areas_m2["visible"] / total if total else None


def band_edges(range_m: float) -> list[float]:
    """Cut a range into at most six bands of a round width.

    Parameters
    ----------
    range_m : float
        The range [m].

    Returns
    -------
    list of float
        Outer edges of the bands [m], the last one the range itself.

    Examples
    --------
    >>> band_edges(30_000.0)
    [5000.0, 10000.0, 15000.0, 20000.0, 25000.0, 30000.0]
    >>> band_edges(1200.0)
    [200.0, 400.0, 600.0, 800.0, 1000.0, 1200.0]
    """
    least = range_m / _MOST_BANDS
    power = 10.0 ** math.floor(math.log10(least))
    step = next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= least * (1.0 - 1e-9))
    edges = [step * n for n in range(1, math.ceil(range_m / step - 1e-9))]
    return [*edges, range_m]


def tally_up(
    visible: NDArray[np.uint8], post_map: PostMap, areas: CellAreas, range_m: float
) -> Tally:
    """Add up what one observer sees.

    Parameters
    ----------
    visible : (rows, cols) uint8
        1 visible, 0 hidden, 2 unresolved, 255 no data.
    post_map : PostMap
        True local coordinates of the cells.
    areas : CellAreas
        True areas of the cells.
    range_m : float
        Range [m], which is cut into bands.

    Returns
    -------
    Tally
        Cells, areas, bands and the farthest visible cell.

    Notes
    -----
    Along a row the distance has a least and no greatest between its ends, so the farthest visible
    cell is an end of the visible ones.
    """
    edges = band_edges(range_m)
    counts, sums, tips = _add_up(visible, runs_within(post_map, visible.shape, edges[:-1]), areas)
    named = [dict(zip(STATE_NAMES, (float(v) for v in row), strict=True)) for row in sums]
    total = counts.sum(axis=0)
    return Tally(
        counts={name: int(n) for name, n in zip(STATE_NAMES, total, strict=True)},
        areas_m2={name: math.fsum(row[name] for row in named) for name in STATE_NAMES},
        bands=tuple(
            Band(low, high, row)
            for low, high, row in zip([0.0, *edges[:-1]], edges, named, strict=True)
        ),
        farthest=_farthest(post_map, tips),
    )


def runs_within(post_map: PostMap, shape: tuple[int, int], radii: list[float]) -> NDArray[np.int64]:
    """Find what lies within some distances of the observer, row by row.

    Parameters
    ----------
    post_map : PostMap
        True local coordinates of the cells.
    shape : tuple of int
        Rows and columns of the window.
    radii : list of float
        Distances [m].

    Returns
    -------
    (radii, 2, rows) int64
        First column within each distance and the one past the last; the same twice where a row has
        none.

    Notes
    -----
    Along a row the distance has a least and no greatest between its ends, so what lies within a
    distance is one run of columns, whose ends are found by bisection.
    """
    ends = np.empty((len(radii), 2, shape[0]), dtype=np.int64)
    gather.runs_within(
        post_map.cp,
        post_map.cq,
        post_map.jacobian,
        np.array([post_map.row0, post_map.col0, post_map.scale]),
        shape[1],
        np.array(radii, dtype=np.float64),
        ends,
        np.empty((2, post_map.degree + 1)),
    )
    return ends


def reached_window(
    post_map: PostMap, shape: tuple[int, int], range_m: float
) -> tuple[int, int, int, int]:
    """Find the part of a window that holds cells within range; the observer's cell stays in.

    Parameters
    ----------
    post_map : PostMap
        True local coordinates of the cells.
    shape : tuple of int
        Rows and columns of the window.
    range_m : float
        Range [m].

    Returns
    -------
    tuple of int
        First row and column, rows and columns.
    """
    first, past = runs_within(post_map, shape, [range_m])[0]
    top, bottom = math.floor(post_map.row0), math.ceil(post_map.row0)
    left, right = math.floor(post_map.col0), math.ceil(post_map.col0)
    rows = np.flatnonzero(first < past)
    if rows.size:
        top, bottom = min(top, int(rows[0])), max(bottom, int(rows[-1]))
        left, right = min(left, int(first[rows].min())), max(right, int(past[rows].max()) - 1)
    return top, left, bottom + 1 - top, right + 1 - left


def sums(
    visible: NDArray[np.uint8], areas: CellAreas
) -> tuple[dict[str, int], dict[str, float]]:
    """Add up cells and true areas [m2] of each state, whatever their distance."""
    counts, found, _ = _add_up(visible, np.empty((0, 2, visible.shape[0]), dtype=np.int64), areas)
    return (
        {name: int(n) for name, n in zip(STATE_NAMES, counts[0], strict=True)},
        {name: float(a) for name, a in zip(STATE_NAMES, found[0], strict=True)},
    )


def _add_up(
    visible: NDArray[np.uint8], ends: NDArray[np.int64], areas: CellAreas
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.int64]]:
    """Cells and areas [m2] by band and state, and the first and last visible column of each row."""
    rows, bands = visible.shape[0], ends.shape[0] + 1
    counts = np.zeros((bands, gather.STATES), dtype=np.int64)
    found = np.zeros((bands, gather.STATES), dtype=np.float64)
    tips = np.full((2, rows), -1, dtype=np.int64)
    usual, more = _summed(areas.col_factors)
    scratch = np.zeros((*found.shape, usual.size + 1))
    for start in range(0, rows, _STRIP_ROWS):
        part = slice(start, min(start + _STRIP_ROWS, rows))
        gather.tally(
            visible[part],
            np.ascontiguousarray(ends[:, :, part]),
            areas.row_factors[part],
            usual,
            more,
            counts,
            found,
            tips[0, part],
            tips[1, part],
            scratch,
        )
    return counts, found, tips


def _summed(
    col_factors: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Split the numbers of the columns into a usual one and running sums of what is more.

    The numbers hardly differ, so the running sums stay small and their differences sharp.
    """
    usual = col_factors.mean(axis=1)
    more = np.zeros((col_factors.shape[0], col_factors.shape[1] + 1))
    np.cumsum(col_factors - usual[:, np.newaxis], axis=1, out=more[:, 1:])
    return usual, more


def _farthest(
    post_map: PostMap, tips: NDArray[np.int64]
) -> tuple[int, int, float, float] | None:
    rows = np.flatnonzero(tips[0] >= 0)
    if not rows.size:
        return None
    both = np.concatenate([rows, rows])
    cols = np.concatenate([tips[0, rows], tips[1, rows]])
    east, north = post_map.en(both.astype(np.float64), cols.astype(np.float64))
    best = int(np.argmax(np.hypot(east, north)))
    e, n = float(east[best]), float(north[best])
    bearing = math.degrees(math.atan2(e, n)) % 360.0
    return int(both[best]), int(cols[best]), math.hypot(e, n), bearing
