"""The engine gives the plain walker's answer, hard part by hard part."""

from functools import cache

import numpy as np
import pytest
from affine import Affine

from tests.helpers import (
    affine_map,
    assert_like_twin,
    bent_map,
    bowl,
    city,
    fitted_map,
    flat,
    fractal,
    noise,
    saddle,
    steps,
    with_voids,
)
from tests.reference.walker import Walker
from tests.unit.grids import make_grid
from viewshed.errors import InputError
from viewshed.geodesy import crs_from_user
from viewshed.grid import Grid
from viewshed.places import Sector
from viewshed.postmap import fit_post_map
from viewshed.visibility import compute
from viewshed.wedges import skew_of

OFFSETS = (0.0, 1e-9, 0.5, 1.0 - 1e-9)
N = 23
MIDDLE = (11.0, 11.0)


def count(answer):
    """Cells visible, hidden, unresolved."""
    return tuple(int((answer.visible == value).sum()) for value in (1, 0, 2))


# --- where the observer stands --------------------------------------------------------------------


@pytest.mark.parametrize("eye", [0.0, 1.7, 50.0, 3000.0])
@pytest.mark.parametrize("down", OFFSETS)
@pytest.mark.parametrize("right", OFFSETS)
def test_offsets_from_a_post(right, down, eye):
    z = fractal(21, seed=int(eye), relief=200.0)
    target = 2.0 if right == down else 0.0
    assert_like_twin(z, affine_map(10 + down, 10 + right), eye_height=eye, target_height=target)


@pytest.mark.parametrize("down", OFFSETS)
@pytest.mark.parametrize("right", OFFSETS)
def test_offsets_on_noise_and_bent_grids(right, down):
    for eye in (0.0, 1.7):
        assert_like_twin(noise(15, 3), affine_map(7 + down, 7 + right), eye_height=eye)
        # on a bent grid a billionth of a cell is known to a ten millionth of itself
        bent = bent_map(7 + down, 7 + right)
        assert_like_twin(noise(15, 4), bent, eye_height=eye, tolerance=1e-5)


@pytest.mark.parametrize("along", [0.0, 1e-9, 0.25, 0.5, 0.7, 1.0 - 1e-9])
def test_on_a_grid_line(along):
    z = steps(N, 5)
    for place in ((11.0, 10.0 + along), (10.0 + along, 11.0)):
        assert_like_twin(z, affine_map(*place))
        assert_like_twin(z, bent_map(*place))


@pytest.mark.parametrize(
    "place",
    [
        (1.0, 11.0),
        (21.0, 11.0),
        (11.0, 1.0),
        (11.0, 21.0),
        (1.5, 21.25),
        (0.0, 11.0),
        (22.0, 11.3),
        (11.0, 0.0),
        (11.5, 22.0),
        (0.0, 0.0),
        (0.0, 22.0),
        (22.0, 0.0),
        (22.0, 22.0),
        (0.3, 21.9),
        (1e-9, 22.0 - 1e-9),
    ],
)
def test_next_to_the_border(place):
    z = fractal(N, seed=2, relief=60.0)
    for eye in (0.0, 6.0):
        assert_like_twin(z, affine_map(*place), eye_height=eye, target_height=1.0)
    assert_like_twin(z, bent_map(*place), target_height=1.0)


# --- directions -----------------------------------------------------------------------------------


@pytest.mark.parametrize("place", [(12.0, 12.0), (12.25, 12.25), (12.5, 11.5), (12.25, 11.75)])
def test_targets_on_and_beside_the_diagonals(place):
    """All eight ends of octants, some answered visible and some not."""
    z = noise(25, 8, height=1.0)
    for post_map in (affine_map(*place), bent_map(*place)):
        _, got = assert_like_twin(z, post_map, eye_height=3.0)
        r, c = np.indices(z.shape)
        off = np.abs(np.abs(r - place[0]) - np.abs(c - place[1]))
        for near in (off == 0.0, (off > 0.0) & (off <= 1.0)):
            seen = got.visible[near]
            assert 0.1 < seen.mean() < 0.9


