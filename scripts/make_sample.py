"""Make sample_dem/: an invented coast with a strait, islands, ridges, a valley and a plateau.

    python scripts/make_sample.py [FOLDER]

The land is grown, not drawn: a plan of where the ground rises is worn down by running water and
soil creep on three grids of 120, 60 and 30 m, drowned by some metres, and rounded at the shore.
Everything follows from SEED, so two runs with the same libraries write the same bytes. Needs the
libraries of the package.
"""

import argparse
import itertools
from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import rasterio
from affine import Affine

SEED = 20_261
#: Coarsest and finest grid [cells a side], and the side of the square [km].
COARSE, SIZE, SIDE = 375, 1500, 45.0
CELL = 1000.0 * SIDE / SIZE
#: UTM zone 32 south, over the open South Atlantic: no land of this world is meant.
CRS, WEST, NORTH = "EPSG:32732", 380_010.0, 6_240_000.0
#: Metres by which the finished land is drowned, and the step of its heights [m].
DROWNED, STEP = 11.0, 0.125

# Plan in km east and north of the south-west corner.
SOUTH_SHORE = ((-5, 4), (0, 5.5), (5, 7), (8, 9.6), (10, 9.2), (14, 9), (20, 13), (26, 14))
SOUTH_SHORE += ((32, 18), (38, 17), (45, 19.5), (50, 20))
NORTH_SHORE = ((-5, 25), (0, 27), (6, 30), (11, 29), (16, 33.5), (20, 35), (24, 33), (28, 29))
NORTH_SHORE += ((32, 28), (38, 28.5), (45, 27), (50, 27))
#: Islands: centre east, north, half axes [km], turn [degrees].
ISLANDS = (
    (9.5, 20.5, 2.6, 1.5, 25),
    (15.5, 23.5, 1.0, 0.7, 70),
    (4.0, 18.0, 0.9, 0.6, 10),
    (21.0, 26.0, 1.5, 0.9, -20),
    (33.0, 22.6, 1.4, 0.7, 10),
    (13.5, 19.8, 0.5, 0.4, 0),
    (2.5, 22.5, 1.2, 0.8, -40),
)
#: Ridges: strength, centre east, north, half axes [km], turn [degrees], km inland to full rise.
RIDGES = (
    (1.45, 36.0, 37.0, 9.0, 3.0, 28, 3.0),
    (1.00, 29.5, 33.0, 4.5, 2.2, 55, 2.5),
    (0.90, 6.0, 38.0, 6.0, 3.5, -30, 3.0),
    (0.80, 14.2, 42.5, 2.0, 6.0, 10, 3.0),
    (0.60, 24.0, 42.0, 1.9, 6.0, 12, 3.0),
    (0.55, 12.0, 3.0, 7.0, 2.0, 15, 3.0),
    (0.60, 19.5, 45.0, 9.0, 6.5, 0, 4.0),
)
PLATEAU = (35.0, 7.5, 12.0, 6.5, 8)
VALLEY = ((19, 50), (17.5, 43.5), (20, 38), (20.3, 34))
#: A hooked shingle spit, at whose turn the low lookout stands, and its height [m].
SPIT = ((8.4, 10.6), (8.0, 11.1), (7.5, 11.42), (7.0, 11.5), (6.6, 11.3))
SPIT_HEIGHT = 1.25

NEIGHBOURS = ((-1, -1), (-1, 0), (-1, 1), (0, -1), (0, 1), (1, -1), (1, 0), (1, 1))


def noise(rng, beta, longest):
    """Fractal noise of unit spread on the coarse grid.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of the numbers.
    beta : float
        Fall of power with frequency; larger is smoother.
    longest : float
        Wavelength [coarse cells] above which there is nothing.

    Returns
    -------
    numpy.ndarray
        Shape (COARSE, COARSE).
    """
    n = 2 * COARSE
    frequency = np.hypot(np.fft.fftfreq(n)[:, None], np.fft.rfftfreq(n)[None, :])
    frequency[0, 0] = 1.0
    gain = frequency ** (-beta / 2) * np.exp(-((1 / (longest * frequency)) ** 2) / 2)
    gain[0, 0] = 0.0
    out = np.fft.irfft2(np.fft.rfft2(rng.standard_normal((n, n))) * gain, s=(n, n))
    return (out / out.std())[:COARSE, :COARSE]


def ramp(low, high, value):
    """Rise smoothly from 0 at `low` to 1 at `high`."""
    t = np.clip((value - low) / (high - low), 0, 1)
    return t * t * (3 - 2 * t)


