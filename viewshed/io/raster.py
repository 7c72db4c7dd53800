"""Rasters out: Cloud Optimized GeoTIFF, read back whole before it counts.

A full disk can be silent: the library may close a file without an error though blocks are missing.
So every file is written under a hidden name, synced, read back cell by cell and only then renamed.
"""

import contextlib
import hashlib
import os
import threading
import uuid
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
import rasterio.shutil
from numpy.typing import NDArray
from rasterio._err import CPLE_BaseError
from rasterio.crs import CRS
from rasterio.enums import ColorInterp
from rasterio.env import getenv, hasenv
from rasterio.errors import CRSError, RasterioError
from rasterio.windows import Window

from viewshed import geodesy
from viewshed.errors import InputError, OutputError
from viewshed.grid import Grid
from viewshed.io._files import file_sha256
from viewshed.io._overviews import with_overviews
from viewshed.io._voice import quiet_stderr

Colour = tuple[int, int, int]

BLOCK = 512
#: Block cache that the raster library may use [bytes].
CACHE_BYTES = 64 * 2**20
#: Everything that the raster library raises when a file cannot be read or written.
GDAL_ERRORS = (RasterioError, CPLE_BaseError, CRSError, OSError, SystemError)

#: Largest move of a corner that writing the CRS into a file may cause [degrees], about 1 mm.
_CRS_TOLERANCE_DEG = 1e-8


@contextlib.contextmanager
def gdal_env() -> Iterator[None]:
    """Set up the raster library: no side files, a bounded cache, heights with their CRS."""
    with rasterio.Env(
        GDAL_PAM_ENABLED="NO",
        GDAL_CACHEMAX=CACHE_BYTES,
        GDAL_NUM_THREADS=_threads(),
        GTIFF_REPORT_COMPD_CS="YES",
    ):
        yield


def _threads() -> str:
    """Give the number of threads the user set for the raster library, else all."""
    options: dict[str, Any] = getenv() if hasenv() else {}
    asked = options.get("GDAL_NUM_THREADS") or os.environ.get("GDAL_NUM_THREADS")
    return str(asked or "ALL_CPUS")


def threads_allowed() -> int:
    """Give the number of threads the user set for the raster library, else of processors."""
    asked = _threads()
    if asked.isdigit():
        return max(1, int(asked))
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def gdal_message(error: BaseException) -> str:
    """Give the first cause of an error of the raster library in one short line."""
    while error.__cause__ is not None:
        error = error.__cause__
    text = getattr(error, "errmsg", None) or getattr(error, "strerror", None) or str(error)
    line = " ".join(str(text).split())
    return line[:160].rstrip(". ")


def pixel_sha256(array: NDArray[Any]) -> str:
    """Give the SHA-256 of an array's type, shape and cells.

    Parameters
    ----------
    array : numpy.ndarray, shape (rows, cols)
        The cells; hashed in C order, little end first, a strip at a time.

    Returns
    -------
    str
        Hexadecimal digits, the same for the same cells however the file is packed.
    """
    digest = _start_digest(array)
    for first in range(0, array.shape[0], BLOCK):
        digest.update(_strip(array, first))
    return str(digest.hexdigest())


def _start_digest(array: NDArray[Any]) -> Any:
    return hashlib.sha256(f"{array.dtype.name} {array.shape[0]}x{array.shape[1]}\n".encode())


def _strip(array: NDArray[Any], first: int) -> NDArray[np.uint8]:
    """Give the bytes of one strip of rows, little end first."""
    part = array[first : first + BLOCK]
    return np.ascontiguousarray(part, dtype=array.dtype.newbyteorder("<")).view(np.uint8)