@pytest.mark.parametrize("eye", [2.0, 40.0])
@pytest.mark.parametrize("place", [MIDDLE, (11.5, 11.25)])
@pytest.mark.parametrize("lie", ["row", "column", "diagonal", "other diagonal"])
def test_walls_one_cell_wide(lie, place, eye):
    z = flat(N)
    r, c = np.indices(z.shape)
    beyond = {"row": r - 16, "column": 5 - c, "diagonal": r - c - 5, "other diagonal": r + c - 27}
    z[beyond[lie] == 0] = 20.0
    _, got = assert_like_twin(z, affine_map(*place), eye_height=eye)
    assert np.all(got.visible[beyond[lie] < -1] == 1)
    if eye == 2.0:
        assert np.all(got.visible[beyond[lie] > 0] == 0)
    assert_like_twin(z, bent_map(*place, bend=1e-5), eye_height=eye)


@pytest.mark.parametrize("width", [(30, 31), (300, 30), (44, 134), (5, 95), (350, 10), (10, 350)])
def test_sectors(width):
    """Widths of 1, 90 and 200 degrees among them, and across north."""
    sector = Sector(*width)
    z = fractal(25, 4, relief=80.0)
    for post_map in (affine_map(12.0, 12.0), affine_map(11.3, 12.6), bent_map(11.3, 12.6)):
        _, got = assert_like_twin(z, post_map, eye_height=8.0, sector=sector)
        share = (got.visible != 255).mean()
        assert share == pytest.approx(sector.width_deg / 360.0, abs=0.06)


@pytest.mark.parametrize("width", [(67.5, 267.5), (0, 90), (100, 300), (350, 190)])
def test_sectors_of_other_grids(width):
    sector = Sector(*width)
    z = with_voids(noise(21, 5), 0.05, keep=(10, 10))
    for post_map in (
        affine_map(10.2, 10.4, jacobian=[[20.0, 12.0], [15.0, -25.0]]),
        affine_map(10.0, 10.0, jacobian=[[30.0, 0.0], [0.0, 30.0]]),
        bent_map(10.0, 10.5),
    ):
        assert_like_twin(z, post_map, target_height=2.0, sector=sector)


@pytest.mark.parametrize("range_m", [20.0, 30.0, 150.0, 234.5, 300.0 * 2**0.5])
def test_ranges(range_m):
    """A cell belongs if its centre is not farther, exact distances included."""
    z = fractal(25, 6, relief=50.0)
    post_map = affine_map(12.0, 12.0)
    _, got = assert_like_twin(z, post_map, eye_height=5.0, range_m=range_m)
    r, c = np.indices(z.shape)
    inside = (r - 12) ** 2 + (c - 12) ** 2 <= (range_m / 30.0) ** 2 + 1e-9
    np.testing.assert_array_equal(got.visible != 255, inside)
    for place in ((12.5, 11.9), (3.0, 22.2)):
        assert_like_twin(z, bent_map(*place), eye_height=5.0, range_m=range_m)


# --- bulges inside cells --------------------------------------------------------------------------

#: The two posts that make the cell between (11, 11) and (12, 12) bulge on its diagonal.
HUMP = ((11, 12), (12, 11))


