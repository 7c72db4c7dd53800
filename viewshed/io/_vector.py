"""Polygons out: vector files, read back whole before they count.

The same polygons give the same bytes: what would be today's date in a file is a fixed one.
"""

import contextlib
import importlib.util
import os
import shutil
import sqlite3
import uuid
import warnings
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pyogrio
import shapely
from numpy.typing import NDArray

from viewshed import geodesy
from viewshed.errors import InputError, OutputError
from viewshed.io import _shapefile

#: Formats by name, which is also the suffix, and the driver of each.
FORMATS = {
    "shp": "ESRI Shapefile",
    "gpkg": "GPKG",
    "fgb": "FlatGeobuf",
    "parquet": "GeoParquet",
}
#: Files that others leave beside a layer and that are wrong once it is replaced, by format.
SIDE_SUFFIXES = {
    "shp": (
        ".qix", ".qpj", ".sbn", ".sbx", ".fbn", ".fbx", ".ain", ".aih", ".atx", ".ixs", ".mxs",
        ".cst", ".shp.xml",
    ),
    "gpkg": (".gpkg-wal", ".gpkg-shm", ".gpkg-journal"),
    "fgb": (),
    "parquet": (),
}  # fmt: skip
#: Date that stands in every file.
_DATE = "2000-01-01"
#: Columns of text, and of numbers.
_TEXTS, _NUMBERS = ("observer", "state"), ("area_m2", "map_m2", "refr_k", "earth_fac")
#: Largest move of a corner that writing the CRS into a file may cause [degrees], about 1 mm.
_CRS_TOLERANCE_DEG = 1e-8


def file_names(stem: str, fmt: str) -> list[str]:
    """Give the names of the files of a layer, the one to open first."""
    suffixes = _shapefile.SUFFIXES if fmt == "shp" else (f".{fmt}",)
    return [stem + suffix for suffix in suffixes]


def check_format(fmt: str) -> None:
    """Refuse a format that is not known, or that nothing here can write.

    Raises
    ------
    InputError
        If it is not one of `FORMATS`.
    OutputError
        If it is parquet and pyarrow is not installed.
    """
    if fmt not in FORMATS:
        msg = f"format {fmt!r} is not known; choose from {', '.join(FORMATS)}"
        raise InputError(msg)
    if fmt == "parquet" and importlib.util.find_spec("pyarrow") is None:
        msg = "parquet needs pyarrow, which is not here; pip install pyarrow, or choose gpkg"
        raise OutputError(msg)


def write_polygons(
    path_without_suffix: str | os.PathLike[str], frame: geopandas.GeoDataFrame, fmt: str
) -> list[Path]:
    """Write polygons as a layer of its own, and prove that it is whole.

    Parameters
    ----------
    path_without_suffix : path
        The file but for its suffix, in a folder that exists; its name is that of the layer.
    frame : geopandas.GeoDataFrame
        Polygons from `polygonise`; none at all make an empty layer. A FlatGeobuf keeps them in
        the order of its spatial index, the others in the order of the frame.
    fmt : {"shp", "gpkg", "fgb", "parquet"}
        The format. A shapefile is five files.

    Returns
    -------
    list of pathlib.Path
        The files, the one to open first.

    Raises
    ------
    InputError
        If the format is not known.
    OutputError
        If a file is there already, cannot be written or does not read back as it should, a
        shapefile would pass 2 GB, or pyarrow is missing. Nothing is left behind.
    """
    check_format(fmt)
    base = Path(path_without_suffix)
    names = file_names(base.name, fmt)
    final = [base.with_name(name) for name in names]
    for file in final:
        if os.path.lexists(file):
            msg = f"{file}: exists; remove it or choose another name"
            raise OutputError(msg)
    draft = base.with_name(f".{base.name}-{os.getpid()}-{uuid.uuid4().hex[:8]}")
    done = False
    try:
        if fmt == "shp":
            _shapefile.check_fits(frame, _TEXTS)
        draft.mkdir()
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", RuntimeWarning)  # whatever is lost, `_compare` finds
            _write(draft / names[0], base.name, frame, fmt)
            if fmt == "shp" and not (draft / names[0]).with_suffix(".prj").exists():
                raise OutputError(_not_this_crs(frame, fmt))
            for name in names:
                _sync(draft / name)
            _compare(draft / names[0], frame, fmt)
        for name, file in zip(names, final, strict=True):
            (draft / name).rename(file)
        done = True
    except OutputError as error:
        msg = f"{_told(final[0])}: {error}"
        raise OutputError(msg) from error
    except (OSError, RuntimeError, ValueError) as error:
        reason = _reason(error)
        what = f"{_told(final[0])}: cannot be written: {reason}"
        msg = f"{what}; free some space or choose another folder"
        raise OutputError(msg) from error
    finally:
        shutil.rmtree(draft, ignore_errors=True)
        for file in final if not done else []:
            file.unlink(missing_ok=True)
    return final


def _told(path: Path) -> Path:
    """Give a path as the user will know it, without the hidden folder of a result."""
    return path.parent.parent / path.name if path.parent.name.startswith(".viewshed-") else path


def _reason(error: Exception) -> str:
    text = getattr(error, "strerror", None) or str(error)
    return " ".join(str(text).split())[:160].rstrip(". ")


# --- writing ------------------------------------------------------------------------------------


