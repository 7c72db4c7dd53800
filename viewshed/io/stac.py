"""A STAC Item beside the results, so that a catalogue can find them.

The item follows STAC 1.1.0 [1]_ and its extensions for projection, raster, file and processing.
It is made from the record alone, so the same inputs give the same item.

STAC wants a time. A record holds none, on purpose, and what an elevation grid shows has no one day
that its files state; the day of the computation says nothing about the ground. So ``datetime`` is
null and the span that STAC then asks for is the whole span its notation can write: the result
claims no time and a search by time does not leave it out.

References
----------
.. [1] SpatioTemporal Asset Catalog specification 1.1.0, Item, https://stacspec.org.
"""

import hashlib
import json
import os
from collections.abc import Mapping
from itertools import pairwise
from pathlib import PurePosixPath
from typing import Any
from urllib.parse import quote

import numpy as np
from affine import Affine
from shapely import MultiPolygon, Polygon, affinity, box
from shapely.geometry import mapping
from shapely.geometry.polygon import orient

from viewshed import geodesy
from viewshed.grid import FloatArray, Grid
from viewshed.io._atomic import RECORD_NAME
from viewshed.io._files import write_text

#: Name of the item in a folder of results.
STAC_NAME = "stac_item.json"
STAC_VERSION = "1.1.0"
#: Earliest and latest time that STAC can write.
_ALWAYS = ("0001-01-01T00:00:00Z", "9999-12-31T23:59:59Z")
_EXTENSIONS = tuple(
    f"https://stac-extensions.github.io/{name}/schema.json"
    for name in ("file/v2.1.0", "processing/v1.2.0", "projection/v2.0.0", "raster/v2.0.0")
)
#: Pieces that each side of the grid is cut into, since it is bent in longitude and latitude.
_PIECES = 32
#: Decimals of longitudes and latitudes: a centimetre.
_DECIMALS = 7
#: Media type and roles of each kind of file.
_KINDS = {
    ".tif": ("image/tiff; application=geotiff; profile=cloud-optimized", "data"),
    ".png": ("image/png", "overview"),
    ".csv": ("text/csv", "data"),
    ".json": ("application/json", "metadata"),
    ".shp": ("application/vnd.shp", "data"),
    ".shx": ("application/vnd.shx", "data"),
    ".dbf": ("application/vnd.dbf", "data"),
    ".prj": ("text/plain", "data"),
    ".cpg": ("text/plain", "data"),
    ".gpkg": ("application/geopackage+sqlite3", "data"),
    ".fgb": ("application/vnd.flatgeobuf", "data"),
    ".parquet": ("application/vnd.apache.parquet", "data"),
}
#: How a multihash of SHA-256 begins: its code and its length.
_SHA256 = "1220"


def stac_item(record: Mapping[str, Any], *, name: str | None = None) -> dict[str, Any]:
    """Describe a result as a STAC Item.

    Parameters
    ----------
    record : mapping
        The record of the result with its outputs, from `viewshed.io.record.build_record`.
    name : str, optional
        The item's id. Default: ``viewshed-`` and digits that follow from inputs, options and
        values, the same wherever the result lies.

    Returns
    -------
    dict
        Plain JSON values. Links and assets are relative to the folder of the record.

    Raises
    ------
    InputError
        If the grid has no place in longitude and latitude of WGS 84.
    """
    rows, cols = record["grid"]["shape"]
    grid = Grid((rows, cols), Affine(*record["grid"]["transform"]), record["crs"])
    geometry, bbox = footprint(grid)
    return {
        "type": "Feature",
        "stac_version": STAC_VERSION,
        "stac_extensions": list(_EXTENSIONS),
        "id": name or _name(record),
        "geometry": geometry,
        "bbox": bbox,
        "properties": {
            "title": "What can be seen from where",
            "description": record["question"],
            "datetime": None,
            "start_datetime": _ALWAYS[0],
            "end_datetime": _ALWAYS[1],
            "processing:lineage": _lineage(record),
            "processing:software": {"viewshed": record["version"]},
            **_projection(grid),
        },
        "links": [
            {"rel": "derived_from", "href": _href(entry["path"]), "title": _last(entry["path"])}
            for entry in [*record["dem"], *(record["surface"] or {"files": []})["files"]]
        ],
        "assets": _assets(record["outputs"]),
    }


def write_stac(
    path: str | os.PathLike[str], record: Mapping[str, Any], *, name: str | None = None
) -> None:
    """Write the STAC Item of a result as JSON and read it back.

    Parameters
    ----------
    path : path
        The file, usually `STAC_NAME`.
    record, name
        As in `stac_item`.

    Raises
    ------
    InputError
        If the grid has no place in longitude and latitude of WGS 84.
    OutputError
        If it cannot be written whole; nothing is left behind.
    """
    write_text(path, json.dumps(stac_item(record, name=name), indent=2, ensure_ascii=False) + "\n")


def _name(record: Mapping[str, Any]) -> str:
    """Give an id that follows from the inputs, the question and the cells."""
    outputs = record["outputs"].items()
    facts = {
        "question": record["question"],
        "inputs": [entry["sha256"] for entry in record["dem"]],
        "surface": [entry["sha256"] for entry in (record["surface"] or {"files": []})["files"]],
        "cells": {name: entry.get("pixel_sha256") for name, entry in outputs},
    }
    text = json.dumps(facts, sort_keys=True).encode("utf-8", "replace")
    return f"viewshed-{hashlib.sha256(text).hexdigest()[:16]}"


