"""The surface that blocks sight (a DSM), brought onto the grid of the ground.

Its heights are read as they are where its posts are those of the ground; else they are taken
between its posts, or averaged over the cells of the ground where its own cells are finer. A height
that would rest on a void or on something beyond its edge is not known, and nothing is guessed.
"""

import re
import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from math import ceil, floor
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from viewshed import extent
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.grid import FloatArray, Grid
from viewshed.io._cells import fill_void
from viewshed.io._median import median
from viewshed.io._resample import Box, IndexMap, Place, bilinear, block_means, box_round
from viewshed.io._windows import Windows
from viewshed.io.elevation import PathLike, Terrain, open_terrain
from viewshed.io.fingerprint import Fingerprint
from viewshed.io.mosaic import Heights

#: Farthest that posts of the same grid may lie apart [cells].
_SAME_GRID = 0.01
#: Cells of the surface may be this much finer than those of the ground and count as equal.
_AS_LARGE = 1.05
#: Most heights taken along a side of a cell for its mean; finer cells are averaged in blocks first.
_MOST_SAMPLES = 8
#: Most posts of the ground, and most cells of the surface, that are worked on at a time.
_BLOCK_POSTS, _BLOCK_CELLS = 1 << 19, 1 << 22
#: Posts whose heights are worked out in one go.
_NEAR_POSTS = 1 << 15
#: A surface that is this far above the ground in the middle [m] is worth a question.
_HIGH_ABOVE = 20.0
#: Nothing that grows or is built stands this far over the ground [m] at more than this share.
_TALL, _TALL_SHARE = 60.0, 0.05
#: Rows whose differences are taken at a time.
_COMPARE_ROWS = 256


