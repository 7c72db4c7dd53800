"""One landscape at 60 degrees north in grids of several kinds against an answer that has no grid.

The ground is a formula of E, N in the azimuthal equidistant frame of the observer. Each grid holds
that formula at its own posts; the answer to compare with marches along sight lines over the formula
itself. No source: both follow from the meaning of the result, and the second uses plane
trigonometry on a sphere of the effective radius of the sight line's bearing (Euler, 1/R =
cos^2 a / M + sin^2 a / P), in place of the engine's flat heights.
"""

import math

import numba
import numpy as np
import pytest
from affine import Affine
from pyproj import CRS, Transformer

from viewshed.geodesy import crs_from_user, ellipsoid, principal_radii
from viewshed.grid import Grid
from viewshed.postmap import fit_post_map
from viewshed.visibility import compute, ground_at

pytestmark = pytest.mark.skipif(bool(numba.config.DISABLE_JIT), reason="marching needs a compiler")

LON, LAT = 17.3, 60.0  # 2.3 degrees from the axis of its UTM zone
RANGE = 60_000.0
CELL = 140.0  # true size [m]
EYE_HEIGHT, TARGET_HEIGHT, K = 60.0, 2.0, 0.13
STEP = 50.0
PLACES = 4000

#: The observer lies between posts, this far from one.
OFF_ROW, OFF_COL = 0.21, 0.37

_FOOT_CRS = (
    "+proj=tmerc +lat_0=58 +lon_0=16 +k=0.9999 +x_0=500000 +ellps=GRS80 +units=us-ft +type=crs"
)
_SECANT = 2.0 * (1.0 - 0.0067 * 0.75) ** 0.5  # scale of a Mercator map at 60 degrees north
_MERCATOR = (CELL * _SECANT, CELL * _SECANT)
_DEGREES = (CELL / 55_800.0, CELL / 111_412.0)

#: CRS, cell size along x and y [CRS units], and rotation [degrees].
GRIDS = {
    "utm": ("EPSG:32633", (CELL, CELL), 0.0),
    "utm turned by 30 degrees": ("EPSG:32633", (CELL, CELL), 30.0),
    "geographic": ("EPSG:4326", _DEGREES, 0.0),
    "web mercator": ("EPSG:3857", _MERCATOR, 0.0),
    "world mercator": ("EPSG:3395", _MERCATOR, 0.0),
    "us survey feet": (_FOOT_CRS, (CELL * 3937 / 1200, CELL * 3937 / 1200), 0.0),
}


def _waves():
    """Hills: amplitude [m], wave numbers along E and N [1/m], phase."""
    rng = np.random.default_rng(60)
    length = np.geomspace(6e3, 30e3, 24)
    bearing, phase = rng.uniform(0.0, 2.0 * np.pi, (2, length.size))
    number = 2.0 * np.pi / length
    columns = (0.002 * length, number * np.sin(bearing), number * np.cos(bearing), phase)
    return np.stack(columns, axis=1)


def _ridges():
    """Long ridges: height [m], sine and cosine of the bearing across, distance and width [m]."""
    height, bearing, distance, width = np.transpose(
        [
            (350.0, 40.0, 11e3, 1.8e3),
            (420.0, 200.0, 19e3, 2.2e3),
            (550.0, 110.0, 30e3, 2.5e3),
            (600.0, 300.0, 41e3, 3.0e3),
        ]
    )
    b = np.radians(bearing)
    return np.stack((height, np.sin(b), np.cos(b), distance, width), axis=1)


WAVES, RIDGES = _waves(), _ridges()


@numba.njit
def ground(east, north):
    """Elevation [m] of the landscape: a hill under the observer, hills and ridges around it."""
    z = 300.0 + 500.0 * math.exp(-(east * east + north * north) / (2.0 * 4000.0**2))
    for w in range(WAVES.shape[0]):
        z += WAVES[w, 0] * math.sin(WAVES[w, 1] * east + WAVES[w, 2] * north + WAVES[w, 3])
    for r in range(RIDGES.shape[0]):
        across = (RIDGES[r, 1] * east + RIDGES[r, 2] * north - RIDGES[r, 3]) / RIDGES[r, 4]
        along = RIDGES[r, 2] * east - RIDGES[r, 1] * north
        crest = RIDGES[r, 0] * (1.0 + 0.5 * math.sin(along / 4000.0))
        z += crest * math.exp(-0.5 * across * across)
    return z


@numba.njit
def ground_everywhere(east, north):
    """`ground` of arrays, in float32 as elevation grids have it."""
    z = np.empty(east.size, dtype=np.float32)
    for i in range(east.size):
        z[i] = ground(east[i], north[i])
    return z


@numba.njit
def rise_and_run(z, distance, radius, eye):
    """Height over and distance along the eye's tangent plane [m] on a sphere."""
    angle = distance / radius
    fall = 2.0 * radius * math.sin(angle / 2.0) ** 2
    return z * math.cos(angle) - fall - eye, (radius + z) * math.sin(angle)


@numba.njit
def march(east, north, eye, radii, k):
    """Clearance [m] of targets, walking each sight line in steps over the formula.

    Steps of 50 m find the neighbourhood of the horizon, steps of 2 m around it the horizon.
    """
    clearance = np.empty(east.size)
    for i in range(east.size):
        length = math.hypot(east[i], north[i])
        e, n = east[i] / length, north[i] / length
        radius = 1.0 / ((n * n / radii[0] + e * e / radii[1]) * (1.0 - k))
        steps = int(length / STEP) + 1
        horizon, at = -np.inf, 0.0
        for j in range(1, steps):
            d = j * length / steps
            rise, run = rise_and_run(ground(e * d, n * d), d, radius, eye)
            if rise / run > horizon:
                horizon, at = rise / run, d
        for j in range(-25, 26):
            d = at + j * STEP / 25.0
            if 0.0 < d < length:
                rise, run = rise_and_run(ground(e * d, n * d), d, radius, eye)
                horizon = max(horizon, rise / run)
        z = ground(east[i], north[i]) + TARGET_HEIGHT
        rise, run = rise_and_run(z, length, radius, eye)
        clearance[i] = rise - horizon * run
    return clearance


