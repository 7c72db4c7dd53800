"""One raster: opened with plain errors, and what it says about itself."""

import contextlib
import stat
import warnings
from collections.abc import Iterator
from math import isfinite
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from rasterio.enums import MaskFlags
from rasterio.errors import NotGeoreferencedWarning

from viewshed.errors import DataError, InputError
from viewshed.grid import Grid
from viewshed.io import _vrt
from viewshed.io.mosaic import Header
from viewshed.io.raster import GDAL_ERRORS, gdal_env, gdal_message

#: Files beside a raster that do not change its heights.
_SIDE_SUFFIXES = {".ovr"}
#: What every result of viewshed says about itself.
_RESULT_TAG = "VIEWSHED_VERSION"
#: Number of files from which on looking for side files by name is faster than listing a folder.
_MANY = 200


@contextlib.contextmanager
def reading_env(count: int = 1) -> Iterator[None]:
    """Set up the raster library for reading elevation.

    Side files count as a part of a raster and heights come with their datum, also where the format
    implies it.

    Parameters
    ----------
    count : int, optional
        Number of files that will be read.
    """
    listing = "TRUE" if count > _MANY else "FALSE"
    with (
        gdal_env(),
        rasterio.Env(
            GDAL_PAM_ENABLED="YES",
            REPORT_COMPD_CS="YES",
            GDAL_DISABLE_READDIR_ON_OPEN=listing,
        ),
    ):
        yield


@contextlib.contextmanager
def opened(path: Path, **options: str) -> Iterator[Any]:
    """Open a raster; whatever goes wrong becomes one line that names it.

    Parameters
    ----------
    path : pathlib.Path
        The raster.
    **options
        Options of its format.

    Raises
    ------
    DataError
        If the file is missing, empty, no raster, or fails while it is read.
    """
    check_file(path)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            file = rasterio.open(path, **options)
    except GDAL_ERRORS as error:
        msg = f"{path}: cannot be opened as a raster, or is damaged: {gdal_message(error)}"
        raise DataError(msg) from error
    try:
        with file:
            yield file
    except GDAL_ERRORS as error:
        msg = f"{path}: cannot be read, the file is truncated or damaged: {gdal_message(error)}"
        raise DataError(msg) from error


def check_file(path: Path) -> tuple[int, int]:
    """Refuse a path that is no file with something in it; give its size and time of change.

    Raises
    ------
    DataError
        If it is missing, a folder or empty.
    """
    try:
        status = path.stat()
    except OSError as error:
        if isinstance(error, FileNotFoundError | NotADirectoryError):
            msg = f"{path}: no such file; check the path of the elevation grid"
        else:
            msg = f"{path}: cannot be read: {error.strerror or error}"
        raise DataError(msg) from error
    if stat.S_ISDIR(status.st_mode):
        msg = f"{path}: is a folder; name the rasters in it"
        raise DataError(msg)
    if status.st_size == 0:
        msg = f"{path}: is empty; get the elevation grid again"
        raise DataError(msg)
    return status.st_size, status.st_mtime_ns


def file_state(path: Path) -> tuple[int, int] | None:
    """Give size [bytes] and time of change [ns] of a file, None if there is none."""
    try:
        status = path.stat()
    except OSError:
        return None
    return status.st_size, status.st_mtime_ns


def read_header(path: Path) -> Header:
    """Read the header of a raster and refuse what is no elevation grid.

    Call it inside `reading_env`.

    Raises
    ------
    DataError
        If the file is missing, empty, truncated, no raster, a result of viewshed, or has more
        than one band or no position.
    """
    state = check_file(path)
    with opened(path) as file:
        _check_band(path, file)
        header = _header(path, file, state)
    if not (isfinite(header.scale) and isfinite(header.offset)) or header.scale == 0.0:
        msg = (
            f"{path}: scale {header.scale} and offset {header.offset} give no heights; "
            "correct them"
        )
        raise DataError(msg)
    return header


