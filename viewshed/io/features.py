"""Observers in: points of any vector format, or of a table of text, each with its own values.

What an observer does not say is the run's. Nothing is guessed: what cannot be read is refused
and the row is named, what is not used is noted once.
"""

import os
import warnings
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from viewshed import geodesy
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io._point_table import LENGTHS, VALUES, Column, PointTable, Row
from viewshed.io._points_text import TEXT_SUFFIXES, read_text_points
from viewshed.io._points_vector import read_vector_points
from viewshed.places import Observer, Sector, parse_length

__all__ = ["read_observers"]

_FIELDS = {name: "range_m" if name == "range" else name for name in LENGTHS}


def read_observers(
    path: str | os.PathLike[str],
    *,
    crs: str | None = None,
    eye_height: float | None = None,
    eye_elevation: float | None = None,
) -> list[Observer]:
    """Read observers from a file.

    Parameters
    ----------
    path : path
        Points in any vector format that geopandas reads, or a table of text (``.csv``, ``.txt``,
        ``.tsv``) with columns x,y (also easting,northing) or lon,lat (also longitude,latitude). A
        layer is named after a colon, ``sites.gpkg:masts``; where one layer alone has points it
        need not be.
    crs : str, optional
        CRS of the coordinates where the file states none. Columns lon,lat are EPSG:4326.
    eye_height, eye_elevation : float, optional
        Height [m] or elevation [m] of the eye of observers that state neither; not both.

    Returns
    -------
    list of Observer
        In the order of the file, named ``observer 1`` and so on where it names none. `crs` of an
        observer is None, the elevation grid's, for columns x,y of which nothing is stated.

    Raises
    ------
    DataError
        If the file cannot be read or used; the message names the line or feature and the column.
    InputError
        If `crs` is no CRS.

    Notes
    -----
    Columns, all optional and in any case: ``name``, ``eye_height``, ``eye_elevation``,
    ``target_height``, ``range``, ``bearing_from``, ``bearing_to`` [m; degrees clockwise from true
    north]. A length may have a unit in its cell (``30km``) or in the name of its column
    (``range_km``). An empty cell leaves the value to the run.

    Examples
    --------
    >>> from viewshed.io.features import read_observers
    >>> places = read_observers("sample_dem/places.gpkg:lookouts")
    >>> places[1].name, places[1].x, places[1].crs
    ('Carrowmel Edge', 410385.0, 'EPSG:32732')
    """
    if crs is not None:
        geodesy.crs_from_user(crs)
    file, layer = _file_and_layer(path)
    if file.suffix.lower() in TEXT_SUFFIXES:
        if layer is not None:
            msg = f"{file}: is a table of text and has no layers; leave out {layer!r}"
            raise DataError(msg)
        table = read_text_points(file, crs)
    else:
        table = read_vector_points(file, layer, crs)
    if not table.rows:
        msg = f"{file}: holds no points; give it one for each observer"
        raise DataError(msg)
    _check_degrees(table)
    _note_unused(table)
    eye = {"eye_height": eye_height, "eye_elevation": eye_elevation}
    return _named(table, *_once(table, [_observer(table, row, eye) for row in table.rows]))


def _file_and_layer(path: str | os.PathLike[str]) -> tuple[Path, str | None]:
    text = os.fspath(path)
    file, colon, layer = text.rpartition(":")
    given = Path(text)
    found: tuple[Path, str | None] = (given, None)
    if not given.exists() and colon and layer and Path(file).exists():
        found = (Path(file), layer)
    if not found[0].exists():
        msg = f"{text}: no such file; check the path of the observers"
        raise DataError(msg)
    if found[0].is_file() and found[0].stat().st_size == 0:
        msg = f"{text}: is empty; give it a point for each observer"
        raise DataError(msg)
    return found


def _check_degrees(table: PointTable) -> None:
    """Refuse longitudes and latitudes that there are none of."""
    if table.crs is None:
        return
    crs = geodesy.crs_from_user(table.crs)
    if geodesy.horizontal_unit_factor(crs) is not None:
        return
    lons, lats = geodesy.lonlat(crs, [row.x for row in table.rows], [row.y for row in table.rows])
    for i in np.flatnonzero((np.abs(lats) > 90) | (np.abs(lons) > 360))[:1]:
        lon, lat = lons[i], lats[i]
        what = f"latitude {lat:g}" if abs(lat) > 90 else f"longitude {lon:g}"
        if abs(lat) <= 360 and abs(lon) <= 90:
            cure = "longitude and latitude seem to be swapped"
        else:
            cure = "state the CRS that the coordinates are in"
        msg = f"{table.path}: {table.rows[i].where}: there is no {what}; {cure}"
        raise DataError(msg)


