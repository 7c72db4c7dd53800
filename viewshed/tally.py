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
    Along a row the distance has a least and no greatest between its ends, so what lies within a
    distance is one run of columns, and the farthest visible cell is an end of the visible ones.
    """
    rows, cols = visible.shape
    edges = band_edges(range_m)
    ends = _runs_within(post_map, (rows, cols), edges[:-1])
    counts = np.zeros((len(edges), gather.STATES), dtype=np.int64)
    sums = np.zeros((len(edges), gather.STATES), dtype=np.float64)
    tips = np.full((2, rows), -1, dtype=np.int64)
    scratch = np.zeros((*sums.shape, areas.col_factors.shape[0]))
    for start in range(0, rows, _STRIP_ROWS):
        part = slice(start, min(start + _STRIP_ROWS, rows))
        gather.tally(
            visible[part],
            np.ascontiguousarray(ends[:, :, part]),
            areas.row_factors[part],
            areas.col_factors,
            counts,
            sums,
            tips[0, part],
            tips[1, part],
            scratch,
        )
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


def _runs_within(
    post_map: PostMap, shape: tuple[int, int], radii: list[float]
) -> NDArray[np.int64]:
    """First column within each radius and the one past the last, row by row; by bisection.

    All radii and both sides at once: an array of (radii, 2, rows) costs little more than one row.
    """
    rows, last = np.arange(float(shape[0])), shape[1] - 1

    def distance(cols: NDArray[np.int64]) -> NDArray[np.float64]:
        return np.hypot(*post_map.en(rows, cols.astype(np.float64)))

    low, high = np.zeros(shape[0], dtype=np.int64), np.full(shape[0], last)
    while (low < high).any():  # the nearest column
        middle = (low + high) // 2
        here, ahead = distance(np.stack([middle, np.minimum(middle + 1, last)]))
        falls = here > ahead
        low = np.where(falls, np.minimum(middle + 1, high), low)
        high = np.where(falls, high, middle)
        high = np.maximum(low, high)
    found = np.broadcast_to(low, (len(radii), 2, shape[0])).copy()
    if not radii:
        return found
    within = np.array(radii)[:, np.newaxis, np.newaxis]
    reached = distance(low) <= within[:, 0]
    outside = np.empty_like(found)
    outside[:, 0], outside[:, 1] = -1, last + 1  # surely beyond, and never asked
    while (np.abs(outside - found) > 1).any():
        middle = (found + outside) // 2
        near = distance(middle) <= within
        found, outside = np.where(near, middle, found), np.where(near, outside, middle)
    found[:, 1] += reached
    return found


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


def sums(
    visible: NDArray[np.uint8], areas: CellAreas
) -> tuple[dict[str, int], dict[str, float]]:
    """Add up cells and true areas [m2] of each state, whatever their distance."""
    counts = np.zeros((1, gather.STATES), dtype=np.int64)
    found = np.zeros((1, gather.STATES), dtype=np.float64)
    scratch = np.zeros((*found.shape, areas.col_factors.shape[0]))
    tips = np.empty((2, visible.shape[0]), dtype=np.int64)
    for start in range(0, visible.shape[0], _STRIP_ROWS):
        part = slice(start, min(start + _STRIP_ROWS, visible.shape[0]))
        gather.tally(
            visible[part],
            np.empty((0, 2, part.stop - part.start), dtype=np.int64),
            areas.row_factors[part],
            areas.col_factors,
            counts,
            found,
            tips[0, part],
            tips[1, part],
            scratch,
        )
    return (
        {name: int(n) for name, n in zip(STATE_NAMES, counts[0], strict=True)},
        {name: float(a) for name, a in zip(STATE_NAMES, found[0], strict=True)},
    )
