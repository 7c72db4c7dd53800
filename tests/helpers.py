"""Terrain and post maps for the tests, and the comparison of the engine with its plain twin."""

from dataclasses import dataclass, replace

import numpy as np

from tests.reference.walker import Walker
from viewshed.grid import PostMap
from viewshed.postmap import fit_post_map
from viewshed.visibility import compute

#: Principal radii at 45 degrees north on the WGS 84 ellipsoid, to the metre [m].
MERIDIAN, PRIME_VERTICAL = 6367382.0, 6388838.0
SPHERE = 6371000.0

#: How closely the engine has to give the twin's answer [m].
TOLERANCE = 1e-6
#: A float32 is off by half of its last bit, 2^-24 = 6e-8 of it.
ROUNDING = 1.2e-7


# --- terrain: (rows, cols) float32 elevations [m] -------------------------------------------------


def flat(n, height=0.0):
    return np.full((n, n), height, np.float32)


def fractal(n, seed=0, roughness=1.0, relief=300.0):
    """Hills with a power-law spectrum."""
    rng = np.random.default_rng(seed)
    square = np.fft.fftfreq(n)[:, None] ** 2 + np.fft.rfftfreq(n)[None, :] ** 2
    square[0, 0] = 1.0
    waves = rng.normal(size=square.shape) + 1j * rng.normal(size=square.shape)
    z = np.fft.irfft2(waves * square ** (-(1.0 + roughness) / 2.0), s=(n, n))
    return ((z - z.min()) * (relief / np.ptp(z))).astype(np.float32)


def noise(n, seed=0, height=5.0):
    """Independent heights, as rough as a grid can be."""
    return (np.random.default_rng(seed).normal(size=(n, n)) * height).astype(np.float32)


def steps(n, seed=0, levels=4):
    """Whole-number heights: many points are exactly in line with the eye."""
    return np.random.default_rng(seed).integers(0, levels, (n, n)).astype(np.float32)


