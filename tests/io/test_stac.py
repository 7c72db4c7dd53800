"""The STAC Item against the rules of STAC, and its footprint against the ground.

The schema here holds the rules of the SpatioTemporal Asset Catalog specification 1.1.0 for an
Item (item-spec/item-spec.md) and those of its extensions for projection 2.0.0, raster 2.0.0, file
2.1.0 and processing 1.2.0, as far as the item uses them. GeoJSON is RFC 7946.
"""

import copy
import json
from datetime import datetime
from urllib.parse import unquote

import numpy as np
import pytest
from affine import Affine
from jsonschema import Draft202012Validator
from shapely.geometry import Point, shape

from tests.io.records import SHA, sections, surface
from viewshed import geodesy
from viewshed.errors import InputError, OutputError
from viewshed.grid import Grid
from viewshed.io.record import build_record
from viewshed.io.stac import STAC_NAME, footprint, stac_item, write_stac

POSITION = {"type": "array", "minItems": 2, "maxItems": 2, "items": {"type": "number"}}
RING = {"type": "array", "minItems": 4, "items": POSITION}
RINGS = {"type": "array", "minItems": 1, "items": RING}
TIME = {"type": "string", "pattern": r"^\d{4}-\d\d-\d\dT\d\d:\d\d:\d\dZ$"}
NUMBERS = {"type": "array", "items": {"type": "number"}}
RULES = {
    "type": "object",
    "required": [
        "type", "stac_version", "id", "geometry", "bbox", "properties", "links", "assets",
    ],
    "properties": {
        "type": {"const": "Feature"},
        "stac_version": {"const": "1.1.0"},
        "stac_extensions": {
            "type": "array",
            "uniqueItems": True,
            "items": {"type": "string", "pattern": "^https://.*/v[0-9.]+/schema.json$"},
        },
        "id": {"type": "string", "minLength": 1, "pattern": "^[^/:]+$"},
        "geometry": {
            "type": "object",
            "required": ["type", "coordinates"],
            "oneOf": [
                {"properties": {"type": {"const": "Polygon"}, "coordinates": RINGS}},
                {
                    "properties": {
                        "type": {"const": "MultiPolygon"},
                        "coordinates": {"type": "array", "items": RINGS},
                    }
                },
            ],
        },
        "bbox": {"type": "array", "minItems": 4, "maxItems": 4, "items": {"type": "number"}},
        "properties": {
            "type": "object",
            # a null datetime needs both ends of a span
            "required": [
                "datetime", "start_datetime", "end_datetime", "proj:code", "proj:wkt2",
                "proj:shape", "proj:transform", "proj:bbox", "processing:software",
            ],
            "properties": {
                "datetime": {"type": "null"},
                "start_datetime": TIME,
                "end_datetime": TIME,
                "proj:code": {"type": ["string", "null"], "pattern": "^[A-Z]+:[0-9]+$"},
                "proj:wkt2": {"type": "string"},
                "proj:shape": {**NUMBERS, "minItems": 2, "maxItems": 2},
                "proj:transform": {**NUMBERS, "minItems": 6, "maxItems": 6},
                "proj:bbox": {**NUMBERS, "minItems": 4, "maxItems": 4},
                "processing:lineage": {"type": "string"},
                "processing:software": {
                    "type": "object",
                    "additionalProperties": {"type": "string"},
                },
            },
        },
        "links": {
            "type": "array",
            "items": {
                "type": "object",
                "required": ["href", "rel"],
                "properties": {"href": {"type": "string", "format": "iri-reference"}},
            },
        },
        "assets": {
            "type": "object",
            "additionalProperties": {
                "type": "object",
                "required": ["href"],
                "properties": {
                    "type": {"type": "string"},
                    "roles": {"type": "array", "items": {"type": "string"}},
                    "file:checksum": {"type": "string", "pattern": "^1220[0-9a-f]{64}$"},
                    "file:size": {"type": "integer"},
                    "bands": {
                        "type": "array",
                        "items": {
                            "type": "object",
                            "properties": {
                                "data_type": {"enum": ["uint8", "uint16", "uint32", "float32"]},
                                "nodata": {"anyOf": [{"type": "number"}, {"enum": ["nan"]}]},
                                "unit": {"type": "string", "minLength": 1},
                                "raster:sampling": {"enum": ["area", "point"]},
                            },
                        },
                    },
                },
            },
        },
    },
}  # fmt: skip