def sample(grid, rows, cols):
    """Bilinear values of `grid` at fractional (row, col), held at the border."""
    top = np.clip(np.floor(rows).astype(np.intp), 0, grid.shape[0] - 2)
    left = np.clip(np.floor(cols).astype(np.intp), 0, grid.shape[1] - 2)
    down, right = np.clip(rows - top, 0, 1), np.clip(cols - left, 0, 1)
    upper = grid[top, left] * (1 - right) + grid[top, left + 1] * right
    lower = grid[top + 1, left] * (1 - right) + grid[top + 1, left + 1] * right
    return upper * (1 - down) + lower * down


def refine(grid, size):
    """Bring a square grid to `size` cells a side over the same ground."""
    at = (np.arange(size) + 0.5) * grid.shape[0] / size - 0.5
    rows, cols = np.meshgrid(at, at, indexing="ij")
    return sample(grid, rows, cols)


def bump(east, north, centre_east, centre_north, half_long, half_wide, turn):
    """Hill of height 1 with elliptic foot; `turn` [degrees] is anticlockwise from east."""
    along, across = turned(east - centre_east, north - centre_north, turn)
    return np.exp(-((along / half_long) ** 2) - (across / half_wide) ** 2)


def turned(east, north, turn):
    """Coordinates along and across an axis turned by `turn` [degrees] from east."""
    cosine, sine = np.cos(np.radians(turn)), np.sin(np.radians(turn))
    return east * cosine + north * sine, north * cosine - east * sine


def shore(east, points):
    """North coordinate [km] of a shore drawn through `points` with its corners rounded."""
    at = np.linspace(-5, 50, 1101)
    window = np.hanning(81)
    line = np.pad(np.interp(at, *np.array(points, float).T), 40, mode="edge")
    return np.interp(east, at, np.convolve(line, window / window.sum(), "valid"))


def line_distance(east, north, points):
    """Distance [km] to a broken line."""
    best = np.full(east.shape, np.inf)
    for (x0, y0), (x1, y1) in itertools.pairwise(points):
        x, y = x1 - x0, y1 - y0
        t = np.clip(((east - x0) * x + (north - y0) * y) / (x * x + y * y), 0, 1)
        best = np.minimum(best, np.hypot(east - x0 - t * x, north - y0 - t * y))
    return best


def plan(size, noises):
    """Where the land lies, how fast it rises and how easily it wears.

    Parameters
    ----------
    size : int
        Cells a side.
    noises : list of numpy.ndarray
        Five fields from `noise`.

    Returns
    -------
    tuple of numpy.ndarray
        (inland, rise, softness, plateau), each (size, size): distance inland [km], negative at
        sea; uplift [m per unit of time]; erodibility; 0 to 1 on the plateau.
    """
    bend_east, bend_north, rough, swell, rock = (refine(field, size) for field in noises)
    at = (np.arange(size) + 0.5) * SIDE / size
    east, north = np.meshgrid(at, SIDE - at)
    east, north = east + 0.9 * bend_east, north + 0.9 * bend_north
    inland = np.maximum(shore(east, SOUTH_SHORE) - north, north - shore(east, NORTH_SHORE))
    island = np.full(inland.shape, -9.0)
    for x, y, half_long, half_wide, turn in ISLANDS:
        along, across = turned(east - x, north - y, turn)
        depth = 1 - np.hypot(along / half_long, across / half_wide)
        island = np.maximum(island, 1.3 * depth * min(half_long, half_wide))
    inland = np.maximum(inland, island)

    plateau = ramp(0.45, 0.75, bump(east, north, *PLATEAU) + 0.05 * rough)
    rise = 0.10 + 0.35 * ramp(-1.5, 6.0, inland) + 0.75 * plateau + 0.5 * ramp(0, 0.6, island)
    for strength, *ellipse, full in RIDGES:
        rise += strength * bump(east, north, *ellipse) * ramp(-0.3, full, inland)
    rise *= 1 - 0.92 * np.exp(-((line_distance(east, north, VALLEY) / 1.2) ** 2))
    rise *= np.exp(0.35 * swell * (1 - 0.8 * plateau)) * (0.1 + 0.9 * ramp(-2.5, 0.3, inland))
    return inland, 0.42 * rise, 0.02 * np.exp(0.35 * rock) * (1 - 0.88 * plateau), plateau


