"""What the checks against the world share: flat seas, packaged elevation grids and closed forms."""

import importlib.util
import math
from pathlib import Path

import numpy as np
import pytest
from affine import Affine

from viewshed.geodesy import crs_from_user
from viewshed.grid import Grid
from viewshed.postmap import fit_post_map
from viewshed.visibility import compute

FOOT = 0.3048
NAUTICAL_MILE = 1852.0
STATUTE_MILE = 1609.344

#: Mean radius of the Earth behind the round numbers of the closed forms [m].
RADIUS = 6_371_000.0


def centred_crs(earth, latitude=50.0):
    """Azimuthal equidistant about (10 E, latitude): x, y are E, N of geodesics from there.

    `earth` is a radius in metres, or the name of an ellipsoid.
    """
    shape = f"+ellps={earth}" if isinstance(earth, str) else f"+R={earth!r}"
    return crs_from_user(f"+proj=aeqd +lat_0={latitude} +lon_0=10 {shape} +units=m +type=crs")


def strip(crs, cell, length, bearing_deg=0.0):
    """Three columns of posts from the centre outward: a grid, its observer, and distances [m].

    Row n of the middle column lies n cells away from the centre of `crs` on the bearing.
    """
    rows = round(length / cell) + 1
    along = cell * math.sin(math.radians(bearing_deg)), cell * math.cos(math.radians(bearing_deg))
    across = along[1], -along[0]
    origin = [-1.5 * c - 0.5 * a for c, a in zip(across, along, strict=True)]
    transform = Affine(across[0], along[0], origin[0], across[1], along[1], origin[1])
    return Grid((rows, 3), transform, crs.to_wkt()), (0.0, 1.0), cell * np.arange(rows)


def square(crs, cell, reach):
    """A square grid about the centre of `crs`: the grid, its observer, and E, N of posts [m]."""
    half = math.ceil(reach / cell) + 1
    edge = (half + 0.5) * cell
    transform = Affine(cell, 0.0, -edge, 0.0, -cell, edge)
    steps = cell * np.arange(-half, half + 1.0)
    grid = Grid((2 * half + 1, 2 * half + 1), transform, crs.to_wkt())
    return grid, (float(half), float(half)), np.meshgrid(steps, -steps)


def look(z, grid, at, *, range_m, **question):
    """Ask the engine, with the map from posts to places fitted for the range."""
    post_map = fit_post_map(grid, *at, range_m=range_m)
    return compute(z, post_map, range_m=range_m, **question)


def look_along_sea(crs, *, cell, length, **question):
    """Ask the engine over a strip of flat sea: the answer on the middle column, and distances."""
    grid, at, distance = strip(crs, cell, length)
    sea = np.zeros(grid.shape, dtype=np.float32)
    return look(sea, grid, at, range_m=length + cell, **question), distance


def farthest_seen(answer, distance):
    """Distance of the farthest visible post of the middle column [m]; all before must be seen."""
    return float(distance[answer.visible[:, 1] == 1].max())


def horizon_distance(height, k, radius):
    """Distance of the sea horizon [m] from an eye `height` m up: sqrt(2 R h / (1 - k))."""
    return math.sqrt(2.0 * radius * height / (1.0 - k))


def hidden_height(height, distance, k, radius):
    """Part of a far object that the sea hides [m].

    Closed form on a sphere of the effective radius Re = R / (1 - k): the line from an eye h up
    touches the sphere at the angle acos(Re / (Re + h)) and passes over the place D / Re away at
    Re (sec(D / Re - that angle) - 1).
    """
    effective = radius / (1.0 - k)
    beyond = distance / effective - math.acos(effective / (effective + height))
    return effective * (1.0 / math.cos(beyond) - 1.0) if beyond > 0.0 else 0.0


def packaged_file(package, *parts):
    """Path of a data file inside an installed package, which is not imported; skip without it."""
    spec = importlib.util.find_spec(package)
    path = None
    if spec is not None and spec.submodule_search_locations:
        path = Path(spec.submodule_search_locations[0]).joinpath(*parts)
    if path is None or not path.is_file():
        cure = f"install it with: python -m pip install --no-deps {package}"
        pytest.skip(f"the elevation grid {parts[-1]} of the package {package} is missing; {cure}")
    return path
