"""The sea horizon, geographic range and hidden heights against navigation tables.

Source: N. Bowditch, The American Practical Navigator (NGA Pub. No. 9), Table 12 "Distance of the
Horizon" and Table 13 "Geographic Range", table numbers of the editions since 1995 from memory.
The explanation of Table 12 gives D = 1.17 sqrt(h), D in nautical miles and h in feet, which is
D = sqrt(2 r0 h / (6076.1 b)) with r0 = 3440.1 nautical miles and b = 0.8279; b from memory. Then
k = 1 - b = 0.1721.
"""

import math

import numpy as np
import pytest

from tests.published import _scenes
from tests.published._scenes import FOOT, NAUTICAL_MILE, RADIUS
from viewshed.geodesy import ellipsoid, principal_radii

TABLE_12_K = 0.1721
TABLE_12_RADIUS = 3440.1 * NAUTICAL_MILE
TABLE_12_FEET = [1, 2, 4, 6, 10, 15, 20, 35, 50, 65, 100, 200, 500, 1000, 2000, 5000, 10000]

#: Object and eye [ft] with the geographic range [nautical miles]. The first is the example of the
#: USCG Light List (9.4 + 6.9); the others are the sum of two rows of Table 12, worked out here.
GEOGRAPHIC_RANGES = [(65, 35, 16.3), (100, 20, 16.9), (150, 15, 18.9), (300, 6, 23.1)]

#: Object and eye [m] with the range [nautical miles] of the metric lists of lights,
#: 2.03 (sqrt(H) + sqrt(h)); the rule is from memory, the rows are worked out from it.
METRIC_RANGES = [(10, 2, 9.3), (30, 5, 15.7), (50, 10, 20.8), (100, 5, 24.8), (200, 20, 37.8)]

#: Eye [m], distance [km], k: hidden height [m], by the closed form in `_scenes.hidden_height`
#: with R = 6371 km. No published table: plane trigonometry on a sphere.
HIDDEN = [
    (1.8288, 10, 0.0, 2.100),
    (1.8288, 10, 0.13, 1.589),
    (1.8288, 10, 0.25, 1.153),
    (2.0, 20, 0.0, 17.545),
    (2.0, 20, 0.13, 14.530),
    (2.0, 20, 0.25, 11.820),
    (2.0, 50, 0.0, 158.586),
    (2.0, 50, 0.13, 135.744),
    (2.0, 50, 0.25, 114.842),
    (10.0, 30, 0.0, 27.479),
    (10.0, 30, 0.13, 21.872),
    (10.0, 30, 0.25, 16.942),
    (100.0, 100, 0.0, 324.534),
    (100.0, 100, 0.13, 260.189),
    (100.0, 100, 0.25, 203.387),
]

#: Top [m] and k: how far out at sea it is just seen by an eye at 2 m [km]; same closed form.
TIP_RANGES = [
    (150, 0.0, 48.77),
    (150, 0.13, 52.28),
    (150, 0.25, 56.31),
    (200, 0.0, 55.53),
    (200, 0.13, 59.53),
    (200, 0.25, 64.12),
]


@pytest.mark.parametrize("feet", TABLE_12_FEET)
def test_distance_of_the_horizon(feet, measured):
    cell = 25.0 if feet <= 100 else 50.0
    # Bowditch Table 12 in full, k = 0.1721: sqrt(2 r0 h / (6076.1 b)) nautical miles.
    table = math.sqrt(2 * 3440.1 * feet / (6076.1 * (1 - TABLE_12_K))) * NAUTICAL_MILE
    answer, distance = _scenes.look_along_sea(
        _scenes.centred_crs(TABLE_12_RADIUS),
        cell=cell,
        length=math.ceil(1.2 * table / cell) * cell,
        eye_height=feet * FOOT,
        refraction_k=TABLE_12_K,
    )
    found = _scenes.farthest_seen(answer, distance)
    measured(f"{found:.0f} m, {found - table:+.1f} m off the table, cell {cell:.0f} m")
    assert abs(found - table) <= cell, f"{found:.0f} m against {table:.1f} m in the table"
    # As printed, to a tenth of a nautical mile.
    assert abs(found / NAUTICAL_MILE - 1.17 * math.sqrt(feet)) <= 0.05 + cell / NAUTICAL_MILE
    # Nothing but the horizon hides: all is seen before it and nothing behind it.
    assert np.array_equal(answer.visible[:, 1] == 1, distance <= found)


@pytest.mark.parametrize("feet", [6, 20, 65])
def test_horizon_all_around_on_the_ellipsoid(feet, measured):
    # Bowditch Table 12, k = 0.1721, on WGS84 at 50 degrees north: its radii there differ from the
    # table's by up to 0.3 % with the bearing, which is less than a cell at these distances.
    cell = 100.0
    table = _scenes.horizon_distance(feet * FOOT, TABLE_12_K, TABLE_12_RADIUS)
    reach = 1.1 * table
    grid, at, (east, north) = _scenes.square(_scenes.centred_crs("WGS84"), cell, reach)
    sea = np.zeros(grid.shape, dtype=np.float32)
    answer = _scenes.look(
        sea, grid, at, range_m=reach, eye_height=feet * FOOT, refraction_k=TABLE_12_K
    )
    distance = np.hypot(east, north)
    seen = answer.visible == 1
    ends = distance[answer.visible == 0].min() - table, distance[seen].max() - table
    measured(f"nearest hidden {ends[0]:+.0f} m, farthest seen {ends[1]:+.0f} m off the table")
    assert seen[distance <= table - cell].all()
    assert not seen[distance >= table + cell].any()


