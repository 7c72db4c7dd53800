"""Elevation grids in: one raster or a mosaic of equal ones, read window by window.

Heights come out in metres, float32, NaN where they are not known, never resampled. A file is
opened anew by each read, so that no open file is shared between threads.
"""

import contextlib
import os
import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from math import isfinite, isinf, isnan
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.enums import MaskFlags
from rasterio.errors import NotGeoreferencedWarning
from rasterio.windows import Window

from viewshed import geodesy
from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.grid import Grid
from viewshed.io._atomic import file_sha256
from viewshed.io.mosaic import Heights, Tile, fit_together, overlaps
from viewshed.io.raster import GDAL_ERRORS, gdal_env, gdal_message

PathLike = str | os.PathLike[str]

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
#: Most cells of a strip that is read at a time.
_STRIP_CELLS = 1 << 22
#: Values that mean a void by habit, also where a file forgets to declare them.
_HABITUAL_VOIDS = (-9999.0, -32768.0, -32767.0, -99999.0)
#: Magnitude beyond which a height equals a huge nodata value that was rounded.
_HUGE = 1e30
#: Files beside a raster that do not change its heights.
_SIDE_SUFFIXES = {".ovr"}
#: How the WKT of a CRS begins that is tied to no place.
_LOCAL_CRS = ("LOCAL_CS", "ENGCRS", "ENGINEERINGCRS")


@dataclass(frozen=True)
class Terrain:
    """Heights on a grid, in files.

    Made by `open_terrain`.

    Attributes
    ----------
    grid : Grid
        The whole grid, over all tiles.
    paths : tuple of pathlib.Path
        The files in the order given; where they overlap, the first whose height is known counts.
    height_factor : float
        Metres in one unit of the heights in the files [m].
    height_unit_origin : str
        Where that is known from: ``"option"``, ``"band"``, ``"crs"`` or ``"assumed metres"``.
    tiles : tuple of Tile
        What each file says.
    stated : dict
        What the caller stated of the files: ``crs`` and ``height_unit``, None where nothing.
    """

    grid: Grid
    height_factor: float
    height_unit_origin: str
    tiles: tuple[Tile, ...] = field(repr=False)
    stated: dict[str, str | None] = field(default_factory=dict, repr=False)

    @property
    def paths(self) -> tuple[Path, ...]:
        """The files, in the order given."""
        return tuple(tile.path for tile in self.tiles)

    @property
    def nodata(self) -> tuple[float | None, ...]:
        """The nodata value that each file declares, None where it declares none."""
        return tuple(tile.nodata for tile in self.tiles)

    def read(self, row_off: int, col_off: int, rows: int, cols: int) -> Heights:
        """Read a window.

        Parameters
        ----------
        row_off, col_off : int
            First row and column of the window in `grid`.
        rows, cols : int
            Size of the window.

        Returns
        -------
        numpy.ndarray, shape (rows, cols), float32
            Heights [m], NaN where a file declares a void or there is no file.

        Raises
        ------
        InputError
            If the window is not inside the grid.
        DataError
            If a file is missing, truncated or damaged, holds an infinite height, or no height in
            the whole window is known.

        Notes
        -----
        Besides the result it takes the memory of one strip of blocks.
        """
        self.grid.window(row_off, col_off, rows, cols)
        out = np.full((rows, cols), np.nan, dtype=np.float32)
        known = False
        with gdal_env():
            for tile, row, col, part in overlaps(self.tiles, row_off, col_off, out):
                known |= _read_tile(tile, row, col, part)
        if not known:
            names = ", ".join(str(path) for path in self.paths[:3])
            msg = (
                f"{names}: only voids in the {rows} x {cols} cells from row {row_off}, "
                f"column {col_off}; move the observer or use another elevation grid"
            )
            raise DataError(msg)
        return out

    def fingerprints(self) -> list[dict[str, Any]]:
        """Give name, size and SHA-256 of every file that the heights come from.

        Returns
        -------
        list of dict
            ``path`` (as given), ``size`` [bytes] and ``sha256``. Files that belong to a raster,
            such as the header of a raw one or the tiles of a virtual one, follow it.

        Raises
        ------
        DataError
            If a file cannot be read.
        """
        files = dict.fromkeys(file for tile in self.tiles for file in tile.files)
        found = []
        for file in files:
            try:
                size, digest = file.stat().st_size, file_sha256(file)
            except OSError as error:
                msg = f"{file}: cannot be read: {error.strerror or error}"
                raise DataError(msg) from error
            found.append({"path": str(file), "size": size, "sha256": digest})
        return found


