"""Points from a vector file, whatever its format."""

import warnings
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pyogrio
import shapely

from viewshed import geodesy
from viewshed.constants import MOST_OBSERVERS
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io._point_table import PointTable, Row, clean, columns_of

_ARROW_READERS = {
    ".parquet": geopandas.read_parquet,
    ".geoparquet": geopandas.read_parquet,
    ".feather": geopandas.read_feather,
}
_POINT, _MULTIPOINT = 0, 4
_NO_GEOMETRY = "save it as CSV with columns x,y or lon,lat"


def read_vector_points(path: Path, layer: str | None, crs: str | None) -> PointTable:
    """Read the points of a vector file.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    layer : str, optional
        Its layer; where it has one layer of points, that is taken.
    crs : str, optional
        CRS of the coordinates where the file states none.

    Returns
    -------
    PointTable
        The points.

    Raises
    ------
    DataError
        If the file cannot be read, holds anything but points, or states no CRS and none is given.
    """
    frame = _read(path, layer)
    if not isinstance(frame, geopandas.GeoDataFrame):
        msg = f"{path}: has no geometry; {_NO_GEOMETRY}"
        raise DataError(msg)
    own = _crs(path, frame.crs, crs)
    points = _points(path, np.asarray(frame.geometry.values, dtype=object))
    table = frame.drop(columns=frame.geometry.name)
    cells = [[_cell(value) for value in table.iloc[:, i]] for i in range(table.shape[1])]
    rows = [
        Row(f"feature {i + 1}", float(x), float(y), tuple(column[i] for column in cells))
        for i, (x, y) in enumerate(points)
    ]
    columns = columns_of(path, [str(name) for name in table.columns], places=False)
    return PointTable(path, columns, rows, own)


def _read(path: Path, layer: str | None) -> Any:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what the reader finds odd but can read
        try:
            if path.suffix.lower() in _ARROW_READERS:
                if layer is not None:
                    msg = f"{path}: has no layers; leave out {layer!r}"
                    raise DataError(msg)
                return _ARROW_READERS[path.suffix.lower()](path)
            name = _layer(path, layer)
            info = pyogrio.read_info(path, layer=name, force_feature_count=True)
            _check_number(path, info["features"])
            return pyogrio.read_dataframe(path, layer=name)
        except (RuntimeError, ValueError, OSError, ImportError) as error:
            reason = " ".join(str(error).split("; It might help")[0].split())
            msg = f"{path}: cannot be read as a vector file: {reason}"
            raise DataError(msg) from error


def _layer(path: Path, asked: str | None) -> str:
    kinds = {str(name): kind for name, kind in pyogrio.list_layers(path)}
    names = ", ".join(kinds)
    if asked is not None:
        if asked not in kinds:
            msg = f"{path}: has no layer {asked!r}; it has {names or 'none'}"
            raise DataError(msg)
        return asked
    if len(kinds) == 1:
        return next(iter(kinds))
    pointed = [name for name, kind in kinds.items() if kind and "Point" in kind]
    if len(pointed) == 1:
        return pointed[0]
    if not kinds:
        msg = f"{path}: has no layer of points; {_NO_GEOMETRY}"
        raise DataError(msg)
    which = "several layers of points" if pointed else "no layer of points alone"
    msg = (
        f"{path}: has {which} ({', '.join(pointed) or names}); name one, like "
        f"{path.name}:{(pointed or list(kinds))[0]}"
    )
    raise DataError(msg)


def _check_number(path: Path, count: int) -> None:
    if count > MOST_OBSERVERS:
        msg = f"{path}: holds {count} points; give at most {MOST_OBSERVERS} observers"
        raise DataError(msg)


def _points(path: Path, shapes: Any) -> Any:
    """Coordinates of points; anything else is refused."""
    _check_number(path, len(shapes))
    kinds = shapely.get_type_id(shapes)
    lonely = (kinds == _MULTIPOINT) & (shapely.get_num_geometries(shapes) == 1)
    shapes = np.where(lonely, shapely.get_geometry(shapes, 0), shapes)
    for i in np.flatnonzero(((kinds != _POINT) & ~lonely) | shapely.is_empty(shapes))[:1]:
        where, shape = f"{path}: feature {i + 1}", shapes[i]
        if shape is None or shape.is_empty:
            msg = f"{where} has no place; give it a point or remove it"
        elif kinds[i] == _MULTIPOINT:
            msg = f"{where} is {len(shape.geoms)} points in one; split it into single points"
        else:
            kind = shape.geom_type
            msg = (
                f"{where} is a {kind}, and observers are points; take points of it, like its "
                "centroid or corners"
            )
        raise DataError(msg)
    places = np.stack([shapely.get_x(shapes), shapely.get_y(shapes)], axis=1)
    for i in np.flatnonzero(~np.isfinite(places).all(axis=1))[:1]:
        msg = f"{path}: feature {i + 1} has no finite coordinates; correct it"
        raise DataError(msg)
    heights = shapely.get_z(shapes)
    if (np.isfinite(heights) & (heights != 0)).any():
        note = (
            f"{path}: the z coordinates of its points are not used; give heights in columns "
            "eye_height or eye_elevation"
        )
        warnings.warn(note, ViewshedWarning, stacklevel=5)
    return places


def _crs(path: Path, own: Any, given: str | None) -> str:
    if own is None:
        if given is None:
            msg = (
                f"{path}: has no coordinate reference system; state it with --observer-crs (crs= "
                "in Python)"
            )
            raise DataError(msg)
        return given
    authority = own.to_authority(min_confidence=100)
    text = ":".join(authority) if authority else str(own.to_wkt())
    try:
        mine = geodesy.crs_from_user(text)
    except InputError as error:
        msg = f"{path}: {error}"
        raise DataError(msg) from error
    if given is not None and not mine.equals(geodesy.crs_from_user(given), ignore_axis_order=True):
        note = f"{path}: states its own CRS, {mine.name}, which counts here; {given} was not used"
        warnings.warn(note, ViewshedWarning, stacklevel=5)
    return text


def _cell(value: Any) -> str:
    """Text of a value as a person would write it; nothing for a missing one."""
    if isinstance(value, float | np.floating) and float(value).is_integer():
        return str(int(value))
    text = "" if value is None else clean(str(value))
    return "" if text in {"nan", "<NA>", "NaT"} else text
