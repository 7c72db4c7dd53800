"""Voids: what counts as one though it is not declared, and the height a user gives to them."""

import hashlib

import geopandas
import numpy as np
import pytest
import shapely
from affine import Affine

from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io.elevation import open_terrain

NORTH_UP = Affine(30, 0, 400_000, 0, -30, 6_000_000)
PLAIN = np.arange(12 * 10, dtype=np.float32).reshape(12, 10)
ALL = (0, 0, 12, 10)
LOWEST = float(np.finfo(np.float32).min)


def with_voids(value, dtype, cells=3):
    array = PLAIN.astype(dtype)
    array.ravel()[5 : 5 + cells] = value
    return array


# --- not declared -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("dtype", "value"),
    [
        *(("int16", value) for value in (-9999, -32768, -32767)),
        *(("int32", value) for value in (-9999, -32768, -32767, -99999, -(2**31))),
        *(("float32", value) for value in (-9999, -32768, -32767, -99999, LOWEST)),
        *(("float64", value) for value in (-9999, -32768, LOWEST, np.finfo(np.float64).min)),
        ("float32", -3.40282e38),
        ("uint16", 65535),
    ],
)
def test_undeclared_value_is_void_with_a_warning(make_dem, dtype, value):
    path = make_dem(array=with_voids(value, dtype))
    with pytest.warns(ViewshedWarning, match=r"dem\.tif: 3 cells of -?[\d.e+]+, not declared as n"):
        reading = open_terrain(path).load(*ALL)
    expected = PLAIN.copy()
    expected.ravel()[5:8] = np.nan
    np.testing.assert_array_equal(reading.elevation, expected)
    assert reading.undeclared_voids == 3


def test_warning_names_file_value_and_cure(make_dem):
    with pytest.warns(ViewshedWarning) as caught:
        open_terrain(make_dem(array=with_voids(-9999, "int16", cells=1))).read(*ALL)
    assert str(caught[0].message).endswith(
        "dem.tif: 1 cell of -9999, not declared as nodata, taken as void; "
        "declare the value in the file"
    )


def test_one_warning_for_many_files(make_dem, tmp_path):
    for n in range(4):
        transform = NORTH_UP @ Affine.translation(10 * n, 0)
        make_dem(f"{n}.tif", with_voids(-32768, "int16", cells=n), transform=transform)
    with pytest.warns(ViewshedWarning, match=r"1\.tif: 1 cell of .* \(likewise in 2 more files\)"):
        reading = open_terrain(tmp_path).load(0, 0, 12, 40)
    assert reading.undeclared_voids == 6


@pytest.mark.parametrize(("scale", "offset", "unit"), [(0.1, 0, "m"), (1, 50, "ft"), (-1, 0, "m")])
def test_undeclared_value_is_that_of_the_file(make_dem, scale, offset, unit):
    path = make_dem(array=with_voids(-9999, "int16"), scale=scale, offset=offset, unit=unit)
    with pytest.warns(ViewshedWarning, match=r"3 cells of -9999, not declared"):
        heights = open_terrain(path).read(*ALL)
    factor = 0.3048 if unit == "ft" else 1.0
    expected = (PLAIN * scale + offset) * factor
    expected.ravel()[5:8] = np.nan
    np.testing.assert_allclose(heights, expected, rtol=1e-6)


@pytest.mark.parametrize(("declared", "value"), [(-9999, -32767), (-32768, -9999), (0, -32768)])
def test_undeclared_value_beside_a_declared_one(make_dem, declared, value):
    array = with_voids(value, "int16")
    array[9, 9] = declared
    with pytest.warns(ViewshedWarning, match=rf"3 cells of {value}, not declared"):
        reading = open_terrain(make_dem(array=array, nodata=declared)).load(*ALL)
    assert np.isnan(reading.elevation[9, 9])
    assert reading.undeclared_voids == 3