def open_terrain(
    paths: PathLike | Sequence[PathLike],
    *,
    crs: str | None = None,
    height_unit: str | None = None,
) -> Terrain:
    """Open one elevation raster, or several that form one mosaic of equal grids.

    Only the headers are read here.

    Parameters
    ----------
    paths : path or sequence of paths
        The rasters. Several must share CRS, cell size and the position of the cells; they may
        leave gaps, which are voids, and may overlap, where the first known height counts.
    crs : str, optional
        CRS of rasters that state none; a vertical part adds the unit of the heights to a raster
        that states only its horizontal CRS. A raster that states another CRS is refused.
    height_unit : {"m", "ft", "us-ft"}, optional
        Unit of the heights. Default: that of the band, else of the CRS, else metres.

    Returns
    -------
    Terrain
        The grid and a way to read it.

    Raises
    ------
    InputError
        If no CRS is stated, `crs` contradicts a file, or the heights of a grid in feet have no
        stated unit.
    DataError
        If a file is missing, empty, truncated, no raster, has more than one band, no usable CRS
        or no position, or the files do not fit together.
    """
    names = [paths] if isinstance(paths, str | os.PathLike) else list(paths)
    if not names:
        msg = "no elevation grid was given; name at least one raster"
        raise InputError(msg)
    if height_unit is not None and height_unit not in HEIGHT_UNITS:
        msg = f"height unit {height_unit!r} is not known; use m, ft or us-ft"
        raise InputError(msg)
    stated = None if crs is None else geodesy.crs_from_user(crs)
    files = dict.fromkeys(Path(name) for name in names)
    with gdal_env():
        tiles = [_height_unit(_describe(file, stated), height_unit) for file in files]
    grid, tiles = fit_together(tiles)
    return Terrain(
        grid=grid,
        height_factor=tiles[0].height_factor,
        height_unit_origin=tiles[0].height_unit_origin,
        tiles=tuple(tiles),
        stated={"crs": crs, "height_unit": height_unit},
    )


# --- one file -----------------------------------------------------------------------------------


@contextlib.contextmanager
def _opened(path: Path) -> Iterator[Any]:
    """Open a raster; whatever goes wrong becomes one line that names it."""
    _check_file(path)
    try:
        file = rasterio.open(path)
    except GDAL_ERRORS as error:
        msg = f"{path}: cannot be opened as a raster, or is damaged: {gdal_message(error)}"
        raise DataError(msg) from error
    try:
        with file:
            yield file
    except GDAL_ERRORS as error:
        msg = f"{path}: cannot be read, the file is truncated or damaged: {gdal_message(error)}"
        raise DataError(msg) from error


def _check_file(path: Path) -> None:
    if not path.exists():
        msg = f"{path}: no such file; check the path of the elevation grid"
        raise DataError(msg)
    if path.is_dir():
        msg = f"{path}: is a folder; name the rasters in it"
        raise DataError(msg)
    if path.stat().st_size == 0:
        msg = f"{path}: is empty; get the elevation grid again"
        raise DataError(msg)


def _describe(path: Path, stated: Any) -> Tile:
    """Read the header of a raster and refuse what is no elevation grid."""
    with contextlib.ExitStack() as stack:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            file = stack.enter_context(_opened(path))
        _check_band(path, file)
        flags = file.mask_flag_enums[0]
        tile = Tile(
            path=path,
            shape=file.shape,
            transform=file.transform,
            crs_wkt=_crs_wkt(path, file, stated),
            dtype=file.dtypes[0],
            block=file.block_shapes[0],
            nodata=file.nodata,
            is_masked=MaskFlags.per_dataset in flags and MaskFlags.nodata not in flags,
            scale=float(file.scales[0]),
            offset=float(file.offsets[0]),
            unit=(file.units[0] or "").strip(),
            files=_files(path, file),
        )
    if not (isfinite(tile.scale) and isfinite(tile.offset)) or tile.scale == 0.0:
        msg = f"{path}: scale {tile.scale} and offset {tile.offset} give no heights; correct them"
        raise DataError(msg)
    return tile