def write_cog(  # noqa: PLR0913 - path, cells, place, and what the file says of them
    path: str | os.PathLike[str],
    array: NDArray[Any],
    grid: Grid,
    *,
    nodata: float | None,
    description: str,
    unit: str,
    tags: Mapping[str, str],
    overview: str = "nearest",
    colours: Mapping[int, Colour] | None = None,
    creation_options: Mapping[str, str] | None = None,
) -> dict[str, Any]:
    """Write an array as a Cloud Optimized GeoTIFF and prove that it is whole.

    Same array, same grid and same tags give the same bytes, whatever the number of threads.

    Parameters
    ----------
    path : path
        The file; replaced as a whole if it exists.
    array : numpy.ndarray, shape (rows, cols)
        The cells: uint8, uint16, int16, int32, uint32, float32 or float64.
    grid : Grid
        Where the cells are. Only the horizontal part of its CRS is written.
    nodata : float or None
        Value that means no data; NaN is fine for floats.
    description, unit : str
        Description and unit of the band.
    tags : mapping of str to str
        Tags of the file; ``VIEWSHED_`` is put before a name that lacks it.
    overview : {"nearest", "mode"}, optional
        How the coarser copies for display are made.
    colours : mapping of int to (red, green, blue), optional
        Colour of each value of a uint8 array, 0 to 255 each, for programs that show it.
    creation_options : mapping of str to str, optional
        Options of the COG driver that replace ours, one of `CREATION_OPTIONS`.

    Returns
    -------
    dict
        What a record says of the file: ``sha256``, ``size`` [bytes], ``pixel_sha256`` of its
        cells, ``data_type``, ``nodata`` (``"nan"`` where it is not a number), ``unit`` and
        ``description``.

    Raises
    ------
    OutputError
        If the file cannot be written, or does not read back as it should. Nothing is left behind.
    InputError
        If a creation option is not one that may be set.
    """
    chosen = checked_creation_options(creation_options or {})
    final = Path(path)
    if array.shape != grid.shape:
        msg = f"array of shape {array.shape} does not fit the grid of shape {grid.shape}"
        raise ValueError(msg)
    draft_name = "draft.tif"
    prefix = f".{final.name}-{os.getpid()}-{uuid.uuid4().hex[:8]}-"
    draft, made = (final.with_name(prefix + name) for name in (draft_name, "cog.tif"))
    facts = _Facts(nodata, description, unit, tags, _horizontal_wkt(grid), colours)
    try:
        with quiet_stderr(), gdal_env():
            _write_draft(draft, array, grid, facts)
            block = int(chosen.get("blocksize", BLOCK))
            source, copies = with_overviews(draft, array, overview, nodata, block)
            _copy(source, draft, made, _cog_options(overview, array.dtype.kind == "f") | chosen)
            _remove(final.parent, prefix + draft_name)
            _sync(made)
            pixels = _read_back(made, array, grid, facts)
            _read_overviews(made, copies)
        found = {
            "sha256": file_sha256(made),
            "size": made.stat().st_size,
            "pixel_sha256": pixels,
            "data_type": array.dtype.name,
            "nodata": "nan" if nodata is not None and nodata != nodata else nodata,  # noqa: PLR0124
            "unit": unit,
            "description": description,
        }
        made.replace(final)
    except OutputError as error:
        msg = f"{final}: {error}"
        raise OutputError(msg) from error
    except GDAL_ERRORS as error:
        reason = gdal_message(error)
        msg = f"{final}: cannot be written: {reason}; free some space or choose another folder"
        raise OutputError(msg) from error
    finally:
        _remove(final.parent, prefix)
    return found


class _Facts:
    """What a file says besides its cells."""

    def __init__(
        self,
        nodata: float | None,
        description: str,
        unit: str,
        tags: Mapping[str, str],
        wkt: str,
        colours: Mapping[int, Colour] | None,
    ) -> None:
        self.nodata = nodata
        self.description = description
        self.unit = unit
        self.tags = {_tag_name(name): str(value) for name, value in tags.items()}
        self.wkt = wkt
        self.colours = dict(colours or {})


def _tag_name(name: str) -> str:
    return name if name.startswith(("VIEWSHED_", "TIFFTAG_")) else f"VIEWSHED_{name.upper()}"