def flow(height, base, cell):
    """Cell each cell drains to, itself where water stays, and the length of that step [m]."""
    rows, cols = height.shape
    index = np.arange(height.size).reshape(height.shape)
    steepest, receiver = np.zeros(height.shape), index.copy()
    length = np.full(height.shape, cell)
    for dr, dc in NEIGHBOURS:
        here = np.s_[max(0, -dr) : rows - max(0, dr), max(0, -dc) : cols - max(0, dc)]
        there = np.s_[max(0, dr) : rows - max(0, -dr), max(0, dc) : cols - max(0, -dc)]
        step = cell * float(np.hypot(dr, dc))
        slope = (height[here] - height[there]) / step
        better = (slope > steepest[here]) & ~base[here]
        steepest[here][better] = slope[better]
        receiver[here][better] = index[there][better]
        length[here][better] = step
    return receiver.ravel(), length.ravel()


def by_depth(receiver):
    """Cells in groups: those where water stays, those one step above, two steps, and so on."""
    depth = (receiver != np.arange(receiver.size)).astype(np.int32)
    jump = receiver
    while True:
        depth = depth + depth[jump]
        farther = jump[jump]
        if np.array_equal(farther, jump):
            break
        jump = farther
    order = np.argsort(depth, kind="stable")
    return np.split(order, np.searchsorted(depth[order], np.arange(1, depth.max() + 1)))


def wear(height, base, rise, softness, *, cell, steps, time=15.0, creep=30.0):
    """Lift the land and let rivers and creep wear it down.

    Rivers lower the ground by softness * area**0.45 * slope, solved implicitly from the mouths
    upward; `base` cells stay as they are.

    Parameters
    ----------
    height : numpy.ndarray
        Heights [m], shape (n, n).
    base : numpy.ndarray of bool
        Cells that take all water.
    rise, softness : numpy.ndarray
        As `plan` gives them.
    cell : float
        Cell side [m].
    steps : int
        Number of steps.
    time : float
        Length of a step [units of time].
    creep : float
        Diffusion of the soil [m2 per unit of time].

    Returns
    -------
    numpy.ndarray
        Heights [m], shape (n, n).
    """
    inner = max(1, int(np.ceil(creep * time / cell**2 / 0.2)))
    share = np.where(base, 0.0, creep * time / inner / cell**2)
    for _ in range(steps):
        height = height + np.where(base, 0.0, rise * time)
        receiver, length = flow(height, base, cell)
        groups = by_depth(receiver)
        area = np.full(height.size, cell * cell)
        for cells in reversed(groups[1:]):
            np.add.at(area, receiver[cells], area[cells])
        cut = softness.ravel() * time * area**0.45 / length
        worn = height.ravel().copy()
        for cells in groups[1:]:
            below = worn[receiver[cells]]
            worn[cells] = (worn[cells] + cut[cells] * below) / (1 + cut[cells])
        height = worn.reshape(height.shape)
        for _ in range(inner):
            height = height + share * curvature(height)
    return height


def curvature(height):
    """Sum of the four neighbours less four times the cell."""
    p = np.pad(height, 1, mode="edge")
    return p[:-2, 1:-1] + p[2:, 1:-1] + p[1:-1, :-2] + p[1:-1, 2:] - 4 * height


def unbend(height, noises):
    """Shift the ground sideways by some tens of metres so that no stream follows the grid."""
    rows, cols = np.indices(height.shape, dtype=float)
    shift = 1.3 * height.shape[0] / SIZE
    return sample(
        height,
        rows + shift * refine(noises[0], height.shape[0]),
        cols + shift * refine(noises[1], height.shape[0]),
    )


def make_elevation():
    """Grow the land.

    Returns
    -------
    numpy.ndarray
        Elevation [m], float32, shape (SIZE, SIZE), multiples of STEP; the sea is 0.
    """
    rng = np.random.default_rng(SEED)
    noises = [noise(rng, *p) for p in ((3.2, 90), (3.2, 90), (3.0, 40), (3.4, 120), (3.0, 60))]
    shifts = [noise(rng, 4.0, 10) for _ in range(2)]
    height = None
    for size, steps in ((COARSE, 60), (2 * COARSE, 25), (SIZE, 8)):
        inland, rise, softness, plateau = plan(size, noises)
        if height is None:
            height = 10 * ramp(-1.6, 4, inland) + 30 * plateau
        else:
            height = unbend(refine(height, size), shifts)
        base = inland < -1.6
        height = np.where(base, 0.0, height + 0.7 * rng.random((size, size)))
        cell = 1000.0 * SIDE / size
        height = wear(height, base, rise, softness, cell=cell, steps=steps)
    return finish(unbend(height, shifts) - DROWNED)