def city(n, seed=0, block=4, height=40.0):
    """Flat roofs and upright walls."""
    size = -(-n // block)
    roofs = np.random.default_rng(seed).random((size, size)) * height
    return np.kron(roofs, np.ones((block, block)))[:n, :n].astype(np.float32)


def offsets(n):
    """Rows and columns counted from the middle, to be broadcast."""
    x = np.arange(n) - (n - 1) / 2.0
    return x[:, None], x[None, :]


def bowl(n, depth=0.5):
    r, c = offsets(n)
    return ((r * r + c * c) * depth).astype(np.float32)


def saddle(n, strength=1.0, turned=False):
    """Saddle whose cells all bulge: along the diagonals, or along the axes (turned)."""
    r, c = offsets(n)
    return ((r * r - c * c if turned else r * c) * strength).astype(np.float32)


def with_voids(z, share, seed=0, keep=None):
    """Copy with a share of the cells void, but for those within a cell and a half of `keep`."""
    z = z.copy()
    void = np.random.default_rng(seed).random(z.shape) < share
    if keep is not None:
        r, c = np.indices(z.shape)
        void &= (np.abs(r - keep[0]) > 1.5) | (np.abs(c - keep[1]) > 1.5)
    z[void] = np.nan
    return z


# --- post maps ------------------------------------------------------------------------------------


def affine_map(row0, col0, cell=30.0, jacobian=None, sphere=False):
    """North-up map of square cells, or of any cells by their jacobian [m a step]."""
    steps_ = [[cell, 0.0], [0.0, -cell]] if jacobian is None else jacobian
    coefficients = np.zeros((2, 2, 2))
    coefficients[0, 1, 0] = coefficients[1, 0, 1] = 64.0
    return PostMap(
        row0=row0,
        col0=col0,
        jacobian=np.array(steps_),
        scale=64.0,
        cp=coefficients[0],
        cq=coefficients[1],
        error_m=0.0,
        error_cells=0.0,
        lon=0.0,
        lat=45.0,
        radius_meridian=SPHERE if sphere else MERIDIAN,
        radius_prime_vertical=SPHERE if sphere else PRIME_VERTICAL,
    )


def bent_map(row0, col0, bend=3e-4, degree=3, seed=0, cell=30.0):
    """Map that bends more than a projection does: by `bend` cells at one cell's distance."""
    rng = np.random.default_rng(seed)
    plain = affine_map(row0, col0, cell)
    coefficients = np.zeros((2, degree + 1, degree + 1))
    for i in range(degree + 1):
        for j in range(degree + 1 - i):
            if i + j >= 2:
                coefficients[:, i, j] = rng.normal(size=2) * bend * plain.scale**2
    coefficients[0, 1, 0] = coefficients[1, 0, 1] = plain.scale
    return replace(plain, cp=coefficients[0], cq=coefficients[1])


def fitted_map(grid, row0, col0, size, range_m=60e3):
    """Map of a large grid about its middle, seen through a window of `size` cells.

    The observer is at (row0, col0) of the window, which lies in the grid's middle.
    """
    off_r, off_c = (grid.rows - size) // 2, (grid.cols - size) // 2
    found = fit_post_map(grid, row0 + off_r, col0 + off_c, range_m=range_m)
    return replace(found, row0=row0, col0=col0)


# --- turned and mirrored scenes -------------------------------------------------------------------


@dataclass(frozen=True)
class Scene:
    """An elevation array with the map of its posts."""

    z: np.ndarray
    post_map: PostMap

    def transposed(self):
        """Rows for columns; the ground stays where it is."""
        m = self.post_map
        swapped = replace(
            m,
            row0=m.col0,
            col0=m.row0,
            jacobian=m.jacobian[:, ::-1],
            cp=m.cq.T,
            cq=m.cp.T,
        )
        return Scene(np.ascontiguousarray(self.z.T), swapped)

    def upside_down(self):
        """Rows in the other order; the ground stays where it is."""
        m = self.post_map
        sign = (-1.0) ** np.arange(m.cp.shape[0])
        flipped = replace(
            m,
            row0=self.z.shape[0] - 1 - m.row0,
            jacobian=m.jacobian * [1.0, -1.0],
            cp=m.cp * sign,
            cq=-m.cq * sign,
        )
        return Scene(np.ascontiguousarray(self.z[::-1]), flipped)

    def window(self, rows, cols):
        """Cut out slices of rows and columns."""
        m = self.post_map
        moved = replace(m, row0=m.row0 - rows.start, col0=m.col0 - cols.start)
        return Scene(np.ascontiguousarray(self.z[rows, cols]), moved)


# --- comparison -----------------------------------------------------------------------------------


def differing(got, twin, state, tolerance=TOLERANCE):
    """Cells whose state differs although no clearance is within the tolerance of zero.

    Where the sight line passes a post by less than a float can tell, what is unknown on one side
    of it may count or not.
    """
    tied = np.abs(twin.margin) <= tolerance
    unsure = twin.grazes & ((got == 2) | (state == 2))
    return (got != state) & ~tied & ~unsure


def assert_like_twin(
    z,
    post_map,
    *,
    eye_height=1.7,
    target_height=0.0,
    k=0.13,
    tolerance=TOLERANCE,
    touching=False,
    **scene,
):
    """Compare every layer with the plain walker's; return the walker and the answer.

    Where `touching`, cells whose target may be exactly the top of the ground in its way are left
    out: clearance jumps there, since that top is an obstacle a hair before the target, not at it.
    """
    heights = {"eye_height": eye_height, "target_height": target_height}
    twin = Walker(z, post_map, k=k, **heights, **scene)
    state, clearance = twin.answer()
    full = compute(z, post_map, refraction_k=k, clearance=True, **heights, **scene)
    lean = compute(z, post_map, refraction_k=k, **heights, **scene)

    np.testing.assert_array_equal(lean.visible, full.visible, "with and without clearance")
    left_out = np.zeros(z.shape, bool)
    if touching:
        left_out = np.fmin(np.abs(full.clearance), np.abs(twin.margin)) <= tolerance
    wrong = np.argwhere(differing(full.visible, twin, state, tolerance) & ~left_out)
    assert not len(wrong), report(wrong, full, state, twin.margin)

    both = (full.visible <= 1) & (state <= 1) & ~left_out
    expected = clearance[both]
    off = np.abs(full.clearance[both].astype(np.float64) - expected)
    # beyond 1000 km of clearance the eye stands a billionth of a cell before a grid line
    part = np.where(np.abs(expected) < 1e6, ROUNDING, 1e-5)
    excess = off - tolerance - part * np.abs(expected)
    assert np.all(excess <= 0.0), f"clearance off by {off[excess > 0.0]} m"
    assert np.array_equal(np.isnan(full.clearance), full.visible >= 2)
    return twin, full


def report(cells, got, state, margin):
    """Say which cells differ, and by how much."""
    lines = [f"{len(cells)} cells differ"]
    for r, c in cells[:8]:
        engine = f"engine {got.visible[r, c]} ({got.clearance[r, c]:.9g} m)"
        lines.append(f"({r}, {c}): {engine}, twin {state[r, c]} ({margin[r, c]:.9g} m)")
    return "\n".join(lines)
