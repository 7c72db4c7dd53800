"""The sample terrain holds what its page promises, and its strait shows the curve of the Earth.

The sight lines here are a few lines of numpy that share nothing with the package: heights along
a straight line, less (1 - k) d^2 / (2 R), and the greatest slope so far.
"""

import subprocess
import sys

import geopandas
import numpy as np
import pandas
import pytest
import rasterio

from viewshed.io.features import read_observers

EARTH_RADIUS = 6_371_000.0
K = 0.13
#: Bearings from the low lookout over open water to the far shore [degrees].
BEARINGS = range(53, 62)
LAYERS = ("lookouts", "masts", "turbines")


@pytest.fixture(scope="module")
def terrain(root):
    with rasterio.open(root / "sample_dem" / "elevation.tif") as src:
        yield src.read(1).astype(float), src


@pytest.fixture(scope="module")
def places(root, terrain):
    found = read_places(root / "sample_dem" / "places.gpkg")
    x, y = found.geometry.x.to_numpy(), found.geometry.y.to_numpy()
    return found.assign(ground=heights(terrain, x, y))


def read_places(path):
    """All layers in one table, with a column that names the layer."""
    layers = [geopandas.read_file(path, layer=n).assign(kind=n) for n in LAYERS]
    return pandas.concat(layers).set_index("name")


def heights(terrain, x, y):
    """Bilinear heights [m] at points."""
    z, src = terrain
    col, row = (x - src.bounds.left) / src.res[0] - 0.5, (src.bounds.top - y) / src.res[1] - 0.5
    left, top = np.floor(col).astype(int), np.floor(row).astype(int)
    right, down = col - left, row - top
    upper = z[top, left] * (1 - right) + z[top, left + 1] * right
    lower = z[top + 1, left] * (1 - right) + z[top + 1, left + 1] * right
    return upper * (1 - down) + lower * down


def profile(terrain, place, bearing, curved=True):
    """Distance, height and whether it is seen, every 10 m from a place to the edge."""
    _, src = terrain
    x0, y0 = place.geometry.x, place.geometry.y
    s = np.arange(10.0, 60_000.0, 10.0)
    x, y = x0 + s * np.sin(np.radians(bearing)), y0 + s * np.cos(np.radians(bearing))
    west, south, east, north = src.bounds
    rim = 16
    inside = (x > west + rim) & (x < east - rim) & (y > south + rim) & (y < north - rim)
    s, h = s[inside], heights(terrain, x[inside], y[inside])
    eye = float(heights(terrain, np.array([x0]), np.array([y0]))[0]) + place.eye_height
    drop = (1 - K) * s**2 / (2 * EARTH_RADIUS) if curved else 0.0
    slope = (h - eye - drop) / s
    horizon = np.concatenate([[-np.inf], np.maximum.accumulate(slope)[:-1]])
    return s, h, slope >= horizon


def test_grid_is_what_the_page_says(terrain):
    z, src = terrain
    assert src.shape == (1500, 1500)
    assert src.crs.to_epsg() == 32732
    assert src.res == (30.0, 30.0)
    assert src.units == ("m",)
    assert src.nodata is None
    assert np.isfinite(z).all()
    assert z.min() == 0.0
    assert 1000 < z.max() < 2000
    assert np.array_equal(z * 8, np.round(z * 8))


def test_strait_is_open_from_edge_to_edge(terrain):
    sea = terrain[0] == 0.0
    reached = np.zeros_like(sea)
    reached[:, 0] = sea[:, 0]
    while True:
        grown = reached.copy()
        grown[1:] |= reached[:-1]
        grown[:-1] |= reached[1:]
        grown[:, 1:] |= reached[:, :-1]
        grown[:, :-1] |= reached[:, 1:]
        grown &= sea
        if np.array_equal(grown, reached):
            break
        reached = grown
    assert reached[:, -1].any()
    assert 0.25 < sea.mean() < 0.5


