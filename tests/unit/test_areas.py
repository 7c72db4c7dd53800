"""True areas of cells and of masks."""

import numpy as np
import pytest
from affine import Affine
from pyproj import CRS, Geod

from tests.unit.grids import GRIDS, make_grid
from viewshed import geodesy
from viewshed.areas import cell_areas, summed_area
from viewshed.errors import InputError
from viewshed.grid import Grid


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
    areas = cell_areas(grid)
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
    assert summed_area(grid, mask) == pytest.approx(expected, rel=1e-7)


def test_area_of_the_whole_earth():
    grid = Grid((180, 360), Affine(1, 0, -180, 0, -1, 90), "EPSG:4326")
    # Area of the WGS84 ellipsoid from its authalic radius, 6371007.1809 m.
    expected = 4 * np.pi * 6371007.1809**2
    assert summed_area(grid, np.ones(grid.shape)) == pytest.approx(expected, rel=1e-10)


def test_areas_of_a_grid_off_the_earth_are_refused():
    grid = make_grid("EPSG:3995", (0, 0), (1e5, -1e5), (2000, 2000), 10.0)
    with pytest.raises(InputError, match="smaller range"):
        cell_areas(grid)