def _horizontal_wkt(grid: Grid) -> str:
    """Give the horizontal part of a CRS: a vertical one would set the unit of the band."""
    return str(geodesy.crs_from_user(grid.crs_wkt).to_2d().to_wkt("WKT2_2019"))


def _write_draft(path: Path, array: NDArray[Any], grid: Grid, facts: _Facts) -> None:
    """Write a plain tiled GeoTIFF strip by strip, with all that is to be said."""
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=grid.rows,
        width=grid.cols,
        count=1,
        dtype=array.dtype.name,
        crs=CRS.from_wkt(facts.wkt),
        transform=grid.transform,
        nodata=facts.nodata,
        tiled=True,
        blockxsize=BLOCK,
        blockysize=BLOCK,
        bigtiff="IF_SAFER",
    ) as file:
        file.update_tags(**facts.tags)
        file.set_band_description(1, facts.description)
        file.set_band_unit(1, facts.unit)
        if facts.colours:
            file.write_colormap(1, facts.colours)
        for first, count in _strips(grid.rows):
            window = Window(0, first, grid.cols, count)
            file.write(np.ascontiguousarray(array[first : first + count]), 1, window=window)


#: Options of the COG driver that a caller may set, and the values that leave cells as they are.
CREATION_OPTIONS: dict[str, tuple[str, ...]] = {
    "BIGTIFF": ("YES", "NO", "IF_NEEDED", "IF_SAFER"),
    "BLOCKSIZE": ("128", "256", "512", "1024", "2048"),
    "COMPRESS": ("NONE", "LZW", "DEFLATE", "ZSTD"),
    "LEVEL": tuple(str(level) for level in range(1, 23)),
    "PREDICTOR": ("YES", "NO"),
}


def checked_creation_options(options: Mapping[str, str]) -> dict[str, str]:
    """Check options of the COG driver.

    Raises
    ------
    InputError
        If a name or value is not one of `CREATION_OPTIONS`.
    """
    for name, value in options.items():
        known = CREATION_OPTIONS.get(name.upper())
        if known is None:
            msg = f"creation option {name!r} is unknown: choose from {', '.join(CREATION_OPTIONS)}"
            raise InputError(msg)
        if value.upper() not in known:
            span = f"{known[0]} to {known[-1]}" if len(known) > 6 else ", ".join(known)
            msg = f"creation option {name}={value} is refused: choose from {span}"
            raise InputError(msg)
    return {name.lower(): value.upper() for name, value in options.items()}


def _cog_options(overview: str, is_float: bool) -> dict[str, Any]:
    return {
        "blocksize": BLOCK,
        "compress": "DEFLATE",
        "level": 6,
        "predictor": "YES" if is_float else "NO",
        "overview_resampling": overview.upper(),
        "bigtiff": "IF_SAFER",
        "num_threads": _threads(),
    }


def _copy(source: Path, draft: Path, made: Path, options: Mapping[str, Any]) -> None:
    """Make the COG in one call of the library, which Ctrl-C still ends at once.

    The call runs in a thread of its own; emptying the draft behind its source makes it fail soon.
    """
    failed: list[BaseException] = []

    def run() -> None:
        try:
            with gdal_env():
                rasterio.shutil.copy(source, made, driver="COG", **options)
        except BaseException as error:
            failed.append(error)

    worker = threading.Thread(target=run)
    worker.start()
    try:
        while worker.is_alive():
            worker.join(0.2)
    except BaseException:
        with contextlib.suppress(OSError):
            os.truncate(draft, 0)
        worker.join()
        raise
    if failed:
        raise failed[0]


def _strips(rows: int) -> Iterator[tuple[int, int]]:
    for first in range(0, rows, BLOCK):
        yield first, min(BLOCK, rows - first)


