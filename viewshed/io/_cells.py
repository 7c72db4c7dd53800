"""The cells of one tile as metres, strip by strip."""

from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field
from functools import lru_cache
from math import ceil, isinf, isnan, sqrt
from queue import SimpleQueue
from typing import Any

import numpy as np
from numpy.typing import NDArray
from rasterio.windows import Window

from viewshed.errors import DataError
from viewshed.io import voids
from viewshed.io._header import check_header, opened, reading_env
from viewshed.io._pool import in_order
from viewshed.io.mosaic import Heights, Part, Tile
from viewshed.io.raster import threads_allowed

#: Most cells of a strip that is read at a time.
_STRIP_CELLS = 1 << 22
#: Rows that are made void at a time.
_VOID_ROWS = 256
#: Most cells of a tile that are looked at to understand one value.
_MOST_CELLS = 1 << 28
#: Fewest cells of a block that a thread unpacks faster than it is handed the block.
_WORTH_A_THREAD = 1 << 15
#: Formats that several threads can read at a time, and the most threads that do.
_THREADED = {"GTiff", "COG"}
_MOST_READERS = 4


@dataclass
class Noticed:
    """What was noticed while a part of a tile was read.

    Attributes
    ----------
    is_known : bool
        Whether any height in it is known.
    undeclared : dict of float to int
        Cells that hold a habitual void value which is not declared, by that value.
    missing_blocks : int
        Blocks that the file does not hold.
    difference : float
        Largest difference from the tiles before it where both are known [m], NaN where none is.
    where : tuple of int
        Row and column of the window where that is.
    """

    is_known: bool = False
    undeclared: dict[float, int] = field(default_factory=dict)
    missing_blocks: int = 0
    difference: float = np.nan
    where: tuple[int, int] = (0, 0)

    def add(self, other: "Noticed") -> None:
        """Add what was noticed in cells that follow."""
        self.is_known |= other.is_known
        for value, cells in other.undeclared.items():
            self.undeclared[value] = self.undeclared.get(value, 0) + cells
        if not isnan(other.difference) and not other.difference <= self.difference:
            self.difference, self.where = other.difference, other.where


def fill_void(heights: Heights) -> None:
    """Make all heights of an array void, strip by strip."""
    for first in range(0, heights.shape[0], _VOID_ROWS):
        heights[first : first + _VOID_ROWS] = np.nan


def fill(part: Part, window: Heights) -> Noticed:
    """Fill the cells of a window that are not known yet from a tile.

    Call it inside `reading_env`.

    Parameters
    ----------
    part : Part
        The tile and where it reaches into the window.
    window : numpy.ndarray, float32
        Heights of the window [m], NaN where they are not known yet; changed in place.

    Returns
    -------
    Noticed
        What was noticed.

    Raises
    ------
    DataError
        If the file is missing, truncated or damaged, has changed, or holds an infinite height.
    """
    notes, tile = Noticed(), part.tile
    shape = (part.rows.stop - part.rows.start, part.cols.stop - part.cols.start)
    boxes = list(_boxes(tile, part.row, part.col, shape))
    readers = _readers(tile, len(boxes))
    with ExitStack() as stack:
        files: SimpleQueue[Any] = SimpleQueue()
        for _ in range(readers):
            file = stack.enter_context(opened(tile.path, **_options(tile, readers)))
            check_header(tile, file)
            files.put(file)

        def read(box: Window) -> Noticed:
            own = files.get()
            try:
                return _fill_box(part, window, own, box)
            finally:
                files.put(own)

        for found in in_order(read, boxes, readers, reading_env):
            notes.add(found)
        notes.missing_blocks = _missing_blocks(tile, file, part.row, part.col, shape)
    return notes


def _fill_box(part: Part, window: Heights, file: Any, box: Window) -> Noticed:
    """Fill the cells of one box of a tile; boxes may be filled at the same time."""
    notes = Noticed()
    top, left = part.rows.start + box.row_off - part.row, part.cols.start + box.col_off - part.col
    target = window[top : top + box.height, left : left + box.width]
    if part.shared:
        heights = _to_metres(part.tile, file, box, notes)
        _compare(part, window, heights, (top, left), notes)
        np.copyto(target, heights, where=np.isnan(target))
    else:
        _to_metres(part.tile, file, box, notes, out=target)
    return notes


