"""A surface that blocks sight over the ground that observers and targets stand on."""

import numpy as np
import pytest

from tests.helpers import (
    affine_map,
    assert_like_twin,
    bent_map,
    city,
    flat,
    fractal,
    noise,
    with_voids,
)
from viewshed.errors import InputError
from viewshed.places import Sector
from viewshed.visibility import compute

N = 23
PLACES = [(11.0, 11.0), (11.4, 10.3), (11.0, 10.5), (11.0 + 1e-9, 11.0), (0.0, 22.0)]


def woods(n, place, seed=0, height=15.0, share=0.4):
    """Tree tops over ground: blocks of trees, none within two cells of a place."""
    trees = np.random.default_rng(seed).random((n, n)) < share
    r, c = np.indices((n, n))
    trees &= (np.abs(r - place[0]) > 2) | (np.abs(c - place[1]) > 2)
    return (trees * height).astype(np.float32)


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("target", [0.0, 2.0, 25.0])
def test_woods_over_hills(place, target):
    ground = fractal(N, 3, relief=60.0)
    surface = ground + woods(N, place, 1)
    for post_map in (affine_map(*place), bent_map(*place)):
        _, got = assert_like_twin(
            ground, post_map, surface=surface, eye_height=4.0, target_height=target
        )
        assert (got.visible == 0).any()


@pytest.mark.parametrize("place", PLACES)
def test_noise_over_noise(place):
    """The surface may also lie under the ground, as two products of unlike accuracy do."""
    ground = noise(N, 1, height=2.0)
    surface = ground + noise(N, 2, height=2.0)
    r, c = np.indices(ground.shape)
    near = (np.abs(r - place[0]) < 1.5) & (np.abs(c - place[1]) < 1.5)
    surface[near] = ground[near] - 1.0
    for post_map in (affine_map(*place), bent_map(*place)):
        assert_like_twin(ground, post_map, surface=surface, eye_height=6.0, target_height=1.0)


@pytest.mark.parametrize("place", PLACES[:3])
@pytest.mark.parametrize("which", ["ground", "surface", "both"])
def test_voids_of_either(place, which):
    ground = fractal(N, 5, relief=40.0)
    surface = ground + woods(N, place, 4, share=0.1)
    if which != "surface":
        ground = with_voids(ground, 0.06, 7, keep=place)
    if which != "ground":
        surface = with_voids(surface, 0.06, 8, keep=place)
    for post_map in (affine_map(*place), bent_map(*place)):
        _, got = assert_like_twin(
            ground, post_map, surface=surface, eye_height=9.0, target_height=1.5
        )
        np.testing.assert_array_equal(got.visible == 255, np.isnan(ground))
        if which != "ground":
            assert (got.visible == 2).any()


def test_a_target_whose_own_surface_is_void_is_never_seen():
    """Also straight along the observer's row, where no cell is entered."""
    ground = flat(N)
    surface = ground.copy()
    surface[11, 18] = surface[4, 11] = surface[15, 15] = np.nan
    got = compute(ground, affine_map(11.0, 11.0), surface=surface, eye_height=5.0)
    assert [got.visible[at] for at in ((11, 18), (4, 11), (15, 15))] == [2, 2, 2]


@pytest.mark.parametrize("sector", [None, Sector(350, 100)])
def test_city_blocks_with_a_sector_and_a_range(sector):
    ground = flat(N, 3.0)
    surface = ground + city(N, 2, block=3, height=30.0)
    surface[9:14, 9:14] = ground[9:14, 9:14]
    assert_like_twin(
        ground,
        affine_map(11.0, 11.3),
        surface=surface,
        eye_height=20.0,
        target_height=2.0,
        range_m=260.0,
        sector=sector,
    )


def test_a_surface_equal_to_the_ground_hides_and_shows_the_same():
    ground = fractal(60, 9, relief=150.0)
    post_map = affine_map(30.2, 29.1)
    for target in (0.0, 2.0):
        heights = {"eye_height": 2.0, "target_height": target}
        alone = compute(ground, post_map, clearance=True, **heights)
        both = compute(ground, post_map, surface=ground.copy(), clearance=True, **heights)
        np.testing.assert_array_equal(alone.visible, both.visible)
        # the surface at its own post is an obstacle of the target, as tall as it stands over it
        assert np.nanmax(both.clearance) <= target + 1e-3


def test_a_higher_surface_never_shows_more():
    ground = fractal(60, 4, relief=150.0)
    place = (30.0, 30.0)
    less = ground + woods(60, place, 2, height=5.0)
    more = less + woods(60, place, 3, height=9.0)
    seen = [
        compute(ground, affine_map(*place), surface=s, eye_height=3.0, target_height=12.0).visible
        for s in (ground, less, more)
    ]
    assert np.all(seen[0] >= seen[1])
    assert np.all(seen[1] >= seen[2])
    assert [int(s.sum()) for s in seen] == sorted((int(s.sum()) for s in seen), reverse=True)


def test_from_a_roof_the_ground_under_it_is_hidden():
    ground = flat(N, 10.0)
    surface = ground.copy()
    surface[9:14, 9:14] = 40.0
    got = compute(
        ground, affine_map(11.0, 11.0), surface=surface, eye_height=31.7, clearance=True
    )
    assert got.visible[11, 11] == 0
    assert got.clearance[11, 11] == pytest.approx(-30.0, abs=1e-3)
    assert got.eye_elevation == pytest.approx(41.7)


def test_an_eye_under_the_surface_is_refused():
    ground, surface = flat(N, 10.0), flat(N, 22.0)
    with pytest.raises(InputError, match=r"eye at 11\.70 m is 10\.30 m below the surface"):
        compute(ground, affine_map(11.0, 11.0), surface=surface, eye_height=1.7)


def test_a_surface_not_known_at_the_observer_is_refused():
    surface = flat(N)
    surface[11, 12] = np.nan
    with pytest.raises(InputError, match="surface is not known at the observer"):
        compute(flat(N), affine_map(11.0, 11.5), surface=surface, eye_height=1.7)


def test_a_surface_of_another_shape_is_refused():
    with pytest.raises(InputError, match=r"\(23, 22\) does not fit the ground of \(23, 23\)"):
        compute(flat(N), affine_map(11.0, 11.0), surface=flat(N)[:, :-1], eye_height=1.7)
