"""Positions on the ellipsoid: the only place that talks to PROJ.

A point is always (x east or longitude, y north or latitude), whatever order the authority of a CRS
has chosen. Distances and bearings are those of the geodesic on the ellipsoid of the grid's own
datum, and no datum shift happens between a grid's CRS and its own latitudes and longitudes.

References
----------
.. [1] C. F. F. Karney, "Algorithms for geodesics", Journal of Geodesy 87 (2013) 43-55,
   doi:10.1007/s00190-012-0578-z.
.. [2] J. P. Snyder, "Map projections: a working manual", USGS Professional Paper 1395 (1987),
   equations 4-18 and 4-20, doi:10.3133/pp1395.
"""

from functools import lru_cache
from math import degrees, radians, sin, sqrt
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike
from pyproj import CRS, Geod, Transformer, proj_version_str
from pyproj.exceptions import CRSError, ProjError

from viewshed.errors import InputError
from viewshed.grid import FloatArray, Grid


def proj_version() -> str:
    """Give the version of PROJ that carries coordinates from one CRS to another."""
    return str(proj_version_str)


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


def vertical_part(crs: CRS) -> CRS | None:
    """Give the part of a CRS that says what its heights are counted from.

    Parameters
    ----------
    crs : pyproj.CRS
        Any CRS that `crs_from_user` lets pass.

    Returns
    -------
    pyproj.CRS or None
        The vertical CRS; the CRS itself where its third axis is the height above its ellipsoid;
        None where it does not say.
    """
    if crs.is_bound and crs.source_crs is not None:
        return vertical_part(crs.source_crs)
    if crs.is_compound:
        part = crs.sub_crs_list[1]
        return part.source_crs if part.is_bound and part.source_crs is not None else part
    return crs if len(crs.axis_info) == 3 else None


def height_datum(crs: CRS) -> str | None:
    """Name what the heights of a CRS are counted from, None where it does not say."""
    part = vertical_part(crs)
    if part is None:
        return None
    return str(part.name) if part.is_vertical else f"ellipsoid of {part.name}"


def is_same_place(one: CRS, other: CRS) -> bool:
    """Tell whether two CRSs give every place on the ground the same x and y."""
    return bool(_horizontal(one).equals(_horizontal(other), ignore_axis_order=True))


# --- from coordinates to geodesics --------------------------------------------------------------


