"""Coordinate systems, the range window, the post map's precision and true areas."""

import time

import numpy as np
import pytest
from affine import Affine
from geographiclib.geodesic import Geodesic
from pyproj import CRS, Geod, Transformer

from viewshed import geodesy
from viewshed.errors import InputError
from viewshed.grid import Grid

ROTATED_POLE = "+proj=ob_tran +o_proj=longlat +o_lat_p=40 +o_lon_p=0 +lon_0=10 +ellps=GRS80"


def make_grid(crs, centre, step, shape, turn=0.0):
    """Grid about a centre, steps (x, y) in CRS units."""
    transform = (
        Affine.translation(*centre)
        @ Affine.rotation(turn)
        @ Affine.scale(*step)
        @ Affine.translation(-shape[1] / 2, -shape[0] / 2)
    )
    return Grid(shape, transform, CRS.from_user_input(crs).to_wkt())


BIG = (4400, 4400)
#: name: (grid, range [m])
GRIDS = {
    "geographic at 65 N": (
        make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (4400, 4000)),
        60e3,
    ),
    "geographic at 65 S": (
        make_grid("EPSG:4258", (10, -65), (1 / 1500, -1 / 3600), (4400, 4000)),
        60e3,
    ),
    "geographic at 85 N": (make_grid("EPSG:4326", (10, 85), (1 / 300, -1 / 3600), BIG), 60e3),
    "geographic over 180": (make_grid("EPSG:4326", (180, 52), (1 / 3600, -1 / 3600), BIG), 60e3),
    "geographic 0 to 360": (make_grid("EPSG:4326", (359, 52), (1 / 3600, -1 / 3600), BIG), 60e3),
    "geographic in grads": (make_grid("EPSG:4807", (0.5, 50), (3e-4, -3e-4), BIG), 60e3),
    "rotated pole": (make_grid(ROTATED_POLE, (3, 5), (3e-4, -3e-4), BIG), 60e3),
    "UTM": (make_grid("EPSG:32633", (5e5, 7.2e6), (30, -30), BIG), 60e3),
    "UTM off its axis": (make_grid("EPSG:32633", (8.3e5, 6.1e6), (30, -30), BIG), 60e3),
    "UTM turned": (make_grid("EPSG:32633", (4e5, 5e6), (30, -30), BIG, 33.0), 60e3),
    "UTM south-up": (make_grid("EPSG:32633", (4e5, 5e6), (30, 30), BIG), 60e3),
    "UTM 1 m": (make_grid("EPSG:32633", (4e5, 5e6), (1, -1), (12_000, 12_000)), 5e3),
    "UTM 200 km": (make_grid("EPSG:32633", (4e5, 5e6), (30, -30), (14_000, 14_000)), 200e3),
    "Web Mercator at 60 N": (make_grid("EPSG:3857", (2e6, 8.4e6), (60, -60), BIG), 60e3),
    "state plane in feet": (make_grid("EPSG:2263", (1e6, 2e5), (100, -100), BIG), 60e3),
    "conic equal area": (make_grid("EPSG:5070", (0, 2e6), (30, -30), BIG), 60e3),
    "polar at the pole": (make_grid("EPSG:3995", (1e3, 2e3), (30, -30), BIG), 60e3),
    "westing and southing": (make_grid("EPSG:2053", (1e4, 3e6), (30, -30), BIG), 60e3),
    "one row": (make_grid("EPSG:32633", (4e5, 5e6), (30, -30), (1, 2500)), 60e3),
    "one column": (make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (2500, 1)), 60e3),
    "one cell": (make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (1, 1)), 60e3),
}
#: Places of the observer as shares of rows and columns; the last two lie outside the grid.
PLACES = [(0.5, 0.5), (0.02, 0.93), (-0.1, 0.4), (0.3, 1.2)]


def place(grid, share):
    return share[0] * (grid.rows - 1) + 0.3, share[1] * (grid.cols - 1) - 0.2