def _read_back(path: Path, array: NDArray[Any], grid: Grid, facts: _Facts) -> str:
    """Compare a file with what it was made from; give the hash of its cells."""
    with rasterio.open(path) as file:
        _compare_facts(file, array, grid, facts)
        digest = _start_digest(array)
        for first, count in _strips(grid.rows):
            read = file.read(1, window=Window(0, first, grid.cols, count))
            wrote = _strip(array, first)
            if not np.array_equal(_strip(read, 0), wrote):
                last = first + count - 1
                msg = f"rows {first} to {last} do not read back as written; the disk may be full"
                raise OutputError(msg)
            digest.update(wrote)
    return str(digest.hexdigest())


def _compare_facts(file: Any, array: NDArray[Any], grid: Grid, facts: _Facts) -> None:
    wrong = []
    tags = file.tags()
    if file.shape != grid.shape or file.dtypes != (array.dtype.name,):
        wrong.append("size or type")
    if not file.transform.almost_equals(grid.transform, precision=_precision(grid)):
        wrong.append("transform")
    if not _same(file.nodata, facts.nodata):
        wrong.append("nodata value")
    if not _is_same_crs(file.crs, grid, facts):
        wrong.append("coordinate reference system")
    if (file.descriptions[0] or "") != facts.description or (file.units[0] or "") != facts.unit:
        wrong.append("band description or unit")
    if facts.colours and not _has_colours(file, facts.colours):
        wrong.append("colours")
    wrong += [f"tag {name}" for name, value in facts.tags.items() if tags.get(name) != value]
    if wrong:
        msg = f"the {', '.join(wrong)} cannot be kept in a GeoTIFF or did not read back"
        raise OutputError(msg)


def _has_colours(file: Any, colours: Mapping[int, Colour]) -> bool:
    if file.colorinterp[0] != ColorInterp.palette:
        return False
    found = file.colormap(1)
    return all(found[value][:3] == colour for value, colour in colours.items())


def _precision(grid: Grid) -> float:
    """Give how exactly a transform must read back: a millionth of a cell [CRS units]."""
    t = grid.transform
    return 1e-6 * min(abs(t.a) + abs(t.d), abs(t.b) + abs(t.e))


def _same(one: float | None, other: float | None) -> bool:
    if one is None or other is None:
        return one is other
    return one == other or (one != one and other != other)  # noqa: PLR0124


def _is_same_crs(found: CRS | None, grid: Grid, facts: _Facts) -> bool:
    """Tell whether the corners of the grid are where they should be in the CRS of a file."""
    if not found:
        return False
    rows, cols = np.array([-0.5, grid.rows - 0.5]), np.array([-0.5, grid.cols - 0.5])
    x, y = grid.xy(rows[:, None], cols[None, :])
    want = geodesy.lonlat(geodesy.crs_from_user(facts.wkt), x, y)
    got = geodesy.lonlat(geodesy.crs_from_user(found.to_wkt(version="WKT2_2019")), x, y)
    return all(
        np.allclose(g, w, rtol=0.0, atol=_CRS_TOLERANCE_DEG, equal_nan=True)
        for g, w in zip(got, want, strict=True)
    )


def _read_overviews(path: Path, digests: Sequence[bytes]) -> None:
    """Read every coarser copy in a file, and compare those whose SHA-256 is known."""
    with rasterio.open(path) as file:
        levels = len(file.overviews(1))
    for level in range(levels):
        digest = hashlib.sha256()
        with rasterio.open(path, overview_level=level) as file:
            for first, count in _strips(file.height):
                read = file.read(1, window=Window(0, first, file.width, count))
                digest.update(read.view(np.uint8))
        if digests and digest.digest() != digests[level]:
            msg = "a coarser copy does not read back as it was made; the disk may be full"
            raise OutputError(msg)


def _sync(path: Path) -> None:
    with path.open("rb") as file:
        os.fsync(file.fileno())


def _remove(folder: Path, prefix: str) -> None:
    with contextlib.suppress(OSError):
        for entry in list(folder.iterdir()):
            if entry.name.startswith(prefix):
                entry.unlink(missing_ok=True)