class Frame(NamedTuple):
    """The way between the coordinates of one CRS and geodesics on its own datum.

    Made by `frame_of`, once for each CRS; for the modules that work on many points of one grid.

    Attributes
    ----------
    crs : pyproj.CRS
        The horizontal CRS, without any tie to another datum.
    geod : pyproj.Geod
        Its ellipsoid: radii `a` and `b` [m], flattening `f`.
    to_base, from_base : pyproj.Transformer or None
        From its coordinates to its own longitudes and latitudes, and back; None where they are
        the same.
    degrees_per_unit : float
        Degrees in one unit of those longitudes and latitudes.
    """

    crs: CRS
    geod: Geod
    to_base: Transformer | None
    from_base: Transformer | None
    degrees_per_unit: float

    @property
    def is_lonlat(self) -> bool:
        """Whether x and y are longitude and latitude themselves."""
        return self.to_base is None

    def lonlat(self, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Give longitude and latitude [degrees] of coordinates, as the function `lonlat`."""
        xs, ys = np.broadcast_arrays(np.asarray(x, np.float64), np.asarray(y, np.float64))
        unit = self.degrees_per_unit
        if self.to_base is None:
            return xs * unit, ys * unit
        lon, lat = self.to_base.transform(xs.ravel(), ys.ravel())
        return np.reshape(lon, xs.shape) * unit, np.reshape(lat, xs.shape) * unit

    def xy(self, lon: FloatArray, lat: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Give the coordinates of longitudes and latitudes [degrees]; the inverse of `lonlat`."""
        lon, lat = lon / self.degrees_per_unit, lat / self.degrees_per_unit
        if self.from_base is None:
            return lon, lat
        x, y = self.from_base.transform(lon, lat)
        return np.asarray(x), np.asarray(y)

    def inverse(
        self, lon1: ArrayLike, lat1: ArrayLike, lon2: ArrayLike, lat2: ArrayLike
    ) -> tuple[FloatArray, FloatArray]:
        """Give distance [m] and bearing [rad] between points, as the function `inverse`."""
        ends = np.broadcast_arrays(*(np.asarray(v, np.float64) for v in (lon1, lat1, lon2, lat2)))
        start_lon, start_lat, end_lon, end_lat = (np.array(v).ravel() for v in ends)
        bearing, _, distance = self.geod.inv(start_lon, start_lat, end_lon, end_lat)
        shape = ends[0].shape
        return np.reshape(distance, shape), np.radians(np.reshape(bearing, shape))

    def direct(
        self, lon: float, lat: float, bearing: ArrayLike, distance: ArrayLike
    ) -> tuple[FloatArray, FloatArray]:
        """Give the ends [degrees] of geodesics from a point, as the function `direct`."""
        azimuth, length = np.broadcast_arrays(
            np.degrees(np.asarray(bearing, np.float64)), np.asarray(distance, np.float64)
        )
        n = azimuth.size
        ends = self.geod.fwd(np.full(n, lon), np.full(n, lat), azimuth.ravel(), length.ravel())
        return np.reshape(ends[0], azimuth.shape), np.reshape(ends[1], azimuth.shape)


@lru_cache(maxsize=32)
def _frame_of_wkt(wkt: str) -> Frame:
    crs = _horizontal(crs_from_user(wkt))
    base = _base(crs)
    geod = base.get_geod()
    if geod is None:
        msg = f"CRS {crs.name!r} has no ellipsoid; give one that has"
        raise InputError(msg)
    unit = degrees(base.axis_info[0].unit_conversion_factor)
    unit = 1.0 if abs(unit - 1.0) < 1e-9 else unit
    if base is crs:
        return Frame(crs, geod, None, None, unit)
    there = Transformer.from_crs(crs, base, always_xy=True)
    back = Transformer.from_crs(base, crs, always_xy=True)
    return Frame(crs, geod, there, back, unit)


def frame_of(crs: CRS | str) -> Frame:
    """Give the frame of a CRS, which may be its WKT.

    Returns
    -------
    Frame
        The way between its coordinates and its own geodesics.

    Raises
    ------
    InputError
        If it is no such CRS or has no ellipsoid.
    """
    return _frame_of_wkt(crs if isinstance(crs, str) else crs.to_wkt())


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
    return frame_of(crs).lonlat(x, y)


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


def wgs84(crs: CRS, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Carry points to longitude and latitude on WGS 84, datum shift included.

    Parameters
    ----------
    crs : pyproj.CRS
        Projected or geographic; a vertical part plays no role.
    x, y : array_like
        Coordinates [CRS units]. Broadcast. A latitude past a pole counts as the pole.

    Returns
    -------
    lon, lat : numpy.ndarray
        Longitude and latitude [degrees].

    Raises
    ------
    InputError
        If a point has no place on WGS 84.
    """
    xs, ys = np.broadcast_arrays(np.asarray(x, np.float64), np.asarray(y, np.float64))
    frame = frame_of(crs)
    if frame.is_lonlat:
        pole = 90.0 / frame.degrees_per_unit
        ys = np.clip(ys, -pole, pole)
    lon, lat = transform_points(xs, ys, crs, CRS.from_user_input("OGC:CRS84"))
    if not (np.all(np.isfinite(lon)) and np.all(np.isfinite(lat))):
        msg = f"part of the grid in {crs.name!r} has no place in longitude and latitude of WGS 84"
        raise InputError(msg)
    return lon, lat


def authority_code(crs: CRS) -> str | None:
    """Give the code under which an authority knows a CRS, like ``EPSG:32633``; None without one."""
    found = crs.to_authority()
    if found is None:
        return None
    code = ":".join(found)
    same = CRS.from_user_input(code).equals(crs, ignore_axis_order=True)
    return code if same else None


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
    frame = frame_of(grid.crs_wkt)
    if frame.is_lonlat:
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
    geod = frame_of(crs).geod
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
    return frame_of(crs).inverse(lon1, lat1, lon2, lat2)


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
    return frame_of(crs).direct(lon, lat, bearing, distance)


def transform_points(
    x: ArrayLike, y: ArrayLike, from_crs: CRS, to_crs: CRS
) -> tuple[FloatArray, FloatArray]:
    """Carry many points from one CRS to another, datum shift included.

    Parameters
    ----------
    x, y : array_like
        Coordinates [units of `from_crs`]. Broadcast together.
    from_crs, to_crs : pyproj.CRS
        Where the points come from and go to; vertical parts play no role.

    Returns
    -------
    x, y : numpy.ndarray
        Coordinates [units of `to_crs`], infinite where a point has no place there.

    Raises
    ------
    InputError
        If no way leads from one CRS to the other.
    """
    xs, ys = np.broadcast_arrays(np.asarray(x, np.float64), np.asarray(y, np.float64))
    try:
        way = _way(_keep_ties(from_crs).to_wkt(), _keep_ties(to_crs).to_wkt())
    except ProjError as error:
        msg = f"no way leads from CRS {from_crs.name!r} to {to_crs.name!r}; warp one to the other"
        raise InputError(msg) from error
    right, up = way.transform(xs.ravel(), ys.ravel())
    return np.reshape(right, xs.shape), np.reshape(up, xs.shape)


@lru_cache(maxsize=8)
def _way(from_wkt: str, to_wkt: str) -> Transformer:
    return Transformer.from_crs(CRS.from_wkt(from_wkt), CRS.from_wkt(to_wkt), always_xy=True)


def unit_name(crs: CRS) -> str:
    """Give the name of the unit of x and y."""
    return str(_horizontal(crs).axis_info[0].unit_name)
