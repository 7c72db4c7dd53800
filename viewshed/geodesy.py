"""Positions on the ellipsoid: the only place that talks to PROJ.

A point is always (x east or longitude, y north or latitude), whatever order the authority of a CRS
has chosen. Distances and bearings are those of the geodesic on the ellipsoid of the grid's own
datum, and no datum shift happens between a grid's CRS and its own latitudes and longitudes.

References
----------
.. [1] C. F. F. Karney, "Algorithms for geodesics", Journal of Geodesy 87 (2013) 43-55,
   doi:10.1007/s00190-012-0578-z.
.. [2] J. P. Snyder, "Map projections: a working manual", USGS Professional Paper 1395 (1987),
   equations 3-12, 4-18 and 4-20, doi:10.3133/pp1395.
"""

from dataclasses import replace
from functools import lru_cache
from math import degrees, frexp, hypot, ldexp, pi, radians, sin, sqrt
from typing import Any, NamedTuple

import numpy as np
from numpy.polynomial.chebyshev import chebpts1, chebvander
from numpy.typing import ArrayLike, NDArray
from pyproj import CRS, Geod, Transformer
from pyproj.exceptions import CRSError, ProjError

from viewshed.errors import InputError
from viewshed.grid import CellAreas, FloatArray, Grid, PostMap

_MAX_DEGREE = 10
_WANTED_ERROR = 0.001  # [cells]
_ALLOWED_ERROR = 0.01  # [cells]
_FIT_NODES = 24
_CHECK_NODES = 41
_AREA_SIZES = (5, 9, 13, 17, 25)
_AREA_WANTED = 1e-9
_AREA_ALLOWED = 1e-6
_AREA_STEP = 5000.0  # [m]
_WINDOW_MARGIN = 2


# --- coordinate reference systems ---------------------------------------------------------------


def crs_from_user(text: Any) -> CRS:
    """Make a coordinate reference system from what a user or a file gives.

    Parameters
    ----------
    text : str or pyproj.CRS
        Authority code, WKT, PROJJSON or PROJ text.

    Returns
    -------
    pyproj.CRS
        The whole CRS, with its vertical part if it has one.

    Raises
    ------
    InputError
        If it is no CRS, or not one with projected or geographic horizontal coordinates.
    """
    shown = " ".join(str(text).split())
    shown = shown if len(shown) <= 60 else shown[:57] + "..."
    try:
        crs = CRS.from_user_input(text)
    except (CRSError, TypeError, ValueError) as error:
        msg = f"{shown!r} is not a coordinate reference system; give it like EPSG:32633 or as WKT"
        raise InputError(msg) from error
    flat = _horizontal(crs)
    if not (flat.is_projected or flat.is_geographic):
        msg = (
            f"{shown!r} is a {flat.type_name}, in which places on the ground cannot be told; "
            "give a projected or geographic one, like EPSG:32633"
        )
        raise InputError(msg)
    return crs


def _horizontal(crs: CRS) -> CRS:
    """Take the two-dimensional part, without any tie to another datum."""
    if crs.is_bound and crs.source_crs is not None:
        return _horizontal(crs.source_crs)
    if crs.is_compound:
        return _horizontal(crs.sub_crs_list[0])
    if len(crs.axis_info) == 3 and (crs.is_projected or crs.is_geographic):
        return crs.to_2d()
    return crs


def _base(crs: CRS) -> CRS:
    """Give the latitudes and longitudes that a horizontal CRS stands on."""
    if crs.is_geographic and crs.is_derived and crs.source_crs is not None:
        return crs.source_crs
    if crs.is_geographic or crs.geodetic_crs is None:
        return crs
    return _horizontal(crs.geodetic_crs)


class _Frame(NamedTuple):
    """What is needed to go from the coordinates of a CRS to its own geodesics."""

    crs: CRS
    geod: Geod
    to_base: Transformer | None
    from_base: Transformer | None
    degrees_per_unit: float