def test_both_undeclared_values_in_one_file(make_dem):
    array = with_voids(-32768, "int16")
    array[11, :4] = -32767
    with pytest.warns(ViewshedWarning, match=r"of -3276[78], not declared"):
        reading = open_terrain(make_dem(array=array)).load(*ALL)
    assert reading.undeclared_voids == 7


@pytest.mark.parametrize("dtype", ["uint8", "int8", "uint32"])
def test_type_that_holds_no_habitual_value(make_dem, dtype):
    array = PLAIN.astype(dtype)
    array[0, 0] = np.iinfo(dtype).max
    array[0, 1] = np.iinfo(dtype).min
    assert not np.isnan(open_terrain(make_dem(array=array)).read(*ALL)).any()


def test_sea_floor_that_deep_is_ground(make_dem):
    depths = np.linspace(-10900, -9000, 120).round().astype(np.int16).reshape(12, 10)
    depths[3, 3] = -9999
    np.testing.assert_array_equal(open_terrain(make_dem(array=depths)).read(*ALL), depths)


def test_fine_steps_that_pass_the_value_are_ground(make_dem):
    steps = np.linspace(-20000, 20000, 120 * 100).round().astype(np.int16).reshape(120, 100)
    heights = open_terrain(make_dem(array=steps, scale=0.01)).read(0, 0, 120, 100)
    np.testing.assert_allclose(heights, steps * 0.01, rtol=1e-6)


def test_what_a_value_means_does_not_depend_on_the_window(make_dem, monkeypatch):
    """Nor on the strips that are read at a time, nor on how much of a large tile is looked at."""
    floor = np.linspace(-9900, -10100, 60 * 80).reshape(60, 80).astype(np.int16)
    assert (floor == -9999).any()
    terrain = open_terrain(make_dem("floor.tif", floor))
    row, col = (int(v[0]) for v in np.nonzero(floor == -9999))
    assert terrain.read(0, 0, 60, 80)[row, col] == -9999
    assert terrain.read(row, col, 1, 1)[0, 0] == -9999
    monkeypatch.setattr("viewshed.io._cells._STRIP_CELLS", 80)
    monkeypatch.setattr("viewshed.io._cells._MOST_CELLS", 1200)
    again = open_terrain(make_dem("floor again.tif", floor))
    assert again.read(row, col, 1, 1)[0, 0] == -9999
    land = np.where(floor == -9999, floor, 12).astype(np.int16)
    holed = open_terrain(make_dem("holed.tif", land))
    with pytest.warns(ViewshedWarning, match="cells of -9999"):
        assert np.isnan(holed.read(row, 0, 1, 80)[0, col])


def test_masked_cells_may_hold_anything(make_dem):
    mask = np.full(PLAIN.shape, 255, np.uint8)
    mask[0, 5:8] = 0
    reading = open_terrain(make_dem(array=with_voids(-9999, "int16"), mask=mask)).load(*ALL)
    assert np.isnan(reading.elevation).sum() == 3
    assert reading.undeclared_voids == 0


# --- given a height -----------------------------------------------------------------------------


@pytest.fixture
def coast(make_dem):
    """Ground in the west, voids in the three columns of the east."""
    array = PLAIN.copy()
    array[:, 7:] = -9999
    return make_dem("coast.tif", array, nodata=-9999)


def polygons(path, shapes, crs="EPSG:32633", **options):
    names = [f"part {n}" for n in range(len(shapes))]
    frame = geopandas.GeoDataFrame({"name": names}, geometry=shapes, crs=crs)
    frame.to_file(path, **options)
    return path


def cells(rows, cols):
    """Rectangle about the cells from a first row and column up to others."""
    left, top = NORTH_UP @ (cols[0], rows[0])
    right, bottom = NORTH_UP @ (cols[1], rows[1])
    return shapely.box(left, bottom, right, top)