def _check_band(path: Path, file: Any) -> None:
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


def _files(path: Path, file: Any) -> tuple[Path, ...]:
    """Give the files that a raster is made of, itself first, overviews left out."""
    others = [Path(name) for name in file.files if Path(name).is_file()]
    kept = [p for p in others if p.suffix not in _SIDE_SUFFIXES and p.name != path.name]
    return (path, *sorted(kept))


def _crs_wkt(path: Path, file: Any, stated: Any) -> str:
    """Give the CRS of a raster, from the file or as the user states it."""
    if not file.crs:
        if stated is None:
            msg = f"{path}: has no coordinate reference system; state it with --crs"
            raise InputError(msg)
        return str(stated.to_wkt())
    try:
        own = geodesy.crs_from_user(file.crs.to_wkt(version="WKT2_2019"))
        geodesy.vertical_unit_factor(own)
    except InputError as error:
        if stated is not None and file.crs.to_wkt().startswith(_LOCAL_CRS):
            return str(stated.to_wkt())
        msg = f"{path}: {error}"
        raise DataError(msg) from error
    if stated is None or own.equals(stated, ignore_axis_order=True):
        return str(own.to_wkt())
    if own.to_2d().equals(stated.to_2d(), ignore_axis_order=True):
        return str(stated.to_wkt())
    msg = f"{path}: is in {own.name!r} and --crs says {stated.name!r}; leave --crs out or warp it"
    raise InputError(msg)


def _height_unit(tile: Tile, asked: str | None) -> Tile:
    """Find out the unit of a raster's heights."""
    crs = geodesy.crs_from_user(tile.crs_wkt)
    band, vertical = _named_unit(tile.unit), geodesy.vertical_unit_factor(crs)
    horizontal = geodesy.horizontal_unit_factor(crs)
    if asked is not None:
        factor, origin = HEIGHT_UNITS[asked], "option"
        stated = band or vertical
        if stated is not None and abs(stated / factor - 1.0) > 1e-9:
            msg = f"{tile.path}: says that a unit of height is {stated:g} m; taken as {asked}"
            warnings.warn(msg, ViewshedWarning, stacklevel=3)
    elif tile.unit and band is None:
        msg = f"{tile.path}: height unit {tile.unit!r} is not known; state it with --height-unit"
        raise InputError(msg)
    elif band is not None:
        factor, origin = band, "band"
    elif vertical is not None:
        factor, origin = vertical, "crs"
    elif horizontal is not None and not _is_metric(horizontal):
        msg = (
            f"{tile.path}: the grid is in units of {horizontal:.7g} m and nothing says the unit of "
            "the heights; state it with --height-unit m, ft or us-ft"
        )
        raise InputError(msg)
    else:
        factor, origin = 1.0, "assumed metres"
    return replace(tile, height_factor=factor, height_unit_origin=origin)


def _named_unit(name: str) -> float | None:
    """Give the metres in a unit of length, None if the name is empty or not known."""
    wanted = " ".join(name.lower().strip("[]() ").split())
    return next((factor for factor, names in _UNIT_NAMES.items() if wanted in names), None)


def _is_metric(factor: float) -> bool:
    return any(abs(factor / unit - 1.0) < 1e-9 for unit in (1.0, 0.01, 0.1, 1000.0))


def _read_tile(tile: Tile, row: int, col: int, out: Heights) -> bool:
    """Fill the unknown cells of `out` from a raster; tell whether any height in it is known."""
    known = False
    with _opened(tile.path) as file:
        if file.shape != tile.shape or file.transform != tile.transform:
            msg = f"{tile.path}: has changed since it was opened; start again"
            raise DataError(msg)
        lowest = np.inf
        for first, count in _strips(tile, row, out.shape):
            window = Window(col, first, out.shape[1], count)
            heights = _to_metres(tile, file, window)
            part = out[first - row : first - row + count]
            low = _lowest(tile, heights, first, col)
            if not isnan(low):
                known, lowest = True, min(lowest, low)
            np.copyto(part, heights, where=np.isnan(part))
        missing = _missing_blocks(tile, file, row, col, out.shape)
    if missing:
        msg = (
            f"{tile.path}: {missing} blocks of cells are missing in the file and count as height "
            f"{tile.offset * tile.height_factor:g} m; if it was not written to its end, get it "
            "again"
        )
        warnings.warn(msg, ViewshedWarning, stacklevel=3)
    _warn_of_habitual_voids(tile, lowest)
    return known


