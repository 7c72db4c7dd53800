"""A `visible` raster that was made earlier, read with what it says of itself."""

import os
import warnings
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.errors import NotGeoreferencedWarning

from viewshed import geodesy
from viewshed.atmosphere import Refraction
from viewshed.constants import HIDDEN, NODATA, UNRESOLVED, VISIBLE
from viewshed.errors import DataError, InputError
from viewshed.grid import Grid
from viewshed.io.raster import GDAL_ERRORS, gdal_env, gdal_message

_NOT_OURS = "is not a visible layer of viewshed; give a visible.tif that viewshed map made"


class VisibleMap(NamedTuple):
    """What a raster of the layer `visible` holds.

    Attributes
    ----------
    visible : numpy.ndarray, shape (rows, cols)
        1 visible, 0 hidden, 2 unresolved, 255 no data.
    grid : Grid
        Where the cells are.
    k : float
        Coefficient of refraction that it was made with [1].
    observer : str
        Name of the observer, or of the file where it tells none.
    """

    visible: NDArray[np.uint8]
    grid: Grid
    k: float
    observer: str


def read_visible(path: str | os.PathLike[str]) -> VisibleMap:
    """Read a raster of the layer `visible`.

    Parameters
    ----------
    path : path
        The raster.

    Returns
    -------
    VisibleMap
        Its cells and what it says of them.

    Raises
    ------
    DataError
        If it cannot be read or is not a `visible` layer of viewshed.
    """
    try:
        with gdal_env(), warnings.catch_warnings():
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            with rasterio.open(path) as file:
                tags = _checked_tags(path, file)
                wkt = file.crs.to_wkt(version="WKT2_2019")
                grid, cells = Grid(file.shape, file.transform, wkt), file.read(1)
                geodesy.crs_from_user(wkt)
    except GDAL_ERRORS as error:
        msg = f"{path}: cannot be read: {gdal_message(error)}; give a visible.tif or make it again"
        raise DataError(msg) from error
    except InputError as error:
        msg = f"{path}: {error}"
        raise DataError(msg) from error
    found = np.unique(cells)
    strange = np.setdiff1d(found, [HIDDEN, VISIBLE, UNRESOLVED, NODATA])
    if strange.size:
        msg = f"{path}: holds the value {strange[0]}, which is no state; make it again"
        raise DataError(msg)
    observer = tags.get("VIEWSHED_OBSERVER", "").strip() or Path(path).stem
    return VisibleMap(cells, grid, _refraction(path, tags), observer)


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
