"""Observers, targets and sectors, and the texts in which lengths and places are given.

Everything is checked when it is made, so that the code further in meets only usable values.
"""

import re
from dataclasses import dataclass
from math import isfinite

import numpy as np
from numpy.typing import ArrayLike, NDArray

from viewshed.constants import DEFAULT_EYE_HEIGHT, DEFAULT_TARGET_HEIGHT
from viewshed.errors import InputError

#: Metres in each unit of length that a text can name.
LENGTH_UNITS = {
    "m": 1.0,
    "km": 1000.0,
    "cm": 0.01,
    "ft": 0.3048,
    "us-ft": 1200.0 / 3937.0,
    "mi": 1609.344,
    "nmi": 1852.0,
}

_NUMBER = r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
_LENGTH = re.compile(rf"\s*({_NUMBER})\s*([A-Za-z-]*)\s*")
_PAIR = re.compile(rf"\s*({_NUMBER})\s*,\s*({_NUMBER})\s*")


def _finite(value: float, what: str, cure: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = float("nan")
    if not isfinite(number):
        msg = f"{what} {value!r} is not a finite number; {cure}"
        raise InputError(msg)
    return number


#: Heights beyond this are slips of the pen [m].
_GREATEST_HEIGHT = 100_000.0
#: Half way round the Earth, about [m].
GREATEST_RANGE = 2e7


def _height(value: float, what: str) -> float:
    number = _finite(value, what, "give it in metres above ground")
    if number < 0.0:
        msg = f"{what} {number:g} m is below ground; give 0 or more"
        raise InputError(msg)
    if number > _GREATEST_HEIGHT:
        msg = f"{what} {number:g} m is no height on Earth; give at most {_GREATEST_HEIGHT:g} m"
        raise InputError(msg)
    return number


def _range(value: float) -> float:
    number = _finite(value, "range", "give it in metres")
    if not 0.0 < number <= GREATEST_RANGE:
        msg = f"range {number:g} m: give a length above 0 and up to {GREATEST_RANGE / 1e3:g} km"
        raise InputError(msg)
    return number


@dataclass(frozen=True)
class Observer:
    """The point that sight lines start from.

    Target height, range and sector are those of the run where the observer has none of its own.

    Parameters
    ----------
    x, y : float
        Position, x east or longitude and y north or latitude [units of `crs`].
    eye_height : float, optional
        Height of the eye above the ground [m]; 1.7 where neither height is given.
    name : str
        What the observer is called in results.
    crs : str, optional
        Coordinate reference system of `x` and `y`; that of the DEM if none.
    eye_elevation : float, optional
        Elevation of the eye in the DEM's datum [m], instead of `eye_height`, which is then None.
    target_height : float, optional
        Height above the ground of what this observer looks at [m].
    range_m : float, optional
        Farthest ground distance this observer considers [m], above 0.
    sector : Sector, optional
        Bearings this observer looks over.

    Raises
    ------
    InputError
        If a number is not finite, a height is negative, both heights of the eye are given, the
        range is not above 0 and up to 2e7 m, the sector is no `Sector`, or the name is empty.
    """

    x: float
    y: float
    eye_height: float | None = None
    name: str = "observer"
    crs: str | None = None
    eye_elevation: float | None = None
    target_height: float | None = None
    range_m: float | None = None
    sector: "Sector | None" = None

    def __post_init__(self) -> None:
        """Check every value."""
        for axis in ("x", "y"):
            value = _finite(getattr(self, axis), f"observer {axis}", "give the position as X,Y")
            object.__setattr__(self, axis, value)
        if not (isinstance(self.name, str) and self.name.strip()):
            msg = f"observer name {self.name!r} is empty; give it a word"
            raise InputError(msg)
        if any("\ud800" <= letter <= "\udfff" for letter in self.name):
            msg = f"observer name {self.name!r} is not UTF-8; write it in UTF-8"
            raise InputError(msg)
        if self.target_height is not None:
            height = _height(self.target_height, "target height")
            object.__setattr__(self, "target_height", height)
        if self.range_m is not None:
            object.__setattr__(self, "range_m", _range(self.range_m))
        if not (self.sector is None or isinstance(self.sector, Sector)):
            msg = f"sector {self.sector!r} is no sector; make it as Sector(from_deg, to_deg)"
            raise InputError(msg)
        self._settle_eye()

    def _settle_eye(self) -> None:
        """Check the height or elevation of the eye; 1.7 m above ground where neither is given."""
        if self.eye_elevation is None:
            given = DEFAULT_EYE_HEIGHT if self.eye_height is None else self.eye_height
            object.__setattr__(self, "eye_height", _height(given, "eye height"))
            return
        if self.eye_height is not None:
            msg = (
                f"eye height {self.eye_height!r} and eye elevation {self.eye_elevation!r} exclude "
                "each other; give one of them"
            )
            raise InputError(msg)
        cure = "give it in metres in the DEM's datum"
        elevation = _finite(self.eye_elevation, "eye elevation", cure)
        object.__setattr__(self, "eye_elevation", elevation)


@dataclass(frozen=True)
class Target:
    """What is looked at in each cell.

    Parameters
    ----------
    height : float
        Height above the ground [m], 0 or more.

    Raises
    ------
    InputError
        If the height is not finite or negative.
    """

    height: float = DEFAULT_TARGET_HEIGHT

    def __post_init__(self) -> None:
        """Check the height."""
        object.__setattr__(self, "height", _height(self.height, "target height"))


@dataclass(frozen=True)
class Sector:
    """Bearings an observer looks over, both ends included.

    Parameters
    ----------
    from_deg, to_deg : float
        First and last bearing, clockwise from true north [degrees], -360 to 360. A sector runs
        clockwise: 350 to 10 is 20 degrees wide. 0 to 360 is the full circle.

    Raises
    ------
    InputError
        If a bearing is not finite or outside -360 to 360, or both are the same direction.
    """

    from_deg: float
    to_deg: float

    def __post_init__(self) -> None:
        """Check both bearings."""
        for name in ("from_deg", "to_deg"):
            cure = "give degrees clockwise from true north"
            bearing = _finite(getattr(self, name), "sector bearing", cure)
            if abs(bearing) > 360.0:
                msg = f"sector bearing {bearing:g} is outside -360 to 360; {cure}"
                raise InputError(msg)
            object.__setattr__(self, name, bearing)
        if self.width_deg == 0.0:
            msg = (
                f"sector {self.from_deg:g},{self.to_deg:g} has no width; give two different "
                "bearings, or 0,360 for the full circle"
            )
            raise InputError(msg)

    @property
    def width_deg(self) -> float:
        """Width of the sector [degrees], more than 0 and at most 360."""
        if self.to_deg - self.from_deg == 360.0:
            return 360.0
        return (self.to_deg - self.from_deg) % 360.0

    def contains(self, bearing_deg: ArrayLike) -> NDArray[np.bool_]:
        """Tell which bearings lie in the sector.

        Parameters
        ----------
        bearing_deg : array_like
            Bearings clockwise from true north [degrees], any turn; NaN is in no sector.

        Returns
        -------
        numpy.ndarray of bool
            True inside and on both ends.
        """
        bearing = np.asarray(bearing_deg, dtype=np.float64)
        after_start = np.mod(bearing - self.from_deg, 360.0)
        at_end = np.mod(bearing - self.to_deg, 360.0) == 0.0
        inside: NDArray[np.bool_] = (after_start <= self.width_deg) | at_end
        return inside


def _with_unit(
    text: str, form: re.Pattern[str], units: dict[str, float], what: str, example: str
) -> float:
    """Read a number with a unit; the first unit is meant where none is given."""
    match = form.fullmatch(str(text))
    factor = units.get(match[2] or next(iter(units))) if match else None
    value = float(match[1]) * factor if match and factor else float("nan")
    if not isfinite(value):
        told = ", ".join(units)
        msg = f"{what} {text!r} is not a number with a unit; give it like {example} (units: {told})"
        raise InputError(msg)
    return value


def parse_length(text: str) -> float:
    """Read a length such as ``30km``.

    Parameters
    ----------
    text : str
        A number and a unit: m (also when no unit is given), km, cm, ft (0.3048 m), us-ft
        (1200/3937 m), mi (1609.344 m), nmi (1852 m).

    Returns
    -------
    float
        Length [m], with its sign.

    Raises
    ------
    InputError
        If it is not a finite number with one of these units.

    Examples
    --------
    >>> parse_length("30km"), parse_length("1.7"), parse_length("6 ft")
    (30000.0, 1.7, 1.8288000000000002)
    """
    return _with_unit(text, _LENGTH, LENGTH_UNITS, "length", "30km")


def _parse_pair(text: str, what: str, cure: str) -> tuple[float, float]:
    match = _PAIR.fullmatch(str(text))
    pair = (float(match[1]), float(match[2])) if match else (float("nan"),) * 2
    if not all(isfinite(v) for v in pair):
        msg = f"{what} {text!r} is not two finite numbers with a comma between; {cure}"
        raise InputError(msg)
    return pair


def parse_point(text: str) -> tuple[float, float]:
    """Read a position given as ``X,Y``.

    Parameters
    ----------
    text : str
        Two numbers: x east or longitude, y north or latitude.

    Returns
    -------
    x, y : float
        The position [CRS units].

    Raises
    ------
    InputError
        If it is not two finite numbers.

    Examples
    --------
    >>> parse_point("500000, 7200000.5")
    (500000.0, 7200000.5)
    """
    return _parse_pair(text, "point", "give it as X,Y, x east or longitude first")


def parse_sector(text: str) -> Sector:
    """Read a sector given as ``FROM,TO``.

    Parameters
    ----------
    text : str
        Two bearings clockwise from true north [degrees].

    Returns
    -------
    Sector
        The sector.

    Raises
    ------
    InputError
        If it is not two usable bearings.

    Examples
    --------
    >>> parse_sector("350,10").width_deg
    20.0
    """
    return Sector(*_parse_pair(text, "sector", "give it as FROM,TO in degrees, like 350,10"))


#: Square metres in each unit of area that a text can name.
AREA_UNITS = {
    "m2": 1.0,
    "ha": 10_000.0,
    "km2": 1_000_000.0,
    "ft2": 0.3048**2,
    "acre": 4046.8564224,
}
_AREA = re.compile(rf"\s*({_NUMBER})\s*([A-Za-z]+2?)?\s*")


def parse_area(text: str) -> float:
    """Read an area such as ``2ha``.

    Parameters
    ----------
    text : str
        A number and a unit: m2 (also when no unit is given), ha, km2, ft2 (of 0.3048 m), acre
        (4046.8564224 m2).

    Returns
    -------
    float
        Area [m2], with its sign.

    Raises
    ------
    InputError
        If it is not a finite number with one of these units.

    Examples
    --------
    >>> parse_area("2ha"), parse_area("900"), parse_area("0.5 km2")
    (20000.0, 900.0, 500000.0)
    """
    return _with_unit(text, _AREA, AREA_UNITS, "area", "2ha")