def check_range(height, eye, k, radius, nautical_miles):
    """Farthest place where a top `height` m above the sea shows to an eye `eye` m above it."""
    cell = 50.0
    expected = sum(_scenes.horizon_distance(h, k, radius) for h in (height, eye))
    answer, distance = _scenes.look_along_sea(
        _scenes.centred_crs(radius),
        cell=cell,
        length=math.ceil(1.1 * expected / cell) * cell,
        eye_height=eye,
        target_height=height,
        refraction_k=k,
    )
    found = _scenes.farthest_seen(answer, distance)
    assert abs(found - expected) <= cell
    assert abs(found / NAUTICAL_MILE - nautical_miles) <= 0.1 + cell / NAUTICAL_MILE
    return found - expected


@pytest.mark.parametrize(("object_ft", "eye_ft", "nautical_miles"), GEOGRAPHIC_RANGES)
def test_geographic_range(object_ft, eye_ft, nautical_miles, measured):
    # Bowditch Table 13 is the sum of two rows of Table 12, k = 0.1721.
    off = check_range(object_ft * FOOT, eye_ft * FOOT, TABLE_12_K, TABLE_12_RADIUS, nautical_miles)
    measured(f"{off:+.1f} m off the rule")


@pytest.mark.parametrize(("height", "eye", "nautical_miles"), METRIC_RANGES)
def test_geographic_range_of_metric_lists(height, eye, nautical_miles, measured):
    # 2.03 nautical miles for the root of a metre stands for k = 0.0985 on a sphere of 6371 km.
    k = 1.0 - 2.0 * RADIUS / (2.03 * NAUTICAL_MILE) ** 2
    assert k == pytest.approx(0.0985, abs=5e-5)
    off = check_range(height, eye, k, RADIUS, nautical_miles)
    measured(f"{off:+.1f} m off the rule")


@pytest.mark.parametrize(("eye", "kilometres", "k", "hidden"), HIDDEN)
def test_hidden_height(eye, kilometres, k, hidden, measured):
    length = kilometres * 1000.0
    assert _scenes.hidden_height(eye, length, k, RADIUS) == pytest.approx(hidden, abs=6e-4)
    answer, _ = _scenes.look_along_sea(
        _scenes.centred_crs(RADIUS),
        cell=20.0,
        length=length,
        eye_height=eye,
        refraction_k=k,
        clearance=True,
        needed_height=True,
    )
    found = float(answer.needed_height[-1, 1])
    measured(f"{found:.4f} m, {found - hidden:+.4f} m off the closed form")
    # The drop is a parabola: low by 5 mm at 50 km and by 8 cm at 100 km.
    tolerance = 0.01 if kilometres <= 50 else 0.12
    assert found == pytest.approx(hidden, abs=tolerance)
    assert float(answer.clearance[-1, 1]) == pytest.approx(-found, abs=1e-3)


@pytest.mark.parametrize(("top", "k", "kilometres"), TIP_RANGES)
def test_range_at_sea_of_a_tall_structure(top, k, kilometres, measured):
    cell = 20.0
    answer, distance = _scenes.look_along_sea(
        _scenes.centred_crs(RADIUS),
        cell=cell,
        length=1100.0 * kilometres - (1100.0 * kilometres) % cell,
        eye_height=2.0,
        target_height=top,
        refraction_k=k,
    )
    found = _scenes.farthest_seen(answer, distance)
    measured(f"{found - 1000.0 * kilometres:+.0f} m off the closed form")
    assert found == pytest.approx(1000.0 * kilometres, abs=cell + 5.0)


@pytest.mark.parametrize("bearing_deg", [0, 45, 90, 200, 315])
@pytest.mark.parametrize("latitude", [0.0, 50.0, 80.0])
def test_hidden_height_on_the_ellipsoid(latitude, bearing_deg, measured):
    # The closed form with Euler's radius of the bearing, 1/R = cos^2 a / M + sin^2 a / P, which
    # differs by up to 0.7 % (0.9 m here) between bearings.
    crs = _scenes.centred_crs("WGS84", latitude)
    meridian, prime = principal_radii(latitude, *ellipsoid(crs))
    a = math.radians(bearing_deg)
    radius = 1.0 / (math.cos(a) ** 2 / meridian + math.sin(a) ** 2 / prime)
    grid, at, _ = _scenes.strip(crs, 50.0, 50_000.0, bearing_deg)
    sea = np.zeros(grid.shape, dtype=np.float32)
    answer = _scenes.look(
        sea, grid, at, range_m=51_000.0, eye_height=2.0, refraction_k=0.13, needed_height=True
    )
    off = float(answer.needed_height[-1, 1]) - _scenes.hidden_height(2.0, 50_000.0, 0.13, radius)
    measured(f"{off:+.4f} m off the closed form")
    assert abs(off) < 0.01