def test_void_height(coast):
    terrain = open_terrain(coast, void_height=0)
    reading = terrain.load(0, 5, 12, 5)
    assert (reading.elevation[:, 2:] == 0).all()
    np.testing.assert_array_equal(reading.elevation[:, :2], PLAIN[:, 5:7])
    assert reading.voids_set == 36
    assert terrain.stated["void_height_m"] == 0
    assert terrain.stated["void_mask"] is None
    assert open_terrain(coast).load(*ALL).voids_set == 0


def test_void_height_is_in_metres(make_dem):
    path = make_dem(array=with_voids(-9999, "int16"), nodata=-9999, unit="ft")
    heights = open_terrain(path, void_height=-1.5).read(*ALL)
    assert (heights.ravel()[5:8] == -1.5).all()


def test_void_height_where_a_tile_is_missing(make_dem):
    paths = [make_dem("a.tif"), make_dem("b.tif", transform=NORTH_UP @ Affine.translation(20, 0))]
    reading = open_terrain(paths, void_height=3).load(0, 10, 12, 10)
    assert (reading.elevation == 3).all()
    assert reading.voids_set == 120


def test_void_height_where_the_value_is_not_declared(make_dem):
    with pytest.warns(ViewshedWarning, match="taken as void"):
        reading = open_terrain(make_dem(array=with_voids(-32768, "int16")), void_height=0).load(
            *ALL
        )
    assert (reading.undeclared_voids, reading.voids_set) == (3, 3)
    assert (reading.elevation.ravel()[5:8] == 0).all()


@pytest.mark.parametrize("height", [np.nan, np.inf])
def test_void_height_that_is_none(coast, height):
    with pytest.raises(InputError, match=r"void height (nan|inf) is not a height; give metres"):
        open_terrain(coast, void_height=height)


def test_mask_without_a_height(coast, tmp_path):
    mask = polygons(tmp_path / "sea.gpkg", [cells((0, 12), (0, 10))])
    with pytest.raises(InputError, match=r"sea\.gpkg was given and no void height; state it"):
        open_terrain(coast, void_mask=mask)


@pytest.mark.parametrize("suffix", ["gpkg", "shp", "geojson", "fgb"])
def test_only_voids_in_the_mask(coast, tmp_path, suffix):
    mask = polygons(tmp_path / f"the sea.{suffix}", [cells((2, 6), (3, 9))])
    terrain = open_terrain(coast, void_height=0, void_mask=mask)
    reading = terrain.load(*ALL)
    expected = PLAIN.copy()
    expected[:, 7:] = np.nan
    expected[2:6, 7:9] = 0
    np.testing.assert_array_equal(reading.elevation, expected)
    assert reading.voids_set == 8
    assert terrain.stated["void_mask"] == str(mask)
    np.testing.assert_array_equal(terrain.read(4, 6, 5, 4), expected[4:9, 6:])


def test_a_cell_is_in_the_mask_if_its_centre_is(coast, tmp_path):
    mask = polygons(tmp_path / "sea.gpkg", [cells((2.4, 5.6), (6.6, 8.4))])
    heights = open_terrain(coast, void_height=0, void_mask=mask).read(*ALL)
    assert (heights[2:6, 7] == 0).all()
    assert np.isnan(heights[2:6, 8:]).all()
    assert np.isnan(heights[[1, 6], 7]).all()


def test_hole_in_the_mask_and_other_shapes_beside(coast, tmp_path):
    outer, hole = cells((0, 12), (0, 10)), cells((4, 6), (8, 9))
    mask = polygons(
        tmp_path / "sea.gpkg",
        [shapely.MultiPolygon([outer.difference(hole)]), shapely.Point(4e5, 6e6), None],
    )
    reading = open_terrain(coast, void_height=0, void_mask=mask).load(*ALL)
    assert np.isnan(reading.elevation[4:6, 8]).all()
    assert reading.voids_set == 34


