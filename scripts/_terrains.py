"""Terrains for measuring: every kind that has been known to be hard for some way of working.

All are made from fixed seeds by numpy alone, so that two runs with the same numpy measure the same
ground. The observer's place is part of a scene, since most of the cost depends on it.
"""

import functools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

SEED = 4_711
#: Sides of fractal ground [cells], of small factors and so quick to transform. Relief is stated
#: for the last; smaller ground is as steep.
SIDES = (2_048, 3_072, 6_144)


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
    """

    name: str
    words: str
    eye: float
    make: Callable
    place: Callable
    cell: float = 30.0
    cover: Callable | None = None


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
        From the lowest to the highest post of the largest ground [m].

    Returns
    -------
    numpy.ndarray
        Elevation [m], shape (n, n), float32; kept for the next scene, so not to be written to.
    """
    side = next(s for s in SIDES if s >= n)
    rng = np.random.default_rng(SEED)
    power = np.fft.fftfreq(side)[:, None] ** 2 + np.fft.rfftfreq(side)[None, :] ** 2
    power[0, 0] = np.inf
    np.power(power, -0.5 * (1.0 + roughness), out=power)
    z = np.fft.irfft2(np.fft.rfft2(rng.standard_normal((side, side))) * power, s=(side, side))
    z -= z.min()
    z *= relief * (side / SIDES[-1]) ** roughness / z.max()
    top = np.unravel_index(np.argmax(z), z.shape)
    z = np.roll(z, (n // 2 - top[0], n // 2 - top[1]), (0, 1))  # it repeats without a seam
    return np.ascontiguousarray(z[:n, :n], dtype=np.float32)


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
    x = (np.arange(n) - n // 2) / (n // 2)
    return (2000.0 * (x[:, None] ** 2 + x[None, :] ** 2)).astype(np.float32)


def ridges(n):
    """Saw-tooth ridges of 90 m, 60 cells apart, slanting across the grid."""
    x = np.arange(n) - n // 2
    return (np.abs((x[:, None] + 0.3 * x[None, :]) % 60.0 - 30.0) * 3.0).astype(np.float32)


def voids(n):
    """Smooth fractal from its summit with 1 % of its posts unknown."""
    z = smooth(n).copy()
    holes = np.random.default_rng(SEED + 1).random((n, n), dtype=np.float32) < 0.01
    holes[n // 2 - 1 : n // 2 + 2, n // 2 - 1 : n // 2 + 2] = False
    z[holes] = np.nan
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


def quarter(z):
    """Highest post about a quarter of the grid away from two of its borders."""
    n = z.shape[0] // 4
    near = z[n - n // 8 : n + n // 8, n - n // 8 : n + n // 8]
    row, col = np.unravel_index(np.argmax(near), near.shape)
    return int(row) + n - n // 8, int(col) + n - n // 8


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
    Scene("smooth", "smooth fractal, summit", 5.0, smooth, middle),
    Scene("voids", "smooth fractal, 1 % voids", 5.0, voids, middle),
    Scene("rough", "rough fractal, summit", 5.0, rough, middle),
    Scene("between", "rough, between posts", 5.0, rough, between),
    Scene("quarter", "rough, off centre", 5.0, rough, quarter),
    Scene("woods", "woods over smooth ground", 20.0, smooth, middle, cover=woods),
)