@lru_cache(maxsize=32)
def _frame_of_wkt(wkt: str) -> _Frame:
    crs = _horizontal(crs_from_user(wkt))
    base = _base(crs)
    geod = base.get_geod()
    if geod is None:
        msg = f"CRS {crs.name!r} has no ellipsoid; give one that has"
        raise InputError(msg)
    unit = degrees(base.axis_info[0].unit_conversion_factor)
    unit = 1.0 if abs(unit - 1.0) < 1e-9 else unit
    if base is crs:
        return _Frame(crs, geod, None, None, unit)
    there = Transformer.from_crs(crs, base, always_xy=True)
    back = Transformer.from_crs(base, crs, always_xy=True)
    return _Frame(crs, geod, there, back, unit)


def _frame(crs: CRS | str) -> _Frame:
    return _frame_of_wkt(crs if isinstance(crs, str) else crs.to_wkt())


def horizontal_unit_factor(crs: CRS) -> float | None:
    """Give the metres in one unit of x and y.

    Parameters
    ----------
    crs : pyproj.CRS
        Projected or geographic, with or without a vertical part.

    Returns
    -------
    float or None
        Metres per unit [m]; None for a geographic CRS, whose unit is an angle.
    """
    flat = _horizontal(crs)
    if flat.is_geographic:
        return None
    return float(flat.axis_info[0].unit_conversion_factor)


def vertical_unit_factor(crs: CRS) -> float | None:
    """Give the metres in one unit of height.

    Parameters
    ----------
    crs : pyproj.CRS
        Any CRS that `crs_from_user` lets pass.

    Returns
    -------
    float or None
        Metres per unit [m]; None where the CRS has no vertical axis and so does not say.

    Raises
    ------
    InputError
        If the vertical axis counts downwards.
    """
    whole = crs.source_crs if crs.is_bound and crs.source_crs is not None else crs
    parts = whole.sub_crs_list[1:] if whole.is_compound else []
    axes = [axis for part in parts for axis in part.axis_info] or list(whole.axis_info[2:3])
    if not axes:
        return None
    if axes[0].direction.lower() == "down":
        msg = f"heights of CRS {crs.name!r} count downwards; convert them to count upwards"
        raise InputError(msg)
    return float(axes[0].unit_conversion_factor)


# --- points, distances, bearings ----------------------------------------------------------------


