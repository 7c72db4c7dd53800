"""The height that a user gives to voids, everywhere or within the polygons of a mask."""

import os
import warnings
from math import isfinite
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from rasterio.features import rasterize

from viewshed import geodesy
from viewshed.errors import DataError, InputError
from viewshed.grid import Grid
from viewshed.io.fingerprint import Fingerprint
from viewshed.io.mosaic import Heights

if TYPE_CHECKING:
    import geopandas

#: Most cells that are looked at together.
_STRIP_CELLS = 1 << 22
#: Suffixes of the files that belong to a vector file, by its own.
_BESIDE = {
    ".shp": (".shx", ".dbf", ".prj", ".cpg"),
    ".tab": (".dat", ".map", ".id"),
    ".mif": (".mid",),
    ".gml": (".xsd", ".gfs"),
}
#: Parts into which the shorter side of a window is cut for the edges of polygons, which are
#: straight in their own CRS and bend in that of the grid.
_EDGES = 256
#: Kinds of layer that may hold polygons among others.
_ANY_KIND = ("Unknown", "GeometryCollection")


class VoidHeight:
    """The height that voids get, and where.

    Parameters
    ----------
    height : float
        Height of voids [m].
    mask : path, optional
        Vector file. Only voids whose cell centre lies in its polygons get the height.

    Attributes
    ----------
    height : float
        Height of voids [m].
    fingerprint : Fingerprint
        Of the vector file and those that belong to it, taken before it was read.

    Raises
    ------
    InputError
        If the height is not finite.
    DataError
        If the vector file cannot be read, holds no polygon or states no CRS.
    """

    def __init__(self, height: float, mask: str | os.PathLike[str] | None = None) -> None:
        if not isfinite(height):
            msg = f"void height {height} is not a height; give metres, like 0"
            raise InputError(msg)
        self.height = float(height)
        self.fingerprint = Fingerprint(())
        self._mask: geopandas.GeoSeries | None = None
        if mask is not None:
            path = Path(mask)
            if path.exists():
                self.fingerprint = Fingerprint(_files(path))
            self._mask = read_polygons(path)

    def fill(self, grid: Grid, heights: Heights, cover: Heights | None = None) -> int:
        """Give voids the height.

        Parameters
        ----------
        grid : Grid
            Where the cells are.
        heights : numpy.ndarray, float32, shape (rows, cols)
            Heights [m], NaN for void; changed in place.
        cover : numpy.ndarray, float32, shape (rows, cols), optional
            Heights of a surface over them [m]; where both are void, both get the height.

        Returns
        -------
        int
            Number of cells of `heights` that got the height.
        """
        shapes = None if self._mask is None else _on_grid(self._mask, grid)
        step = max(1, _STRIP_CELLS // grid.cols)
        count = 0
        for first in range(0, grid.rows, step):
            strip = heights[first : first + step]
            void = np.isnan(strip)
            if not void.any():
                continue
            if shapes is not None:
                void &= _burn(shapes, grid.window(first, 0, *strip.shape))
            np.copyto(strip, np.float32(self.height), where=void)
            if cover is not None:
                over = cover[first : first + step]
                np.copyto(over, np.float32(self.height), where=void & np.isnan(over))
            count += int(np.count_nonzero(void))
        return count


def _files(path: Path) -> tuple[Path, ...]:
    """Give the files that a vector file consists of, itself first; some are folders."""
    if path.is_dir():
        return tuple(sorted(file for file in path.iterdir() if file.is_file()))
    beside = [path.with_suffix(suffix) for suffix in _BESIDE.get(path.suffix.lower(), ())]
    return (path, *(file for file in beside if file.is_file()))


def read_polygons(path: Path) -> "geopandas.GeoSeries":
    """Read the polygons of a vector file.

    Returns
    -------
    geopandas.GeoSeries
        Its polygons, with their CRS; whatever else it holds is left out.

    Raises
    ------
    DataError
        If the file is missing, cannot be read, holds no polygon, has several layers of polygons
        or states no CRS.
    """
    import geopandas
    import pyogrio
    import shapely

    if not path.exists():
        msg = f"{path}: no such file; check the path of the void mask"
        raise DataError(msg)
    try:
        layer = _polygon_layer(path, pyogrio.list_layers(path))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            frame = geopandas.read_file(path, layer=layer, columns=[])
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError, OSError) as error:
        reason = " ".join(str(error).split())
        msg = f"{path}: cannot be read as a void mask: {reason}; give a file of polygons"
        raise DataError(msg) from error
    geometry = getattr(frame, "geometry", None)
    if geometry is None or len(geometry) == 0 or geometry.isna().all():
        msg = f"{path}: is an empty void mask; give at least one polygon"
        raise DataError(msg)
    if geometry.crs is None:
        msg = f"{path}: the void mask states no coordinate reference system; add one to the file"
        raise DataError(msg)
    parts = geometry.dropna().explode(index_parts=False, ignore_index=True)
    parts = shapely.force_2d(parts[parts.geom_type == "Polygon"])
    parts = parts[~parts.is_empty]
    if parts.empty:
        kinds = ", ".join(sorted(set(geometry.dropna().geom_type)))
        msg = f"{path}: holds {kinds} and no polygon; a void mask is made of polygons"
        raise DataError(msg)
    return geopandas.GeoSeries(parts, crs=geometry.crs).make_valid()