def _readers(tile: Tile, boxes: int) -> int:
    """Say how many threads read a tile, each from a file that it opened for itself."""
    if tile.driver not in _THREADED:
        return 1
    return max(1, min(boxes, _MOST_READERS, threads_allowed()))


def _options(tile: Tile, readers: int = 1) -> dict[str, str]:
    """Give options for reading a file: handing a small block to a thread takes longer than it."""
    is_worth_it = tile.is_compressed and tile.block[0] * tile.block[1] >= _WORTH_A_THREAD
    if tile.driver != "GTiff" or (is_worth_it and readers == 1):
        return {}
    return {"NUM_THREADS": "1"}


def height_at(part: Part, row: int, col: int) -> float:
    """Give the height that a tile has for one cell of the window [m], NaN for a void."""
    tile = part.tile
    at_row, at_col = part.row + row - part.rows.start, part.col + col - part.cols.start
    with opened(tile.path) as file:
        return float(_to_metres(tile, file, Window(at_col, at_row, 1, 1), Noticed())[0, 0])


def _compare(
    part: Part, window: Heights, heights: Heights, corner: tuple[int, int], notes: Noticed
) -> None:
    """Note the largest difference between a box of cells and what earlier tiles gave for it."""
    top, left = corner
    for rows, cols in part.shared:
        first, last = max(rows.start, top), min(rows.stop, top + heights.shape[0])
        west, east = max(cols.start, left), min(cols.stop, left + heights.shape[1])
        if first >= last or west >= east:
            continue
        own = heights[first - top : last - top, west - left : east - left]
        apart = np.abs(window[first:last, west:east] - own)
        largest = float(np.fmax.reduce(apart, axis=None))
        if isnan(largest) or largest <= notes.difference:
            continue
        notes.difference = largest
        r, c = np.unravel_index(int(np.nanargmax(apart)), apart.shape)
        notes.where = (first + int(r), west + int(c))