def test_small_enough(root):
    folder = root / "sample_dem"
    assert sum(path.stat().st_size for path in folder.iterdir()) < 4_000_000


def test_page_says_that_it_is_invented(root):
    first = (root / "sample_dem" / "README.md").read_text(encoding="utf-8").splitlines()[0]
    assert "invented" in first


def test_places(places):
    assert places.kind.value_counts().to_dict() == {"turbines": 8, "masts": 3, "lookouts": 2}
    assert places.crs.to_epsg() == 32732
    assert (places.ground > 0).all()
    turbines = places[places.kind == "turbines"].geometry
    steps = np.hypot(np.diff(turbines.x), np.diff(turbines.y))
    assert steps.min() > 400
    assert steps.max() < 650


def test_low_lookout_stands_about_three_metres_above_the_sea(places):
    low = places.loc["Tirrow Spit"]
    assert low.ground + low.eye_height == pytest.approx(3.0, abs=0.1)


@pytest.mark.parametrize("bearing", BEARINGS)
def test_curve_hides_the_foot_of_the_far_shore(terrain, places, bearing):
    low = places.loc["Tirrow Spit"]
    s, h, seen = profile(terrain, low, bearing)
    shore = int(np.flatnonzero((h > 0) & (s > 1000))[0])
    assert 25_000 < s[shore] < 35_000
    assert not h[(s > 500) & (s < s[shore])].any()
    foot = (s >= s[shore]) & (s < s[shore] + 1500) & (h > 0) & (h <= 8)
    assert foot.sum() > 3
    assert not seen[foot].any()
    hills = seen & (s > s[shore])
    assert h[hills].max() > 100
    distance = s[hills][0]
    horizon = np.sqrt(2 * EARTH_RADIUS * (low.ground + low.eye_height) / (1 - K))
    hidden = (1 - K) * (distance - horizon) ** 2 / (2 * EARTH_RADIUS)
    assert h[hills][0] >= hidden - 1.0


@pytest.mark.parametrize("bearing", BEARINGS)
def test_on_a_flat_earth_the_foot_would_be_seen(terrain, places, bearing):
    s, h, seen = profile(terrain, places.loc["Tirrow Spit"], bearing, curved=False)
    shore = int(np.flatnonzero((h > 0) & (s > 1000))[0])
    foot = (s >= s[shore]) & (s < s[shore] + 1500) & (h > 0) & (h <= 8)
    assert seen[foot].any()


def test_demo_looks_from_the_turbines(places, load_script):
    path, _, layer = load_script("demo").OBSERVERS.rpartition(":")
    found = read_observers(f"{path}:{layer}")
    turbines = places[places.kind == "turbines"]
    assert [(one.name, one.x, one.y) for one in found] == [
        (name, point.x, point.y) for name, point in turbines.geometry.items()
    ]


@pytest.mark.slow
def test_made_again_it_is_the_same(root, terrain, places, tmp_path):
    script = root / "scripts" / "make_sample.py"
    subprocess.run([sys.executable, script, tmp_path], check=True, capture_output=True)
    with rasterio.open(tmp_path / "elevation.tif") as again:
        assert np.abs(again.read(1) - terrain[0]).max() <= 0.125
        assert again.transform == terrain[1].transform
    fresh = read_places(tmp_path / "places.gpkg")
    assert fresh.geometry.equals(places.geometry)


@pytest.mark.slow
def test_same_bytes_twice(load_script, terrain, tmp_path):
    script = load_script("make_sample")
    z = terrain[0].astype(np.float32)
    for name in ("a", "b"):
        script.write_elevation(tmp_path / f"{name}.tif", z)
        script.write_places(tmp_path / f"{name}.gpkg", script.make_places(z))
    assert (tmp_path / "a.tif").read_bytes() == (tmp_path / "b.tif").read_bytes()
    assert (tmp_path / "a.gpkg").read_bytes() == (tmp_path / "b.gpkg").read_bytes()
