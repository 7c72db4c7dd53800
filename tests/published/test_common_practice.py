"""What anybody who looks out to sea knows. Common practice: no source.

A shore at sea level, an eye 6 ft (1.83 m) above the water, and things at various distances.
"""

import math
from itertools import pairwise

import numpy as np
import pytest

from tests.published import _scenes
from tests.published._scenes import RADIUS, STATUTE_MILE

EYE = 6 * _scenes.FOOT
SPHERE = _scenes.centred_crs(RADIUS)
AIRS = [0.0, 0.13, 0.25]

#: Towers standing in the sea: distance [km] and bearing [degrees], all of one height [m].
TOWERS = [(7.0, 20.0), (11.0, 75.0), (16.0, 140.0), (23.0, 205.0), (29.0, 250.0), (34.0, 330.0)]
TOWER_HEIGHT = 120.0


def test_horizon_is_three_miles_off():
    # Common practice: from 6 ft above the water the horizon is about 3 miles (4.8 km) off.
    cell = 10.0
    answer, distance = _scenes.look_along_sea(
        SPHERE, cell=cell, length=8000.0, eye_height=EYE, refraction_k=0.0
    )
    found = _scenes.farthest_seen(answer, distance)
    assert round(found / STATUTE_MILE, 1) == 3.0
    assert found / 1000.0 == pytest.approx(4.8, abs=0.05)


@pytest.mark.parametrize("k", AIRS)
def test_near_thing_stands_wholly_in_front_of_the_horizon(k):
    # Common practice: of something 1.4 miles (2.3 km) away the waterline is in view.
    cell = 10.0
    grid, at, distance = _scenes.strip(SPHERE, cell, 8000.0)
    foot = round(1.4 * STATUTE_MILE / cell)
    z = np.zeros(grid.shape, dtype=np.float32)
    z[foot : foot + 3] = 15.0
    answer = _scenes.look(
        z, grid, at, range_m=8000.0, eye_height=EYE, refraction_k=k, needed_height=True
    )
    up_to_it = slice(1, foot + 1)  # the last post of it is the front of the thing itself
    assert (answer.visible[up_to_it] == 1).all()
    assert (answer.needed_height[up_to_it] == 0.0).all()
    horizon = _scenes.horizon_distance(EYE, k, RADIUS)
    assert distance[foot] < horizon / 2.0
    # The horizon itself is behind it: there the sea is covered by the thing and by nothing else.
    sea, _ = _scenes.look_along_sea(
        SPHERE, cell=cell, length=8000.0, eye_height=EYE, refraction_k=k
    )
    between = (distance > distance[foot + 3]) & (distance < horizon - cell)
    assert (answer.visible[between, 1] == 0).all()
    assert (sea.visible[between, 1] == 1).all()


@pytest.fixture(scope="module")
def towers():
    """Cut-off parts [m] and true distances [m] of the towers for each k."""
    cell = 100.0
    grid, at, (east, north) = _scenes.square(SPHERE, cell, 35_000.0)
    z = np.zeros(grid.shape, dtype=np.float32)
    posts = []
    for kilometres, bearing_deg in TOWERS:
        step = 1000.0 * kilometres / cell
        bearing = math.radians(bearing_deg)
        post = (
            round(at[0] - step * math.cos(bearing)),
            round(at[1] + step * math.sin(bearing)),
        )
        z[post] = TOWER_HEIGHT
        posts.append(post)
    index = tuple(np.transpose(posts))
    distance = np.hypot(east, north)[index]
    cut, states = {}, {}
    for k in AIRS:
        answer = _scenes.look(
            z, grid, at, range_m=35_000.0, eye_height=EYE, refraction_k=k, clearance=True
        )
        # Clearance is that of the tower's top: its height less that is below the line of sight.
        cut[k] = TOWER_HEIGHT - answer.clearance[index].astype(np.float64)
        states[k] = answer
    return cut, distance, states


@pytest.mark.parametrize("k", AIRS)
def test_things_beyond_are_cut_off_by_the_same_horizon(towers, k):
    cut, distance, _ = towers
    # Common practice: the farther, the more is cut off.
    assert (cut[k] > 0.0).all()
    assert (np.diff(cut[k]) > 0.0).all()
    # One and the same horizon does it: the line of sight that grazes the sea at d passes over a
    # place D away at (D - d)^2 / (2 Re), so each tower tells d.
    effective = RADIUS / (1.0 - k)
    told = distance - np.sqrt(2.0 * effective * cut[k])
    assert np.ptp(told) < 10.0
    assert told == pytest.approx(_scenes.horizon_distance(EYE, k, RADIUS), abs=10.0)


def test_refraction_lifts_far_things(towers):
    # Common practice: with refraction far things stand higher, never lower.
    cut, distance, answers = towers
    for less, more in pairwise(AIRS):
        lifted = cut[less] - cut[more]
        assert (lifted > 0.0).all()
        assert (np.diff(lifted) > 0.0).all()  # and the farther, the higher
        before, after = answers[less], answers[more]
        assert (after.visible[before.visible == 1] == 1).all()
        assert np.count_nonzero(after.visible == 1) > np.count_nonzero(before.visible == 1)
        known = before.visible != 255
        assert (after.clearance[known] >= before.clearance[known] - 1e-4).all()
    assert (distance > _scenes.horizon_distance(EYE, max(AIRS), RADIUS)).all()


@pytest.mark.parametrize("k", AIRS)
def test_far_ground_shows_only_what_rises_above_the_horizon(k):
    # Common practice: ground 46.2 km (28.7 miles) off shows only what rises above the horizon.
    cell, shore, rise = 50.0, 46_200.0, 0.25
    assert round(shore / STATUTE_MILE, 1) == 28.7
    grid, at, distance = _scenes.strip(SPHERE, cell, shore + 1200.0)
    profile = rise * np.maximum(0.0, distance - shore)
    z = np.repeat(profile[:, None], 3, axis=1).astype(np.float32)
    answer = _scenes.look(z, grid, at, range_m=shore + 1300.0, eye_height=EYE, refraction_k=k)
    hidden = np.array([_scenes.hidden_height(EYE, d, k, RADIUS) for d in distance])
    land = distance >= shore
    # Outside 2 cm, where the drop as a parabola might tell otherwise than the sphere.
    sure = land & (np.abs(profile - hidden) > 0.02)
    assert np.array_equal(answer.visible[sure, 1] == 1, (profile > hidden)[sure])
    lowest_seen = profile[land & (answer.visible[:, 1] == 1)].min()
    assert lowest_seen == pytest.approx(hidden[land].mean(), abs=cell * rise)
    # With no refraction about 134 m of it are below the horizon.
    if k == 0.0:
        assert hidden[distance == shore] == pytest.approx(134.3, abs=0.1)
    # The sea from the horizon to that shore is not seen at all.
    horizon = _scenes.horizon_distance(EYE, k, RADIUS)
    assert not (answer.visible[(distance > horizon + cell) & (distance <= shore), 1] == 1).any()
