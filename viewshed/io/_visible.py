"""A `visible` raster that was made earlier, read with what it says of itself."""

import contextlib
import os
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.errors import NotGeoreferencedWarning
from rasterio.windows import Window

from viewshed import geodesy
from viewshed.atmosphere import Refraction
from viewshed.constants import HIDDEN, NODATA, UNRESOLVED, VISIBLE
from viewshed.errors import DataError, InputError
from viewshed.grid import Grid
from viewshed.io.raster import GDAL_ERRORS, gdal_env, gdal_message

_STATES = (HIDDEN, VISIBLE, UNRESOLVED, NODATA)
_NOT_OURS = "is not a visible layer of viewshed; give a visible.tif that viewshed map made"


class VisibleMap(NamedTuple):
    """What a raster of the layer `visible` holds.

    Attributes
    ----------
    visible : VisibleRows
        1 visible, 0 hidden, 2 unresolved, 255 no data; read when rows are asked for.
    grid : Grid
        Where the cells are.
    k : float
        Coefficient of refraction that it was made with [1].
    observer : str
        Name of the observer, or of the file where it tells none.
    """

    visible: "VisibleRows"
    grid: Grid
    k: float
    observer: str


class VisibleRows:
    """The states in an open raster, read by slices of rows."""

    dtype = np.dtype(np.uint8)

    def __init__(self, path: str | os.PathLike[str], file: Any) -> None:
        self._path, self._file = path, file
        self.shape: tuple[int, int] = file.shape

    def __getitem__(self, rows: slice, /) -> NDArray[np.uint8]:
        """Read some rows, all columns.

        Raises
        ------
        DataError
            If they cannot be read or hold what is no state.
        """
        first, last, _ = rows.indices(self.shape[0])
        with _told(self._path):
            window = Window(0, first, self.shape[1], last - first)
            cells: NDArray[np.uint8] = self._file.read(1, window=window)
        strange = np.ones(cells.shape, np.bool_)
        for state in _STATES:
            strange &= cells != state
        if strange.any():
            least = cells[strange].min()
            msg = f"{self._path}: holds the value {least}, which is no state; make it again"
            raise DataError(msg)
        return cells


@contextlib.contextmanager
def open_visible(path: str | os.PathLike[str]) -> Iterator[VisibleMap]:
    """Open a raster of the layer `visible`.

    Parameters
    ----------
    path : path
        The raster.

    Yields
    ------
    VisibleMap
        Its cells, which can be read while it is open, and what it says of them.

    Raises
    ------
    DataError
        If it cannot be read or is not a `visible` layer of viewshed.
    """
    with contextlib.ExitStack() as stack:
        with _told(path), warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            stack.enter_context(gdal_env())
            file = stack.enter_context(rasterio.open(path))
            tags = _checked_tags(path, file)
            wkt = file.crs.to_wkt(version="WKT2_2019")
            grid = Grid(file.shape, file.transform, wkt)
            geodesy.crs_from_user(wkt)
        observer = tags.get("VIEWSHED_OBSERVER", "").strip() or Path(path).stem
        yield VisibleMap(VisibleRows(path, file), grid, _refraction(path, tags), observer)


@contextlib.contextmanager
def _told(path: str | os.PathLike[str]) -> Iterator[None]:
    """Say which raster it was that failed."""
    try:
        yield
    except GDAL_ERRORS as error:
        msg = f"{path}: cannot be read: {gdal_message(error)}; give a visible.tif or make it again"
        raise DataError(msg) from error
    except InputError as error:
        msg = f"{path}: {error}"
        raise DataError(msg) from error


def _checked_tags(path: str | os.PathLike[str], file: Any) -> dict[str, str]:
    tags: dict[str, str] = file.tags()
    if tags.get("VIEWSHED_LAYER") != "visible":
        msg = f"{path}: {_NOT_OURS}"
        raise DataError(msg)
    if file.count != 1 or file.dtypes[0] != "uint8" or not file.crs:
        msg = f"{path}: lost its CRS or type since it was made; make it again"
        raise DataError(msg)
    return tags


def _refraction(path: str | os.PathLike[str], tags: dict[str, str]) -> float:
    told = tags.get("VIEWSHED_REFRACTION_K", "")
    try:
        return Refraction(float(told)).k
    except ValueError as error:
        msg = f"{path}: tells no usable refraction ({told!r}); make it again"
        raise DataError(msg) from error