def _missing_blocks(tile: Tile, file: Any, row: int, col: int, shape: tuple[int, ...]) -> int:
    """Count blocks of a window that a GeoTIFF does not hold and that are not read as voids.

    A file whose writer was killed opens cleanly and reads as zeros there.
    """
    if file.driver not in {"GTiff", "COG"} or tile.nodata is not None or tile.is_masked:
        return 0
    high, wide = tile.block
    return sum(
        file.get_tag_item(f"BLOCK_OFFSET_{x}_{y}", "TIFF", 1) is None
        for y in range(row // high, (row + shape[0] - 1) // high + 1)
        for x in range(col // wide, (col + shape[1] - 1) // wide + 1)
    )


def _strips(tile: Tile, row: int, shape: tuple[int, ...]) -> Iterator[tuple[int, int]]:
    """Cut rows of a raster into strips of whole blocks: first row and number of rows."""
    rows, cols = shape[0], shape[1]
    block = tile.block[0]
    step = max(1, _STRIP_CELLS // cols // block) * block
    first, end = row, row + rows
    while first < end:
        stop = min(end, (first // step + 1) * step)
        yield first, stop - first
        first = stop


def _to_metres(tile: Tile, file: Any, window: Window) -> Heights:
    """Read a strip as metres, NaN for void."""
    raw = file.read(1, window=window)
    void = _void(raw, tile.nodata)
    if tile.is_masked:
        void |= file.read_masks(1, window=window) == 0
    with np.errstate(over="ignore", invalid="ignore"):
        if (tile.scale, tile.offset, tile.height_factor) == (1.0, 0.0, 1.0):
            heights: Heights = raw.astype(np.float32)
        else:
            metres = raw.astype(np.float64)
            metres *= tile.scale
            metres += tile.offset
            metres *= tile.height_factor
            heights = metres.astype(np.float32)
    np.copyto(heights, np.float32(np.nan), where=void)
    return heights


def _lowest(tile: Tile, heights: Heights, row: int, col: int) -> float:
    """Give the lowest height of a strip, NaN if none is known; refuse infinite ones."""
    low = float(np.fmin.reduce(heights, axis=None))
    high = float(np.fmax.reduce(heights, axis=None))
    if isinf(low) or isinf(high):
        r, c = (int(v[0]) for v in np.nonzero(np.isinf(heights)))
        msg = (
            f"{tile.path}: the height at row {r + row}, column {c + col} is infinite; "
            "declare it as nodata or correct it"
        )
        raise DataError(msg)
    return low


def _void(raw: NDArray[Any], nodata: float | None) -> NDArray[np.bool_]:
    """Tell which cells hold the declared nodata value."""
    if nodata is None or isnan(nodata):
        return np.zeros(raw.shape, dtype=np.bool_)
    if raw.dtype.kind in "iu":
        limits = np.iinfo(raw.dtype)
        if nodata != int(nodata) or not limits.min <= nodata <= limits.max:
            return np.zeros(raw.shape, dtype=np.bool_)
        return np.asarray(raw == raw.dtype.type(int(nodata)))
    with np.errstate(over="ignore"):
        void = raw == raw.dtype.type(nodata)
    if abs(nodata) >= _HUGE and not isinf(nodata):
        void |= (raw * np.sign(nodata) >= _HUGE) & np.isfinite(raw)
    return np.asarray(void)


def _warn_of_habitual_voids(tile: Tile, lowest: float) -> None:
    for value in _HABITUAL_VOIDS:
        metres = (value * tile.scale + tile.offset) * tile.height_factor
        if lowest == np.float32(metres):
            msg = (
                f"{tile.path}: heights of {value:g} look like voids but are not declared as "
                "nodata and count as ground; declare them in the file"
            )
            warnings.warn(msg, ViewshedWarning, stacklevel=4)
