"""The surface that blocks sight, brought onto the grid of the ground."""

import tracemalloc
import warnings

import numpy as np
import pytest
from affine import Affine
from pyproj import Transformer

from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io.elevation import open_terrain
from viewshed.io.surface import compare, open_surface

WEST, NORTH, CELL = 400_000.0, 6_000_000.0, 30.0
UTM = "EPSG:32633"
GROUND = Affine(CELL, 0, WEST, 0, -CELL, NORTH)
#: Rows and columns of the ground in all tests that name no others.
SHAPE = (40, 50)


def plane(x, y):
    """A tilted plane over the ground [m]."""
    return 100.0 + 0.04 * (x - WEST) - 0.03 * (y - NORTH)


def centres(transform, shape):
    rows, cols = np.indices(shape) + 0.5
    return transform @ (cols, rows)


def plane_on(transform, shape):
    return plane(*centres(transform, shape)).astype(np.float32)


def read(surface, shape=SHAPE):
    return surface.read(0, 0, *shape)


@pytest.fixture
def ground(make_dem):
    return open_terrain(make_dem("ground.tif", np.zeros(SHAPE, np.float32), transform=GROUND))


@pytest.fixture
def over(make_dem, ground):
    """Give a function that makes a surface over the ground and opens it."""

    def make(array, transform=GROUND, options=None, **profile):
        path = make_dem("surface.tif", array, transform=transform, **profile)
        return open_surface(path, ground, **(options or {}))

    return make


# --- the same grid ----------------------------------------------------------------------------


def test_same_grid_is_read_as_it_is(over, make_dem):
    noise = np.random.default_rng(0).random(SHAPE, np.float32)
    surface = over(noise)
    assert surface.method == "same grid"
    assert [p.name for p in surface.paths] == ["surface.tif"]
    np.testing.assert_array_equal(read(surface), noise)
    np.testing.assert_array_equal(surface.read(3, 5, 10, 20), noise[3:13, 5:25])


@pytest.mark.parametrize(("down", "right"), [(-7, -4), (9, 12), (-5, 20)])
def test_same_grid_elsewhere_is_shifted_and_void_outside(over, down, right):
    array = np.arange(40 * 50, dtype=np.float32).reshape(SHAPE)
    surface = over(array, GROUND @ Affine.translation(right, down))
    assert surface.method == "same grid"
    expected = np.full(SHAPE, np.nan, np.float32)
    for row in range(SHAPE[0]):
        for col in range(SHAPE[1]):
            if 0 <= row - down < SHAPE[0] and 0 <= col - right < SHAPE[1]:
                expected[row, col] = array[row - down, col - right]
    np.testing.assert_array_equal(read(surface), expected)
    np.testing.assert_array_equal(surface.read(2, 3, 20, 9), expected[2:22, 3:12])


@pytest.mark.parametrize(("shift", "method"), [(0.009, "same grid"), (0.02, "bilinear")])
def test_one_hundredth_of_a_cell_is_the_same_grid(over, shift, method):
    assert over(plane_on(GROUND, SHAPE), GROUND @ Affine.translation(shift, 0)).method == method


def test_window_where_the_same_grid_does_not_reach(over):
    surface = over(np.ones((5, 5), np.float32))
    assert np.isnan(surface.read(20, 20, 10, 10)).all()


def test_window_must_be_in_the_ground(over):
    with pytest.raises(InputError, match="not inside the grid"):
        over(np.ones(SHAPE, np.float32)).read(0, 0, 41, 5)


# --- other grids: a plane stays the plane -----------------------------------------------------