def exact_en(grid, lon0, lat0, rows, cols):
    """Local coordinates by a geodesic library of its own [m]."""
    crs = CRS.from_wkt(grid.crs_wkt)
    x, y = grid.xy(rows, cols)
    if crs.is_geographic and not crs.is_derived:
        unit = np.degrees(crs.axis_info[0].unit_conversion_factor)
        lon, lat = x * unit, y * unit
    else:
        base = crs.source_crs if crs.is_derived and crs.is_geographic else crs.geodetic_crs
        lon, lat = Transformer.from_crs(crs, base, always_xy=True).transform(x, y)
    shape = crs.ellipsoid
    a = shape.semi_major_metre
    line = Geodesic(a, (a - shape.semi_minor_metre) / a)
    found = [line.Inverse(lat0, lon0, p, m) for m, p in zip(lon, lat, strict=True)]
    distance = np.array([g["s12"] for g in found])
    bearing = np.radians([g["azi1"] for g in found])
    return distance * np.sin(bearing), distance * np.cos(bearing)


@pytest.mark.parametrize("share", PLACES)
@pytest.mark.parametrize("name", GRIDS)
def test_post_map_is_true(name, share):
    grid, range_m = GRIDS[name]
    row0, col0 = place(grid, share)
    found = geodesy.fit_post_map(grid, row0, col0, range_m=range_m)
    (row, col, rows, cols), _ = geodesy.range_window(grid, row0, col0, range_m)
    rng = np.random.default_rng(7)
    at_row = rng.uniform(row, row + rows - 1, 300)
    at_col = rng.uniform(col, col + cols - 1, 300)
    at_row[:4] = row, row, row + rows - 1, row + rows - 1
    at_col[:4] = col, col + cols - 1, col, col + cols - 1
    away = np.subtract(
        found.en(at_row, at_col), exact_en(grid, found.lon, found.lat, at_row, at_col)
    )
    worst = np.hypot(*away).max()
    side = np.hypot(*found.jacobian).min()
    assert worst <= 1e-3 * side
    assert worst <= 1.2 * found.error_m + 1e-6
    assert found.error_cells <= 1e-3
    assert found.degree <= 6
    assert np.array_equal(found.pq(row0, col0), (0.0, 0.0))


@pytest.mark.parametrize("name", GRIDS)
def test_post_map_is_the_index_near_the_observer(name):
    grid, range_m = GRIDS[name]
    row0, col0 = place(grid, (0.5, 0.5))
    found = geodesy.fit_post_map(grid, row0, col0, range_m=range_m)
    assert found.cp[1, 0] == found.cq[0, 1] == found.scale
    assert found.cp[0, 0] == found.cq[0, 0] == found.cp[0, 1] == found.cq[1, 0] == 0.0
    p, q = found.pq(row0 + 0.01, col0 - 0.01)
    assert np.allclose((p, q), (-0.01, 0.01), rtol=1e-4)
    exact = exact_en(grid, found.lon, found.lat, row0 + np.array([0, 1]), col0 + np.array([1, 0]))
    assert np.allclose(found.jacobian, exact, rtol=0.0, atol=2e-3 * np.abs(exact).max())


def test_small_ranges_need_no_curve():
    grid, _ = GRIDS["UTM"]
    found = geodesy.fit_post_map(grid, 2000.25, 1999.75, range_m=500.0)
    rows, cols = np.arange(1990.0, 2010.0)[:, None], np.arange(1990.0, 2010.0)[None, :]
    p, q = found.pq(rows, cols)
    assert found.degree == 1
    assert np.array_equal(p, np.broadcast_to(cols - 1999.75, p.shape))
    assert np.array_equal(q, np.broadcast_to(rows - 2000.25, q.shape))


def test_post_map_knows_the_observer():
    grid = make_grid("EPSG:4326", (10, 45), (0.001, -0.001), (101, 101))
    found = geodesy.fit_post_map(grid, 50.0, 50.0, range_m=5e3)
    assert (found.lon, found.lat) == pytest.approx((10.0, 45.0), abs=1e-12)
    assert found.radius_meridian == pytest.approx(6367381.816, abs=1e-3)
    assert found.radius_prime_vertical == pytest.approx(6388838.290, abs=1e-3)


@pytest.mark.parametrize(("lat", "range_m"), [(0.0, 6e6), (0.0, 2e7), (89.0, 3e5)])
def test_post_map_of_a_huge_range_is_refused_with_a_smaller_one(lat, range_m):
    grid = Grid((18_000, 36_000), Affine(0.01, 0, -180, 0, -0.01, 90), "EPSG:4326")
    row0, col0 = geodesy.post_position(grid, 0.0, lat)
    with pytest.raises(InputError, match=r" km are only known to .* of a cell .*give a range of"):
        geodesy.fit_post_map(grid, row0, col0, range_m=range_m)


