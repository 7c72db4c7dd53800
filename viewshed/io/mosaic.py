"""Equal grids that form one: whether tiles fit together, and which of them a window needs."""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from math import atan2, degrees
from pathlib import Path

import numpy as np
from affine import Affine
from numpy.typing import NDArray

from viewshed import geodesy
from viewshed.errors import DataError
from viewshed.grid import Grid

Heights = NDArray[np.float32]

#: Farthest that the cells of two tiles may lie off each other [cells].
_MISFIT = 0.01


@dataclass(frozen=True)
class Tile:
    """What one raster says about itself, and where in the mosaic it lies."""

    path: Path
    shape: tuple[int, int]
    transform: Affine
    crs_wkt: str
    dtype: str
    block: tuple[int, int]
    nodata: float | None
    is_masked: bool
    scale: float
    offset: float
    unit: str
    files: tuple[Path, ...]
    height_factor: float = 1.0
    height_unit_origin: str = ""
    row0: int = 0
    col0: int = 0


def fit_together(tiles: list[Tile]) -> tuple[Grid, list[Tile]]:
    """Place tiles in one grid.

    Parameters
    ----------
    tiles : list of Tile
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
    placed = []
    for tile in tiles:
        problem = _misfit(first, tile)
        if problem:
            msg = f"{first.path} and {tile.path} do not fit together: {problem}"
            raise DataError(msg)
        col, row = _offset(first, tile)
        placed.append(replace(tile, row0=round(row), col0=round(col)))
    top, left = min(t.row0 for t in placed), min(t.col0 for t in placed)
    rows = max(t.row0 + t.shape[0] for t in placed) - top
    cols = max(t.col0 + t.shape[1] for t in placed) - left
    t = first.transform
    x, y = Grid(first.shape, t, first.crs_wkt).xy(top - 0.5, left - 0.5)
    transform = Affine(t.a, t.b, float(x), t.d, t.e, float(y))
    placed = [replace(t, row0=t.row0 - top, col0=t.col0 - left) for t in placed]
    return Grid((rows, cols), transform, first.crs_wkt), placed


def overlaps(
    tiles: Iterable[Tile], row_off: int, col_off: int, out: Heights
) -> Iterator[tuple[Tile, int, int, Heights]]:
    """Find the tiles that reach into a window, in their order.

    Parameters
    ----------
    tiles : iterable of Tile
        Tiles placed by `fit_together`.
    row_off, col_off : int
        First row and column of the window in the grid of the mosaic.
    out : numpy.ndarray, shape (rows, cols)
        Heights of the window.

    Yields
    ------
    tile : Tile
        A tile that reaches into the window.
    row, col : int
        Where the common part begins in the tile.
    part : numpy.ndarray
        The common part of `out`, a view. Filling only what is not known yet in it makes the first
        known height count.
    """
    rows, cols = out.shape
    for tile in tiles:
        first, left = max(row_off, tile.row0), max(col_off, tile.col0)
        last = min(row_off + rows, tile.row0 + tile.shape[0])
        right = min(col_off + cols, tile.col0 + tile.shape[1])
        if first < last and left < right:
            part = out[first - row_off : last - row_off, left - col_off : right - col_off]
            yield tile, first - tile.row0, left - tile.col0, part


def _offset(first: Tile, tile: Tile) -> tuple[float, float]:
    """Give the column and row of the corner of a tile in the cells of the first one."""
    row, col = Grid(first.shape, first.transform, "").rowcol(tile.transform.c, tile.transform.f)
    return float(col) + 0.5, float(row) + 0.5


def _misfit(first: Tile, tile: Tile) -> str | None:
    """Say how two tiles differ, None where they fit."""
    if tile.crs_wkt != first.crs_wkt:
        one, other = geodesy.crs_from_user(first.crs_wkt), geodesy.crs_from_user(tile.crs_wkt)
        if not one.equals(other, ignore_axis_order=True):
            return f"CRS {one.name!r} against {other.name!r}; warp one to the CRS of the other"
    a, b = first.transform, tile.transform
    size = max(tile.shape)
    cell = max(abs(a.a), abs(a.b), abs(a.d), abs(a.e))
    terms = zip((a.a, a.b, a.d, a.e), (b.a, b.b, b.d, b.e), strict=True)
    if any(abs(p - q) * size > _MISFIT * cell for p, q in terms):
        sizes = f"{_cell(a)} against {_cell(b)}"
        return f"cell size {sizes}; resample one to the grid of the other"
    col, row = _offset(first, tile)
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


def _cell(t: Affine) -> str:
    turned = "" if t.b == t.d == 0.0 else f" (turned {degrees(atan2(t.d, t.a)):.4g} degrees)"
    return f"{t.a:.10g} x {t.e:.10g}{turned}"