TURNED = (
    Affine.translation(WEST - 900, NORTH + 300) @ Affine.rotation(-25) @ Affine.translation(0, 900)
)
WIDE = Affine.translation(WEST - 300, NORTH + 300)
OTHER_GRIDS = {
    "half a cell off": (GROUND @ Affine.translation(-1.5, -1.5), (44, 54), "bilinear"),
    "coarser": (WIDE @ Affine.scale(90, -90), (20, 25), "bilinear"),
    "a little finer": (WIDE @ Affine.scale(29, -29), (64, 74), "bilinear"),
    "south up": (
        Affine.translation(WEST - 300, NORTH - 1500) @ Affine.scale(40, 40),
        (50, 60),
        "bilinear",
    ),
    "turned": (TURNED @ Affine.scale(30, -30), (85, 100), "bilinear"),
    "finer": (WIDE @ Affine.scale(11, -11), (170, 200), "average"),
    "finer and turned": (TURNED @ Affine.scale(17, -17), (150, 180), "average"),
    "finer one way": (WIDE @ Affine.scale(12, -45), (42, 180), "average"),
    "much finer": (WIDE @ Affine.scale(1.7, -1.7), (1100, 1300), "average"),
}


@pytest.mark.parametrize(("transform", "shape", "method"), OTHER_GRIDS.values(), ids=OTHER_GRIDS)
def test_plane_is_exact(over, transform, shape, method):
    surface = over(plane_on(transform, shape), transform)
    assert surface.method == method
    got, expected = read(surface), plane_on(GROUND, SHAPE)
    known = np.isfinite(got)
    assert known.mean() > 0.85
    np.testing.assert_allclose(got[known], expected[known], rtol=2.5e-7)


@pytest.mark.parametrize("shape", [(40, 50), (1, 50), (40, 1), (1, 1)])
def test_windows_agree_with_the_whole(over, shape):
    transform = TURNED @ Affine.scale(30, -30)
    surface = over(np.random.default_rng(1).random((85, 100), np.float32), transform)
    part = surface.read(40 - shape[0], 50 - shape[1], *shape)
    whole = read(surface)[40 - shape[0] :, 50 - shape[1] :]
    np.testing.assert_allclose(part, whole, rtol=1e-5)  # places are interpolated by the window


GEOGRAPHIC = Affine(0.0005, 0, 13.45, 0, -0.0003, 54.16)


def lonlat_plane(lon, lat):
    return 50.0 + 900.0 * (lon - 13.45) + 700.0 * (lat - 54.0)


@pytest.mark.parametrize(
    ("crs", "turn"), [("EPSG:4326", 0), ("EPSG:4326", 360), ("EPSG:4326", -360)]
)
def test_surface_in_degrees(over, crs, turn):
    array = lonlat_plane(*centres(GEOGRAPHIC, (150, 120))).astype(np.float32)
    surface = over(array, Affine.translation(turn, 0) @ GEOGRAPHIC, crs=crs)
    assert surface.method == "bilinear"
    to_degrees = Transformer.from_crs(UTM, crs, always_xy=True)
    expected = lonlat_plane(*to_degrees.transform(*centres(GROUND, SHAPE)))
    np.testing.assert_allclose(read(surface), expected, rtol=2.5e-7)


def test_surface_in_another_projection(over):
    transform = Affine(50, 0, 4_546_000, 0, -50, 3_455_000)
    array = plane_on(transform, (200, 200))
    surface = over(array, transform, crs="EPSG:3035")
    x, y = Transformer.from_crs(UTM, "EPSG:3035", always_xy=True).transform(*centres(GROUND, SHAPE))
    np.testing.assert_allclose(read(surface), plane(x, y), rtol=2.5e-7)


def test_ground_in_degrees(make_dem):
    flat = np.zeros((30, 20), np.float32)
    ground = open_terrain(make_dem("g.tif", flat, transform=GEOGRAPHIC, crs="EPSG:4326"))
    to_utm = Transformer.from_crs("EPSG:4326", UTM, always_xy=True)
    x, y = to_utm.transform(*centres(GEOGRAPHIC, (30, 20)))
    transform = Affine(10, 0, x.min() - 500, 0, -10, y.max() + 500)
    path = make_dem("surface.tif", plane_on(transform, (250, 250)), transform=transform)
    surface = open_surface(path, ground)
    assert surface.method == "average"
    np.testing.assert_allclose(surface.read(0, 0, 30, 20), plane(x, y), rtol=1e-6, atol=1e-5)


# --- averages ---------------------------------------------------------------------------------


