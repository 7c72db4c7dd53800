"""The posts within range and their true places, fitted to exact geodesics.

A `PostMap` stands for the geodesics from one observer to every post of a window: polynomials of
the index coordinates whose error is measured, not assumed.

References
----------
.. [1] C. F. F. Karney, "Algorithms for geodesics", Journal of Geodesy 87 (2013) 43-55,
   doi:10.1007/s00190-012-0578-z.
"""

from dataclasses import replace
from math import frexp, hypot, ldexp, pi
from typing import NamedTuple

import numpy as np
from numpy.polynomial.chebyshev import chebpts1

from viewshed.errors import InputError
from viewshed.geodesy import Frame, frame_of, principal_radii
from viewshed.grid import FloatArray, Grid, PostMap

_MAX_DEGREE = 10
_WANTED_ERROR = 0.001  # [cells]
ALLOWED_ERROR = 0.01  # [cells]
_FIT_NODES = 24
_CHECK_NODES = 41
_WINDOW_MARGIN = 2
_NO_BEND = 1e-9  # effect of a term that is rounding of the fit [cells]


# --- the part of a grid within range ------------------------------------------------------------


def range_window(
    grid: Grid, row0: float, col0: float, range_m: float
) -> tuple[tuple[int, int, int, int], bool]:
    """Find the window of a grid that holds every post within range.

    Parameters
    ----------
    grid : Grid
        The grid.
    row0, col0 : float
        Post coordinates of the observer, also outside the grid.
    range_m : float
        Farthest geodesic distance [m].

    Returns
    -------
    window : tuple of int
        ``(row_off, col_off, rows, cols)``: no post outside it is within range; a few posts wider
        than need be.
    reaches_past : bool
        True if some place within range lies outside the cells of the grid.

    Raises
    ------
    InputError
        If the range is not a positive number, no post can be within range, or the CRS cannot
        describe the observer.
    """
    _check_range(range_m)
    low, high, cut = _range_box(grid, row0, col0, range_m)
    past = cut or bool(np.any(low < -0.5) or np.any(high > np.array(grid.shape) - 0.5))
    pad = _WINDOW_MARGIN + 1e-4 * np.where(np.isfinite(high - low), high - low, 0.0)
    first = np.maximum(np.floor(low - pad), 0.0)
    last = np.minimum(np.ceil(high + pad), np.array(grid.shape) - 1.0)
    if np.any(last < first):
        msg = (
            f"no post of the grid is within {range_m:g} m of the observer at row {row0:g}, "
            f"column {col0:g}; move the observer or give a larger range"
        )
        raise InputError(msg)
    rows, cols = (int(v) for v in last - first + 1.0)
    return (int(first[0]), int(first[1]), rows, cols), past


def _check_range(range_m: float) -> None:
    if not (range_m > 0.0 and np.isfinite(range_m)):
        msg = f"range {range_m!r} m is not a positive number; give a length like 30km"
        raise InputError(msg)


def _range_box(
    grid: Grid, row0: float, col0: float, range_m: float
) -> tuple[FloatArray, FloatArray, bool]:
    """Give the least and greatest (row, col) of the circle, and whether the CRS cuts it."""
    frame = frame_of(grid.crs_wkt)
    lon0, lat0 = _observer_lonlat(grid, frame, row0, col0)
    everything = (np.full(2, -np.inf), np.full(2, np.inf), True)
    if range_m > 0.49 * pi * frame.geod.b:
        return everything
    lon, lat = frame.direct(lon0, lat0, np.radians(np.arange(360.0)), range_m)
    for pole in (90.0, -90.0):
        if float(frame.inverse(lon0, lat0, lon0, pole)[0]) <= 1.01 * range_m:
            if not _pole_is_a_point(frame, pole):
                return everything
            lon, lat = np.append(lon, lon0), np.append(lat, pole)
    if frame.is_lonlat:
        lon = lon0 + (lon - lon0 + 180.0) % 360.0 - 180.0
    points = np.stack(grid.rowcol(*frame.xy(lon, lat)))
    if not np.all(np.isfinite(points)):
        return everything
    away = np.hypot(points[0] - row0, points[1] - col0)
    near = away <= 40.0 * away.min()
    kept = points[:, near]
    if near.all():
        return kept.min(axis=1), kept.max(axis=1), False
    slack = 0.05 * (kept.max(axis=1) - kept.min(axis=1))
    return kept.min(axis=1) - slack, kept.max(axis=1) + slack, True