def _write(path: Path, layer: str, frame: geopandas.GeoDataFrame, fmt: str) -> None:
    if fmt == "parquet":
        frame.to_parquet(path, index=False, compression="zstd")
        return
    columns = [frame[name].to_numpy(object) for name in _TEXTS]
    columns += [frame[name].to_numpy(np.float64) for name in _NUMBERS]
    options = {"DBF_DATE_LAST_UPDATE": _DATE, "RESIZE": "YES"} if fmt == "shp" else {}
    with _fixed_date():
        pyogrio.raw.write(
            path,
            geometry=shapely.to_wkb(frame.geometry.to_numpy()),
            field_data=columns,
            fields=[*_TEXTS, *_NUMBERS],
            crs=_wkt(frame),
            geometry_type="Polygon",
            layer=layer,
            driver=FORMATS[fmt],
            encoding="UTF-8",
            layer_options=options,
        )


def _wkt(frame: geopandas.GeoDataFrame) -> str:
    return str(frame.crs.to_wkt("WKT2_2019"))


@contextlib.contextmanager
def _fixed_date() -> Iterator[None]:
    """Have the vector library take a fixed date for today's."""
    name = "OGR_CURRENT_DATE"
    before = pyogrio.get_gdal_config_option(name)
    pyogrio.set_gdal_config_options({name: f"{_DATE}T00:00:00.000Z"})
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options({name: before})


def _sync(path: Path) -> None:
    with path.open("rb") as file:
        os.fsync(file.fileno())


# --- reading back -------------------------------------------------------------------------------


def _compare(path: Path, frame: geopandas.GeoDataFrame, fmt: str) -> None:
    """Compare a layer with what it was made from."""
    geometry, columns, crs = _read_parquet(path) if fmt == "parquet" else _read(path, fmt)
    wrote = frame.geometry.to_numpy()
    wrong = []
    if not (_shapefile.holds(path, wrote) if geometry is None else _is_same(geometry, wrote)):
        wrong.append("polygons")
    for name in _TEXTS:
        if Counter(columns[name]) != Counter(frame[name].to_numpy(object)):
            wrong.append(f"column {name}")
    for name in _NUMBERS:
        one, other = (np.sort(np.asarray(c, float)) for c in (columns[name], frame[name]))
        if one.shape != other.shape or not np.allclose(one, other, 1e-14, 0.0, equal_nan=True):
            wrong.append(f"column {name}")
    if fmt == "gpkg" and not _has_index(path, len(wrote)):
        wrong.append("spatial index")
    if wrong:
        msg = f"the {', '.join(wrong)} did not read back as written; the disk may be full"
        raise OutputError(msg)
    if not _is_same_crs(crs, frame):
        raise OutputError(_not_this_crs(frame, fmt))


def _read(path: Path, fmt: str) -> tuple[NDArray[Any] | None, dict[str, NDArray[Any]], str]:
    """Read geometry (but for a shapefile), columns and CRS."""
    meta, _, wkb, columns = pyogrio.raw.read(path, read_geometry=fmt != "shp")
    if meta["geometry_type"] != "Polygon" or list(meta["fields"]) != [*_TEXTS, *_NUMBERS]:
        msg = "the columns did not read back as written; the disk may be full"
        raise OutputError(msg)
    geometry = None if wkb is None else shapely.from_wkb(wkb)
    return geometry, dict(zip(meta["fields"], columns, strict=True)), meta["crs"]


def _read_parquet(path: Path) -> tuple[NDArray[Any], dict[str, NDArray[Any]], str]:
    read = geopandas.read_parquet(path)
    columns = {name: read[name].to_numpy(object) for name in _TEXTS}
    columns |= {name: read[name].to_numpy(np.float64) for name in _NUMBERS}
    return read.geometry.to_numpy(), columns, read.crs.to_wkt("WKT2_2019")


def _is_same(one: NDArray[Any], other: NDArray[Any]) -> bool:
    """Tell whether polygons are the same but for their order, to the last bit."""
    facts = [
        np.column_stack([shapely.bounds(g), shapely.get_num_coordinates(g), shapely.area(g)])
        for g in (one, other)
    ]
    corners = [shapely.get_coordinates(g) for g in (one, other)]
    return all(
        a.shape == b.shape and np.array_equal(np.sort(a, axis=0), np.sort(b, axis=0))
        for a, b in (facts, corners)
    )


def _has_index(path: Path, count: int) -> bool:
    """Tell whether a GeoPackage is sound and its spatial index knows all polygons."""
    uri = path.resolve().as_uri() + "?mode=ro"
    with contextlib.closing(sqlite3.connect(uri, uri=True)) as base:
        try:
            sound = base.execute("pragma quick_check").fetchall()
            (layer,) = base.execute("select table_name from gpkg_geometry_columns").fetchone()
            table = f"rtree_{layer}_geom_rowid".replace('"', '""')
            (known,) = base.execute(f'select count(*) from "{table}"').fetchone()
        except sqlite3.Error:
            return False
    return bool(sound == [("ok",)] and known == count)


def _not_this_crs(frame: geopandas.GeoDataFrame, fmt: str) -> str:
    other = "parquet" if fmt == "gpkg" else "gpkg"
    return f"the CRS {frame.crs.name!r} cannot be kept in {fmt}; choose {other}"


def _is_same_crs(found: str | None, frame: geopandas.GeoDataFrame) -> bool:
    """Tell whether the corners of the box round all polygons are where they should be."""
    if found is None:
        return False
    if frame.empty:
        return True
    left, bottom, right, top = frame.total_bounds
    x, y = np.array([left, right, left, right]), np.array([bottom, bottom, top, top])
    want = geodesy.lonlat(geodesy.crs_from_user(_wkt(frame)), x, y)
    got = geodesy.lonlat(geodesy.crs_from_user(found), x, y)
    return all(
        np.allclose(g, w, rtol=0.0, atol=_CRS_TOLERANCE_DEG, equal_nan=True)
        for g, w in zip(got, want, strict=True)
    )
