"""What rasters and their user state of CRS and unit of height, brought together."""

import warnings
from collections.abc import Iterable
from typing import Any

from viewshed import geodesy
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io.mosaic import Header, Tile

#: Metres in one unit of height, by the name of the unit that the user states.
HEIGHT_UNITS = {"m": 1.0, "ft": 0.3048, "us-ft": 1200.0 / 3937.0}

_FEET = ("foot", "feet", "ft")
_UNIT_NAMES = {
    1.0: ("m", "metre", "metres", "meter", "meters"),
    0.3048: ("ft", "foot", "feet", "international foot", "international feet", "foot_intl"),
    1200.0 / 3937.0: (
        *("us-ft", "ft-us", "us_ft", "ft_us", "ftus", "usft", "foot_us", "sfoot", "sft"),
        *(f"{us} {ft}" for us in ("us survey", "u.s. survey", "survey", "us") for ft in _FEET),
    ),
    0.01: ("cm", "centimetre", "centimetres", "centimeter", "centimeters"),
    0.1: ("dm", "decimetre", "decimetres", "decimeter", "decimeters"),
    1000.0: ("km", "kilometre", "kilometres", "kilometer", "kilometers"),
}
#: What some formats give for a unit that nobody stated.
_UNSAID = ("", "unspecified", "unknown", "undefined", "none")
#: How the WKT of a CRS begins that is tied to no place.
_LOCAL_CRS = ("LOCAL_CS", "ENGCRS", "ENGINEERINGCRS")


def settle(headers: Iterable[Header], crs: str | None, height_unit: str | None) -> list[Tile]:
    """Settle the CRS and the unit of height of rasters.

    Parameters
    ----------
    headers : iterable of Header
        What the rasters state.
    crs : str or None
        CRS that the user states, for rasters that state none or only a horizontal one.
    height_unit : {"m", "ft", "us-ft"} or None
        Unit of height that the user states.

    Returns
    -------
    list of Tile
        One a raster.

    Raises
    ------
    InputError
        If a CRS or unit of height is stated nowhere, or stated differently by file and user.
    DataError
        If a raster is in a CRS in which places on the ground cannot be told.
    """
    stated = None if crs is None else geodesy.crs_from_user(crs)
    wkts: dict[str, str] = {}
    units: dict[tuple[str, str], tuple[float, str]] = {}
    overruled: list[tuple[Header, float]] = []
    tiles = []
    for header in headers:
        if header.own_wkt not in wkts:
            wkts[header.own_wkt] = _crs_wkt(header, stated)
        wkt = wkts[header.own_wkt]
        if (wkt, header.unit) not in units:
            units[wkt, header.unit] = _height_unit(header, wkt, height_unit, overruled)
        factor, origin = units[wkt, header.unit]
        tiles.append(
            Tile(**vars(header), crs_wkt=wkt, height_factor=factor, height_unit_origin=origin)
        )
    for header, factor in overruled:
        msg = f"{header.path}: says that a unit of height is {factor:g} m; taken as {height_unit}"
        warnings.warn(msg, ViewshedWarning, stacklevel=3)
    return tiles


def _crs_wkt(header: Header, stated: Any) -> str:
    """Give the CRS of a raster, from the file or as the user states it."""
    path = header.path
    if not header.own_wkt:
        if stated is None:
            msg = f"{path}: has no coordinate reference system; state it with --crs"
            raise InputError(msg)
        return str(stated.to_wkt())
    try:
        own = geodesy.crs_from_user(header.own_wkt)
        geodesy.vertical_unit_factor(own)
    except InputError as error:
        if stated is not None and header.own_wkt.startswith(_LOCAL_CRS):
            return str(stated.to_wkt())
        msg = f"{path}: {error}"
        raise DataError(msg) from error
    if stated is None:
        return str(own.to_wkt())
    if not geodesy.is_same_place(own, stated):
        msg = (
            f"{path}: is in {own.name!r} and --crs says {stated.name!r}; leave --crs out or warp it"
        )
        raise InputError(msg)
    level, stated_level = geodesy.vertical_part(own), geodesy.vertical_part(stated)
    if level is None:
        return str(stated.to_wkt())
    if stated_level is not None and not level.equals(stated_level, ignore_axis_order=True):
        told = geodesy.height_datum(own), geodesy.height_datum(stated)
        msg = (
            f"{path}: says that heights count from {told[0]!r} and --crs says {told[1]!r}; leave "
            "--crs out or convert the heights"
        )
        raise InputError(msg)
    return str(own.to_wkt())


def _height_unit(
    header: Header, wkt: str, asked: str | None, overruled: list[tuple[Header, float]]
) -> tuple[float, str]:
    """Find out the unit of a raster's heights, and where it is known from."""
    crs = geodesy.crs_from_user(wkt)
    band, vertical = _named_unit(header.unit), geodesy.vertical_unit_factor(crs)
    horizontal = geodesy.horizontal_unit_factor(crs)
    if asked is not None:
        factor, stated = HEIGHT_UNITS[asked], band or vertical
        if stated is not None and abs(stated / factor - 1.0) > 1e-9:
            overruled.append((header, stated))
        return factor, "option"
    if header.unit.lower() not in _UNSAID and band is None:
        msg = (
            f"{header.path}: height unit {header.unit!r} is not known; state it with --height-unit"
        )
        raise InputError(msg)
    if band is not None:
        return band, "band"
    if vertical is not None:
        return vertical, "crs"
    if horizontal is not None and not _is_metric(horizontal):
        msg = (
            f"{header.path}: the grid is in units of {horizontal:.7g} m and nothing says the unit "
            "of the heights; state it with --height-unit m, ft or us-ft"
        )
        raise InputError(msg)
    return 1.0, "assumed metres"


def _named_unit(name: str) -> float | None:
    """Give the metres in a unit of length, None if the name is empty or not known."""
    wanted = " ".join(name.lower().strip("[]() ").split())
    return next((factor for factor, names in _UNIT_NAMES.items() if wanted in names), None)


def _is_metric(factor: float) -> bool:
    return any(abs(factor / unit - 1.0) < 1e-9 for unit in (1.0, 0.01, 0.1, 1000.0))