def _note_unused(table: PointTable) -> None:
    unused = [
        column.name
        for i, column in enumerate(table.columns)
        if not column.meaning
        and column.name.lower() != "fid"  # the file's own numbers
        and any(row.cells[i] for row in table.rows)
    ]
    if unused:
        note = (
            f"{table.path}: columns not used: {', '.join(unused)}; those understood are "
            f"{', '.join(VALUES)}"
        )
        warnings.warn(note, ViewshedWarning, stacklevel=3)


def _observer(table: PointTable, row: Row, eye: Mapping[str, float | None]) -> Observer:
    """Make an observer of a row; its name is left at the default where the row has none."""
    cells = {c.meaning: (c, text) for c, text in zip(table.columns, row.cells, strict=True) if text}
    values: dict[str, Any] = {}
    for meaning, field in _FIELDS.items():
        if meaning in cells:
            values[field] = _checked(table, row, cells[meaning], field)
    if {"eye_height", "eye_elevation"} <= values.keys():
        msg = f"{table.path}: {row.where} has eye_height and eye_elevation; leave one empty"
        raise DataError(msg)
    if not eye.keys() & values.keys():
        values.update(eye)
    values["sector"] = _sector(table, row, cells)
    if "name" in cells:
        values["name"] = cells["name"][1]
    return Observer(row.x, row.y, crs=table.crs, **values)


def _checked(table: PointTable, row: Row, cell: tuple[Column, str], field: str) -> float:
    column, text = cell
    if column.unit != "m" and text[-1:] in "0123456789.":
        text += column.unit
    try:
        metres = parse_length(text)
        values: dict[str, Any] = {field: metres}
        Observer(0.0, 0.0, **values)  # tried alone, it says what is wrong with this value
    except InputError as error:
        msg = f"{table.path}: {row.where}, {column.name}: {error}"
        raise DataError(msg) from error
    return metres


def _sector(
    table: PointTable, row: Row, cells: Mapping[str, tuple[Column, str]]
) -> Sector | None:
    ends = [cells.get(name) for name in ("bearing_from", "bearing_to")]
    given = [end for end in ends if end is not None]
    if not given:
        return None
    where = f"{table.path}: {row.where}"
    if len(given) == 1:
        msg = f"{where} has only {given[0][0].name} of the two bearings; give both or none"
        raise DataError(msg)
    bearings = []
    for column, text in given:
        number = text.removesuffix("degrees").removesuffix("deg").removesuffix("°").strip()
        try:
            bearings.append(float(number))
        except ValueError as error:
            msg = f"{where}, {column.name}: {text!r} is not a bearing; give degrees like 270"
            raise DataError(msg) from error
    try:
        return Sector(*bearings)
    except InputError as error:
        msg = f"{where}: {error}"
        raise DataError(msg) from error


def _once(table: PointTable, made: list[Observer]) -> tuple[list[Row], list[Observer]]:
    """Keep one of observers that are alike in all; say so."""
    kept: dict[Observer, Row] = {}
    again = []
    for row, observer in zip(table.rows, made, strict=True):
        if observer in kept:
            again.append(f"{row.where} repeats {kept[observer].where}")
        else:
            kept[observer] = row
    if again:
        more = f" and {len(again) - 3} more" if len(again) > 3 else ""
        note = f"{table.path}: {', '.join(again[:3])}{more}; each counts once"
        warnings.warn(note, ViewshedWarning, stacklevel=3)
    return list(kept.values()), list(kept)


def _named(table: PointTable, rows: list[Row], observers: list[Observer]) -> list[Observer]:
    """Give every observer a name of its own."""
    column = next((i for i, c in enumerate(table.columns) if c.meaning == "name"), None)
    names = ["" if column is None else row.cells[column] for row in rows]
    owners: dict[str, Row] = {}
    for name, row in zip(names, rows, strict=True):
        if name and name in owners:
            msg = (
                f"{table.path}: {owners[name].where} and {row.where} have the same name {name!r}; "
                "names tell results apart, so give each its own"
            )
            raise DataError(msg)
        owners[name] = row
    found, number = [], 0
    for name, observer in zip(names, observers, strict=True):
        number += 1
        while not name and f"observer {number}" in owners:
            number += 1
        found.append(replace(observer, name=name or f"observer {number}"))
    return found