@pytest.mark.parametrize("target_height", [0.0, 1.5])
@pytest.mark.parametrize(
    ("where", "place", "target"),
    [
        ("last", (6.0, 6.0), (12, 12)),
        ("last", (6.5, 6.5), (12, 12)),
        ("between", (6.0, 6.0), (16, 16)),
        ("between", (6.5, 6.5), (13, 13)),
        ("own", (11.0, 11.0), (16, 16)),
        ("own", (11.125, 11.125), (18, 18)),
        ("own", (11.0 + 1e-9, 11.0 + 1e-9), (16, 16)),
        ("own", (11.125, 11.125), (12, 12)),
    ],
)
def test_a_bulge_alone_hides(where, place, target, target_height):
    """The sight line crosses grid lines at low posts only; what hides is inside one cell."""
    z = flat(N)
    for post in HUMP:
        z[post] = 12.0
    scene = {"eye_height": 1.0, "target_height": target_height}
    twin, got = assert_like_twin(z, affine_map(*place), **scene)
    flattened = Walker(z, affine_map(*place), without={where}, **scene)
    assert flattened.answer()[0][target] == 1
    assert flattened.margin[target] > twin.margin[target] + 0.5
    assert got.visible[target] == 0
    assert_like_twin(z, bent_map(*place, bend=1e-6), **scene)


@pytest.mark.parametrize("where", ["own", "last", "between"])
def test_bulges_of_rough_ground_matter(where):
    changed = 0
    for seed in range(4):
        z, place = noise(15, seed), (7.3, 7.4)
        twin, _ = assert_like_twin(z, affine_map(*place), eye_height=0.5)
        state = twin.answer()[0]
        without = Walker(z, affine_map(*place), eye_height=0.5, without={where}).answer()[0]
        changed += int((state != without).sum())
    assert changed > 0


@pytest.mark.parametrize("place", [MIDDLE, (11.5, 11.5), (11.0, 10.4), (4.2, 15.9)])
@pytest.mark.parametrize("turned", [False, True])
@pytest.mark.parametrize("strength", [-2.0, 0.01, 2.0])
def test_saddles(strength, turned, place):
    z = saddle(N, strength, turned)
    assert_like_twin(z, affine_map(*place), target_height=1.0)
    assert_like_twin(z, bent_map(*place), eye_height=0.0)


# --- kinds of ground ------------------------------------------------------------------------------

GROUNDS = {
    "flat": flat(N),
    "noise": noise(N, 1),
    "city": city(N, 2),
    "bowl": bowl(N),
    "dome": -bowl(N, 0.02),
    "smooth": fractal(N, 3, roughness=1.5),
    "rough": fractal(N, 4, roughness=0.5),
    "ties": steps(N, 6),
    "stairs": np.repeat(np.arange(N, dtype=np.float32)[:, None], N, axis=1),
}


@pytest.mark.parametrize("target_height", [0.0, 2.0])
@pytest.mark.parametrize("ground", GROUNDS)
def test_grounds(ground, target_height):
    for place, eye in ((MIDDLE, 1.7), ((11.5, 11.5), 0.0), ((3.2, 20.0), 30.0)):
        scene = {"eye_height": eye, "target_height": target_height}
        assert_like_twin(GROUNDS[ground], affine_map(*place), **scene)
    assert_like_twin(GROUNDS[ground], bent_map(11.5, 11.5), target_height=target_height)


@pytest.mark.parametrize("k", [-0.5, 0.0, 0.13, 0.9])
def test_air(k):
    z = flat(N)
    z[5], z[:, 17] = 60.0, 80.0
    twin, _ = assert_like_twin(z, affine_map(11.0, 11.0, cell=3000.0), eye_height=40.0, k=k)
    state = twin.answer()[0]
    assert (state == 1).any()
    assert (state == 0).any()


@pytest.mark.parametrize("place", [MIDDLE, (11.0, 10.5), (2.0, 20.5)])
def test_exact_ties(place):
    """Without any curve, whole-number heights put eye, obstacle and target in line."""
    k = 1.0 - 1e-15
    in_line = 0
    for z in (steps(N, 7), steps(N, 8, levels=2), GROUNDS["stairs"], flat(N)):
        for eye in (0.0, 1.0):
            scene = {"eye_height": eye, "k": k, "touching": True}
            twin, _ = assert_like_twin(z, affine_map(*place), **scene)
            in_line += int((np.abs(twin.margin) < 1e-9).sum())
    assert in_line > 40


