"""True extent and sizes of a grid, along geodesics."""

import numpy as np

from viewshed.geodesy import frame_of, horizontal_unit_factor
from viewshed.grid import Grid


def lonlat_bounds(grid: Grid) -> tuple[float, float, float, float] | None:
    """Give the extent of a grid on the datum of its CRS.

    Returns
    -------
    tuple of float or None
        West, south, east and north [degrees]; None where the CRS describes no place in the grid.
    """
    rows, cols = (np.linspace(-0.5, n - 0.5, 33) for n in grid.shape)
    lon, lat = frame_of(grid.crs_wkt).lonlat(*grid.xy(rows[:, None], cols[None, :]))
    known = np.isfinite(lon) & np.isfinite(lat)
    if not known.any():
        return None
    lon, lat = lon[known], lat[known]
    return float(lon.min()), float(lat.min()), float(lon.max()), float(lat.max())


def cell_size(grid: Grid) -> tuple[float, float]:
    """Give the true size of the cell in the middle of a grid, along geodesics.

    Returns
    -------
    along_row, along_column : float
        Length of a step to the next column and to the next row [m]; NaN where the CRS describes
        no place there.
    """
    row, col = (grid.rows - 1) / 2.0, (grid.cols - 1) / 2.0
    frame = frame_of(grid.crs_wkt)
    ends = ([row, row, row - 0.5, row + 0.5], [col - 0.5, col + 0.5, col, col])
    lon, lat = frame.lonlat(*grid.xy(*ends))
    if not (np.isfinite(lon).all() and np.isfinite(lat).all()):
        return float("nan"), float("nan")
    length, _ = frame.inverse(lon[[0, 2]], lat[[0, 2]], lon[[1, 3]], lat[[1, 3]])
    return float(length[0]), float(length[1])


def unit_lengths(grid: Grid, x: float, y: float) -> tuple[float, float]:
    """Give the true lengths of a unit of x and a unit of y at a place of a grid.

    Returns
    -------
    float, float
        Lengths [m]; the nominal ones where the CRS describes no place there.
    """
    t = grid.transform
    step = 0.25 * min(abs(t.a) + abs(t.b), abs(t.d) + abs(t.e))
    frame = frame_of(grid.crs_wkt)
    lon, lat = frame.lonlat([x - step, x + step, x, x], [y, y, y - step, y + step])
    if not (np.isfinite(lon).all() and np.isfinite(lat).all()):
        unit = horizontal_unit_factor(frame.crs)
        return (unit, unit) if unit is not None else (1.0, 1.0)
    length, _ = frame.inverse(lon[[0, 2]], lat[[0, 2]], lon[[1, 3]], lat[[1, 3]])
    return float(length[0]) / (2.0 * step), float(length[1]) / (2.0 * step)