def test_post_map_reaches_a_thousand_kilometres():
    grid = Grid((18_000, 36_000), Affine(0.01, 0, -180, 0, -0.01, 90), "EPSG:4326")
    row0, col0 = geodesy.post_position(grid, 0.0, 60.0)
    found = geodesy.fit_post_map(grid, row0, col0, range_m=1e6)
    assert found.error_cells <= 1e-3


def test_post_map_takes_little_time():
    grid, range_m = GRIDS["geographic at 85 N"]
    geodesy.fit_post_map(grid, 2000.0, 2000.0, range_m=range_m)
    start = time.perf_counter()
    geodesy.fit_post_map(grid, 2000.5, 2000.0, range_m=range_m)
    assert time.perf_counter() - start < 0.3


@pytest.mark.parametrize("share", PLACES)
@pytest.mark.parametrize("name", GRIDS)
def test_range_window_misses_no_post(name, share):
    grid, _ = GRIDS[name]
    row0, col0 = place(grid, share)
    crs = CRS.from_wkt(grid.crs_wkt)
    for range_m in (2e3, 20e3, 60e3):
        rows, cols = np.meshgrid(
            np.linspace(0, grid.rows - 1, min(grid.rows, 221)).round(),
            np.linspace(0, grid.cols - 1, min(grid.cols, 223)).round(),
        )
        lon0, lat0 = geodesy.lonlat(crs, *grid.xy(row0, col0))
        lon, lat = geodesy.lonlat(crs, *grid.xy(rows, cols))
        near = geodesy.inverse(crs, lon0, lat0, lon, lat)[0] <= range_m
        if not near.any():
            continue
        (row, col, n_rows, n_cols), _ = geodesy.range_window(grid, row0, col0, range_m)
        assert rows[near].min() >= row
        assert rows[near].max() < row + n_rows
        assert cols[near].min() >= col
        assert cols[near].max() < col + n_cols
        grid.window(row, col, n_rows, n_cols)


def test_range_window_is_tight_and_tells_the_edge():
    grid, _ = GRIDS["UTM"]
    window, past = geodesy.range_window(grid, 2200.0, 2200.0, 30e3)
    assert not past
    assert window[2] == window[3] == pytest.approx(2006, abs=4)
    window, past = geodesy.range_window(grid, 1000.0, 2200.0, 30e3)
    assert not past
    window, past = geodesy.range_window(grid, 999.0, 2200.0, 30e3)
    assert past
    assert window[0] == 0


def test_range_window_of_fine_cells_keeps_the_rim():
    grid = make_grid("EPSG:32633", (5e5, 5e6), (0.25, -0.25), (500_000, 500_000))
    row0, col0 = 250_000.0, 250_000.0
    (row, _, rows, _), _ = geodesy.range_window(grid, row0, col0, 60e3)
    lon, lat = geodesy.lonlat(CRS.from_wkt(grid.crs_wkt), *grid.xy(row0, col0))
    bearings = np.radians(np.linspace(-2.0, 2.0, 4001))
    ends = geodesy.direct(CRS.from_wkt(grid.crs_wkt), lon, lat, bearings, 60e3)
    back = Transformer.from_crs("EPSG:4326", "EPSG:32633", always_xy=True).transform(*ends)
    assert row <= grid.rowcol(*back)[0].min()
    assert rows < 1.001 * 2 * 60e3 / 0.25 / 0.9996


def test_range_window_with_the_pole_inside():
    geographic = make_grid("EPSG:4326", (0, 89), (0.1, -0.001), (1999, 3600))
    window, past = geodesy.range_window(geographic, 500.0, 1800.0, 80e3)
    assert window[3] == 3600
    assert past
    polar, _ = GRIDS["polar at the pole"]
    window, past = geodesy.range_window(polar, 2100.0, 2200.0, 40e3)
    assert not past
    assert max(window[2:]) < 2900


def test_range_over_the_cut_of_a_projection_keeps_one_side_and_says_so():
    edge = 20037508.342789244
    grid = Grid((2000, 2000), Affine(60, 0, edge - 120_000, 0, -60, 8.46e6), "EPSG:3857")
    window, past = geodesy.range_window(grid, 1000.0, 1800.0, 20e3)
    assert past
    assert window[1] + window[3] == 2000
    assert 1000 < window[1] < 1800 - 20e3 / 30 * 0.99
    geodesy.fit_post_map(grid, 1000.0, 1800.0, range_m=20e3)