@pytest.mark.parametrize("transform", [
    Affine(30, 0, 4e5, 0, 30, 6e6),
    Affine(30, 0, 4e5, 0, -30, 6e6) @ Affine.rotation(30),
])  # fmt: skip
def test_mask_on_turned_and_south_up_grids(make_dem, tmp_path, transform):
    array = np.full((40, 50), -9999, np.float32)
    array[:, 0] = 1
    path = make_dem(array=array, nodata=-9999, transform=transform)
    corners = [transform @ (c, r) for c, r in [(10, 5), (30, 5), (30, 25), (10, 25)]]
    mask = polygons(tmp_path / "sea.gpkg", [shapely.Polygon(corners)])
    heights = open_terrain(path, void_height=7, void_mask=mask).read(0, 0, 40, 50)
    assert (heights[5:25, 10:30] == 7).all()
    assert (heights == 7).sum() == 400


def test_mask_in_another_crs_keeps_its_straight_edges(make_dem, tmp_path):
    n = 400
    array = np.full((n, n), -9999, np.float32)
    array[0, 0] = 1
    transform = Affine(500, 0, 4e5, 0, -500, 7e6)
    path = make_dem(array=array, nodata=-9999, transform=transform)
    mask = polygons(tmp_path / "north.gpkg", [shapely.box(-170, 62.5, 170, 89)], crs="EPSG:4326")
    heights = open_terrain(path, void_height=0, void_mask=mask).read(0, 0, n, n)
    x, y = open_terrain(path).grid.xy(*np.indices((n, n)))
    points = geopandas.GeoSeries(shapely.points(x.ravel(), y.ravel()), crs="EPSG:32633")
    latitude = points.to_crs("EPSG:4326").y.to_numpy().reshape(n, n)
    is_clear = np.abs(latitude - 62.5) > 2e-4
    is_clear[0, 0] = False
    np.testing.assert_array_equal((heights == 0)[is_clear], (latitude > 62.5)[is_clear])
    assert is_clear.mean() > 0.99


@pytest.mark.parametrize("west", [178.0, -182.0])
def test_mask_across_the_antimeridian(make_dem, tmp_path, west):
    array = np.full((20, 40), -9999, np.float32)
    array[0] = 1
    step = Affine(0.1, 0, west, 0, -0.1, -16)
    path = make_dem(array=array, nodata=-9999, transform=step, crs="EPSG:4326")
    shapes = [shapely.box(179, -17, 180, -16.5), shapely.box(-180, -17, -179, -16.5)]
    mask = polygons(tmp_path / "strait.geojson", shapes, crs="EPSG:4326")
    heights = open_terrain(path, void_height=0, void_mask=mask).read(0, 0, 20, 40)
    assert (heights[5:10, 10:30] == 0).all()
    assert (heights == 0).sum() == 100
    around = polygons(tmp_path / "round.gpkg", [shapely.box(179, -17, 181, -16.5)], "EPSG:4326")
    again = open_terrain(path, void_height=0, void_mask=around).read(0, 0, 20, 40)
    np.testing.assert_array_equal(again, heights)


def test_mask_in_a_folder(coast, tmp_path):
    mask = polygons(tmp_path / "sea.gdb", [cells((0, 12), (0, 10))], driver="OpenFileGDB")
    terrain = open_terrain(coast, void_height=0, void_mask=mask)
    assert terrain.load(*ALL).voids_set == 36
    assert len(terrain.fingerprint(*ALL).mask_entries) > 3


def test_a_mask_that_is_replaced_once_it_was_read_is_refused(coast, tmp_path):
    mask = polygons(tmp_path / "sea.gpkg", [cells((2, 6), (3, 9))])
    before = mask.read_bytes()
    terrain = open_terrain(coast, void_height=0, void_mask=mask)
    taken = terrain.fingerprint(*ALL)
    assert [entry["sha256"] for entry in taken.mask_entries] == [hashlib.sha256(before).hexdigest()]
    taken.confirm()
    polygons(mask, [cells((0, 3), (0, 3))])
    with pytest.raises(DataError, match=r"sea\.gpkg: was replaced while it was read"):
        terrain.fingerprint(*ALL).confirm()


