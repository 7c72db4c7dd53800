"""The range window and the post map's precision."""

import time

import numpy as np
import pytest
from affine import Affine
from geographiclib.geodesic import Geodesic
from pyproj import CRS, Transformer

from tests.unit.grids import GRIDS, make_grid
from viewshed import geodesy
from viewshed.errors import InputError
from viewshed.grid import Grid
from viewshed.postmap import fit_post_map, range_window

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
    found = fit_post_map(grid, row0, col0, range_m=range_m)
    (row, col, rows, cols), _ = range_window(grid, row0, col0, range_m)
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
    found = fit_post_map(grid, row0, col0, range_m=range_m)
    assert found.cp[1, 0] == found.cq[0, 1] == found.scale
    assert found.cp[0, 0] == found.cq[0, 0] == found.cp[0, 1] == found.cq[1, 0] == 0.0
    p, q = found.pq(row0 + 0.01, col0 - 0.01)
    assert np.allclose((p, q), (-0.01, 0.01), rtol=1e-4)
    exact = exact_en(grid, found.lon, found.lat, row0 + np.array([0, 1]), col0 + np.array([1, 0]))
    assert np.allclose(found.jacobian, exact, rtol=0.0, atol=2e-3 * np.abs(exact).max())


def test_small_ranges_need_no_curve():
    grid, _ = GRIDS["UTM"]
    found = fit_post_map(grid, 2000.25, 1999.75, range_m=500.0)
    rows, cols = np.arange(1990.0, 2010.0)[:, None], np.arange(1990.0, 2010.0)[None, :]
    p, q = found.pq(rows, cols)
    assert found.degree == 1
    assert np.array_equal(p, np.broadcast_to(cols - 1999.75, p.shape))
    assert np.array_equal(q, np.broadcast_to(rows - 2000.25, q.shape))


def test_post_map_knows_the_observer():
    grid = make_grid("EPSG:4326", (10, 45), (0.001, -0.001), (101, 101))
    found = fit_post_map(grid, 50.0, 50.0, range_m=5e3)
    assert (found.lon, found.lat) == pytest.approx((10.0, 45.0), abs=1e-12)
    assert found.radius_meridian == pytest.approx(6367381.816, abs=1e-3)
    assert found.radius_prime_vertical == pytest.approx(6388838.290, abs=1e-3)


@pytest.mark.parametrize(("lat", "range_m"), [(0.0, 6e6), (0.0, 2e7), (89.0, 3e5)])
def test_post_map_of_a_huge_range_is_refused_with_a_smaller_one(lat, range_m):
    grid = Grid((18_000, 36_000), Affine(0.01, 0, -180, 0, -0.01, 90), "EPSG:4326")
    row0, col0 = geodesy.post_position(grid, 0.0, lat)
    with pytest.raises(InputError, match=r" km are only known to .* of a cell .*give a range of"):
        fit_post_map(grid, row0, col0, range_m=range_m)


def test_post_map_reaches_a_thousand_kilometres():
    grid = Grid((18_000, 36_000), Affine(0.01, 0, -180, 0, -0.01, 90), "EPSG:4326")
    row0, col0 = geodesy.post_position(grid, 0.0, 60.0)
    found = fit_post_map(grid, row0, col0, range_m=1e6)
    assert found.error_cells <= 1e-3


def test_post_map_takes_little_time():
    grid, range_m = GRIDS["geographic at 85 N"]
    fit_post_map(grid, 2000.0, 2000.0, range_m=range_m)
    start = time.perf_counter()
    fit_post_map(grid, 2000.5, 2000.0, range_m=range_m)
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
        (row, col, n_rows, n_cols), _ = range_window(grid, row0, col0, range_m)
        assert rows[near].min() >= row
        assert rows[near].max() < row + n_rows
        assert cols[near].min() >= col
        assert cols[near].max() < col + n_cols
        grid.window(row, col, n_rows, n_cols)


def test_range_window_is_tight_and_tells_the_edge():
    grid, _ = GRIDS["UTM"]
    window, past = range_window(grid, 2200.0, 2200.0, 30e3)
    assert not past
    assert window[2] == window[3] == pytest.approx(2006, abs=4)
    window, past = range_window(grid, 1000.0, 2200.0, 30e3)
    assert not past
    window, past = range_window(grid, 999.0, 2200.0, 30e3)
    assert past
    assert window[0] == 0


def test_range_window_of_fine_cells_keeps_the_rim():
    grid = make_grid("EPSG:32633", (5e5, 5e6), (0.25, -0.25), (500_000, 500_000))
    row0, col0 = 250_000.0, 250_000.0
    (row, _, rows, _), _ = range_window(grid, row0, col0, 60e3)
    lon, lat = geodesy.lonlat(CRS.from_wkt(grid.crs_wkt), *grid.xy(row0, col0))
    bearings = np.radians(np.linspace(-2.0, 2.0, 4001))
    ends = geodesy.direct(CRS.from_wkt(grid.crs_wkt), lon, lat, bearings, 60e3)
    back = Transformer.from_crs("EPSG:4326", "EPSG:32633", always_xy=True).transform(*ends)
    assert row <= grid.rowcol(*back)[0].min()
    assert rows < 1.001 * 2 * 60e3 / 0.25 / 0.9996


def test_range_window_with_the_pole_inside():
    geographic = make_grid("EPSG:4326", (0, 89), (0.1, -0.001), (1999, 3600))
    window, past = range_window(geographic, 500.0, 1800.0, 80e3)
    assert window[3] == 3600
    assert past
    polar, _ = GRIDS["polar at the pole"]
    window, past = range_window(polar, 2100.0, 2200.0, 40e3)
    assert not past
    assert max(window[2:]) < 2900


def test_range_over_the_cut_of_a_projection_keeps_one_side_and_says_so():
    edge = 20037508.342789244
    grid = Grid((2000, 2000), Affine(60, 0, edge - 120_000, 0, -60, 8.46e6), "EPSG:3857")
    window, past = range_window(grid, 1000.0, 1800.0, 20e3)
    assert past
    assert window[1] + window[3] == 2000
    assert 1000 < window[1] < 1800 - 20e3 / 30 * 0.99
    fit_post_map(grid, 1000.0, 1800.0, range_m=20e3)


def test_range_over_the_edge_of_a_whole_world_grid():
    grid = Grid((18_000, 36_000), Affine(0.01, 0, -180, 0, -0.01, 90), "EPSG:4326")
    window, past = range_window(grid, 4000.0, 10.0, 60e3)
    assert past
    assert window[1] == 0
    assert window[3] < 150


@pytest.mark.parametrize("range_m", [0.0, -5.0, float("nan"), float("inf")])
def test_ranges_without_sense_are_refused(range_m):
    with pytest.raises(InputError, match="is not a positive number"):
        range_window(GRIDS["UTM"][0], 0.0, 0.0, range_m)


def test_a_range_that_reaches_nothing_is_refused():
    with pytest.raises(InputError, match="no post of the grid is within 100 m"):
        range_window(GRIDS["UTM"][0], -500.0, 0.0, 100.0)


def test_an_observer_off_the_earth_is_refused():
    grid = Grid((10, 10), Affine(1, 0, 0, 0, -1, 95), "EPSG:4326")
    with pytest.raises(InputError, match="outside what CRS 'WGS 84' can describe"):
        range_window(grid, 0.0, 0.0, 1e3)