def test_range_over_the_edge_of_a_whole_world_grid():
    grid = Grid((18_000, 36_000), Affine(0.01, 0, -180, 0, -0.01, 90), "EPSG:4326")
    window, past = geodesy.range_window(grid, 4000.0, 10.0, 60e3)
    assert past
    assert window[1] == 0
    assert window[3] < 150


@pytest.mark.parametrize("range_m", [0.0, -5.0, float("nan"), float("inf")])
def test_ranges_without_sense_are_refused(range_m):
    with pytest.raises(InputError, match="is not a positive number"):
        geodesy.range_window(GRIDS["UTM"][0], 0.0, 0.0, range_m)


def test_a_range_that_reaches_nothing_is_refused():
    with pytest.raises(InputError, match="no post of the grid is within 100 m"):
        geodesy.range_window(GRIDS["UTM"][0], -500.0, 0.0, 100.0)


def test_an_observer_off_the_earth_is_refused():
    grid = Grid((10, 10), Affine(1, 0, 0, 0, -1, 95), "EPSG:4326")
    with pytest.raises(InputError, match="outside what CRS 'WGS 84' can describe"):
        geodesy.range_window(grid, 0.0, 0.0, 1e3)


def test_positions_find_the_turn_of_the_grid():
    grid = make_grid("EPSG:4326", (190, 10), (0.1, -0.1), (100, 100))
    assert geodesy.post_position(grid, -170.05, 9.95) == pytest.approx((50.0, 49.0))
    assert geodesy.post_position(grid, 189.95, 9.95) == pytest.approx((50.0, 49.0))
    utm, _ = GRIDS["UTM"]
    assert geodesy.post_position(utm, *utm.xy(3.25, 9.0)) == pytest.approx((3.25, 9.0))


# --- areas --------------------------------------------------------------------------------------


def edge_area(grid, block, points):
    """Area inside the edge of a block (row, col, rows, cols), by geodesic polygon [m2]."""
    row, col, rows, cols = block
    along = np.linspace(0.0, 1.0, points, endpoint=False)
    r = row - 0.5 + rows * np.concatenate([0 * along, along, 0 * along + 1, 1 - along])
    c = col - 0.5 + cols * np.concatenate([along, 0 * along + 1, 1 - along, 0 * along])
    crs = CRS.from_wkt(grid.crs_wkt)
    lon, lat = geodesy.lonlat(crs, *grid.xy(r, c))
    a, f = geodesy.ellipsoid(crs)
    return abs(Geod(a=a, f=f).polygon_area_perimeter(lon, lat)[0])


@pytest.mark.parametrize("name", GRIDS)
def test_areas_are_true(name):
    grid, _ = GRIDS[name]
    areas = geodesy.cell_areas(grid)
    assert areas.error <= 1e-9
    rng = np.random.default_rng(3)
    n_rows, n_cols = min(grid.rows, 100), min(grid.cols, 100)
    for _ in range(4):
        row, col = rng.integers(0, grid.rows - n_rows + 1), rng.integers(0, grid.cols - n_cols + 1)
        rows, cols = row + np.arange(n_rows)[:, None], col + np.arange(n_cols)[None, :]
        expected = edge_area(grid, (row, col, n_rows, n_cols), 2000)
        assert areas.at(rows, cols).sum() == pytest.approx(expected, rel=1e-7)


@pytest.mark.parametrize("name", ["UTM off its axis", "Web Mercator at 60 N", "UTM turned"])
def test_summed_area_of_a_part(name):
    grid, _ = GRIDS[name]
    mask = np.zeros(grid.shape, dtype=bool)
    mask[300:3900, 50:2000] = True
    expected = edge_area(grid, (300, 50, 3600, 1950), 20_000)
    assert geodesy.summed_area(grid, mask) == pytest.approx(expected, rel=1e-7)


def test_area_of_the_whole_earth():
    grid = Grid((180, 360), Affine(1, 0, -180, 0, -1, 90), "EPSG:4326")
    # Area of the WGS84 ellipsoid from its authalic radius, 6371007.1809 m.
    expected = 4 * np.pi * 6371007.1809**2
    assert geodesy.summed_area(grid, np.ones(grid.shape)) == pytest.approx(expected, rel=1e-10)