@dataclass(frozen=True)
class Surface:
    """Heights of what blocks sight, at the posts of a terrain.

    Made by `open_surface`.

    Attributes
    ----------
    own : Terrain
        The surface on its own grid.
    grid : Grid
        The grid of the ground.
    method : str
        ``"same grid"``: read as it is; ``"bilinear"``: between four posts; ``"average"``: mean over
        the cell of the ground.
    offset : tuple of int or None
        Row and column of the own grid at the ground's first post, for the same grid.
    samples : tuple of int
        Heights along the rows and the columns of a cell whose mean is taken.
    blocks : tuple of int
        Side of the blocks of own cells that are averaged first, and where the first one begins.
    """

    own: Terrain
    grid: Grid
    method: str
    offset: tuple[int, int] | None = field(repr=False)
    samples: tuple[int, int] = field(repr=False)
    blocks: tuple[int, int, int] = field(repr=False)

    @property
    def paths(self) -> tuple[Path, ...]:
        """The files, in the order given."""
        return self.own.paths

    @property
    def given(self) -> tuple[str, ...]:
        """The files, folders and patterns as the caller named them."""
        return self.own.given

    def fingerprint(
        self, row_off: int, col_off: int, rows: int, cols: int, *, meanwhile: bool = False
    ) -> Fingerprint:
        """Take size and SHA-256 of the files that a window needs; begin before it is read.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in the grid of the ground.
        rows, cols : int
            Size of the window.
        meanwhile : bool, optional
            Whether that goes on while the caller reads the window.

        Returns
        -------
        Fingerprint
            As from `Terrain.fingerprint`.

        Raises
        ------
        InputError
            If the window is not inside the grid of the ground.
        DataError
            If a file cannot be read.
        """
        self.grid.window(row_off, col_off, rows, cols)
        row, col = IndexMap(self.grid, self.own.grid).lattice((row_off, col_off, rows, cols))
        if self.offset is not None:
            row, col = np.round(row), np.round(col)
        margin = 0.0 if self.offset is not None else self._margin * self.blocks[0]
        box = box_round(row, col, margin, self.own.grid.shape)
        if box is None:
            return Fingerprint(())
        return self.own.fingerprint(*box, meanwhile=meanwhile)

    def read(
        self,
        row_off: int,
        col_off: int,
        rows: int,
        cols: int,
        *,
        out: Heights | None = None,
    ) -> Heights:
        """Read a window.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in the grid of the ground.
        rows, cols : int
            Size of the window.
        out : numpy.ndarray, float32, shape (rows, cols), optional
            Array to read into.

        Returns
        -------
        numpy.ndarray, shape (rows, cols), float32
            Heights [m], NaN where they are not known.

        Raises
        ------
        InputError
            If the window is not inside the grid of the ground.
        DataError
            If a file is missing, truncated or damaged, or holds an infinite height.

        Notes
        -----
        Besides the result it takes the memory of a block of some million cells.
        """
        self.grid.window(row_off, col_off, rows, cols)
        out = np.empty((rows, cols), np.float32) if out is None else out
        fill_void(out)
        window, own = (row_off, col_off, rows, cols), Windows(self.own)
        if self.offset is not None:
            self._copy(window, self.offset, own, out)
        else:
            for box, source, place in self._pieces(window):
                row, col = box[0] - row_off, box[1] - col_off
                heights = self._heights(box, source, place, own)
                out[row : row + box[2], col : col + box[3]] = heights
        own.warn()
        return out

    def _copy(self, box: Box, offset: tuple[int, int], own: Windows, out: Heights) -> None:
        """Read what lies in a box of the ground's grid as it is."""
        shape = self.own.grid.shape
        starts = [box[i] + offset[i] for i in (0, 1)]
        first = [max(0, start) for start in starts]
        count = [min(shape[i], starts[i] + box[2 + i]) - first[i] for i in (0, 1)]
        if min(count) > 0:
            row, col = (first[i] - starts[i] for i in (0, 1))
            own.read(*first, *count, out=out[row : row + count[0], col : col + count[1]])

    @property
    def _margin(self) -> float:
        """How far beyond its posts a window can need the surface [blocked cells]."""
        return 2.0 + max(self.samples)

    @property
    def _map(self) -> IndexMap:
        return IndexMap(self.grid, self._blocked())

    def _blocked(self) -> Grid:
        """Give the own grid, with a block of cells as one cell where they are averaged first."""
        size, row, col = self.blocks
        own = self.own.grid
        if size == 1:
            return own
        rows, cols = (own.rows - row) // size, (own.cols - col) // size
        start = own.window(row, col, rows * size, cols * size)
        t = start.transform
        scaled = type(t)(t.a * size, t.b * size, t.c, t.d * size, t.e * size, t.f)
        return Grid((rows, cols), scaled, own.crs_wkt)

    def _pieces(self, window: Box) -> Iterator[tuple[Box, Box, Place]]:
        """Cut a window into pieces of moderate size, each with the part of the surface it needs."""
        index, shape = self._map, self._blocked().shape
        most = max(1, _BLOCK_CELLS // self.blocks[0] ** 2)
        waiting = [window]
        while waiting:
            box = waiting.pop()
            row, col = index.lattice(box)
            source = box_round(row, col, self._margin, shape)
            if source is None:
                continue
            posts, cells = box[2] * box[3], source[2] * source[3]
            if posts > _BLOCK_POSTS or (cells > most and posts > 1):
                waiting += _halves(box, is_turned=_area(row, col) < 0.5 * cells)
            else:
                yield box, source, index.place(box)

    def _heights(self, box: Box, source: Box, place: Place, own: Windows) -> FloatArray:
        """Work out the heights of a piece, few posts at a time since small arrays stay near."""
        size, row0, col0 = self.blocks
        start = (source[0] * size + row0, source[1] * size + col0)
        read = own.read(*start, source[2] * size, source[3] * size)
        values = block_means(read, size) if size > 1 else read.astype(np.float64)
        right = np.arange(box[1], box[1] + box[3], dtype=np.float64)
        shifts = [(np.arange(n) + 0.5) / n - 0.5 for n in self.samples]
        total, step = np.zeros((box[2], box[3])), max(1, _NEAR_POSTS // box[3])
        for first in range(0, box[2], step):
            part = total[first : first + step]
            down = np.arange(box[0] + first, box[0] + first + part.shape[0], dtype=np.float64)
            for down_by in shifts[0]:
                for right_by in shifts[1]:
                    row, col = place(down + down_by, right + right_by)
                    part += bilinear(values, row - source[0], col - source[1])
        return total / (self.samples[0] * self.samples[1])


def open_surface(
    paths: PathLike | Sequence[PathLike],
    terrain: Terrain,
    *,
    crs: str | None = None,
    height_unit: str | None = None,
) -> Surface:
    """Open what blocks sight over a terrain: one raster, or several that form one mosaic.

    Only the headers are read here.

    Parameters
    ----------
    paths : path or sequence of paths
        The rasters of the surface, as for `open_terrain`; their grid may differ from that of the
        terrain in every way.
    terrain : Terrain
        The ground, on whose grid the surface is wanted.
    crs : str, optional
        CRS of rasters that state none.
    height_unit : {"m", "ft", "us-ft"}, optional
        Unit of the heights. Default: that of the band, else of the CRS, else metres.

    Returns
    -------
    Surface
        A way to read the surface at the posts of the terrain.

    Raises
    ------
    InputError
        As from `open_terrain`, or if no way leads from one CRS to the other.
    DataError
        As from `open_terrain`, or if the surface lies somewhere else than the terrain.

    Warns
    -----
    ViewshedWarning
        If the heights of the two are stated to count from different datums.
    """
    try:
        own = open_terrain(paths, crs=crs, height_unit=height_unit)
    except InputError as error:
        raise InputError(re.sub(r"--(crs|height-unit)", r"--surface-\1", str(error))) from error
    except DataError as error:
        raise DataError(str(error).replace("the elevation grid", "the surface")) from error
    ground, grid = IndexMap(terrain.grid, own.grid), terrain.grid
    common = box_round(*IndexMap(own.grid, grid).lattice((0, 0, *own.grid.shape)), 0.0, grid.shape)
    middle = (0, 0) if common is None else (common[0] + common[2] // 2, common[1] + common[3] // 2)
    steps = ground.steps(*middle)
    if common is None or not np.isfinite(steps).all():
        msg = (
            f"the surface {own.paths[0]} ({_extent(own.grid)}) lies elsewhere than the ground "
            f"{terrain.paths[0]} ({_extent(grid)}); give a surface of the same place"
        )
        raise DataError(msg)
    _warn_of_datum(own, terrain)
    offset = _offset(ground, common)
    if offset is not None:
        return Surface(own, grid, "same grid", offset, (1, 1), (1, 0, 0))
    ratio = float(np.abs(steps).max(axis=1).min())
    size = _block_size(min(ratio, min(own.grid.shape) / 2.0))
    corner = ground.exact(middle[0] - 0.5, middle[1] - 0.5)
    blocks = (size, round(float(corner[0]) + 0.5) % size, round(float(corner[1]) + 0.5) % size)
    samples = [max(1, ceil(length / size / _AS_LARGE)) for length in np.hypot(*steps)]
    method = "bilinear" if max(samples) == 1 else "average"
    return Surface(own, grid, method, None, (samples[0], samples[1]), blocks)


def compare(surface: Heights, ground: Heights) -> float | None:
    """Give the median of surface minus ground, and warn of what looks wrong.

    Parameters
    ----------
    surface, ground : numpy.ndarray, shape (rows, cols)
        Heights of the same posts [m], NaN where not known.

    Returns
    -------
    float or None
        Median over the posts known in both [m]; None where there is none.

    Warns
    -----
    ViewshedWarning
        If the median is negative or over 20 m, if much of the surface is taller over the ground
        than anything that grows or is built, or if the surface is unknown where the ground is
        known.

    Notes
    -----
    It takes the memory of a strip of rows.
    """
    on_ground = in_both = 0
    for rows in _strips(ground):
        on_ground += int(np.count_nonzero(np.isfinite(ground[rows])))
        in_both += int(np.count_nonzero(_both(surface[rows], ground[rows])))
    if in_both < on_ground:
        share = _percent((on_ground - in_both) / on_ground)
        msg = (
            f"the surface is not known at {share} of the posts where the ground is; sight lines "
            "across them are unresolved"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=2)
    if not in_both:
        return None

    def differences() -> Iterator[NDArray[np.float32]]:
        for rows in _strips(ground):
            mask = _both(surface[rows], ground[rows])
            yield surface[rows][mask] - ground[rows][mask]

    middle = median(differences, in_both)
    tall = sum(int(np.count_nonzero(part > _TALL)) for part in differences())
    if tall > _TALL_SHARE * in_both and middle <= _HIGH_ABOVE:
        msg = (
            f"the surface is more than {_TALL:g} m above the ground at {_percent(tall / in_both)} "
            "of the posts, taller than woods and houses; check that both share the unit of their "
            "heights"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=2)
    if round(middle, 2) < 0.0 or middle > _HIGH_ABOVE:
        side = f"{middle:.2f} m above" if middle > 0.0 else f"{-middle:.2f} m below"
        msg = (
            f"the surface is {side} the ground in the middle of all differences; check that "
            "surface and ground are not swapped and share unit and datum of their heights"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=2)
    return middle


# --- fitting the grids ------------------------------------------------------------------------


def _offset(ground: IndexMap, common: Box) -> tuple[int, int] | None:
    """Give the surface's row and column of the ground's first post if their posts are the same."""
    row, col, rows, cols = common
    down = np.unique(np.linspace(row, row + rows - 1, 9).round())
    right = np.unique(np.linspace(col, col + cols - 1, 9).round())
    there = ground.exact(down[:, None], right[None, :])
    off = [there[0] - down[:, None], there[1] - right[None, :]]
    whole = [np.round(v[0, 0]) for v in off]
    if all(bool(np.all(np.abs(v - w) <= _SAME_GRID)) for v, w in zip(off, whole, strict=True)):
        return int(whole[0]), int(whole[1])
    return None


def _block_size(ratio: float) -> int:
    """Give the side of the blocks of cells averaged first, so that few means fill a cell.

    It divides the cell into whole blocks where it can.
    """
    if ratio <= _MOST_SAMPLES:
        return 1
    sizes = range(ceil(ratio / _MOST_SAMPLES), floor(2.0 * ratio / _MOST_SAMPLES) + 1)
    return max(sizes, key=lambda n: (-round(abs(ratio / n - round(ratio / n)), 2), n))


def _halves(box: Box, *, is_turned: bool) -> list[Box]:
    """Cut a box in two, across its rows or, if the other grid is turned, its longer side."""
    row, col, rows, cols = box
    if rows == 1 or (is_turned and cols > rows):
        half = cols // 2
        return [(row, col + half, rows, cols - half), (row, col, rows, half)]
    half = rows // 2
    return [(row + half, col, rows - half, cols), (row, col, half, cols)]


def _area(row: FloatArray, col: FloatArray) -> float:
    """Give the area of the figure whose corners are those of a lattice."""
    r, c = (v[[0, 0, -1, -1], [0, -1, -1, 0]] for v in (row, col))
    return 0.5 * abs(float(np.sum(r * np.roll(c, -1) - c * np.roll(r, -1))))


def _both(surface: Heights, ground: Heights) -> NDArray[np.bool_]:
    return np.asarray(np.isfinite(surface) & np.isfinite(ground))


def _warn_of_datum(surface: Terrain, ground: Terrain) -> None:
    datums = (surface.datum, ground.datum)
    if "unstated" not in datums and datums[0] != datums[1]:
        msg = (
            f"heights of the surface count from {datums[0]!r} and those of the ground from "
            f"{datums[1]!r}; both are used as they are, so convert one of them if they differ"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=3)


# --- words ------------------------------------------------------------------------------------


def _strips(array: Heights) -> list[slice]:
    return [slice(i, i + _COMPARE_ROWS) for i in range(0, array.shape[0], _COMPARE_ROWS)]


def _percent(share: float) -> str:
    percent = 100.0 * share
    return "less than 0.1 %" if percent < 0.1 else f"{percent:.3g} %"


def _extent(grid: Grid) -> str:
    """Give the extent of a grid in longitude and latitude."""
    found = extent.lonlat_bounds(grid)
    if found is None:
        return "in no known place"
    west, south, east, north = found
    return f"lon {west:.4f} to {east:.4f}, lat {south:.4f} to {north:.4f}"