# --- voids ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("place", [MIDDLE, (11.5, 10.25), (11.0, 11.5), (1.0, 21.0)])
@pytest.mark.parametrize("share", [0.01, 0.3, 0.6])
def test_scattered_voids(share, place):
    for seed, ground in enumerate((fractal(N, 1, relief=80.0), noise(N, 2))):
        z = with_voids(ground, share, seed, keep=place)
        _, got = assert_like_twin(z, affine_map(*place), eye_height=9.0)
        assert np.all((got.visible == 255) == np.isnan(z))
        assert share < 0.1 or (got.visible == 2).any()
        assert_like_twin(z, bent_map(*place), eye_height=2.0, target_height=3.0)


@pytest.mark.parametrize("place", [MIDDLE, (11.3, 10.2), (11.0, 0.0)])
def test_half_the_map_void(place):
    z = fractal(N, 5, relief=40.0)
    z[:, 13:] = np.nan
    z[4, 20] = 500.0  # alone among voids
    _, got = assert_like_twin(z, affine_map(*place), eye_height=20.0)
    assert np.all(got.visible[:, :13] != 2)
    assert got.visible[4, 20] == 2
    for turned in (z.T, z[::-1, ::-1].copy()):
        where = (place[1], place[0]) if turned is z.T else (22.0 - place[0], 22.0 - place[1])
        assert_like_twin(np.ascontiguousarray(turned), affine_map(*where), eye_height=20.0)
        assert_like_twin(np.ascontiguousarray(turned), bent_map(*where), eye_height=20.0)


@pytest.mark.parametrize("eye", [0.0, 3.0])
@pytest.mark.parametrize(
    ("place", "voids"),
    [
        ((11.0, 11.0), [(11, 12)]),
        ((11.0, 11.0), [(12, 12), (10, 10)]),
        ((11.0, 11.0), [(10, 11), (12, 11), (11, 10), (11, 12)]),
        ((11.0, 11.5), [(12, 11)]),
        ((11.0, 11.5), [(10, 12), (12, 12)]),
        ((11.25, 11.0), [(11, 10)]),
        ((11.5, 11.5), [(10, 11), (13, 12)]),
        ((11.0 + 1e-9, 11.0 - 1e-9), [(9, 11), (11, 13)]),
    ],
)
def test_observer_beside_a_void(place, voids, eye):
    z = fractal(N, 6, relief=60.0)
    for post in voids:
        z[post] = np.nan
    for post_map in (affine_map(*place), bent_map(*place)):
        _, got = assert_like_twin(z, post_map, eye_height=eye, target_height=2.0)
        assert (got.visible == 2).any()


def test_known_terrain_hides_behind_voids():
    """Hidden is hidden, whatever else the sight line crosses."""
    z = flat(N)
    z[11, 14] = np.nan
    z[:, 17] = 50.0
    _, got = assert_like_twin(z, affine_map(*MIDDLE), eye_height=2.0)
    assert np.all(got.visible[:, 18:] == 0)
    assert got.visible[11, 15] == got.visible[11, 16] == got.visible[11, 17] == 2


@pytest.mark.parametrize("turns", range(4))
@pytest.mark.parametrize("mirrored", [False, True])
def test_the_end_of_a_known_edge_blocks(mirrored, turns):
    """The diagonal meets one post between voids, whose only known edge leads outward."""
    z = np.full((9, 9), np.nan, np.float32)
    z[4:6, 4:6] = 5.0
    z[7, 7] = z[7, 8] = z[8, 8] = 9.0
    z = z.T if mirrored else z
    _, got = assert_like_twin(np.ascontiguousarray(np.rot90(z, turns)), affine_map(4.0, 4.0))
    assert got.visible[{0: (8, 8), 1: (0, 8), 2: (0, 0), 3: (8, 0)}[turns]] == 0


