"""Lines of many posts are looked at part by part; those of narrow wedges have one part alone.

Both must agree: in the state wherever clearance is not a tie, and in clearance to its rounding.
"""

import numpy as np
import pytest

from tests.helpers import TOLERANCE, affine_map, bent_map, fractal, noise, with_voids
from viewshed import wedges
from viewshed.places import Sector
from viewshed.visibility import compute

N = 161
AXIS = np.arange(N) - N // 2
MIDDLE, ASIDE = (80.0, 80.0), (30.3, 110.7)
GROUNDS = {
    "hills": fractal(N, 1, relief=300.0),
    "noise": noise(N, 4),
    "bowl": (0.01 * (AXIS[:, None] ** 2 + AXIS[None, :] ** 2)).astype(np.float32),
    "sea": np.zeros((N, N), np.float32),
    "ridges": (np.abs((AXIS[:, None] + 0.3 * AXIS[None, :]) % 30 - 15) * 3.0).astype(np.float32),
}


def slightly_bent(row, col):
    """Bend a grid so little that a whole line of it is looked at part by part."""
    return bent_map(row, col, bend=3e-5)


def answers(monkeypatch, posts, z, post_map, **scene):
    """Answer with wedges about so many posts wide at the end of the range."""
    monkeypatch.setattr(wedges, "_LEAST_WEDGES", 1)
    monkeypatch.setattr(wedges, "_FEWEST_POSTS", posts)
    monkeypatch.setattr(wedges, "_MOST_POSTS", posts)
    full = compute(z, post_map, clearance=True, **scene)
    lean = compute(z, post_map, **scene)
    np.testing.assert_array_equal(lean.visible, full.visible, "with and without clearance")
    return full


def assert_width_changes_nothing(monkeypatch, z, post_map, **scene):
    narrow = answers(monkeypatch, 6, z, post_map, **scene)
    wide = answers(monkeypatch, 1000, z, post_map, **scene)
    ties = np.fmin(np.abs(narrow.clearance), np.abs(wide.clearance)) <= TOLERANCE
    assert not np.argwhere((narrow.visible != wide.visible) & ~ties).size
    np.testing.assert_allclose(wide.clearance, narrow.clearance, rtol=1e-6, atol=TOLERANCE)


@pytest.mark.parametrize("make", [affine_map, slightly_bent])
@pytest.mark.parametrize("place", [MIDDLE, ASIDE])
@pytest.mark.parametrize("ground", GROUNDS)
def test_grounds(monkeypatch, ground, place, make):
    for eye, target in ((3.0, 0.0), (60.0, 20.0)):
        z = GROUNDS[ground]
        assert_width_changes_nothing(
            monkeypatch, z, make(*place), eye_height=eye, target_height=target
        )


@pytest.mark.parametrize("make", [affine_map, slightly_bent])
@pytest.mark.parametrize("ground", ["hills", "noise"])
def test_voids(monkeypatch, ground, make):
    z = with_voids(GROUNDS[ground], 0.01, seed=3, keep=MIDDLE)
    assert_width_changes_nothing(monkeypatch, z, make(*MIDDLE), eye_height=9.0)


@pytest.mark.parametrize("ground", ["hills", "sea"])
def test_surface_over_ground(monkeypatch, ground):
    z = GROUNDS[ground]
    woods = np.kron(np.random.default_rng(5).random((23, 23)) < 0.3, np.ones((7, 7)))
    surface = z + np.float32(6.0) * woods.astype(np.float32)
    surface[78:84, 78:84] = z[78:84, 78:84]
    assert_width_changes_nothing(
        monkeypatch, z, affine_map(*MIDDLE), surface=surface, eye_height=20.0, target_height=2.0
    )


@pytest.mark.parametrize("sector", [Sector(20, 110), Sector(350, 345)])
def test_sectors(monkeypatch, sector):
    z = GROUNDS["hills"]
    assert_width_changes_nothing(
        monkeypatch, z, affine_map(*ASIDE), eye_height=9.0, sector=sector, range_m=2500.0
    )


def test_octants_share_the_pieces_by_their_work():
    """Near a corner the octants that reach far get nearly all pieces."""
    middle, corner = (wedges.wedge_counts(scene_at(place)) for place in (MIDDLE, (3.0, 3.0)))
    assert max(middle.values()) - min(middle.values()) <= 1
    assert corner[True, 1, 1] > 2 * middle[True, 1, 1]
    assert corner[True, -1, -1] == wedges._LEAST_WEDGES


def scene_at(place):
    """Scene of a large flat grid without looking at it."""
    post_map = affine_map(*(16.0 * n for n in place))
    ground = np.broadcast_to(np.float32(0.0), (16 * N, 16 * N))
    air = wedges.Air(6.4e6, 6.4e6, 0.13)
    return wedges.Scene(ground, None, post_map, air, 0.0, 2.0, 0.0, 1e6, None, (0.0, 0.0), 2.0)