OUTPUTS = {
    "visible.tif": {
        "sha256": SHA,
        "size": 7,
        "pixel_sha256": SHA,
        "layer": "visible",
        "data_type": "uint8",
        "nodata": 255,
        "unit": "",
        "description": "visible (1), hidden (0)",
    },
    "clearance.tif": {
        "sha256": SHA,
        "size": 8,
        "pixel_sha256": SHA,
        "layer": "clearance",
        "data_type": "float32",
        "nodata": "nan",
        "unit": "m",
        "description": "height above the horizon",
    },
    "visible_Tårn 2.tif": {"sha256": SHA, "layer": "visible"},
    "map.png": {"sha256": SHA, "size": 9, "layer": None},
    "visible.gpkg": {"sha256": SHA, "size": 10, "layer": None},
    "odd.xyz": {"sha256": SHA},
    STAC_NAME: {"sha256": SHA},
}


def a_record(**changes):
    return build_record(sections(**{"outputs": OUTPUTS, **changes}))


@pytest.fixture
def item():
    return stac_item(a_record())


def test_the_rules_of_stac(item):
    Draft202012Validator(RULES).validate(item)
    assert json.loads(json.dumps(item, allow_nan=False)) == item
    named = {uri.split("/")[3] for uri in item["stac_extensions"]}
    parts = [item["properties"], *item["assets"].values()]
    parts += [band for asset in item["assets"].values() for band in asset.get("bands", [])]
    used = {key.partition(":")[0] for part in parts for key in part if ":" in key}
    assert used == {"proj", "processing", "file", "raster"}
    assert named == {"projection", "processing", "file", "raster"}


@pytest.mark.parametrize("place", ["id", "bbox", "links", "properties", "assets"])
def test_the_rules_refuse_what_is_wrong(item, place):
    assert not Draft202012Validator(RULES).is_valid({**item, place: None})
    assert not Draft202012Validator(RULES).is_valid({k: v for k, v in item.items() if k != place})


def test_no_time_is_claimed(item):
    start, end = (item["properties"][f"{name}_datetime"] for name in ("start", "end"))
    assert item["properties"]["datetime"] is None
    assert datetime.fromisoformat(start).year == 1
    assert datetime.fromisoformat(end).year == 9999


def test_projection(item):
    found = item["properties"]
    assert found["proj:code"] == "EPSG:32633"
    assert found["proj:shape"] == [3, 4]
    assert found["proj:transform"] == [30.0, 0.0, 400_000.0, 0.0, -30.0, 6_000_000.0]
    assert found["proj:bbox"] == [400_000.0, 5_999_910.0, 400_120.0, 6_000_000.0]
    assert geodesy.crs_from_user(found["proj:wkt2"]).name == "WGS 84 / UTM zone 33N"


def test_heights_of_the_grid_are_not_in_the_crs_of_the_files():
    found = stac_item(a_record(crs=geodesy.crs_from_user("EPSG:32633+5773").to_wkt()))
    assert found["properties"]["proj:code"] == "EPSG:32633"


def test_a_crs_without_a_code():
    text = "+proj=tmerc +lat_0=54 +lon_0=15 +k=1 +x_0=400000 +y_0=6000000 +ellps=GRS80"
    found = stac_item(a_record(crs=geodesy.crs_from_user(text).to_wkt()))
    assert found["properties"]["proj:code"] is None
    assert "Transverse Mercator" in found["properties"]["proj:wkt2"]
    Draft202012Validator(RULES).validate(found)