def lonlat(crs: CRS, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Give geodetic longitude and latitude on the datum of the CRS itself.

    Parameters
    ----------
    crs : pyproj.CRS
        Projected or geographic.
    x, y : array_like
        Coordinates [CRS units], x east or longitude and y north or latitude. Broadcast.

    Returns
    -------
    lon, lat : numpy.ndarray
        Longitude from the prime meridian of the datum and latitude [degrees]; infinite where the
        CRS describes no place.
    """
    return _lonlat(_frame(crs), x, y)


def _lonlat(frame: _Frame, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
    xs, ys = np.broadcast_arrays(np.asarray(x, np.float64), np.asarray(y, np.float64))
    if frame.to_base is None:
        return xs * frame.degrees_per_unit, ys * frame.degrees_per_unit
    lon, lat = frame.to_base.transform(xs.ravel(), ys.ravel())
    shape = xs.shape
    unit = frame.degrees_per_unit
    return np.reshape(lon, shape) * unit, np.reshape(lat, shape) * unit


def _from_lonlat(frame: _Frame, lon: FloatArray, lat: FloatArray) -> tuple[FloatArray, FloatArray]:
    lon, lat = lon / frame.degrees_per_unit, lat / frame.degrees_per_unit
    if frame.from_base is None:
        return lon, lat
    x, y = frame.from_base.transform(lon, lat)
    return np.asarray(x), np.asarray(y)


def transform_point(x: float, y: float, from_crs: CRS, to_crs: CRS) -> tuple[float, float]:
    """Carry a point from one CRS to another, datum shift included.

    Parameters
    ----------
    x, y : float
        Coordinates [units of `from_crs`].
    from_crs, to_crs : pyproj.CRS
        Where the point comes from and goes to; vertical parts play no role.

    Returns
    -------
    x, y : float
        Coordinates [units of `to_crs`].

    Raises
    ------
    InputError
        If the point has no place in `to_crs`.
    """
    start, end = _keep_ties(from_crs), _keep_ties(to_crs)
    try:
        moved = Transformer.from_crs(start, end, always_xy=True).transform(x, y)
    except ProjError as error:
        msg = f"no way leads from CRS {start.name!r} to {end.name!r}; give the point in the latter"
        raise InputError(msg) from error
    if not np.all(np.isfinite(moved)):
        msg = f"point {x!r},{y!r} in {start.name!r} has no place in {end.name!r}; check its CRS"
        raise InputError(msg)
    return float(moved[0]), float(moved[1])


def _keep_ties(crs: CRS) -> CRS:
    """Take the horizontal part but keep its tie to another datum."""
    return _keep_ties(crs.sub_crs_list[0]) if crs.is_compound else crs


def post_position(grid: Grid, x: float, y: float) -> tuple[float, float]:
    """Give the post coordinates of a point, on whichever turn of longitude the grid lies.

    Parameters
    ----------
    grid : Grid
        The grid.
    x, y : float
        The point in the CRS of the grid [CRS units].

    Returns
    -------
    row, col : float
        Fractional post coordinates, also outside the grid.
    """
    frame = _frame(grid.crs_wkt)
    if frame.to_base is None:
        turn = 360.0 / frame.degrees_per_unit
        left, _, right, _ = grid.bounds
        if not left <= x <= right:
            x += turn * round(((left + right) / 2.0 - x) / turn)
    row, col = grid.rowcol(x, y)
    return float(row), float(col)


def ellipsoid(crs: CRS) -> tuple[float, float]:
    """Give the ellipsoid of a CRS.

    Parameters
    ----------
    crs : pyproj.CRS
        Projected or geographic.

    Returns
    -------
    a, f : float
        Equatorial radius [m] and flattening.
    """
    geod = _frame(crs).geod
    return float(geod.a), float(geod.f)


def principal_radii(lat_deg: float, a: float, f: float) -> tuple[float, float]:
    """Give the principal radii of curvature of an ellipsoid.

    Parameters
    ----------
    lat_deg : float
        Geodetic latitude [degrees].
    a, f : float
        Equatorial radius [m] and flattening.

    Returns
    -------
    M, P : float
        Meridian and prime-vertical radius [m] ([2]_, equations 4-18 and 4-20).
    """
    e2 = f * (2.0 - f)
    w2 = 1.0 - e2 * sin(radians(lat_deg)) ** 2
    return a * (1.0 - e2) / (w2 * sqrt(w2)), a / sqrt(w2)


def inverse(
    crs: CRS, lon1: ArrayLike, lat1: ArrayLike, lon2: ArrayLike, lat2: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Give the geodesic between points on the datum of a CRS [1]_.

    Parameters
    ----------
    crs : pyproj.CRS
        The CRS whose ellipsoid is used.
    lon1, lat1, lon2, lat2 : array_like
        Start and end [degrees]. Broadcast together.

    Returns
    -------
    distance, bearing : numpy.ndarray
        Length [m] and true bearing at the start, clockwise from north [rad], -pi to pi.
    """
    return _inverse(_frame(crs).geod, lon1, lat1, lon2, lat2)


def _inverse(
    geod: Geod, lon1: ArrayLike, lat1: ArrayLike, lon2: ArrayLike, lat2: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    points = np.broadcast_arrays(*(np.asarray(v, np.float64) for v in (lon1, lat1, lon2, lat2)))
    start_lon, start_lat, end_lon, end_lat = (np.array(v).ravel() for v in points)
    bearing, _, distance = geod.inv(start_lon, start_lat, end_lon, end_lat)
    shape = points[0].shape
    return np.reshape(distance, shape), np.radians(np.reshape(bearing, shape))


def direct(
    crs: CRS, lon: float, lat: float, bearing: ArrayLike, distance: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Go along geodesics from a point [1]_.

    Parameters
    ----------
    crs : pyproj.CRS
        The CRS whose ellipsoid is used.
    lon, lat : float
        Start [degrees].
    bearing : array_like
        True bearing at the start, clockwise from north [rad].
    distance : array_like
        Length [m].

    Returns
    -------
    lon, lat : numpy.ndarray
        End points [degrees], longitudes from -180 to 180.
    """
    return _direct(_frame(crs).geod, lon, lat, bearing, distance)


def _direct(
    geod: Geod, lon: float, lat: float, bearing: ArrayLike, distance: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    azimuth, length = np.broadcast_arrays(
        np.degrees(np.asarray(bearing, np.float64)), np.asarray(distance, np.float64)
    )
    n = azimuth.size
    ends = geod.fwd(np.full(n, lon), np.full(n, lat), azimuth.ravel(), length.ravel())
    return np.reshape(ends[0], azimuth.shape), np.reshape(ends[1], azimuth.shape)


def _observer_lonlat(grid: Grid, frame: _Frame, row0: float, col0: float) -> tuple[float, float]:
    x, y = grid.xy(row0, col0)
    lon, lat = (float(v) for v in _lonlat(frame, x, y))
    if not (np.isfinite(lon) and abs(lat) <= 90.0):
        msg = (
            f"observer at {float(x)!r},{float(y)!r} is outside what CRS {frame.crs.name!r} can "
            "describe; check the position and the CRS"
        )
        raise InputError(msg)
    return lon, lat


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
    frame = _frame(grid.crs_wkt)
    lon0, lat0 = _observer_lonlat(grid, frame, row0, col0)
    everything = (np.full(2, -np.inf), np.full(2, np.inf), True)
    if range_m > 0.49 * pi * frame.geod.b:
        return everything
    lon, lat = _direct(frame.geod, lon0, lat0, np.radians(np.arange(360.0)), range_m)
    for pole in (90.0, -90.0):
        if float(_inverse(frame.geod, lon0, lat0, lon0, pole)[0]) <= 1.01 * range_m:
            if not _pole_is_a_point(frame, pole):
                return everything
            lon, lat = np.append(lon, lon0), np.append(lat, pole)
    if frame.to_base is None:
        lon = lon0 + (lon - lon0 + 180.0) % 360.0 - 180.0
    points = np.stack(grid.rowcol(*_from_lonlat(frame, lon, lat)))
    if not np.all(np.isfinite(points)):
        return everything
    away = np.hypot(points[0] - row0, points[1] - col0)
    near = away <= 40.0 * away.min()
    kept = points[:, near]
    if near.all():
        return kept.min(axis=1), kept.max(axis=1), False
    slack = 0.05 * (kept.max(axis=1) - kept.min(axis=1))
    return kept.min(axis=1) - slack, kept.max(axis=1) + slack, True


def _pole_is_a_point(frame: _Frame, pole: float) -> bool:
    """Tell whether meridians meet in one place at a pole in the coordinates of the CRS."""
    if frame.to_base is None:
        return False
    around = np.array([0.0, 90.0, 180.0, -90.0])
    x, y = _from_lonlat(frame, around, np.full(4, pole - np.sign(pole) * 1e-6))
    spread = hypot(np.ptp(x), np.ptp(y)) if np.all(np.isfinite(x + y)) else np.inf
    return spread * float(frame.crs.axis_info[0].unit_conversion_factor) < 100.0


# --- true local coordinates of posts ------------------------------------------------------------


class _Exact(NamedTuple):
    """Exact local coordinates about an observer, by geodesics."""

    grid: Grid
    frame: _Frame
    row0: float
    col0: float
    lon0: float
    lat0: float

    def en(self, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """E, N [m] at index steps x, y from the observer."""
        lon, lat = self.lonlat(x, y)
        distance, bearing = _inverse(self.frame.geod, self.lon0, self.lat0, lon, lat)
        return distance * np.sin(bearing), distance * np.cos(bearing)

    def lonlat(self, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude [degrees] at index steps x, y from the observer."""
        return _lonlat(self.frame, *self.grid.xy(y + self.row0, x + self.col0))


def fit_post_map(grid: Grid, row0: float, col0: float, *, range_m: float) -> PostMap:
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
    frame = _frame(grid.crs_wkt)
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
    return _accepted(best, range_m)


def _accepted(found: PostMap | None, range_m: float) -> PostMap:
    """Pass a map that is good enough; else say what range would be."""
    if found is not None and found.error_cells <= _ALLOWED_ERROR:
        return found
    if found is None or not np.isfinite(found.error_cells):
        msg = f"the places of posts within {range_m:g} m cannot be told; give a smaller range"
        raise InputError(msg)
    cure = 0.8 * range_m * (_ALLOWED_ERROR / found.error_cells) ** (1.0 / (_MAX_DEGREE + 1))
    msg = (
        f"the places of posts within {range_m / 1000:g} km are only known to "
        f"{found.error_cells:.2g} of a cell ({found.error_m:.2g} m), not to {_ALLOWED_ERROR:g}; "
        f"give a range of {cure / 1000:.2g} km"
    )
    raise InputError(msg)


def _post_map(exact: _Exact, terms: FloatArray, scale: float) -> PostMap:
    """Take the linear part at the observer out of E and N; the errors are still unknown."""
    jacobian = np.stack([terms[:, 1, 0], terms[:, 0, 1]], axis=1) / scale
    pq = np.einsum("kl,lij->kij", np.linalg.inv(jacobian), terms)
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
            length = _inverse(exact.frame.geod, *here, *point)[0]
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


# --- true areas of cells ------------------------------------------------------------------------


def cell_areas(grid: Grid) -> CellAreas:
    """Give the true areas of the cells of a grid on the ellipsoid.

    Cells of a geographic grid without rotation are exact, row by row ([2]_, equation 3-12). Else
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
    frame = _frame(grid.crs_wkt)
    t = grid.transform
    if frame.to_base is None and t.b == 0.0 and t.d == 0.0:
        _, y = grid.xy(np.arange(grid.rows + 1) - 0.5, 0.0)
        lat = np.clip(_lonlat(frame, 0.0, y)[1], -90.0, 90.0)
        width = abs(radians(float(t.a) * frame.degrees_per_unit))
        bands = np.abs(np.diff(_area_to_latitude(lat, frame.geod.a, frame.geod.f))) * width
        return CellAreas(bands[:, np.newaxis], np.ones((1, grid.cols)), 0.0)
    best: tuple[float, FloatArray, FloatArray] | None = None
    check_u, check_v = (m.ravel() for m in np.meshgrid(*[np.linspace(-1.0, 1.0, 12)] * 2))
    exact = _cell_area(grid, frame, check_u, check_v)
    for n in _AREA_SIZES:
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
        if error <= _AREA_WANTED:
            break
    assert best is not None
    return _areas_on_grid(grid, *best)


def _areas_on_grid(grid: Grid, error: float, by_row: FloatArray, by_col: FloatArray) -> CellAreas:
    if not error <= _AREA_ALLOWED:
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
    """Area [m2] between equator and latitude per radian of longitude ([2]_, equation 3-12)."""
    e = sqrt(max(f * (2.0 - f), 0.0))
    s = np.sin(np.radians(lat_deg))
    if e < 1e-9:
        return a * a * s
    b2 = (a * (1.0 - f)) ** 2
    return b2 / 2.0 * (s / (1.0 - (e * s) ** 2) + np.arctanh(e * s) / e)


def _cell_area(grid: Grid, frame: _Frame, u: FloatArray, v: FloatArray) -> FloatArray:
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
        h = _AREA_STEP / max(float(np.linalg.norm(ends[1] - ends[0])), 1e-9)
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


def _in_space(grid: Grid, frame: _Frame, row: FloatArray, col: FloatArray) -> FloatArray:
    """Earth-centred coordinates [m], shape (3, n), of index coordinates on the ellipsoid."""
    lon, lat = (np.radians(v) for v in _lonlat(frame, *grid.xy(row, col)))
    a, e2 = frame.geod.a, frame.geod.f * (2.0 - frame.geod.f)
    p = a / np.sqrt(1.0 - e2 * np.sin(lat) ** 2)
    return np.stack(
        [p * np.cos(lat) * np.cos(lon), p * np.cos(lat) * np.sin(lon), p * (1.0 - e2) * np.sin(lat)]
    )