@pytest.mark.parametrize("finer", [2, 3, 5, 12, 30])
def test_nested_cells_give_their_plain_mean(over, finer):
    """Whole numbers of surface cells in a cell of the ground, also when averaged in blocks."""
    shape = (6 * finer, 8 * finer)
    array = np.random.default_rng(finer).random(shape, np.float32)
    start = GROUND @ Affine.translation(10, 20)
    surface = over(array, start @ Affine.scale(1 / finer))
    assert surface.method == "average"
    means = array.reshape(6, finer, 8, finer).mean(axis=(1, 3), dtype=np.float64)
    expected = np.full(SHAPE, np.nan)
    expected[20:26, 10:18] = means
    np.testing.assert_allclose(read(surface), expected, rtol=1e-6, atol=1e-5)


def test_blocks_begin_at_the_corners_of_cells(over):
    """The surface begins in the middle of a cell of the ground."""
    array = np.random.default_rng(3).random((30 * 5, 30 * 5), np.float32)
    surface = over(array, GROUND @ Affine.translation(10.5, 20.4) @ Affine.scale(1 / 30))
    inner = array[18 : 18 + 120, 15 : 15 + 120].reshape(4, 30, 4, 30).mean(axis=(1, 3))
    np.testing.assert_allclose(read(surface)[21:25, 11:15], inner, rtol=1e-5)


def test_step_is_averaged_by_share(over):
    """A wall between the third and the fourth of ten columns in a cell."""
    array = np.zeros((400, 500), np.float32)
    array[:, 253:] = 100.0
    got = read(over(array, GROUND @ Affine.scale(0.1)))
    np.testing.assert_allclose(got[:, 24], 0.0)
    np.testing.assert_allclose(got[:, 25], 70.0, rtol=1e-6, atol=1e-5)
    np.testing.assert_allclose(got[:, 26], 100.0)


def test_step_is_bilinear_on_a_shifted_grid(over):
    array = np.zeros(SHAPE, np.float32)
    array[:, 25:] = 8.0
    got = read(over(array, GROUND @ Affine.translation(0.25, 0)))
    np.testing.assert_allclose(got[:, 24:27], np.tile([0.0, 6.0, 8.0], (40, 1)), atol=1e-6)


# --- voids ------------------------------------------------------------------------------------


def test_post_between_posts_of_which_one_is_void_is_void(over):
    array = np.ones((44, 54), np.float32)
    array[20, 30] = -9999
    got = read(over(array, GROUND @ Affine.translation(-1.5, -1.5), nodata=-9999))
    void = np.zeros(SHAPE, bool)
    void[18:20, 28:30] = True  # the four posts round the void
    np.testing.assert_array_equal(np.isnan(got), void)


def test_void_beside_a_row_of_posts_does_not_count(over):
    """On a row of the surface the rows beside it have no weight."""
    array = np.ones((60, 60), np.float32)
    array[19, :] = np.nan
    got = read(over(array, GROUND @ Affine.translation(-1.5, -1)))
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(got).any(axis=1)), [18])


@pytest.mark.parametrize("finer", [3, 12])
def test_void_makes_the_mean_of_its_cell_void(over, finer):
    array = np.ones((40 * finer, 50 * finer), np.float32)
    array[20 * finer, 30 * finer + 1] = np.nan
    got = read(over(array, GROUND @ Affine.scale(1 / finer)))
    np.testing.assert_array_equal(np.argwhere(np.isnan(got)), [[20, 30]])


def test_nothing_is_known_beyond_the_outermost_posts(over):
    """Cells of 90 m, whose outermost centres lie 45 m inside their edge."""
    surface = over(np.ones((5, 6), np.float32), GROUND @ Affine.translation(9, 6) @ Affine.scale(3))
    known = np.zeros(SHAPE, bool)
    known[7:20, 10:26] = True
    np.testing.assert_array_equal(np.isfinite(read(surface)), known)


def test_surface_void_all_over(over):
    array = np.full(SHAPE, np.nan, np.float32)
    assert np.isnan(read(over(array))).all()
    assert np.isnan(read(over(array, GROUND @ Affine.translation(0.5, 0)))).all()


# --- units, CRS, place ------------------------------------------------------------------------


