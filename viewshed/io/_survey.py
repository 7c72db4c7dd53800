"""One pass over an elevation grid, strip by strip: what its heights are like, and a small copy."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from math import ceil, inf

import numpy as np
from numpy.typing import NDArray

from viewshed.grid import FloatArray, Grid
from viewshed.io._value_steps import StepFinder
from viewshed.io.mosaic import Heights

#: Most cells of a strip, and most if it takes more to read whole blocks of the file.
_STRIP_CELLS, _MOST_CELLS = 1 << 22, 1 << 24
#: Most rows and columns of the small copy.
_OVERVIEW = 900
#: Ground this near to zero [m] beside a void is likely a coast.
NEAR_ZERO = 2.0


@dataclass
class Survey:
    """What the cells of a grid are like.

    Parameters
    ----------
    grid : Grid
        The grid.

    Attributes
    ----------
    known : int
        Cells whose height is known.
    low, high : float
        Lowest and highest height [m]; infinite where none is known.
    rims : int
        Sides between a known cell and a void.
    rims_near_zero : int
        Those of them whose ground is within two metres of zero.
    steps : StepFinder
        Steps of the values.
    """

    grid: Grid
    known: int = 0
    low: float = inf
    high: float = -inf
    rims: int = 0
    rims_near_zero: int = 0
    steps: StepFinder = field(default_factory=StepFinder)

    def __post_init__(self) -> None:
        """Prepare the small copy."""
        self.by, self.bx = (ceil(n / _OVERVIEW) for n in self.grid.shape)
        shape = (ceil(self.grid.rows / self.by), ceil(self.grid.cols / self.bx))
        self._sums = np.zeros(shape)
        self._counts = np.zeros(shape, np.int64)
        self._above = np.empty((0, self.grid.cols), np.float32)

    def add(self, first: int, heights: Heights) -> None:
        """Look at a strip of whole rows, in their order."""
        known = np.isfinite(heights)
        count = int(np.count_nonzero(known))
        self.known += count
        if count:
            values = heights[known] if count < heights.size else heights.ravel()
            self.low, self.high = min(self.low, values.min()), max(self.high, values.max())
            self.steps.add(values)
        if count < heights.size or np.isnan(self._above).any():
            self._add_rims(np.concatenate([self._above, heights]), below=len(self._above))
        self._above = heights[-1:].copy()
        self._add_to_copy(first, heights, known)

    def _add_rims(self, heights: Heights, below: int) -> None:
        """Count sides of voids; those along the row above the strip have been counted."""
        known, near = np.isfinite(heights), np.abs(heights) <= NEAR_ZERO
        own = slice(below, None)
        sides = (
            ((own, slice(None, -1)), (own, slice(1, None))),
            ((slice(None, -1), slice(None)), (slice(1, None), slice(None))),
        )
        for one, other in sides:
            rim = known[one] ^ known[other]
            self.rims += int(np.count_nonzero(rim))
            self.rims_near_zero += int(np.count_nonzero(rim & (near[one] | near[other])))

    def _add_to_copy(self, first: int, heights: Heights, known: NDArray[np.bool_]) -> None:
        rows = (first + np.arange(heights.shape[0])) // self.by
        starts = np.arange(0, self.grid.cols, self.bx)
        filled = np.where(known, heights, np.float32(0.0))
        sums = np.add.reduceat(filled, starts, axis=1, dtype=np.float64)
        np.add.at(self._sums, rows, sums)
        np.add.at(self._counts, rows, np.add.reduceat(known, starts, axis=1, dtype=np.int64))

    def overview(self) -> tuple[Heights, FloatArray]:
        """Give the small copy.

        Returns
        -------
        heights : numpy.ndarray, float32
            Means of blocks of `by` x `bx` cells [m], NaN where none is known.
        voids : numpy.ndarray
            Share of the cells of each block that are void.
        """
        rows, cols = (
            np.minimum(size, n - np.arange(0, n, size))
            for n, size in zip(self.grid.shape, (self.by, self.bx), strict=True)
        )
        means = np.full(self._sums.shape, np.nan)
        np.divide(self._sums, self._counts, out=means, where=self._counts > 0)
        return means.astype(np.float32), 1.0 - self._counts / np.outer(rows, cols)


def survey(
    grid: Grid,
    read: Callable[[int, int, int, int], Heights],
    block_rows: int,
    progress: Callable[[int, int], None] | None = None,
) -> Survey:
    """Look at every cell of a grid, a strip at a time.

    Parameters
    ----------
    grid : Grid
        The grid.
    read : callable
        Gives the heights of a window.
    block_rows : int
        Rows of a block of the file; a strip holds whole ones where it can.
    progress : callable, optional
        Called with rows done and in all.

    Returns
    -------
    Survey
        What was found.
    """
    found = Survey(grid)
    for first, count in _strips(grid, block_rows):
        found.add(first, read(first, 0, count, grid.cols))
        if progress is not None:
            progress(first + count, grid.rows)
    return found


def _strips(grid: Grid, block_rows: int) -> Iterator[tuple[int, int]]:
    step = max(1, _STRIP_CELLS // grid.cols)
    if block_rows * grid.cols <= _MOST_CELLS:
        step = max(1, step // block_rows) * block_rows
    for first in range(0, grid.rows, step):
        yield first, min(step, grid.rows - first)