def test_assets(item):
    assets = item["assets"]
    assert set(assets) == {*OUTPUTS, "record.json"} - {STAC_NAME}
    cog = "image/tiff; application=geotiff; profile=cloud-optimized"
    assert assets["visible.tif"] == {
        "href": "./visible.tif",
        "type": cog,
        "roles": ["data"],
        "file:checksum": "1220" + SHA,
        "file:size": 7,
        "bands": [
            {
                "name": "visible",
                "description": "visible (1), hidden (0)",
                "data_type": "uint8",
                "nodata": 255,
                "raster:sampling": "point",
            }
        ],
    }
    band = assets["clearance.tif"]["bands"][0]
    assert (band["nodata"], band["unit"]) == ("nan", "m")
    assert assets["map.png"]["roles"] == ["overview"]
    assert assets["visible.gpkg"]["type"] == "application/geopackage+sqlite3"
    assert assets["odd.xyz"]["type"] == "application/octet-stream"
    assert assets["record.json"]["roles"] == ["metadata"]
    assert "file:checksum" not in assets["record.json"], "which holds that of the item itself"


def test_references_are_written_as_references():
    dem = [{"path": path, "size": 1, "sha256": SHA} for path in ("../høyde 1/a#b.tif", "c:d.tif")]
    found = stac_item(a_record(dem=dem, surface=surface("dsm\udcff.tif")))
    hrefs = [link["href"] for link in found["links"]]
    assert hrefs == ["../h%C3%B8yde%201/a%23b.tif", "c%3Ad.tif", "dsm%FF.tif"]
    assert [unquote(href) for href in hrefs[:2]] == ["../høyde 1/a#b.tif", "c:d.tif"]
    assert {link["rel"] for link in found["links"]} == {"derived_from"}
    assert found["assets"]["visible_Tårn 2.tif"]["href"] == "./visible_T%C3%A5rn%202.tif"


def test_words(item):
    record = a_record()
    assert item["properties"]["description"] == record["question"]
    assert item["properties"]["processing:software"] == {"viewshed": "1.2"}
    assert item["properties"]["processing:lineage"].endswith("; elevation from a.tif")
    dem = [{"path": f"{name}.tif", "size": 1, "sha256": SHA} for name in "abc"]
    more = stac_item(a_record(dem=dem, surface=surface("dsm.tif")))
    lineage = more["properties"]["processing:lineage"]
    assert lineage.endswith("from a.tif and 2 more files; sight is blocked by a separate surface")


def test_the_id_follows_from_what_was_asked_and_found(item):
    assert stac_item(a_record(), name="tower")["id"] == "tower"
    assert item["id"].startswith("viewshed-")
    elsewhere = [{**sections()["dem"][0], "path": "../../other/a.tif"}]
    assert stac_item(a_record(dem=elsewhere))["id"] == item["id"]
    other = copy.deepcopy(OUTPUTS)
    other["visible.tif"]["pixel_sha256"] = "0" * 64
    assert stac_item(a_record(outputs=other))["id"] != item["id"]


def test_write(tmp_path, item):
    path = tmp_path / STAC_NAME
    write_stac(path, a_record())
    first = path.read_bytes()
    assert json.loads(first) == item
    assert "visible_Tårn 2.tif" in first.decode()
    write_stac(path, a_record())
    assert path.read_bytes() == first
    with pytest.raises(OutputError, match=r"stac_item\.json: cannot be written: No such"):
        write_stac(tmp_path / "no" / STAC_NAME, a_record())


# --- the footprint ------------------------------------------------------------------------------


def outline(crs, shape_, transform):
    grid = Grid(shape_, Affine(*transform), geodesy.crs_from_user(crs).to_wkt())
    geometry, bbox = footprint(grid)
    area = shape(geometry)
    assert area.is_valid
    for part in getattr(area, "geoms", [area]):
        assert part.exterior.is_ccw
    return grid, area, bbox


def test_the_footprint_holds_the_cells_and_no_more():
    crs = "EPSG:32633"
    grid, area, bbox = outline(crs, (600, 800), (100, 0, 2e5, 0, -100, 7.2e6))
    rows, cols = np.mgrid[0:600:37, 0:800:41]
    x, y = grid.xy(rows, cols)
    for lon, lat in zip(*(v.ravel() for v in geodesy.wgs84(crs_of(crs), x, y)), strict=True):
        assert area.contains(Point(lon, lat))
    x, y = grid.xy([-2.0, 300.0, 602.0, 300.0], [400.0, -2.0, 400.0, 802.0])
    for lon, lat in zip(*geodesy.wgs84(crs_of(crs), x, y), strict=True):
        assert not area.contains(Point(lon, lat))
    assert bbox == list(area.bounds)
    # the sides are bent: 60 km of a parallel in UTM bulge by more than two cells
    corners = [area.exterior.coords[i] for i in range(0, 129, 32)]
    chord = type(area)(corners)
    assert area.symmetric_difference(chord).area > 0.001 * area.area