def test_areas_of_a_grid_off_the_earth_are_refused():
    grid = make_grid("EPSG:3995", (0, 0), (1e5, -1e5), (2000, 2000), 10.0)
    with pytest.raises(InputError, match="smaller range"):
        geodesy.cell_areas(grid)


# --- coordinate systems -------------------------------------------------------------------------


@pytest.mark.parametrize("text", ["", "blah", "EPSG:123456789", None, "two\nlines " * 30])
def test_nonsense_is_no_crs(text):
    with pytest.raises(InputError, match="is not a coordinate reference system") as caught:
        geodesy.crs_from_user(text)
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 200


@pytest.mark.parametrize("text", ["EPSG:4978", "EPSG:5773", 'LOCAL_CS["site",UNIT["metre",1]]'])
def test_a_crs_without_places_on_the_ground_is_refused(text):
    with pytest.raises(InputError, match="projected or geographic"):
        geodesy.crs_from_user(text)


@pytest.mark.parametrize(
    ("text", "horizontal", "vertical"),
    [
        ("EPSG:32633", 1.0, None),
        ("EPSG:4326", None, None),
        ("EPSG:4979", None, 1.0),
        ("EPSG:2263", 1200 / 3937, None),
        ("EPSG:2263+6360", 1200 / 3937, 1200 / 3937),
        ("EPSG:2263+5703", 1200 / 3937, 1.0),
        ("EPSG:32633+8228", 1.0, 0.3048),
        ("EPSG:2222", 0.3048, None),
        ("+proj=utm +zone=33 +towgs84=1,2,3 +units=us-ft +type=crs", 1200 / 3937, None),
    ],
)
def test_units_of_length(text, horizontal, vertical):
    crs = geodesy.crs_from_user(text)
    found = geodesy.horizontal_unit_factor(crs), geodesy.vertical_unit_factor(crs)
    for value, expected in zip(found, (horizontal, vertical), strict=True):
        assert value == (None if expected is None else pytest.approx(expected, rel=1e-12))


def test_depths_are_refused():
    with pytest.raises(InputError, match="count downwards"):
        geodesy.vertical_unit_factor(geodesy.crs_from_user("EPSG:32633+5831"))


@pytest.mark.parametrize("text", ["EPSG:4326", "EPSG:4979", "EPSG:4326+5773", "OGC:CRS84"])
def test_x_is_longitude_whatever_the_axis_order(text):
    lon, lat = geodesy.lonlat(geodesy.crs_from_user(text), [10.0, 20.0], 50.0)
    assert lon.tolist() == [10.0, 20.0]
    assert lat.tolist() == [50.0, 50.0]


def test_lonlat_needs_no_datum_shift():
    tied = geodesy.crs_from_user("+proj=utm +zone=33 +ellps=bessel +towgs84=500,400,300 +type=crs")
    lon, lat = geodesy.lonlat(tied, 500000.0, 0.0)
    assert (float(lon), float(lat)) == pytest.approx((15.0, 0.0), abs=1e-9)
    assert geodesy.ellipsoid(tied)[0] == 6377397.155


def test_transform_point_keeps_x_first():
    wgs, utm = geodesy.crs_from_user("EPSG:4326"), geodesy.crs_from_user("EPSG:32633+5773")
    x, y = geodesy.transform_point(15.0, 0.0, wgs, utm)
    assert (x, y) == pytest.approx((500000.0, 0.0), abs=1e-6)
    assert geodesy.transform_point(x, y, utm, wgs) == pytest.approx((15.0, 0.0), abs=1e-9)
    with pytest.raises(InputError, match="has no place in"):
        geodesy.transform_point(0.0, 95.0, wgs, utm)


def test_there_and_back():
    crs = geodesy.crs_from_user("EPSG:4258")
    bearing = np.radians([0.0, 45.0, 179.0, -90.0])
    lon, lat = geodesy.direct(crs, 15.0, 60.0, bearing, 30e3)
    distance, back = geodesy.inverse(crs, 15.0, 60.0, lon, lat)
    assert np.allclose(distance, 30e3, rtol=0.0, atol=1e-6)
    assert np.allclose(back, bearing, rtol=0.0, atol=1e-9)