def check_header(header: Header, file: Any) -> None:
    """Refuse an open raster that is not what its header said.

    Raises
    ------
    DataError
        If it differs in anything that its heights depend on.
    """
    for name, value in _facts(file).items():
        known = getattr(header, name)
        if known != value and not (known != known and value != value):  # noqa: PLR0124
            msg = (
                f"{header.path}: has changed since its header was read; start again, without the "
                "index of tiles if there is one"
            )
            raise DataError(msg)


def _header(path: Path, file: Any, state: tuple[int, int]) -> Header:
    pieces = _vrt.pieces(path) if file.driver == "VRT" else ()
    files = _files(path, file, [piece.path for piece in pieces])
    return Header(
        path=path,
        block=file.block_shapes[0],
        files=files,
        pieces=pieces,
        states=(state, *(file_state(other) or (0, 0) for other in files[1:])),
        **_facts(file),
    )


def _facts(file: Any) -> dict[str, Any]:
    """Give everything that the heights of a raster and their places depend on."""
    flags = file.mask_flag_enums[0]
    return {
        "driver": file.driver,
        "shape": file.shape,
        "transform": file.transform,
        "own_wkt": file.crs.to_wkt(version="WKT2_2019") if file.crs else "",
        "dtype": file.dtypes[0],
        "is_compressed": file.compression is not None,
        "nodata": file.nodata,
        "is_masked": MaskFlags.per_dataset in flags and MaskFlags.nodata not in flags,
        "scale": float(file.scales[0]),
        "offset": float(file.offsets[0]),
        "unit": (file.units[0] or "").strip(),
    }


def _check_band(path: Path, file: Any) -> None:
    if _RESULT_TAG in file.tags():
        msg = f"{path}: is a result of viewshed and no elevation grid; name the grid it came from"
        raise DataError(msg)
    if file.count != 1:
        msg = f"{path}: has {file.count} bands, an elevation grid has one; extract the heights"
        raise DataError(msg)
    dtype = file.dtypes[0]
    if np.dtype(dtype).kind not in "iuf":
        msg = f"{path}: cells of type {dtype} are not heights; use real numbers"
        raise DataError(msg)
    if file.transform.is_identity:
        how = "only control points; warp it first" if file.gcps[0] else "none; add a georeference"
        msg = f"{path}: a grid needs a position on the ground and this one has {how}"
        raise DataError(msg)
    try:
        Grid(file.shape, file.transform, "")
    except InputError as error:
        msg = f"{path}: {error}"
        raise DataError(msg) from error
    expected = file.height * file.width * np.dtype(dtype).itemsize
    if _is_raw(path, file) and path.stat().st_size < expected:
        msg = f"{path}: is truncated: {path.stat().st_size} bytes of {expected}; get it again"
        raise DataError(msg)


def _is_raw(path: Path, file: Any) -> bool:
    """Tell whether cells lie bare in a file whose reader takes missing ones for zeros."""
    if file.driver == "netCDF":
        with path.open("rb") as start:
            return start.read(3) == b"CDF"
    return file.driver == "ENVI" and not file.compression


def _files(path: Path, file: Any, sources: list[Path]) -> tuple[Path, ...]:
    """Give the files that a raster is made of, itself first, overviews left out."""
    others = {Path(name) for name in file.files} | set(sources)
    others |= {source.with_suffix(".hdr") for source in sources}  # says how bare cells are packed
    kept = [p for p in others if p.suffix not in _SIDE_SUFFIXES and p != path]
    own = path.resolve()
    return (path, *sorted(p for p in kept if p.is_file() and p.resolve() != own))


def is_foreign(path: Path) -> bool:
    """Tell whether no format of the raster library knows a file, so that it is no raster at all."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            rasterio.open(path).close()
    except GDAL_ERRORS as error:
        return "not recognized" in gdal_message(error) or path.stat().st_size == 0
    return False


def is_result(path: Path) -> bool:
    """Tell whether a raster is a result of viewshed."""
    try:
        with opened(path) as file:
            return _RESULT_TAG in file.tags()
    except DataError:
        return False