def finish(height):
    """Round the shore, lay the spit, and cut the heights to their step; see `make_elevation`."""
    beach = height
    for _ in range(24):
        beach = beach + 0.2 * curvature(beach)
    height = beach + (height - beach) * ramp(2.0, 16.0, height)
    at = (np.arange(SIZE) + 0.5) * CELL / 1000
    east, north = np.meshgrid(at, SIDE - at)
    away = line_distance(east, north, SPIT) + 0.012 * (east - SPIT[-1][0]) * np.sin(9 * east)
    shingle = SPIT_HEIGHT * ramp(0.14, 0.08, away)
    height = np.maximum(height, shingle)
    return (np.round(np.maximum(height, 0.0) / STEP) * STEP).astype(np.float32)


def position(row, col):
    """Centre of a cell in the CRS [m]."""
    return WEST + (col + 0.5) * CELL, NORTH - (row + 0.5) * CELL


def cell_at(east, north):
    """Cell (row, col) that holds a point of the plan [km]."""
    return int((SIDE - north) * 1000 / CELL), int(east * 1000 / CELL)


def summit(elevation, east, north, reach):
    """Cell (row, col) of the highest ground within `reach` [km] of a point of the plan [km]."""
    row, col = cell_at(east, north)
    n = int(reach * 1000 / CELL)
    part = elevation[row - n : row + n + 1, col - n : col + n + 1]
    down, right = np.unravel_index(int(np.argmax(part)), part.shape)
    return row - n + int(down), col - n + int(right)


def make_places(elevation):
    """Lookouts, mast sites and turbines on the finished ground.

    Parameters
    ----------
    elevation : numpy.ndarray
        As `make_elevation` gives it.

    Returns
    -------
    list of tuple
        (name, layer, height [m], ground [m], x, y); height is the eye's above ground for a
        lookout, the top's for a mast or turbine.
    """
    spots = [
        ("Tirrow Spit", "lookouts", 1.7, *cell_at(*SPIT[3])),
        ("Carrowmel Edge", "lookouts", 1.7, *summit(elevation, 30.4, 9.2, 0.4)),
        ("Velm Hill", "masts", 60.0, *summit(elevation, 12.7, 3.8, 0.6)),
        ("Dunnamarl", "masts", 45.0, *summit(elevation, 24.7, 34.5, 0.6)),
        ("Great Pellow", "masts", 30.0, *summit(elevation, 10.1, 19.9, 0.6)),
    ]
    for i in range(8):
        row = cell_at(30.9 + 0.54 * i, 8.3 + 0.03 * i)
        spots.append((f"Moorvane {i + 1}", "turbines", 150.0, *row))
    return [
        (name, layer, height, float(elevation[row, col]), *position(row, col))
        for name, layer, height, row, col in spots
    ]


def write_elevation(path, elevation):
    """Write the grid as a tiled, compressed GeoTIFF with heights in metres."""
    place = {"crs": CRS, "transform": Affine(CELL, 0, WEST, 0, -CELL, NORTH)}
    shape = {"height": SIZE, "width": SIZE, "count": 1, "dtype": "float32"}
    blocks = {"tiled": True, "blockxsize": 256, "blockysize": 256}
    packing = {"compress": "DEFLATE", "predictor": 3, "zlevel": 9}
    with rasterio.open(path, "w", driver="GTiff", **shape, **place, **blocks, **packing) as dst:
        dst.write(elevation, 1)
        dst.set_band_description(1, "elevation (invented)")
        dst.set_band_unit(1, "m")


def write_places(path, places):
    """Write the places as layers of a GeoPackage, without the date of today in it."""
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": "2000-01-01T00:00:00.000Z"})
    path.unlink(missing_ok=True)
    for layer in dict.fromkeys(place[1] for place in places):
        names, _, heights, _, xs, ys = zip(*(p for p in places if p[1] == layer), strict=True)
        frame = geopandas.GeoDataFrame(
            {"name": names, "eye_height": heights},
            geometry=geopandas.points_from_xy(xs, ys),
            crs=CRS,
        )
        frame.to_file(path, layer=layer, driver="GPKG")


def main():
    """Write elevation.tif and places.gpkg."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    default = Path(__file__).resolve().parent.parent / "sample_dem"
    parser.add_argument("folder", nargs="?", type=Path, default=default)
    folder = parser.parse_args().folder
    folder.mkdir(parents=True, exist_ok=True)
    elevation = make_elevation()
    write_elevation(folder / "elevation.tif", elevation)
    places = make_places(elevation)
    write_places(folder / "places.gpkg", places)
    for place in places:
        print("{:<20}{:<9}{:>6.1f} m on {:8.3f} m  {:.0f},{:.0f}".format(*place))
    for name in ("elevation.tif", "places.gpkg"):
        print(f"{folder / name}  {(folder / name).stat().st_size / 1e6:.2f} MB")


if __name__ == "__main__":
    main()
