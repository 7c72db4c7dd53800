"""Terrains for measuring: every kind that has been known to be hard for some way of working.

All are made from fixed seeds by numpy alone, so that two runs with the same numpy measure the same
ground. The observer's place is part of a scene, since most of the cost depends on it. A scene seen
less far is the part of the same ground around the observer.
"""

import functools
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

SEED = 4_711
#: Sides of fractal ground [cells], of small factors and so quick to transform.
SIDES = (128, 512, 2_048, 3_072, 6_144, 10_240, 20_480)
#: Side for which the relief of fractal ground is stated [cells]; any other is as steep.
STATED_SIDE = 6_144
#: Rows or columns of fractal ground worked on at a time.
STRIP = 128
#: Metres that the bowl rises by the square of cells from its bottom: more than the Earth curves.
BOWL = 2000.0 / 3000.0**2
#: Posts of a missing tile along its side.
TILE = 64


@dataclass(frozen=True)
class Scene:
    """A terrain with somebody on it.

    Attributes
    ----------
    name : str
        Name on the command line and in the table.
    words : str
        What it is.
    eye : float
        Eye height above the ground [m].
    make : callable
        Elevation (n, n) float32 [m] from n.
    place : callable
        Post coordinates (row, col) of the observer from the elevation; the middle by default.
    cell : float
        Side of a cell [m].
    cover : callable, optional
        Surface (n, n) float32 [m] over an elevation; the ground itself where there is none.
    sector : tuple of float, optional
        Bearings looked over, from and to [degrees]; all around where there is none.
    kind : bool
        Whether it is a kind of terrain of its own, measured over all ranges, and not a kind met
        before with something added.
    """

    name: str
    words: str
    eye: float
    make: Callable
    place: Callable
    cell: float = 30.0
    cover: Callable | None = None
    sector: tuple[float, float] | None = None
    kind: bool = True


