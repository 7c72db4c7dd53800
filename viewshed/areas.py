"""True areas of the cells of a grid on the ellipsoid.

References
----------
.. [1] J. P. Snyder, "Map projections: a working manual", USGS Professional Paper 1395 (1987),
   equation 3-12, doi:10.3133/pp1395.
"""

from math import radians, sqrt
from typing import Any

import numpy as np
from numpy.polynomial.chebyshev import chebpts1, chebvander
from numpy.typing import NDArray

from viewshed.errors import InputError
from viewshed.geodesy import Frame, frame_of
from viewshed.grid import CellAreas, FloatArray, Grid

_SIZES = (5, 9, 13, 17, 25)  # nodes along each axis
_WANTED_ERROR = 1e-9
_ALLOWED_ERROR = 1e-6
_STEP = 5000.0  # [m]


def cell_areas(grid: Grid) -> CellAreas:
    """Give the true areas of the cells of a grid on the ellipsoid.

    Cells of a geographic grid without rotation are exact, row by row ([1]_, equation 3-12). Else
    the area scale is worked out exactly on a lattice, from the geodetic mapping, and interpolated;
    its error, measured on other points, is under one part in a million, or the grid is refused.

    Parameters
    ----------
    grid : Grid
        The grid.

    Returns
    -------
    CellAreas
        Areas [m2] by cell and summed over masks.

    Raises
    ------
    InputError
        If the CRS cannot describe the grid or the error is too large.
    """
    frame = frame_of(grid.crs_wkt)
    t = grid.transform
    if frame.is_lonlat and t.b == 0.0 and t.d == 0.0:
        _, y = grid.xy(np.arange(grid.rows + 1) - 0.5, 0.0)
        lat = np.clip(frame.lonlat(0.0, y)[1], -90.0, 90.0)
        width = abs(radians(float(t.a) * frame.degrees_per_unit))
        bands = np.abs(np.diff(_area_to_latitude(lat, frame.geod.a, frame.geod.f))) * width
        return CellAreas(bands[:, np.newaxis], np.ones((1, grid.cols)), 0.0)
    best: tuple[float, FloatArray, FloatArray] | None = None
    check_u, check_v = (m.ravel() for m in np.meshgrid(*[np.linspace(-1.0, 1.0, 12)] * 2))
    exact = _cell_area(grid, frame, check_u, check_v)
    for n in _SIZES:
        nodes = chebpts1(n)
        u, v = np.meshgrid(nodes, nodes, indexing="ij")
        basis = np.linalg.inv(chebvander(nodes, n - 1))
        weights = basis @ _cell_area(grid, frame, u.ravel(), v.ravel()).reshape(n, n) @ basis.T
        left, sizes, right = np.linalg.svd(weights)
        keep = max(1, int(np.sum(sizes > 1e-12 * sizes[0])))
        by_row, by_col = left[:, :keep] * sizes[:keep], right[:keep].T
        found = (chebvander(check_u, n - 1) @ by_row) * (chebvander(check_v, n - 1) @ by_col)
        error = float(np.max(np.abs(found.sum(axis=1) / exact - 1.0)))
        if best is None or error < best[0] / 1.2:
            best = error, by_row, by_col
        if error <= _WANTED_ERROR:
            break
    assert best is not None
    return _areas_on_grid(grid, *best)


def _areas_on_grid(grid: Grid, error: float, by_row: FloatArray, by_col: FloatArray) -> CellAreas:
    if not error <= _ALLOWED_ERROR:
        msg = (
            f"areas of the {grid.rows} x {grid.cols} cells are known to {error:.2g} only; "
            "give a smaller range"
        )
        raise InputError(msg)
    rows = chebvander(_unit(grid.rows), by_row.shape[0] - 1) @ by_row
    cols = chebvander(_unit(grid.cols), by_col.shape[0] - 1) @ by_col
    return CellAreas(rows, cols.T, error)


def summed_area(grid: Grid, mask: NDArray[Any]) -> float:
    """Sum the true areas of the cells chosen by a mask.

    Parameters
    ----------
    grid : Grid
        The grid.
    mask : numpy.ndarray, shape (rows, cols)
        Cells that are true or not zero are counted.

    Returns
    -------
    float
        Area [m2]. For several masks of one grid keep ``cell_areas(grid)`` and use its `total`.

    Raises
    ------
    InputError
        As `cell_areas`, and if the mask does not fit the grid.
    """
    return cell_areas(grid).total(mask)


def _unit(n: int) -> FloatArray:
    """Spread n cells over -1 to 1, edges at the ends."""
    return (2.0 * np.arange(n) + 1.0) / n - 1.0


def _area_to_latitude(lat_deg: FloatArray, a: float, f: float) -> FloatArray:
    """Area [m2] between equator and latitude per radian of longitude ([1]_, equation 3-12)."""
    e = sqrt(max(f * (2.0 - f), 0.0))
    s = np.sin(np.radians(lat_deg))
    if e < 1e-9:
        return a * a * s
    b2 = (a * (1.0 - f)) ** 2
    return b2 / 2.0 * (s / (1.0 - (e * s) ** 2) + np.arctanh(e * s) / e)


def _cell_area(grid: Grid, frame: Frame, u: FloatArray, v: FloatArray) -> FloatArray:
    """Area [m2] of cells centred at (u, v) of -1 to 1 over rows and columns.

    The ellipsoid is a surface in space: its two tangents along rows and columns come from central
    differences of fourth order, some kilometres wide, and their cross product is the area.
    """
    row = (u + 1.0) / 2.0 * grid.rows - 0.5
    col = (v + 1.0) / 2.0 * grid.cols - 0.5
    middle = np.array([(grid.rows - 1) / 2.0]), np.array([(grid.cols - 1) / 2.0])
    tangents = []
    for dr, dc in ((1.0, 0.0), (0.0, 1.0)):
        ends = [_in_space(grid, frame, middle[0] + s * dr, middle[1] + s * dc) for s in (-0.5, 0.5)]
        h = _STEP / max(float(np.linalg.norm(ends[1] - ends[0])), 1e-9)
        near, far = (
            _in_space(grid, frame, row + k * h * dr, col + k * h * dc)
            - _in_space(grid, frame, row - k * h * dr, col - k * h * dc)
            for k in (1.0, 2.0)
        )
        tangents.append((8.0 * near - far) / (12.0 * h))
    (ax, ay, az), (bx, by, bz) = tangents
    areas: FloatArray = np.sqrt(
        (ay * bz - az * by) ** 2 + (az * bx - ax * bz) ** 2 + (ax * by - ay * bx) ** 2
    )
    if not np.all(np.isfinite(areas)):
        msg = (
            f"the grid leaves what CRS {frame.crs.name!r} can describe, so its areas are not "
            "known; give a smaller range or check the CRS"
        )
        raise InputError(msg)
    return areas


def _in_space(grid: Grid, frame: Frame, row: FloatArray, col: FloatArray) -> FloatArray:
    """Earth-centred coordinates [m], shape (3, n), of index coordinates on the ellipsoid."""
    lon, lat = (np.radians(v) for v in frame.lonlat(*grid.xy(row, col)))
    a, e2 = frame.geod.a, frame.geod.f * (2.0 - frame.geod.f)
    p = a / np.sqrt(1.0 - e2 * np.sin(lat) ** 2)
    return np.stack(
        [p * np.cos(lat) * np.cos(lon), p * np.cos(lat) * np.sin(lon), p * (1.0 - e2) * np.sin(lat)]
    )