def make_grid(name):
    """A grid that holds the whole range, and the observer's post coordinates in it."""
    text, (width, height), turn = GRIDS[name]
    crs = crs_from_user(text)
    x, y = Transformer.from_crs(crs.geodetic_crs, crs, always_xy=True).transform(LON, LAT)
    half = round(1.07 * RANGE / CELL)
    transform = (
        Affine.translation(x, y)
        @ Affine.rotation(turn)
        @ Affine.scale(width, -height)
        @ Affine.translation(-half - 0.5 - OFF_COL, -half - 0.5 - OFF_ROW)
    )
    grid = Grid((2 * half + 1, 2 * half + 1), transform, crs.to_wkt())
    return grid, (half + OFF_ROW, half + OFF_COL)


def true_places(grid):
    """E, N [m] of all posts by the azimuthal equidistant projection of PROJ."""
    crs = CRS.from_wkt(grid.crs_wkt)
    base = crs.geodetic_crs
    a, rf = base.ellipsoid.semi_major_metre, base.ellipsoid.inverse_flattening
    lon, lat = grid.xy(np.arange(grid.rows)[:, np.newaxis], np.arange(grid.cols))
    lon, lat = (np.ravel(v) for v in np.broadcast_arrays(lon, lat))
    if not crs.is_geographic:
        lon, lat = Transformer.from_crs(crs, base, always_xy=True).transform(lon, lat)
    frame = Transformer.from_pipeline(
        "+proj=pipeline +step +proj=unitconvert +xy_in=deg +xy_out=rad "
        f"+step +proj=aeqd +lat_0={LAT} +lon_0={LON} +a={a!r} +rf={rf!r}"
    )
    return frame.transform(lon, lat)


def eye_elevation():
    """The eye stands above the formula's ground, whatever a grid makes of it."""
    return float(ground(0.0, 0.0)) + EYE_HEIGHT


@pytest.mark.parametrize("name", GRIDS)
def test_same_landscape_same_answer(name, measured):
    grid, at = make_grid(name)
    east, north = true_places(grid)
    z = ground_everywhere(east, north).reshape(grid.shape)
    distance = np.hypot(east, north)
    edge = np.ones(grid.shape, dtype=bool)
    edge[1:-1, 1:-1] = False
    assert distance.reshape(grid.shape)[edge].min() > RANGE  # nothing is cut off

    post_map = fit_post_map(grid, *at, range_m=RANGE)
    answer = compute(
        z,
        post_map,
        eye_height=eye_elevation() - ground_at(z, *at),
        target_height=TARGET_HEIGHT,
        refraction_k=K,
        range_m=RANGE,
    )
    sure = np.abs(distance - RANGE) > 1.0
    assert np.array_equal((answer.visible.ravel() != 255)[sure], (distance <= RANGE)[sure])

    inside = np.flatnonzero(distance < RANGE - 1.0)
    places = np.random.default_rng(6).choice(inside, PLACES, replace=False)
    radii = principal_radii(LAT, *ellipsoid(crs_from_user(grid.crs_wkt)))
    clearance = march(east[places], north[places], eye_elevation(), radii, K)
    truth, found = clearance >= 0.0, answer.visible.ravel()[places] == 1
    near = np.abs(clearance) < 1.0
    visible = np.count_nonzero(truth)
    differ = np.count_nonzero((truth != found) & ~near) / np.count_nonzero(truth & ~near)
    near_share = np.count_nonzero(near & truth) / visible
    told = (
        f"{visible / PLACES:.1%} of {PLACES} places visible, {differ:.2%} of them told otherwise, "
        f"leaving out those within 1 m of the line of sight, {near_share:.2%} of the visible and "
        f"{np.mean(near):.2%} of all; {np.count_nonzero(truth != found) / visible:.2%} with them; "
        f"map error {post_map.error_cells:.1e} cells"
    )
    measured(told)
    assert 0.1 < visible / PLACES < 0.6, told
    assert near_share < 0.05, told
    assert differ <= 0.005, told


@pytest.mark.parametrize(
    ("wrong_k", "least_share"),
    [
        (1.0 - 1e-9, 0.05),  # no curve at all
        (1.0 - 4.0 * (1.0 - K), 0.15),  # lengths of a Mercator map taken for true ones: drop x 4
        (0.0, 0.005),  # no air
    ],
)
def test_the_landscape_tells_a_wrong_earth(wrong_k, least_share, measured):
    # Else the check above would prove nothing: more must change than what is allowed there.
    rng = np.random.default_rng(7)
    distance, bearing = RANGE * np.sqrt(rng.uniform(0.0, 1.0, 2000)), rng.uniform(0.0, 7.0, 2000)
    places = distance * np.sin(bearing), distance * np.cos(bearing)
    radii = principal_radii(LAT, *ellipsoid(crs_from_user("EPSG:4326")))
    truth, wrong = (march(*places, eye_elevation(), radii, k) >= 0.0 for k in (K, wrong_k))
    share = np.count_nonzero(wrong != truth) / np.count_nonzero(truth)
    measured(f"{share:.1%} of the visible places change")
    assert share > least_share