def test_mask_that_does_not_reach_the_window(coast, tmp_path):
    mask = polygons(tmp_path / "far.gpkg", [shapely.box(9e5, 5e6, 9.1e5, 5.1e6)])
    reading = open_terrain(coast, void_height=0, void_mask=mask).load(*ALL)
    assert reading.voids_set == 0
    with pytest.raises(DataError, match=r"coast\.tif: only voids in the 12 x 3 cells"):
        open_terrain(coast, void_height=0, void_mask=mask).read(0, 7, 12, 3)


def test_mask_that_crosses_itself(coast, tmp_path):
    (x0, y0), (x1, y1) = NORTH_UP @ (0, 0), NORTH_UP @ (10, 12)
    bow = shapely.Polygon([(x0, y0), (x1, y1), (x1, y0), (x0, y1)])
    mask = polygons(tmp_path / "bow.gpkg", [bow])
    heights = open_terrain(coast, void_height=0, void_mask=mask).read(*ALL)
    assert (heights[3:9, 9] == 0).all()
    assert np.isnan(heights[[0, 11], 7]).all()


def test_mask_that_is_missing_or_unreadable(coast, tmp_path):
    with pytest.raises(DataError, match=r"none\.gpkg: no such file; check the path of the void m"):
        open_terrain(coast, void_height=0, void_mask=tmp_path / "none.gpkg")
    text = tmp_path / "text.gpkg"
    text.write_text("polygons, more or less")
    with pytest.raises(DataError, match=r"^[^\n]*text\.gpkg: cannot be read as a void mask[^\n]*$"):
        open_terrain(coast, void_height=0, void_mask=text)


def test_mask_without_polygons(coast, tmp_path):
    points = polygons(tmp_path / "points.gpkg", [shapely.Point(4e5, 6e6)])
    with pytest.raises(DataError, match=r"points\.gpkg: holds Point and no polygon; a void mask"):
        open_terrain(coast, void_height=0, void_mask=points)
    empty = polygons(tmp_path / "empty.gpkg", [shapely.Polygon()])
    with pytest.raises(DataError, match=r"empty\.gpkg: .*polygon"):
        open_terrain(coast, void_height=0, void_mask=empty)
    none = polygons(tmp_path / "none.geojson", [], driver="GeoJSON")
    with pytest.raises(DataError, match=r"none\.geojson: .*polygon"):
        open_terrain(coast, void_height=0, void_mask=none)
    table = tmp_path / "table.csv"
    table.write_text("a,b\n1,2\n")
    with pytest.raises(DataError, match=r"table\.csv: holds no shapes; a void mask is made of pol"):
        open_terrain(coast, void_height=0, void_mask=table)


def test_mask_without_a_crs(coast, tmp_path):
    mask = polygons(tmp_path / "sea.shp", [cells((0, 12), (0, 10))])
    mask.with_suffix(".prj").unlink()
    with pytest.raises(DataError, match=r"sea\.shp: the void mask states no coordinate ref.*; add"):
        open_terrain(coast, void_height=0, void_mask=mask)


def test_mask_of_several_layers(coast, tmp_path):
    mask = tmp_path / "sea.gpkg"
    polygons(mask, [cells((0, 12), (0, 10))], layer="sea")
    polygons(mask, [shapely.Point(4e5, 6e6)], layer="harbours", mode="a")
    assert open_terrain(coast, void_height=0, void_mask=mask).load(*ALL).voids_set == 36
    polygons(mask, [cells((0, 12), (0, 10))], layer="lakes", mode="a")
    with pytest.raises(DataError, match=r"several layers that may be the void mask \(sea, lakes\)"):
        open_terrain(coast, void_height=0, void_mask=mask)