@pytest.mark.parametrize("shift", [0.0, -0.5])
def test_feet_become_metres(over, shift):
    transform = GROUND @ Affine.translation(shift, shift)
    array = (plane_on(transform, (41, 51)) / 0.3048).astype(np.float32)
    got = read(over(array, transform, {"height_unit": "ft"}))
    np.testing.assert_allclose(got, plane_on(GROUND, SHAPE), rtol=3e-7)


def test_crs_of_a_surface_that_states_none(over):
    with pytest.raises(InputError, match="state it with --surface-crs"):
        over(np.ones(SHAPE, np.float32), crs=None)
    surface = over(np.ones(SHAPE, np.float32), crs=None, options={"crs": UTM})
    assert surface.method == "same grid"


def test_unit_of_a_surface_in_feet_has_to_be_stated(over):
    with pytest.raises(InputError, match="state it with --surface-height-unit m"):
        over(np.ones(SHAPE, np.float32), crs="EPSG:2263")


def test_several_files_are_one_surface(make_dem, ground):
    array = plane_on(GROUND, SHAPE)
    west = make_dem("west.tif", array[:, :20], transform=GROUND)
    east = make_dem("east.tif", array[:, 20:], transform=GROUND @ Affine.translation(20, 0))
    surface = open_surface([west, east], ground)
    assert surface.paths == (west, east)
    np.testing.assert_array_equal(read(surface), array)


@pytest.mark.parametrize("shift", [80, 80.5, -60])
def test_surface_of_another_place(over, shift):
    told = r"surface.tif \(lon 13\.\d+ to 13\.\d+, lat 54\.\d+ to 54\.\d+\) lies elsewhere than .*"
    with pytest.raises(DataError, match=told + r"ground.tif \(lon 13\.\d+ to"):
        over(np.ones(SHAPE, np.float32), GROUND @ Affine.translation(shift, 0))


def test_surface_on_the_other_side_of_the_world(over):
    with pytest.raises(DataError, match=r"\(lon -71.0000 to -70.9600, lat .*lies elsewhere"):
        over(np.ones(SHAPE, np.float32), Affine(0.0008, 0, -71, 0, -0.0008, 40), crs="EPSG:4326")


def test_surface_on_the_moon(over):
    with pytest.raises(InputError, match=r"no way leads from CRS .*Moon"):
        over(np.ones(SHAPE, np.float32), crs=None, options={"crs": "IAU_2015:30100"})


def test_surface_that_is_nowhere(over):
    nowhere = Affine(30, 0, 5e9, 0, -30, 5e9)
    with pytest.raises(DataError, match=r"surface.tif \(in no known place\) lies elsewhere"):
        over(np.ones(SHAPE, np.float32), nowhere, crs="EPSG:3035")