@pytest.mark.parametrize("seed", range(12))
def test_exact_directions_among_voids(seed):
    """From a post, sight lines meet posts exactly: ends of edges, corners of unknown cells."""
    z = with_voids(noise(15, seed), 0.3, seed, keep=(7, 7))
    for eye in (0.0, 1.7, 20.0):
        assert_like_twin(z, affine_map(7.0, 7.0), eye_height=eye)
    z = with_voids(noise(15, seed + 50), 0.6, seed, keep=(3, 12.5))
    assert_like_twin(z, affine_map(3.0, 12.5), eye_height=5.0)


# --- shapes of grids ------------------------------------------------------------------------------


@pytest.mark.parametrize("eye", [0.0, 2.0])
@pytest.mark.parametrize("at", [0.0, 7.0, 7.5, 20.0 + 1e-9, 40.0])
def test_one_row_and_one_column(at, eye):
    for z in (noise(41, 7)[:1], np.where(noise(41, 8)[:1] > 9.0, np.nan, fractal(41, 9)[:1])):
        scene = {"eye_height": eye, "target_height": 1.0}
        _, row = assert_like_twin(z, affine_map(0.0, at), **scene)
        column = np.ascontiguousarray(z.T)
        _, got = assert_like_twin(column, affine_map(at, 0.0), **scene)
        np.testing.assert_allclose(got.visible, row.visible.T)
        assert_like_twin(column, affine_map(at, 0.0, jacobian=[[5.0, 3.0], [2.0, 9.0]]), **scene)
        assert_like_twin(z, bent_map(0.0, at), **scene)


@pytest.mark.parametrize("shape", [(1, 1), (1, 2), (2, 1), (2, 2), (2, 9), (9, 3)])
def test_small_grids(shape):
    z = noise(9, 10)[: shape[0], : shape[1]].copy()
    for place in ((0.0, 0.0), (shape[0] - 1.0, shape[1] - 1.0), ((shape[0] - 1) / 2.0, 0.0)):
        for post_map in (affine_map(*place), bent_map(*place)):
            assert_like_twin(z, post_map, target_height=1.0)


@pytest.mark.parametrize("place", [(10.0, 20.0), (10.3, 20.6), (2.0, 38.5)])
@pytest.mark.parametrize(
    "jacobian",
    [
        [[90.0, 0.0], [0.0, -30.0]],
        [[10.0, 0.0], [0.0, -70.0]],
        [[30.0, 0.0], [0.0, 30.0]],
        [[25.9808, 15.0], [15.0, -25.9808]],
        [[-12.0, 31.0], [28.0, 9.0]],
        [[30.0, 20.0], [0.0, -25.0]],
    ],
)
def test_cells_that_are_not_square(jacobian, place):
    """Oblong, south-up, rotated and sheared, on a grid that is no square either."""
    z = with_voids(noise(41, 11, height=3.0)[:21], 0.01, keep=place)
    assert_like_twin(z, affine_map(*place, jacobian=jacobian), eye_height=4.0)


CURVED = {
    "geographic at 65 N": make_grid("EPSG:4326", (10, 65), (1 / 1500, -1 / 3600), (4000, 4000)),
    "geographic at 65 S": make_grid("EPSG:4326", (10, -65), (1 / 1500, -1 / 3600), (4000, 4000)),
    "Mercator at 60 N": make_grid("EPSG:3395", (1e6, 8362698), (60, -60), (3000, 3000)),
    "rotated, far from the axis": make_grid("EPSG:32633", (8e5, 7e6), (30, -30), (2000, 2000), 25),
    "oblong Mercator": make_grid("EPSG:3395", (1e6, 8362698), (200, -60), (1200, 3000)),
    "coarse geographic": make_grid("EPSG:4326", (10, 65), (1 / 45, -1 / 110), (91, 91), 20),
    "coarse Mercator": make_grid("EPSG:3395", (1e6, 8362698), (4000, -4000), (61, 61)),
}


@cache
def curved_map(name, row0, col0):
    return fitted_map(CURVED[name], row0, col0, N)