def _missing_blocks(tile: Tile, file: Any, row: int, col: int, shape: tuple[int, ...]) -> int:
    """Count blocks of a window that a GeoTIFF does not hold and that are not read as voids.

    A file whose writer was killed opens cleanly and reads as zeros there.
    """
    if file.driver not in {"GTiff", "COG"} or tile.nodata is not None or tile.is_masked:
        return 0
    high, wide = tile.block
    return sum(
        file.get_tag_item(f"BLOCK_OFFSET_{x}_{y}", "TIFF", 1) is None
        for y in range(row // high, (row + shape[0] - 1) // high + 1)
        for x in range(col // wide, (col + shape[1] - 1) // wide + 1)
    )


def _strips(tile: Tile, row: int, shape: tuple[int, ...]) -> Iterator[tuple[int, int]]:
    """Cut rows of a raster into strips of whole blocks: first row and number of rows."""
    rows, cols = shape[0], shape[1]
    block = tile.block[0]
    step = max(1, _STRIP_CELLS // cols // block) * block
    first, end = row, row + rows
    while first < end:
        stop = min(end, (first // step + 1) * step)
        yield first, stop - first
        first = stop


def _boxes(tile: Tile, row: int, col: int, shape: tuple[int, int]) -> Iterator[Window]:
    """Cut a part of a raster into boxes of whole blocks and moderate size, row by row."""
    step = max(1, _STRIP_CELLS // min(tile.block[0], shape[0]) // tile.block[1]) * tile.block[1]
    for first, count in _strips(tile, row, shape):
        left, end = col, col + shape[1]
        while left < end:
            stop = min(end, (left // step + 1) * step)
            yield Window(left, first, stop - left, count)
            left = stop


def _to_metres(
    tile: Tile, file: Any, window: Window, notes: Noticed, *, out: Heights | None = None
) -> Heights:
    """Read a box of cells as metres, NaN for void."""
    is_plain = tile.dtype == "float32" and _is_metres(tile)
    raw = file.read(1, window=window, out=out if is_plain else None)
    heights = _converted(tile, raw, out)
    for void in _voids(tile, file, raw, window):
        np.copyto(heights, np.float32(np.nan), where=void)
    low, high = _bounds(heights)
    if voids.may_hold_undeclared(tile, low, high):
        for value, void in voids.undeclared(tile, raw, heights, _is_habit):
            np.copyto(heights, np.float32(np.nan), where=void)
            cells = int(np.count_nonzero(void))
            notes.undeclared[value] = notes.undeclared.get(value, 0) + cells
        low, high = _bounds(heights)
    if isinf(low) or isinf(high):
        r, c = (int(v[0]) for v in np.nonzero(np.isinf(heights)))
        msg = (
            f"{tile.path}: the height at row {r + window.row_off}, column {c + window.col_off} is "
            "infinite; declare it as nodata or correct it"
        )
        raise DataError(msg)
    notes.is_known |= not isnan(low)
    return heights


@lru_cache(maxsize=4096)
def _is_habit(tile: Tile, value: float) -> bool:
    """Tell whether a value means a void in a tile, from the whole of it, whatever is asked for.

    Of a tile too large for that every so many rows and columns are looked at.
    """
    rows, cols = tile.shape
    skip = ceil(sqrt(rows * cols / _MOST_CELLS))
    with opened(tile.path, **_options(tile)) as file:

        def read(first: int, count: int) -> NDArray[Any]:
            thinned = (max(1, count // skip), max(1, cols // skip))
            window = Window(0, first, cols, count)
            return np.asarray(file.read(1, window=window, out_shape=thinned))

        strips = (read(*strip) for strip in _strips(tile, 0, tile.shape))
        return voids.speaks_of_voids(tile, value, strips)


def _is_metres(tile: Tile) -> bool:
    """Tell whether the cells of a tile are metres as they are."""
    return (tile.scale, tile.offset, tile.height_factor) == (1.0, 0.0, 1.0)


def _converted(tile: Tile, raw: NDArray[Any], out: Heights | None) -> Heights:
    """Turn cells into metres, which may be the same array; in `out` if one is given."""
    with np.errstate(over="ignore", invalid="ignore"):
        metres = raw
        if not _is_metres(tile):
            metres = raw.astype(np.float64)
            metres *= tile.scale
            metres += tile.offset
            metres *= tile.height_factor
        if out is None:
            return metres.astype(np.float32, copy=False)
        if metres is not out:
            np.copyto(out, metres, casting="unsafe")
        return out


def _voids(
    tile: Tile, file: Any, raw: NDArray[Any], window: Window
) -> Iterator[NDArray[np.bool_]]:
    """Give masks of the cells that the file says are void."""
    declared = voids.declared(raw, tile.nodata)
    if declared is not None:
        yield declared
    if tile.is_masked:
        yield file.read_masks(1, window=window) == 0
    if tile.pieces and tile.nodata is None and not tile.is_masked:
        yield _between_pieces(tile, window)


def _between_pieces(tile: Tile, window: Window) -> NDArray[np.bool_]:
    """Tell which cells of a virtual raster no file fills: it reads them as zeros."""
    empty = np.ones((window.height, window.width), dtype=np.bool_)
    for piece in tile.pieces:
        if piece.rows is None or piece.cols is None:
            return np.zeros_like(empty)
        rows = (max(0, edge - window.row_off) for edge in piece.rows)
        cols = (max(0, edge - window.col_off) for edge in piece.cols)
        empty[slice(*rows), slice(*cols)] = False
    return empty


def _bounds(heights: Heights) -> tuple[float, float]:
    """Give the lowest and highest known height of a strip, NaN if none is known."""
    low = float(np.fmin.reduce(heights, axis=None))
    return low, float(np.fmax.reduce(heights, axis=None))
