"""Polygons out: vector files, read back whole before they count.

The same polygons give the same bytes: what would be today's date in a file is a fixed one.
"""

import contextlib
import importlib
import importlib.util
import json
import os
import shutil
import sqlite3
import uuid
import warnings
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any, cast

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
_FIELDS = [*_TEXTS, *_NUMBERS]
#: Features that are read or compared at a time.
_FEATURES_A_BATCH = 20_000
#: Length of the box in the header of a geometry of a GeoPackage, by its kind [bytes].
_ENVELOPE_BYTES = (0, 32, 48, 48, 64)
_NOT_AS_WRITTEN = "the columns did not read back as written; the disk may be full"
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
            wrote = _Content()
            _write(draft / names[0], base.name, frame, fmt, wrote)
            if fmt == "shp" and not (draft / names[0]).with_suffix(".prj").exists():
                raise OutputError(_not_this_crs(frame, fmt))
            for name in names:
                _sync(draft / name)
            _compare(draft / names[0], frame, fmt, wrote)
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


def _write(
    path: Path, layer: str, frame: geopandas.GeoDataFrame, fmt: str, wrote: "_Content"
) -> None:
    columns = {name: frame[name].to_numpy(object) for name in _TEXTS}
    columns |= {name: frame[name].to_numpy(np.float64) for name in _NUMBERS}
    wrote.add_columns(columns)
    if fmt == "parquet":
        frame.to_parquet(path, index=False, compression="zstd")
        for part in _parts(frame.geometry.to_numpy()):
            wrote.add_shapes(shapely.to_wkb(part))
        return
    shapes = shapely.to_wkb(frame.geometry.to_numpy())
    wrote.add_shapes(shapes)
    options = {"DBF_DATE_LAST_UPDATE": _DATE, "RESIZE": "YES"} if fmt == "shp" else {}
    with _fixed_date():
        pyogrio.raw.write(
            path,
            geometry=shapes,
            field_data=list(columns.values()),
            fields=_FIELDS,
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


class _Content:
    """What a layer holds, but for the order of its features."""

    def __init__(self) -> None:
        self._shapes = [np.empty(0, np.int64)]
        self._texts: dict[str, Counter[Any]] = {name: Counter() for name in _TEXTS}
        self._numbers = {name: [np.empty(0)] for name in _NUMBERS}

    def add_shapes(self, wkb: Iterable[bytes]) -> None:
        """Add polygons by what sums up their bytes, which holds within this process."""
        self._shapes.append(np.fromiter(map(hash, wkb), np.int64))

    def add_columns(self, columns: Mapping[str, Any]) -> None:
        """Add the columns of some features."""
        for name in _TEXTS:
            self._texts[name].update(columns[name])
        for name in _NUMBERS:
            self._numbers[name].append(np.asarray(columns[name], float))

    def differences(self, other: "_Content", *, shapes: bool) -> Iterator[str]:
        """Name what is not the same: polygons to the last bit, numbers but for their rounding."""
        one, two = (np.sort(np.concatenate(c._shapes)) for c in (self, other))
        if shapes and not np.array_equal(one, two):
            yield "polygons"
        for name in _TEXTS:
            if self._texts[name] != other._texts[name]:
                yield f"column {name}"
        for name in _NUMBERS:
            a, b = (np.sort(np.concatenate(c._numbers[name])) for c in (self, other))
            if a.shape != b.shape or not np.allclose(a, b, 1e-14, 0.0, equal_nan=True):
                yield f"column {name}"


def _compare(
    path: Path, frame: geopandas.GeoDataFrame, fmt: str, wrote: "_Content"
) -> None:
    """Compare a layer with what it was made from."""
    found = _Content()
    read = {"parquet": _read_parquet, "gpkg": _read_geopackage}.get(fmt, _read)
    crs = read(path, found)
    wrong = list(found.differences(wrote, shapes=fmt != "shp"))
    if fmt == "shp" and not _shapefile.holds(path, frame.geometry.to_numpy()):
        wrong.insert(0, "polygons")
    if fmt == "gpkg" and not _has_index(path, len(frame)):
        wrong.append("spatial index")
    if wrong:
        msg = f"the {', '.join(wrong)} did not read back as written; the disk may be full"
        raise OutputError(msg)
    if not _is_same_crs(crs, frame):
        raise OutputError(_not_this_crs(frame, fmt))


def _read(path: Path, found: _Content) -> str | None:
    """Read columns, the polygons but for a shapefile, and the CRS."""
    meta, _, wkb, columns = pyogrio.raw.read(path, read_geometry=path.suffix != ".shp")
    _check_fields(meta)
    if wkb is not None:
        found.add_shapes(wkb)
    found.add_columns(dict(zip(meta["fields"], columns, strict=True)))
    return cast("str | None", meta["crs"])


def _read_geopackage(path: Path, found: _Content) -> str | None:
    """Read the features of a GeoPackage with SQLite, in half the time, and the CRS."""
    meta = pyogrio.read_info(path)
    _check_fields(meta)
    with contextlib.closing(_base(path)) as base:
        try:
            (layer,) = base.execute("select table_name from gpkg_geometry_columns").fetchone()
            table = layer.replace('"', '""')
            rows = base.execute(f'select geom, {", ".join(_FIELDS)} from "{table}"')
            while some := rows.fetchmany(_FEATURES_A_BATCH):
                shapes, *columns = zip(*some, strict=True)
                found.add_shapes(map(_wkb_in, shapes))
                found.add_columns(dict(zip(_FIELDS, columns, strict=True)))
        except (sqlite3.Error, LookupError, TypeError, ValueError):
            raise OutputError(_NOT_AS_WRITTEN) from None
    return cast("str | None", meta["crs"])


def _wkb_in(blob: bytes) -> bytes:
    """Give the well-known binary in a geometry of a GeoPackage, which a header precedes."""
    return blob[8 + _ENVELOPE_BYTES[blob[3] >> 1 & 7] :]


def _read_parquet(path: Path, found: _Content) -> str | None:
    """Read polygons, columns and CRS."""
    parquet = importlib.import_module("pyarrow.parquet")  # not everyone has it
    with parquet.ParquetFile(path) as file:
        for some in file.iter_batches(_FEATURES_A_BATCH):
            found.add_shapes(some["geometry"].to_pylist())
            found.add_columns({name: some[name].to_pylist() for name in _FIELDS})
        facts = json.loads(file.schema_arrow.metadata[b"geo"])["columns"]["geometry"]
    return str(geodesy.crs_from_user(json.dumps(facts["crs"])).to_wkt("WKT2_2019"))


def _check_fields(meta: Mapping[str, Any]) -> None:
    if meta["geometry_type"] != "Polygon" or list(meta["fields"]) != _FIELDS:
        raise OutputError(_NOT_AS_WRITTEN)


def _parts(geometry: NDArray[Any]) -> Iterator[NDArray[Any]]:
    for first in range(0, len(geometry), _FEATURES_A_BATCH):
        yield geometry[first : first + _FEATURES_A_BATCH]


def _base(path: Path) -> sqlite3.Connection:
    return sqlite3.connect(path.resolve().as_uri() + "?mode=ro", uri=True)


def _has_index(path: Path, count: int) -> bool:
    """Tell whether a GeoPackage is sound and its spatial index knows all polygons."""
    with contextlib.closing(_base(path)) as base:
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