def _lineage(record: Mapping[str, Any]) -> str:
    names = [_last(entry["path"]) for entry in record["dem"]]
    shown = names[0] if len(names) == 1 else f"{names[0]} and {len(names) - 1} more files"
    text = f"Visibility {record['question']}; elevation from {shown}"
    return text if record["surface"] is None else f"{text}; sight is blocked by a separate surface"


def _projection(grid: Grid) -> dict[str, Any]:
    """Give the fields of the projection extension; the files hold the horizontal CRS alone."""
    crs = geodesy.crs_from_user(grid.crs_wkt).to_2d()
    t = grid.transform
    return {
        "proj:code": geodesy.authority_code(crs),
        "proj:wkt2": crs.to_wkt("WKT2_2019"),
        "proj:shape": list(grid.shape),
        "proj:transform": [t.a, t.b, t.c, t.d, t.e, t.f],
        "proj:bbox": list(grid.bounds),
    }


def _assets(outputs: Mapping[str, Any]) -> dict[str, Any]:
    media, role = _KINDS[".json"]
    record = {"href": f"./{RECORD_NAME}", "type": media, "roles": [role], "title": "Record"}
    found: dict[str, Any] = {}
    for name in sorted(outputs):
        if name != STAC_NAME:
            found[name] = _asset(name, outputs[name])
    return {**found, RECORD_NAME: record}


def _asset(name: str, entry: Mapping[str, Any]) -> dict[str, Any]:
    suffix = PurePosixPath(name).suffix.lower()
    media, role = _KINDS.get(suffix, ("application/octet-stream", "data"))
    asset: dict[str, Any] = {"href": f"./{_href(name)}", "type": media, "roles": [role]}
    asset["file:checksum"] = _SHA256 + entry["sha256"]
    if "size" in entry:
        asset["file:size"] = entry["size"]
    if "data_type" in entry:
        band = {
            "name": entry["layer"],
            "description": entry["description"],
            "data_type": entry["data_type"],
            "nodata": entry["nodata"],
            "unit": entry["unit"],
            "raster:sampling": "point",
        }
        asset["bands"] = [{key: value for key, value in band.items() if value not in (None, "")}]
    return asset


def _href(path: str) -> str:
    """Write a relative path as a reference, byte for byte where it is no text."""
    return quote(path, safe="/", errors="surrogateescape")


def _last(path: str) -> str:
    return PurePosixPath(path).name


# --- the footprint ------------------------------------------------------------------------------


def footprint(grid: Grid) -> tuple[dict[str, Any], list[float]]:
    """Give the outline of a grid in longitude and latitude of WGS 84.

    Parameters
    ----------
    grid : Grid
        The grid; its sides are bent in longitude and latitude, so points stand along them.

    Returns
    -------
    geometry : dict
        GeoJSON Polygon, or MultiPolygon where the grid crosses the antimeridian; outer rings run
        counterclockwise.
    bbox : list of float
        West, south, east, north [degrees]. Across the antimeridian west is greater than east; a
        grid with a pole in it reaches from -180 to 180 and to the pole.

    Raises
    ------
    InputError
        If a point of the outline has no place in WGS 84.
    """
    lon, lat = _outline(grid)
    lon[1:] -= 360.0 * np.cumsum(np.round(np.diff(lon) / 360.0))  # a jump is the antimeridian
    if abs(lon[-1] - lon[0]) > 180.0:
        lon, lat = _over_the_pole(lon, lat)
    lon -= 360.0 * np.floor((lon.min() + 180.0) / 360.0)
    whole = Polygon(np.column_stack([lon, lat]))
    near = whole & box(-180.0, -90.0, 180.0, 90.0)
    far = affinity.translate(whole & box(180.0, -90.0, 540.0, 90.0), -360.0)
    area = near if far.area == 0.0 else near | far
    west, south, east, north = area.bounds
    if area.geom_type == "MultiPolygon":
        west, east = near.bounds[0], far.bounds[2]
        area = MultiPolygon([orient(part) for part in area.geoms])
    else:
        area = orient(area)
    shape = {"type": area.geom_type, "coordinates": _rounded(mapping(area)["coordinates"])}
    return shape, _rounded([west, south, east, north])


def _outline(grid: Grid) -> tuple[FloatArray, FloatArray]:
    """Give longitude and latitude of points along the sides of a grid, the first one again last."""
    step = np.arange(_PIECES) / _PIECES
    corners = [(0.0, 0.0), (1.0, 0.0), (1.0, 1.0), (0.0, 1.0), (0.0, 0.0)]
    down, right = (
        np.concatenate([a[i] + step * (b[i] - a[i]) for a, b in pairwise(corners)] + [[0.0]])
        for i in (0, 1)
    )
    x, y = grid.xy(down * grid.rows - 0.5, right * grid.cols - 0.5)
    return geodesy.wgs84(geodesy.crs_from_user(grid.crs_wkt), x, y)


def _over_the_pole(lon: FloatArray, lat: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Close an outline that runs round a pole by way of the pole."""
    pole = 90.0 if lat.mean() > 0.0 else -90.0
    return np.append(lon, [lon[-1], lon[0], lon[0]]), np.append(lat, [pole, pole, lat[0]])


def _rounded(values: Any) -> Any:
    """Round coordinates in lists of any depth."""
    if isinstance(values, list | tuple):
        return [_rounded(value) for value in values]
    return round(float(values), _DECIMALS)