def shaped_noise(side, roughness):
    """White noise with its waves weighed by their length, so that it repeats without a seam.

    Worked strip by strip on two threads, in single precision: relief of kilometres is exact to
    some millimetres, far less than posts beside each other differ.
    """
    rng = np.random.default_rng(SEED)
    waves = np.empty((side, side // 2 + 1), dtype=np.complex64)
    z = np.empty((side, side), dtype=np.float32)
    down = np.fft.fftfreq(side).astype(np.float32)[:, None] ** 2
    along = np.fft.rfftfreq(side).astype(np.float32)[None, :] ** 2

    def transform(first, strip):
        waves[first : first + STRIP] = np.fft.rfft(strip)

    def weigh(first):
        cols = np.s_[:, first : first + STRIP]
        power = down + along[cols]
        if first == 0:
            power[0, 0] = np.inf
        power **= np.float32(-0.5 * (1.0 + roughness))
        waves[cols] = np.fft.ifft(np.fft.fft(waves[cols], axis=0) * power, axis=0)

    def back(first):
        z[first : first + STRIP] = np.fft.irfft(waves[first : first + STRIP], n=side)

    starts = range(0, side, STRIP)
    shapes = ((min(STRIP, side - first), side) for first in starts)
    strips = (rng.standard_normal(shape, dtype=np.float32) for shape in shapes)
    with ThreadPoolExecutor(2) as pool:
        list(pool.map(transform, starts, strips))
        list(pool.map(weigh, range(0, waves.shape[1], STRIP)))
        list(pool.map(back, starts))
    return z


@functools.lru_cache(maxsize=1)
def fractal(n, roughness, relief):
    """Landscape without a scale of its own, its highest post brought to the middle.

    Parameters
    ----------
    n : int
        Rows and columns, at most SIDES[-1].
    roughness : float
        Hurst exponent: heights differ by distance ** roughness, so 1.2 is smooth and 0.7 rough.
    relief : float
        From the lowest to the highest post of ground of the stated side [m].

    Returns
    -------
    numpy.ndarray
        Elevation [m], shape (n, n), float32; kept for the next scene, so not to be written to.
    """
    side = next(s for s in SIDES if s >= n)
    z = shaped_noise(side, roughness)
    z -= z.min()
    z *= np.float32(relief * (side / STATED_SIDE) ** roughness / z.max())
    top = np.unravel_index(np.argmax(z), z.shape)
    rows, cols = ((np.arange(n) + t - n // 2) % side for t in top)
    ground = np.empty((n, n), dtype=np.float32)
    for row, source in zip(ground, rows, strict=True):
        np.take(z[source], cols, out=row)
    return ground


def rough(n):
    """Rough fractal from its summit: ground of many small obstacles."""
    return fractal(n, 0.7, 2000.0)


def smooth(n):
    """Smooth fractal from its summit: hills and valleys."""
    return fractal(n, 1.2, 1500.0)


def sea(n):
    """Flat sea: one edge hides the next by the curve alone."""
    return np.zeros((n, n), dtype=np.float32)


def city(n):
    """Blocks of 12 cells with streets of 4 between them, flat roofs of 5 to 60 m."""
    rng = np.random.default_rng(SEED)
    block = np.zeros((16, 16), dtype=np.float32)
    block[4:, 4:] = 1.0
    side = n // 16 + 1
    roofs = rng.integers(2, 25, (side, side)).astype(np.float32) * np.float32(2.5)
    roofs[n // 32, n // 32] = 60.0  # the observer's
    return np.ascontiguousarray(np.kron(roofs, block)[:n, :n])


def noise(n):
    """White noise of 5 m: no post tells anything about the next."""
    return np.random.default_rng(SEED).random((n, n), dtype=np.float32) * np.float32(5.0)


def bowl(n):
    """Bowl from its bottom: all of it in sight, each line of posts above all before."""
    height = BOWL * (np.arange(n) - n // 2) ** 2.0
    return height.astype(np.float32)[:, None] + height.astype(np.float32)[None, :]


def ridges(n):
    """Saw-tooth ridges of 90 m, 60 cells apart, slanting across the grid."""
    x = (np.arange(n) - n // 2).astype(np.float32)
    z = x[:, None] + np.float32(0.3) * x[None, :]
    z %= np.float32(60.0)
    z -= np.float32(30.0)
    np.abs(z, out=z)
    z *= np.float32(3.0)
    return z


def voids(n):
    """Smooth fractal from its summit with 1 % of its posts unknown."""
    z = smooth(n).copy()
    holes = np.random.default_rng(SEED + 1).random((n, n), dtype=np.float32) < 0.01
    holes[n // 2 - 1 : n // 2 + 2, n // 2 - 1 : n // 2 + 2] = False
    z[holes] = np.nan
    return z


def half(n):
    """Smooth fractal from its summit with every second tile missing, at random."""
    z = smooth(n).copy()
    missing = np.random.default_rng(SEED + 3).random((n // TILE + 1, n // TILE + 1)) < 0.5
    own = n // 2 // TILE
    missing[max(own - 1, 0) : own + 2, max(own - 1, 0) : own + 2] = False
    for row, col in np.argwhere(missing):
        z[row * TILE : (row + 1) * TILE, col * TILE : (col + 1) * TILE] = np.nan
    return z


def woods(z):
    """Surface over a ground: woods of 15 m in blocks of 8 by 8 posts, bare about the middle."""
    n = z.shape[0]
    trees = np.random.default_rng(SEED + 2).random((n // 8 + 1, n // 8 + 1)) < 0.3
    trees[n // 16 - 1 : n // 16 + 2, n // 16 - 1 : n // 16 + 2] = False
    cover = np.kron(trees, np.ones((8, 8), dtype=np.float32))[:n, :n]
    return z + np.float32(15.0) * cover


def middle(z):
    """Post in the middle."""
    return z.shape[0] // 2, z.shape[1] // 2


def between(z):
    """Beside the post in the middle, between four posts."""
    return z.shape[0] // 2 + 0.37, z.shape[1] // 2 + 0.61


def highest(z, low, high):
    """Highest post whose row and column are both between two shares of the side."""
    first, last = int(low * z.shape[0]), int(high * z.shape[0]) + 1
    near = z[first:last, first:last]
    row, col = np.unravel_index(np.argmax(near), near.shape)
    return int(row) + first, int(col) + first


def quarter(z):
    """Highest post about a quarter of the grid away from two of its borders."""
    return highest(z, 0.2, 0.3)


def corner(z):
    """Highest post near a corner of the grid."""
    return highest(z, 0.02, 0.06)


def roof(z):
    """On the roof of the block in the middle, on its edge."""
    n = z.shape[0] // 32 * 16
    return n + 8, n + 5


SCENES = (
    Scene("sea", "flat sea", 100.0, sea, middle),
    Scene("city", "city blocks, from a roof", 30.0, city, roof, 5.0),
    Scene("noise", "white noise, low eye", 2.0, noise, middle),
    Scene("mast", "white noise, from a mast", 50.0, noise, middle),
    Scene("bowl", "bowl, from its bottom", 5.0, bowl, middle),
    Scene("ridges", "saw-tooth ridges", 20.0, ridges, middle),
    Scene("smooth", "smooth hills, summit", 5.0, smooth, middle),
    Scene("voids", "smooth, 1 % voids", 5.0, voids, middle, kind=False),
    Scene("half", "smooth, half of it void", 5.0, half, middle, kind=False),
    Scene("woods", "smooth, under woods", 20.0, smooth, middle, cover=woods, kind=False),
    Scene("rough", "rough hills, summit", 5.0, rough, middle),
    Scene("between", "rough, between posts", 5.0, rough, between, kind=False),
    Scene("quarter", "rough, at a quarter", 5.0, rough, quarter, kind=False),
    Scene("corner", "rough, near a corner", 5.0, rough, corner, kind=False),
    Scene("sector", "rough, 60 degrees of it", 5.0, rough, middle, sector=(20.0, 80.0), kind=False),
)