def test_truncated_surface(over, tmp_path):
    surface = over(np.random.default_rng(0).random((300, 300), np.float32))
    whole = (tmp_path / "surface.tif").read_bytes()
    (tmp_path / "surface.tif").write_bytes(whole[: len(whole) // 30])
    with pytest.raises(DataError, match="truncated or damaged"):
        read(surface)


# --- size -------------------------------------------------------------------------------------


def test_memory_is_the_result_and_a_piece(make_dem):
    shape = (1500, 1500)
    ground = open_terrain(make_dem("ground.tif", np.zeros(shape, np.float32), transform=GROUND))
    transform = TURNED @ Affine.scale(27, -27) @ Affine.translation(-600, -600)
    path = make_dem("surface.tif", np.ones((2900, 2900), np.float32), transform=transform)
    surface = open_surface(path, ground)
    tracemalloc.start()
    try:
        got = surface.read(0, 0, *shape)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert np.isfinite(got).mean() > 0.5
    assert peak < got.nbytes + 110e6


# --- compare ----------------------------------------------------------------------------------


def heights(*values):
    return np.array([values], np.float32)


def test_median_of_what_is_known_in_both():
    surface = heights(10, 13, 12, np.nan, 900)
    ground = heights(9, 11, 11.5, np.nan, np.nan)
    assert compare(surface, ground) == 1.0


def test_median_of_many_rows():
    rng = np.random.default_rng(0)
    ground = rng.random((900, 30), np.float32)
    surface = ground + rng.random((900, 30), np.float32)
    assert compare(surface, ground) == pytest.approx(np.median(surface - ground))


@pytest.mark.parametrize(
    ("above", "told"), [(-0.02, "0.02 m below the ground"), (20.5, "20.50 m above the ground")]
)
def test_unlikely_median(above, told):
    with pytest.warns(ViewshedWarning, match=told + ".*swapped"):
        assert compare(heights(above, above), heights(0, 0)) == pytest.approx(above)


@pytest.mark.parametrize("above", [-0.004, 0.0, 19.9])
def test_likely_median(above):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert compare(heights(above), heights(0)) == pytest.approx(above)


@pytest.mark.parametrize(("voids", "share"), [(1, "0.05 %"), (100, "5 %"), (1999, "100 %")])
def test_surface_that_leaves_ground_uncovered(voids, share):
    ground = np.zeros((40, 50), np.float32)
    surface = np.ones((40, 50), np.float32)
    surface.ravel()[:voids] = np.nan
    share = share.replace("0.05 %", "less than 0.1 %")
    with pytest.warns(ViewshedWarning, match=f"not known at {share} of the posts"):
        assert compare(surface, ground) == 1.0


def test_nothing_known_in_both():
    with pytest.warns(ViewshedWarning, match="not known at 100 % of the posts"):
        assert compare(heights(np.nan, 1), heights(5, np.nan)) is None


# --- what the record needs --------------------------------------------------------------------


def tiles(make_dem, shift):
    """Two surfaces side by side, 20 and 30 columns wide."""
    start = GROUND @ Affine.translation(shift, shift)
    array = plane_on(start, SHAPE)
    west = make_dem("west.tif", array[:, :20], transform=start)
    east = make_dem("east.tif", array[:, 20:], transform=start @ Affine.translation(20, 0))
    return west, east


@pytest.mark.parametrize("shift", [0, 0.5])
def test_fingerprint_names_the_files_a_window_needs(make_dem, ground, shift):
    west, east = tiles(make_dem, shift)
    surface = open_surface([west, east], ground)
    assert surface.given == (str(west), str(east))

    def named(*window):
        return [entry["path"] for entry in surface.fingerprint(*window).entries]

    assert named(0, 0, *SHAPE) == [str(west), str(east)]
    assert named(0, 0, 40, 10) == [str(west)]
    assert named(5, 30, 1, 20) == [str(east)]


def test_fingerprint_where_the_surface_does_not_reach(over):
    surface = over(np.ones((5, 5), np.float32))
    assert surface.fingerprint(20, 20, 5, 5).entries == []
    with pytest.raises(InputError, match="not inside the grid"):
        surface.fingerprint(30, 30, 20, 30)


def test_surface_replaced_while_it_is_read(over, tmp_path):
    surface = over(np.ones(SHAPE, np.float32))
    taken = surface.fingerprint(0, 0, *SHAPE)
    taken.confirm()
    with (tmp_path / "surface.tif").open("ab") as file:
        file.write(b"more")
    with pytest.raises(DataError, match=r"surface.tif: was replaced while it was read"):
        taken.confirm()


def test_datums_that_differ(make_dem):
    flat = np.zeros(SHAPE, np.float32)
    ground = open_terrain(make_dem("ground.tif", flat, transform=GROUND, crs="EPSG:32633+5773"))
    path = make_dem("surface.tif", flat, transform=GROUND, crs="EPSG:32633+3855")
    with pytest.warns(ViewshedWarning, match="from 'EGM2008 height' and .* from 'EGM96 height'"):
        assert open_surface(path, ground).method == "same grid"


def test_what_pieces_warn_of_is_told_once(over, monkeypatch):
    array = np.ones((44, 54), np.float32)
    array[4:40, 30] = -9999
    surface = over(array, GROUND @ Affine.translation(-1.5, -1.5))
    monkeypatch.setattr("viewshed.io.surface._BLOCK_POSTS", 300)
    with pytest.warns(ViewshedWarning) as caught:
        read(surface)
    (warned,) = caught
    assert "surface.tif: " in str(warned.message)
    assert "cells of -9999, not declared as nodata" in str(warned.message)