def crs_of(text):
    return geodesy.crs_from_user(text)


def test_the_datum_is_that_of_wgs_84():
    # OSGB 36 lies some hundred metres from WGS 84 in Britain
    grid, area, _ = outline("EPSG:27700", (10, 10), (100, 0, 4e5, 0, -100, 4e5))
    own = geodesy.lonlat(crs_of("EPSG:27700"), *grid.xy(4.5, 4.5))
    moved = np.array([area.centroid.x, area.centroid.y]) - np.ravel(own)
    assert 0.0003 < np.abs(moved).max() < 0.003


def test_rotated_and_south_up_grids():
    _, area, _ = outline("EPSG:32633", (100, 100), (26, -15, 4e5, 15, 26, 6e6))
    assert area.geom_type == "Polygon"
    assert area.area < 0.6 * area.envelope.area


@pytest.mark.parametrize(
    ("crs", "transform"),
    [
        ("EPSG:4326", (0.01, 0, 179.5, 0, -0.01, 10.0)),
        ("EPSG:4326", (0.01, 0, -180.5, 0, -0.01, 10.0)),
        ("EPSG:3832", (1000, 0, 3.29e6, 0, -1000, 1.1e6)),
    ],
)
def test_across_the_antimeridian(crs, transform):
    _, area, (west, south, east, north) = outline(crs, (100, 200), transform)
    assert area.geom_type == "MultiPolygon"
    assert west > 0 > east, "as RFC 7946 section 5.2 has it"
    assert -90 < south < north < 90
    one, two = sorted(area.geoms, key=lambda part: part.bounds[0])
    assert one.bounds[0] == -180.0
    assert two.bounds[2] == 180.0
    assert (two.bounds[0], one.bounds[2]) == (west, east)
    assert area.area == pytest.approx((east + 360 - west) * (north - south), rel=0.05)


@pytest.mark.parametrize(
    ("crs", "pole"), [("EPSG:3413", 90.0), ("EPSG:3031", -90.0), ("EPSG:32661", 90.0)]
)
def test_round_a_pole(crs, pole):
    shift = 2e6 if crs == "EPSG:32661" else 0.0
    transform = (1000, 0, shift - 50_000, 0, -1000, shift + 50_000)
    _, area, (west, south, east, north) = outline(crs, (100, 100), transform)
    assert area.geom_type == "Polygon"
    assert (west, east) == (-180.0, 180.0)
    assert pole in (south, north)
    for lon in (-179.0, -90.0, 0.0, 90.0, 179.0):
        assert area.contains(Point(lon, pole * 0.998))
        assert not area.contains(Point(lon, pole * 0.99))


@pytest.mark.parametrize("west", [-180.0, 0.0])
def test_all_round_the_earth(west):
    # posts on the poles: the cells reach half a cell past them
    _, area, bbox = outline("EPSG:4269", (181, 360), (1, 0, west, 0, -1, 90.5))
    assert bbox == [-180.0, -90.0, 180.0, 90.0]
    assert area.area == pytest.approx(360 * 180)


def test_another_world():
    moon = geodesy.crs_from_user("+proj=longlat +a=1737400 +b=1737400").to_wkt()
    with pytest.raises(InputError, match=r"no way leads from CRS .* to 'WGS 84"):
        footprint(Grid((3, 3), Affine(1, 0, 0, 0, -1, 0), moon))


def test_a_grid_that_leaves_the_world():
    wkt = geodesy.crs_from_user("EPSG:32633").to_wkt()
    with pytest.raises(InputError, match=r"part of the grid .* has no place"):
        footprint(Grid((3, 3), Affine(1e8, 0, 0, 0, -1e8, 0), wkt))