@pytest.mark.parametrize("place", [MIDDLE, (11.5, 11.25), (0.0, 22.0), (11.0 + 1e-9, 1.0)])
@pytest.mark.parametrize("name", CURVED)
def test_curved_grids(name, place):
    post_map = curved_map(name, *place)
    assert post_map.degree >= 2
    assert_like_twin(fractal(N, 12, relief=40.0), post_map, eye_height=1.7)
    assert_like_twin(noise(N, 13), post_map, eye_height=0.0, target_height=2.0)
    z = with_voids(city(N, 14, height=12.0), 0.02, keep=place)
    assert_like_twin(z, post_map, eye_height=9.0)


@pytest.mark.parametrize("name", ["coarse geographic", "coarse Mercator"])
def test_larger_curved_grids(name):
    post_map = fitted_map(CURVED[name], 20.4, 19.3, 41, range_m=150e3)
    _, got = assert_like_twin(fractal(41, 15, relief=900.0), post_map, eye_height=30.0)
    assert min(count(got)[:2]) > 50


@pytest.mark.parametrize("degree", [2, 4, 7, 10])
def test_degrees_of_the_map(degree):
    for bend in (1e-7, 1e-5, 1e-4):
        post_map = bent_map(10.6, 9.2, bend=bend, degree=degree, seed=degree)
        z = with_voids(fractal(21, degree, relief=80.0), 0.01, keep=(10.6, 9.2))
        assert_like_twin(z, post_map, eye_height=1.0, target_height=1.0)


@pytest.mark.parametrize("place", [(20.0, 20.0), (20.5, 33.3)])
@pytest.mark.parametrize("seed", [16, 17])
def test_larger_hills(seed, place):
    z = fractal(41, seed)
    _, got = assert_like_twin(z, affine_map(*place), eye_height=10.0)
    assert min(count(got)[:2]) > 50


def test_no_layer_depends_on_another():
    z = with_voids(noise(N, 18), 0.1, keep=MIDDLE)
    scene = {"eye_height": 3.0, "target_height": 1.0}
    lean = compute(z, affine_map(*MIDDLE), **scene)
    for clearance, needed in ((True, False), (False, True), (True, True)):
        full = compute(z, affine_map(*MIDDLE), clearance=clearance, needed_height=needed, **scene)
        np.testing.assert_array_equal(full.visible, lean.visible)
        assert (full.clearance is not None) == clearance
        assert (full.needed_height is not None) == needed


# --- near a pole ----------------------------------------------------------------------------------


def polar_scene(latitude, range_m, west=9.0, size=41):
    """Hills on a geographic grid whose window just holds the range, about its middle."""
    step = 2.3 * range_m / 111e3 / size
    wide = step / np.cos(np.radians(latitude))
    transform = Affine(wide, 0, west, 0, -step, latitude + step * size / 2)
    grid = Grid((size, size), transform, crs_from_user("EPSG:4326").to_wkt())
    post_map = fit_post_map(grid, size / 2 - 0.5, size / 2 - 0.3, range_m=range_m)
    return fractal(size, 2, relief=range_m / 150), post_map


@pytest.mark.parametrize(("latitude", "range_m"), [(85.0, 30e3), (88.0, 30e3), (89.0, 10e3)])
def test_rows_that_bend_round_a_pole(latitude, range_m):
    z, post_map = polar_scene(latitude, range_m)
    assert skew_of(post_map, *z.shape) > 0.2
    assert_like_twin(z, post_map, eye_height=20.0, target_height=2.0, range_m=range_m)


@pytest.mark.parametrize("latitude", [89.8, 89.9])
def test_too_near_a_pole_is_refused(latitude):
    z, post_map = polar_scene(latitude, 5e3)
    with pytest.raises(InputError, match=r"too strongly within 5 km.* give a range of [0-9.]+ km"):
        compute(z, post_map, eye_height=20.0, range_m=5e3)