def _polygon_layer(path: Path, layers: NDArray[Any]) -> str:
    """Name the only layer of a vector file that may hold polygons."""
    names = [
        name for name, kind in layers if kind and ("Polygon" in kind or kind in _ANY_KIND)
    ] or [name for name, kind in layers if kind]
    if not names:
        msg = f"{path}: holds no shapes; a void mask is made of polygons"
        raise DataError(msg)
    if len(names) > 1:
        shown = ", ".join(names[:5])
        msg = f"{path}: has several layers that may be the void mask ({shown}); keep one of them"
        raise DataError(msg)
    return str(names[0])


def _on_grid(mask: "geopandas.GeoSeries", grid: Grid) -> list[Any]:
    """Bring the part of a mask that reaches into a window into the CRS of its grid."""
    import geopandas
    import shapely

    target = geodesy.frame_of(grid.crs_wkt).crs.to_wkt()
    found = []
    for box in _boxes(mask, grid, target):
        near = mask[mask.intersects(box)]
        cut = near.intersection(box)
        cut = cut[~cut.is_empty]
        left, bottom, right, top = box.bounds
        dense = shapely.segmentize(cut.to_numpy(), min(right - left, top - bottom) / _EDGES)
        moved = geopandas.GeoSeries(dense, crs=mask.crs).to_crs(target)
        found += list(moved.explode())
    return _turned([g for g in found if g.geom_type == "Polygon"], grid)


def _boxes(mask: "geopandas.GeoSeries", grid: Grid, target: str) -> list[Any]:
    """Give boxes in the CRS of a mask that hold the window, two where it crosses 180 degrees."""
    import geopandas
    import shapely
    from shapely.affinity import translate

    rows, cols = (np.linspace(-0.5, n - 0.5, 65) for n in (grid.rows, grid.cols))
    r, c = np.meshgrid(rows, cols)
    x, y = grid.xy(r.ravel(), c.ravel())
    points = geopandas.GeoSeries(shapely.points(x, y), crs=target).to_crs(mask.crs)
    x, y = points.x.to_numpy(), points.y.to_numpy()
    is_known = np.isfinite(x) & np.isfinite(y)
    x, y = x[is_known], y[is_known]
    if mask.crs.is_geographic and x.size:
        x = (x + 180.0) % 360.0 - 180.0
    spans = [x]
    if mask.crs.is_geographic and x.size and np.ptp(x) > 180.0:
        spans = [x[x < 0.0], x[x >= 0.0]]
    boxes = []
    for part in spans:
        if part.size:
            margin = 0.02 * max(np.ptp(part), np.ptp(y)) + 1e-6
            boxes.append(
                shapely.box(
                    part.min() - margin, y.min() - margin, part.max() + margin, y.max() + margin
                )
            )
    if mask.crs.is_geographic and mask.total_bounds[2] > 180.0:
        boxes += [translate(box, xoff=360.0) for box in boxes]
    return boxes


def _turned(shapes: list[Any], grid: Grid) -> list[Any]:
    """Put polygons of longitudes on the turn of longitude on which the grid lies."""
    from shapely.affinity import translate

    frame = geodesy.frame_of(grid.crs_wkt)
    if not frame.is_lonlat:
        return shapes
    turn = 360.0 / frame.degrees_per_unit
    left, _, right, _ = grid.bounds
    found = []
    for shape in shapes:
        for shift in (-turn, 0.0, turn):
            if shape.bounds[0] + shift < right and shape.bounds[2] + shift > left:
                found.append(translate(shape, xoff=shift) if shift else shape)
    return found


def _burn(shapes: list[Any], grid: Grid) -> NDArray[np.bool_]:
    """Tell which cells have their centre in polygons."""
    if not shapes:
        return np.zeros(grid.shape, dtype=np.bool_)
    burnt = rasterize(shapes, out_shape=grid.shape, transform=grid.transform, dtype="uint8")
    return np.asarray(burnt, dtype=np.bool_)
