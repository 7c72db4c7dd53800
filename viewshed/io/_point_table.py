"""Points with values in cells: what tables of text and vector files have in common."""

import re
import unicodedata
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

from viewshed.errors import DataError
from viewshed.places import LENGTH_UNITS

#: Columns that hold lengths, bearings, coordinates.
LENGTHS = ("eye_height", "eye_elevation", "target_height", "range")
BEARINGS = ("bearing_from", "bearing_to")
#: Columns that an observer can have beside its place.
VALUES = ("name", *LENGTHS, *BEARINGS)

_PLACES = {
    "x": ("x", "easting"),
    "y": ("y", "northing"),
    "lon": ("lon", "long", "lng", "longitude"),
    "lat": ("lat", "latitude"),
}
#: Letters that are left of a name cut to 10 characters, without its underscore.
_CUT = 9


class Column(NamedTuple):
    """A column: its name as given, what it means ("" if nothing), the unit of bare numbers."""

    name: str
    meaning: str
    unit: str = "m"


class Row(NamedTuple):
    """A point: where it stands in the file, its coordinates, its cells as text."""

    where: str
    x: float
    y: float
    cells: tuple[str, ...]


@dataclass(frozen=True)
class PointTable:
    """The points of one file.

    Attributes
    ----------
    path : pathlib.Path
        The file.
    columns : tuple of Column
        One for each cell of a row.
    rows : list of Row
        The points in the order of the file.
    crs : str or None
        CRS of the coordinates; None where nothing states it.
    """

    path: Path
    columns: tuple[Column, ...]
    rows: list[Row]
    crs: str | None


def columns_of(path: Path, names: list[str], *, places: bool = True) -> tuple[Column, ...]:
    """Understand the names of columns.

    Parameters
    ----------
    path : pathlib.Path
        The file, for the message.
    names : list of str
        Names as given: any case, words joined by underscores, hyphens, spaces or nothing, cut to
        10 characters or not; a length may name its unit, as in ``range_km`` or ``range [km]``.
    places : bool
        Whether coordinates stand in columns.

    Returns
    -------
    tuple of Column
        One a name.

    Raises
    ------
    DataError
        If two columns mean the same.
    """
    found = tuple(_column(name, places=places) for name in names)
    known: dict[str, str] = {}
    for column in found:
        if column.meaning in known:
            msg = (
                f"{path}: columns {known[column.meaning]!r} and {column.name!r} both give the "
                f"{column.meaning}; keep one"
            )
            raise DataError(msg)
        if column.meaning:
            known[column.meaning] = column.name
    return found


def _column(name: str, *, places: bool) -> Column:
    key = _letters(name)
    for meaning, spellings in _PLACES.items() if places else ():
        if key in spellings:
            return Column(name, meaning)
    for meaning in VALUES:
        whole = _letters(meaning)
        if key == whole or (len(key) >= _CUT and whole.startswith(key)):
            return Column(name, meaning)
        if meaning in LENGTHS and key.startswith(whole):
            for unit in LENGTH_UNITS:
                if key == whole + _letters(unit):
                    return Column(name, meaning, unit)
    return Column(name, "")


def _letters(name: str) -> str:
    return re.sub(r"[\W_]", "", name).lower()


def clean(text: str) -> str:
    """Make a text one line: composed letters, single spaces, a hyphen for a minus sign."""
    return " ".join(unicodedata.normalize("NFC", text).replace("\u2212", "-").split())
