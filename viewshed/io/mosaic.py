"""Equal grids that form one: whether tiles fit together, and which of them a window needs."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from math import atan2, degrees
from pathlib import Path

import numpy as np
from affine import Affine
from numpy.typing import NDArray

from viewshed import geodesy
from viewshed.errors import DataError
from viewshed.grid import FloatArray, Grid

Heights = NDArray[np.float32]

#: Farthest that the cells of two tiles may lie off each other [cells].
_MISFIT = 0.01
#: Pairs of tiles that are compared at a time.
_PORTION = 1 << 20


@dataclass(frozen=True)
class Piece:
    """A file that a virtual raster reads, and the part of its cells that come from it.

    Attributes
    ----------
    path : pathlib.Path
        The file.
    rows, cols : tuple of int
        First and last but one row and column that it fills; None where that is not known.
    """

    path: Path
    rows: tuple[int, int] | None = None
    cols: tuple[int, int] | None = None

    def reaches(self, row: int, col: int, shape: tuple[int, int]) -> bool:
        """Tell whether the file has a part in a window of the virtual raster."""
        if self.rows is None or self.cols is None:
            return True
        down = self.rows[0] < row + shape[0] and row < self.rows[1]
        return down and self.cols[0] < col + shape[1] and col < self.cols[1]


@dataclass(frozen=True)
class Header:
    """What one raster says about itself.

    Attributes
    ----------
    path : pathlib.Path
        The raster.
    driver : str
        Short name of its format.
    shape : tuple of int
        Rows and columns.
    transform : affine.Affine
        Cell-edge transform [CRS units].
    own_wkt : str
        CRS as the file states it, empty where it states none.
    dtype : str
        Type of the cells.
    block : tuple of int
        Rows and columns that are stored together.
    is_compressed : bool
        Whether they have to be unpacked.
    nodata : float or None
        Value that is declared to mean a void.
    is_masked : bool
        Whether a mask says which cells are known.
    scale, offset : float
        Heights are cells times `scale` plus `offset`.
    unit : str
        Unit of the heights, empty where it is not stated.
    files : tuple of pathlib.Path
        All files that the raster is made of, itself first.
    pieces : tuple of Piece
        Where the cells of a virtual raster come from; empty for any other.
    states : tuple of tuple of int
        Size [bytes] and time of change [ns] of each of the files when this was read.
    """

    path: Path
    driver: str
    shape: tuple[int, int]
    transform: Affine
    own_wkt: str
    dtype: str
    block: tuple[int, int]
    is_compressed: bool
    nodata: float | None
    is_masked: bool
    scale: float
    offset: float
    unit: str
    files: tuple[Path, ...]
    pieces: tuple[Piece, ...] = ()
    states: tuple[tuple[int, int], ...] = ()


@dataclass(frozen=True)
class Tile(Header):
    """A raster whose CRS and unit of height are settled, and where in the mosaic it lies.

    Attributes
    ----------
    crs_wkt : str
        Its CRS, stated by itself or by the caller.
    height_factor : float
        Metres in one unit of its heights [m].
    height_unit_origin : str
        Where that is known from.
    row0, col0 : int
        Its first row and column in the grid of the mosaic.
    """

    crs_wkt: str = ""
    height_factor: float = 1.0
    height_unit_origin: str = ""
    row0: int = 0
    col0: int = 0


# --- do they fit? -------------------------------------------------------------------------------


def fit_together(tiles: Sequence[Tile]) -> tuple[Grid, list[Tile]]:
    """Place tiles in one grid.

    Parameters
    ----------
    tiles : sequence of Tile
        At least one, where they lie still unknown.

    Returns
    -------
    grid : Grid
        The cells of the first tile, continued over all of them.
    tiles : list of Tile
        The same tiles with their first row and column in that grid.

    Raises
    ------
    DataError
        If a tile does not fit the first one; it says how they differ.
    """
    first = tiles[0]
    corners = np.array([(t.transform.c, t.transform.f) for t in tiles], dtype=np.float64)
    rows, cols = Grid(first.shape, first.transform, "").rowcol(corners[:, 0], corners[:, 1])
    shapes = np.array([t.shape for t in tiles], dtype=np.int64)
    rows, cols = rows + 0.5, _closed(first, cols + 0.5, shapes[:, 1])
    for tile, row, col in zip(tiles, rows.tolist(), cols.tolist(), strict=True):
        problem = _misfit(first, tile, row, col)
        if problem:
            msg = f"{first.path} and {tile.path} do not fit together: {problem}"
            raise DataError(msg)
    top, left = _whole(rows), _whole(cols)
    rows_of_all = int((top + shapes[:, 0]).max() - top.min())
    cols_of_all = int((left + shapes[:, 1]).max() - left.min())
    t = first.transform
    x, y = Grid(first.shape, t, first.crs_wkt).xy(top.min() - 0.5, left.min() - 0.5)
    transform = Affine(t.a, t.b, float(x), t.d, t.e, float(y))
    places = zip(tiles, (top - top.min()).tolist(), (left - left.min()).tolist(), strict=True)
    placed = [Tile(**(vars(tile) | {"row0": row, "col0": col})) for tile, row, col in places]
    return Grid((rows_of_all, cols_of_all), transform, first.crs_wkt), placed


def uncovered(grid: Grid, tiles: Sequence[Tile]) -> int:
    """Count the cells of a mosaic that lie in no tile.

    Parameters
    ----------
    grid : Grid
        The grid of the mosaic.
    tiles : sequence of Tile
        Its tiles, placed by `fit_together`.

    Returns
    -------
    int
        Cells.
    """
    rows = np.unique([edge for t in tiles for edge in (t.row0, t.row0 + t.shape[0])])
    cols = np.unique([edge for t in tiles for edge in (t.col0, t.col0 + t.shape[1])])
    inside = np.zeros((rows.size - 1, cols.size - 1), dtype=np.int64)
    for t in tiles:
        down = np.searchsorted(rows, (t.row0, t.row0 + t.shape[0]))
        right = np.searchsorted(cols, (t.col0, t.col0 + t.shape[1]))
        inside[down[0] : down[1], right[0] : right[1]] = 1
    return grid.rows * grid.cols - int(np.diff(rows) @ inside @ np.diff(cols))


def _whole(places: FloatArray) -> NDArray[np.int64]:
    return np.rint(places).astype(np.int64)


def _closed(first: Tile, cols: FloatArray, widths: NDArray[np.int64]) -> FloatArray:
    """Put tiles on both sides of 180 degrees side by side, if that makes the mosaic narrower.

    Parameters
    ----------
    first : Tile
        The tile in whose cells the columns count.
    cols, widths : numpy.ndarray
        First column and number of columns of each tile.

    Returns
    -------
    numpy.ndarray
        The first columns, some of them a turn of longitude farther east or west.
    """
    t = first.transform
    if np.ptp(cols) == 0.0 or t.b != 0.0 or t.d != 0.0 or not _is_lonlat(first.crs_wkt):
        return cols
    around = 360.0 / geodesy.frame_of(first.crs_wkt).degrees_per_unit / abs(t.a)
    starts = np.mod(cols - cols[0], around)
    order = np.argsort(starts, kind="stable")
    ends = np.maximum.accumulate((starts + widths)[order])
    ends = np.maximum(ends, ends[-1] - around)
    gaps = np.append(starts[order][1:], starts[order[0]] + around) - ends
    widest = int(np.argmax(gaps))
    moved = starts.copy()
    moved[order[: widest + 1]] += around
    moved += cols[0] - moved[0]
    narrower = np.max(moved + widths) - np.min(moved) < np.max(cols + widths) - np.min(cols) - 0.5
    return moved if narrower else cols


def _is_lonlat(wkt: str) -> bool:
    return bool(wkt) and geodesy.frame_of(wkt).is_lonlat


def _misfit(first: Tile, tile: Tile, row: float, col: float) -> str | None:
    """Say how two tiles differ, None where they fit."""
    problem = _crs_misfit(first.crs_wkt, tile.crs_wkt)
    if problem:
        return problem
    a, b = first.transform, tile.transform
    size = max(tile.shape)
    cell = max(abs(a.a), abs(a.b), abs(a.d), abs(a.e))
    terms = zip((a.a, a.b, a.d, a.e), (b.a, b.b, b.d, b.e), strict=True)
    if any(abs(p - q) * size > _MISFIT * cell for p, q in terms):
        sizes = f"{_cell(a)} against {_cell(b)}"
        return f"cell size {sizes}; resample one to the grid of the other"
    across, down = abs(col - round(col)), abs(row - round(row))
    if max(across, down) > _MISFIT:
        return (
            f"the cells of the second are shifted by {across:.2f} of a cell across and {down:.2f} "
            "down; resample one to the grid of the other"
        )
    if first.height_factor != tile.height_factor:
        factors = f"{first.height_factor:.7g} m against {tile.height_factor:.7g} m"
        return f"a unit of height is {factors}; convert one of them"
    return None


@lru_cache(maxsize=1024)
def _crs_misfit(first_wkt: str, wkt: str) -> str | None:
    """Say how the coordinates or heights of two CRSs differ, None where they do not."""
    if first_wkt == wkt:
        return None
    one, other = geodesy.crs_from_user(first_wkt), geodesy.crs_from_user(wkt)
    if not geodesy.is_same_place(one, other):
        return f"CRS {one.name!r} against {other.name!r}; warp one to the CRS of the other"
    level, other_level = geodesy.vertical_part(one), geodesy.vertical_part(other)
    if level is None and other_level is None:
        return None
    if level is None or other_level is None:
        names = [geodesy.height_datum(crs) for crs in (one, other)]
        told = " against ".join("unstated" if name is None else repr(name) for name in names)
        return (
            f"datum of the heights {told}; if they are the same, state it with --crs, like "
            "EPSG:4326+5773"
        )
    if level.equals(other_level, ignore_axis_order=True):
        return None
    names = [geodesy.height_datum(crs) for crs in (one, other)]
    return (
        f"datum of the heights {names[0]!r} against {names[1]!r}; convert the heights of one to "
        "that of the other"
    )


def _cell(t: Affine) -> str:
    turned = "" if t.b == t.d == 0.0 else f" (turned {degrees(atan2(t.d, t.a)):.4g} degrees)"
    return f"{t.a:.10g} x {t.e:.10g}{turned}"


# --- which of them? -----------------------------------------------------------------------------


@dataclass(frozen=True)
class Part:
    """The common part of a tile and a window.

    Attributes
    ----------
    tile : Tile
        The tile.
    row, col : int
        Where the common part begins in the tile.
    rows, cols : slice
        Where it is in the window.
    shared : tuple of pair of slices
        Rows and columns of the window that tiles before it reach into as well.
    """

    tile: Tile
    row: int
    col: int
    rows: slice
    cols: slice
    shared: tuple[tuple[slice, slice], ...]

    def covers(self, rows: int, cols: int) -> bool:
        """Tell whether this part is a whole window of that size."""
        return (self.rows, self.cols) == (slice(0, rows), slice(0, cols))

    def holds(self, row: int, col: int) -> bool:
        """Tell whether a cell of the window is in this part."""
        rows, cols = self.rows, self.cols
        return bool(rows.start <= row < rows.stop and cols.start <= col < cols.stop)


class Layout:
    """Where tiles lie, arranged so that those in a window are found at once.

    Parameters
    ----------
    tiles : sequence of Tile
        Tiles placed by `fit_together`.
    """

    def __init__(self, tiles: Sequence[Tile]) -> None:
        self.tiles = tiles
        boxes = [(t.row0, t.row0 + t.shape[0], t.col0, t.col0 + t.shape[1]) for t in tiles]
        box = np.array(boxes, dtype=np.int64).reshape(-1, 4)
        self._order = np.argsort(box[:, 0], kind="stable")
        self._boxes = box[self._order]
        self._tallest = int((box[:, 1] - box[:, 0]).max(initial=0))
        self._before = _overlapping(box)

    def parts(self, row_off: int, col_off: int, rows: int, cols: int) -> list[Part]:
        """Find the tiles that reach into a window, in the order given.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in the grid of the mosaic.
        rows, cols : int
            Size of the window.

        Returns
        -------
        list of Part
            One a tile. Filling only what is not known yet in it makes the first known height
            count.
        """
        found = self._find(row_off, row_off + rows, col_off, col_off + cols)
        order = np.argsort(self._order[found])
        numbers = self._order[found][order]
        offsets, ends = np.array([row_off, row_off, col_off, col_off]), [rows, rows, cols, cols]
        box = np.clip(self._boxes[found][order] - offsets, 0, np.array(ends))
        places = dict(zip(numbers.tolist(), box.tolist(), strict=True))
        made = []
        for number, (top, bottom, left, right) in places.items():
            tile = self.tiles[number]
            before = [places[n] for n in self._before.get(number, ()) if n in places]
            made.append(
                Part(
                    tile,
                    row_off + top - tile.row0,
                    col_off + left - tile.col0,
                    slice(top, bottom),
                    slice(left, right),
                    _shared(before, (top, bottom, left, right)),
                )
            )
        return made

    def _find(self, top: int, bottom: int, left: int, right: int) -> NDArray[np.int64]:
        """Find the boxes that overlap a window, sorted by their first row."""
        starts = self._boxes[:, 0]
        low = int(np.searchsorted(starts, top - self._tallest, side="right"))
        high = int(np.searchsorted(starts, bottom, side="left"))
        near = self._boxes[low:high]
        hit = (near[:, 1] > top) & (near[:, 2] < right) & (near[:, 3] > left)
        return np.flatnonzero(hit) + low


def _shared(
    before: Sequence[Sequence[int]], own: Sequence[int]
) -> tuple[tuple[slice, slice], ...]:
    """Give what a box shares with each of some others."""
    common = []
    for box in before:
        top, bottom = max(box[0], own[0]), min(box[1], own[1])
        left, right = max(box[2], own[2]), min(box[3], own[3])
        if top < bottom and left < right:
            common.append((slice(top, bottom), slice(left, right)))
    return tuple(common)


def _overlapping(box: NDArray[np.int64]) -> dict[int, list[int]]:
    """Give for each box that overlaps boxes before it their numbers, in order.

    Boxes are compared with those only that begin within them along one axis, the one along which
    these are fewer.
    """
    ways = []
    for axis in (0, 2):
        order = np.argsort(box[:, axis], kind="stable")
        ends = np.searchsorted(box[order, axis], box[order, axis + 1], side="left")
        ways.append((order, np.maximum(ends - np.arange(len(box)) - 1, 0)))
    order, counts = min(ways, key=lambda way: int(way[1].sum()))
    found: dict[int, list[int]] = {}
    for first, last in _portions(counts):
        portion = counts[first:last]
        one = np.repeat(np.arange(first, last), portion)
        begin = np.repeat(np.cumsum(portion) - portion, portion)
        other = one + 1 + np.arange(len(one)) - begin
        a, b = order[one], order[other]
        low, high = np.minimum(a, b), np.maximum(a, b)
        hit = (box[a, ::2] < box[b, 1::2]).all(axis=1) & (box[b, ::2] < box[a, 1::2]).all(axis=1)
        for earlier, later in zip(low[hit].tolist(), high[hit].tolist(), strict=True):
            found.setdefault(later, []).append(earlier)
    return {later: sorted(earlier) for later, earlier in found.items()}


def _portions(counts: NDArray[np.int64]) -> Iterator[tuple[int, int]]:
    """Cut a row of counts into pieces of about a million each."""
    total = np.cumsum(counts)
    first = 0
    while first < len(counts):
        goal = total[first] - counts[first] + _PORTION
        last = max(first + 1, int(np.searchsorted(total, goal, side="right")))
        yield first, last
        first = last