def _pole_is_a_point(frame: Frame, pole: float) -> bool:
    """Tell whether meridians meet in one place at a pole in the coordinates of the CRS."""
    if frame.is_lonlat:
        return False
    around = np.array([0.0, 90.0, 180.0, -90.0])
    x, y = frame.xy(around, np.full(4, pole - np.sign(pole) * 1e-6))
    spread = hypot(np.ptp(x), np.ptp(y)) if np.all(np.isfinite(x + y)) else np.inf
    return spread * float(frame.crs.axis_info[0].unit_conversion_factor) < 100.0


def _observer_lonlat(grid: Grid, frame: Frame, row0: float, col0: float) -> tuple[float, float]:
    x, y = grid.xy(row0, col0)
    lon, lat = (float(v) for v in frame.lonlat(x, y))
    if not (np.isfinite(lon) and abs(lat) <= 90.0):
        msg = (
            f"observer at {float(x)!r},{float(y)!r} is outside what CRS {frame.crs.name!r} can "
            "describe; check the position and the CRS"
        )
        raise InputError(msg)
    return lon, lat


# --- true local coordinates of posts ------------------------------------------------------------


class _Exact(NamedTuple):
    """Exact local coordinates about an observer, by geodesics."""

    grid: Grid
    frame: Frame
    row0: float
    col0: float
    lon0: float
    lat0: float

    def en(self, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """E, N [m] at index steps x, y from the observer."""
        lon, lat = self.lonlat(x, y)
        distance, bearing = self.frame.inverse(self.lon0, self.lat0, lon, lat)
        return distance * np.sin(bearing), distance * np.cos(bearing)

    def lonlat(self, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude [degrees] at index steps x, y from the observer."""
        return self.frame.lonlat(*self.grid.xy(y + self.row0, x + self.col0))


def fit_post_map(
    grid: Grid,
    row0: float,
    col0: float,
    *,
    range_m: float,
    allowed_cells: float = ALLOWED_ERROR,
) -> PostMap:
    """Fit the map from posts to true local coordinates about an observer.

    Exact geodesics [1]_ on a lattice are fitted by polynomials of the least total degree, 1 to 10,
    whose error, measured on other points, is at most 0.1 % of a cell; failing that, by the best.

    Parameters
    ----------
    grid : Grid
        The grid; best the window that `range_window` gives.
    row0, col0 : float
        Post coordinates of the observer, also between posts and outside the grid.
    range_m : float
        Farthest geodesic distance [m]. The map holds for the posts of
        ``range_window(grid, row0, col0, range_m)`` and means nothing beyond them.
    allowed_cells : float
        Largest error accepted [cells]; only a drawing can bear more than the default.

    Returns
    -------
    PostMap
        The map with its measured error.

    Raises
    ------
    InputError
        If the error is more than 1 % of a cell, or the CRS cannot describe the window.
    """
    window, _ = range_window(grid, row0, col0, range_m)
    frame = frame_of(grid.crs_wkt)
    exact = _Exact(grid, frame, row0, col0, *_observer_lonlat(grid, frame, row0, col0))
    rows = np.array([min(window[0], row0), max(window[0] + window[2] - 1.0, row0)]) - row0
    cols = np.array([min(window[1], col0), max(window[1] + window[3] - 1.0, col0)]) - col0
    xs, ys = _mesh(_widened(cols), _widened(rows), _chebyshev_points(_FIT_NODES))
    fitted = np.stack(exact.en(xs, ys))
    usable = np.isfinite(fitted).all(axis=0)
    check_x, check_y = _mesh(cols, rows, np.linspace(-1.0, 1.0, _CHECK_NODES))
    checked = np.stack(exact.en(check_x, check_y))
    if not np.isfinite(checked).all() or usable.sum() < usable.size // 3:
        msg = (
            f"the grid within {range_m:g} m of the observer leaves what CRS {frame.crs.name!r} can "
            "describe; give a smaller range or check the CRS"
        )
        raise InputError(msg)
    scale = ldexp(1.0, frexp(max(float(np.max(np.abs([rows, cols]))), 0.5))[1])
    side = _smallest_side(exact, cols, rows)
    best: PostMap | None = None
    for degree in range(1, _MAX_DEGREE + 1):
        terms = _fit(xs[usable], ys[usable], fitted[:, usable], degree, scale)
        found = _post_map(exact, terms, scale)
        places = np.stack(found.en(check_y + row0, check_x + col0))
        error = float(np.max(np.hypot(*(places - checked))))
        if best is None or error < best.error_m / 1.2:
            best = replace(found, error_m=error, error_cells=error / side)
        if error <= _WANTED_ERROR * side:
            break
    return _accepted(best, range_m, allowed_cells)


def _accepted(found: PostMap | None, range_m: float, allowed: float) -> PostMap:
    """Pass a map that is good enough; else say what range would be."""
    if found is not None and found.error_cells <= allowed:
        return found
    if found is None or not np.isfinite(found.error_cells):
        msg = f"the places of posts within {range_m:g} m cannot be told; give a smaller range"
        raise InputError(msg)
    cure = 0.8 * range_m * (ALLOWED_ERROR / found.error_cells) ** (1.0 / (_MAX_DEGREE + 1))
    msg = (
        f"the places of posts within {range_m / 1000:g} km are only known to "
        f"{found.error_cells:.2g} of a cell ({found.error_m:.2g} m), not to {ALLOWED_ERROR:g}; "
        f"give a range of {cure / 1000:.2g} km"
    )
    raise InputError(msg)


def _post_map(exact: _Exact, terms: FloatArray, scale: float) -> PostMap:
    """Take the linear part at the observer out of E and N; the errors are still unknown."""
    jacobian = np.stack([terms[:, 1, 0], terms[:, 0, 1]], axis=1) / scale
    pq = np.einsum("kl,lij->kij", np.linalg.inv(jacobian), terms)
    # rounding alone would bend a meridian away from the grid's own column
    pq[np.abs(pq) < _NO_BEND] = 0.0
    pq[:, 1, 0] = scale, 0.0
    pq[:, 0, 1] = 0.0, scale
    geod = exact.frame.geod
    meridian, prime = principal_radii(exact.lat0, geod.a, geod.f)
    return PostMap(
        row0=float(exact.row0),
        col0=float(exact.col0),
        jacobian=jacobian,
        scale=scale,
        cp=pq[0],
        cq=pq[1],
        error_m=np.inf,
        error_cells=np.inf,
        lon=exact.lon0,
        lat=exact.lat0,
        radius_meridian=meridian,
        radius_prime_vertical=prime,
    )


def _chebyshev_points(n: int) -> FloatArray:
    """Chebyshev points stretched to reach both ends of -1 to 1."""
    points = np.asarray(chebpts1(n), dtype=np.float64)
    stretched: FloatArray = points / points[-1]
    return stretched


def _widened(ends: FloatArray) -> FloatArray:
    """Widen a range of index steps to at least eight, so that no fit is degenerate."""
    lack = max(0.0, 8.0 - float(ends[1] - ends[0])) / 2.0
    return np.array([ends[0] - lack, ends[1] + lack])


def _mesh(cols: FloatArray, rows: FloatArray, nodes: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Spread nodes of -1 to 1 over ranges of columns and rows; give flat x and y."""
    along = [(e[0] + e[1]) / 2.0 + (e[1] - e[0]) / 2.0 * nodes for e in (cols, rows)]
    x, y = np.meshgrid(*along)
    return x.ravel(), y.ravel()


def _smallest_side(exact: _Exact, cols: FloatArray, rows: FloatArray) -> float:
    """Measure the smallest side of a cell [m] on a coarse lattice."""
    x, y = _mesh(cols, rows, np.linspace(-1.0, 1.0, 7))
    here = exact.lonlat(x, y)
    sides = []
    for dx, dy in ((0.5, 0.0), (0.0, 0.5)):
        before, after = exact.lonlat(x - dx, y - dy), exact.lonlat(x + dx, y + dy)
        for point in (before, after):
            length = exact.frame.inverse(*here, *point)[0]
            sides.append(2.0 * length[np.isfinite(length)])
    return float(np.min(np.concatenate(sides)))


def _exponents(degree: int) -> list[tuple[int, int]]:
    return [(i, k - i) for k in range(1, degree + 1) for i in range(k, -1, -1)]


def _fit(x: FloatArray, y: FloatArray, en: FloatArray, degree: int, scale: float) -> FloatArray:
    """Fit E and N, zero at the observer: coefficients [m] of powers of x/scale and y/scale."""
    reach_x, reach_y = float(np.max(np.abs(x))), float(np.max(np.abs(y)))
    powers = _exponents(degree)
    xp = (x / reach_x)[:, np.newaxis] ** np.arange(degree + 1)
    yp = (y / reach_y)[:, np.newaxis] ** np.arange(degree + 1)
    design = np.stack([xp[:, i] * yp[:, j] for i, j in powers], axis=1)
    solved = np.linalg.lstsq(design, en.T, rcond=1e-15)[0]
    terms = np.zeros((2, degree + 1, degree + 1))
    for (i, j), pair in zip(powers, solved, strict=True):
        terms[:, i, j] = pair * (scale / reach_x) ** i * (scale / reach_y) ** j
    return terms
