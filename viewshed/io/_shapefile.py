"""What a shapefile can hold, and its shapes read back without asking which ring lies in which.

The vector library sorts the rings of a polygon when it reads a shapefile, which takes it minutes
where one polygon has very many holes; comparing corners does not need that.
"""

from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import shapely
from numpy.typing import NDArray

from viewshed.errors import OutputError
from viewshed.io._batches import batches

#: Files of a shapefile, the one to open first.
SUFFIXES = (".shp", ".shx", ".dbf", ".prj", ".cpg")
#: Longest file of a shapefile that desktop programs read [bytes].
LIMIT = 2**31 - 1
#: Longest text that a field holds [bytes].
LONGEST_TEXT = 254

#: Bytes of a text field at first, and of a number.
_TEXT_BYTES, _NUMBER_BYTES = 80, 24
#: Bytes of the header of .shp and .shx, and of a record before its parts.
_HEADER, _RECORD = 100, 52
#: Type of a polygon.
_POLYGON = 5


def check_fits(frame: geopandas.GeoDataFrame, texts: tuple[str, ...]) -> None:
    """Refuse what a shapefile cannot hold.

    Parameters
    ----------
    frame : geopandas.GeoDataFrame
        Polygons.
    texts : tuple of str
        Columns of text; the others hold numbers.

    Raises
    ------
    OutputError
        If a text is too long, or a file would pass 2 GB.
    """
    widths = []
    for name in texts:
        longest = max((len(text.encode()) for text in frame[name].unique()), default=0)
        if longest > LONGEST_TEXT:
            msg = (
                f"the {name} takes {longest} bytes and a shapefile holds {LONGEST_TEXT}; "
                "choose gpkg, or a shorter name"
            )
            raise OutputError(msg)
        widths.append(max(_TEXT_BYTES, longest))
    geometry = frame.geometry.to_numpy()
    rings = len(frame) + int(np.sum(shapely.get_num_interior_rings(geometry)))
    corners = int(np.sum(shapely.get_num_coordinates(geometry)))
    shapes = _HEADER + _RECORD * len(frame) + 4 * rings + 16 * corners
    numbers = len(frame.columns) - 1 - len(texts)
    row = 1 + sum(widths) + _NUMBER_BYTES * numbers
    table = 33 + 32 * (numbers + len(texts)) + row * len(frame)
    most = max(shapes, table)
    if most > LIMIT:
        msg = (
            f"{most / 1e9:.2f} GB do not fit, a shapefile ends at {LIMIT / 1e9:.2f} GB; "
            "choose gpkg, or leave out specks with --min-patch"
        )
        raise OutputError(msg)


def holds(path: Path, geometry: NDArray[Any]) -> bool:
    """Tell whether a shapefile holds the corners of some polygons.

    Parameters
    ----------
    path : pathlib.Path
        The .shp file; its .shx is beside it.
    geometry : numpy.ndarray of shapely.Polygon
        The polygons in the order of the file. Rings may run either way.

    Returns
    -------
    bool
        Whether each record has the parts, corners and box of its polygon, and all coordinates
        are there to the last bit.
    """
    corners = shapely.get_num_coordinates(geometry)
    rings = 1 + shapely.get_num_interior_rings(geometry)
    length = 11 + rings + 4 * corners.astype(np.int64)  # of each record after its header, in words
    end = _HEADER // 4 + np.cumsum(length + 2)
    offset = end - length - 2
    if path.stat().st_size != (4 * end[-1] if len(end) else _HEADER):
        return False
    index = np.fromfile(path.with_suffix(".shx"), ">i4")[_HEADER // 4 :]
    if not np.array_equal(index.reshape(-1, 2), 2 * np.column_stack([offset, length])):
        return False
    at = np.concatenate([[0], np.cumsum(corners, dtype=np.int64)])
    for a, b in batches(at):
        words = np.fromfile(path, "<i4", int(end[b - 1] - offset[a]), offset=4 * int(offset[a]))
        facts = np.column_stack([rings[a:b], corners[a:b]])
        if not _is_same(words, offset[a:b] - offset[a], facts, geometry[a:b]):
            return False
    return True


def _is_same(
    words: NDArray[np.int32],
    offset: NDArray[np.int64],
    facts: NDArray[np.int64],
    geometry: NDArray[Any],
) -> bool:
    """Tell whether records hold polygons of which `facts` are the numbers of rings and corners."""
    types = words[offset[:, None] + np.array([2, 11, 12])]
    boxes = words[offset[:, None] + np.arange(3, 11)].view("<f8")
    if not (np.all(types[:, 0] == _POLYGON) and np.array_equal(types[:, 1:], facts)):
        return False
    first = offset + 13 + facts[:, 0]
    step = np.zeros(len(words) + 1, np.int8)
    step[first] = 1
    step[first + 4 * facts[:, 1]] = -1
    is_corner = np.cumsum(step[:-1], dtype=np.int8) == 1
    read = words[is_corner].view("<f8").reshape(-1, 2)
    wrote = shapely.get_coordinates(geometry)
    same = [np.array_equal(np.sort(read[:, i]), np.sort(wrote[:, i])) for i in (0, 1)]
    return all(same) and np.array_equal(boxes, shapely.bounds(geometry))
