"""Sight lines walked one at a time, compiled: what the engine's speed is measured against.

The question is `visible` alone, so the line to walk is the straight one from the eye to the
target, and a walk ends at the first place where the surface stands above it. Meaning, for a grid
whose post map is affine and without voids: row and column lines crossed strictly between observer
and target, edges straight between posts, and the bulge of the bilinear surface inside each cell
passed, the observer's own cell and the target's last cell included. Flat heights are worked out on
the fly in double precision.

Each walk goes strip by strip between two lines of posts: the crossing of the line, that of the row
in between if there is one, and the bulges of the one or two cells passed. Walking outward begins
at the observer, walking inward at the target. `bounded` walks are no longer plain ones: they first
ask of each strip, with one comparison, whether the highest of the four or six posts around the
sight line reaches the least height that could block it, a quadratic in the distance.

The frame is an octant around the observer: u along the main axis, v along the other, v = t u with
t in [0, 1]; line j of posts is at u = x0 + j, row i at v = y0 + i, and the observer is in the cell
between lines 0 and 1 and rows 0 and 1.
"""
# ruff: noqa: PLR0912, PLR0913, PLR0915, PLR0917

import math

import numba
import numpy as np

OPTIONS = {"nogil": True, "error_model": "numpy", "cache": True}
NODATA, HIDDEN, VISIBLE = 255, 0, 1

# Constants of the air: eye elevation, 1 / R', second differences of the drop along x, xy and y.
Z_EYE, INV_R, D_XX, D_XY, D_YY = 0, 1, 2, 3, 4
# A sight line: direction, slope of f, start of lines and rows, drop by u u, u v, v v, and the
# bound level + (rise + bend u) u on heights.
T, S, X0, Y0, D20, D11, D02, ZE, IR, LEVEL, RISE, BEND = range(12)


@numba.njit(**OPTIONS)
def excess(height, u, v, ray):
    """Height of a post above the sight line [m]: its flat height less the line's."""
    drop = ray[D20] * u * u + (ray[D11] * u + ray[D02] * v) * v
    return (height - ray[ZE]) * (1.0 - height * ray[IR]) - drop - ray[S] * u


@numba.njit(**OPTIONS)
def bulges(d1, d2, kappa):
    """Whether a section that rises kappa x (1 - x) above its chord gets above the sight line."""
    rise = d2 - d1 + kappa
    return 0.0 < rise < 2.0 * kappa and rise * rise > -4.0 * kappa * d1


@numba.njit(**OPTIONS)
def own_cell_blocks(z, start, main, minor, ray, last):
    """Whether the surface stands above the sight line before it leaves the observer's cell."""
    x0 = ray[X0]
    y0 = ray[Y0]
    d00 = excess(np.float64(z[start]), x0, y0, ray)
    d01 = excess(np.float64(z[start + minor]), x0, y0 + 1.0, ray)
    d10 = excess(np.float64(z[start + main]), x0 + 1.0, y0, ray)
    d11 = excess(np.float64(z[start + main + minor]), x0 + 1.0, y0 + 1.0, ray)
    near = d00 - y0 * (d01 - d00)
    far = d10 - y0 * (d11 - d10)
    at_eye = near - x0 * (far - near)
    x = 1.0
    y = ray[T] * (x0 + 1.0) - y0
    if y > 1.0:  # it leaves by the side
        y = 1.0
        x = (y0 + 1.0) / ray[T] - x0
        out = d01 + x * (d11 - d01)
        inside = True
    else:
        out = d10 + y * (d11 - d10)
        inside = last > 1
    if inside and out > 0.0:
        return True
    kappa = -(d11 - d10 - d01 + d00) * (x + x0) * (y + y0)
    if kappa > 0.0 and bulges(at_eye, out, kappa):
        return True
    if inside and x < 1.0:  # the rest of the first strip, on the far side
        here = start + 2 * minor
        d02 = excess(np.float64(z[here]), x0, y0 + 2.0, ray)
        d12 = excess(np.float64(z[here + main]), x0 + 1.0, y0 + 2.0, ray)
        y = ray[T] * (x0 + 1.0) - y0 - 1.0
        end = d11 + y * (d12 - d11)
        if last > 1 and end > 0.0:
            return True
        kappa = -(d12 - d11 - d02 + d01) * (1.0 - x) * y
        return kappa > 0.0 and bulges(out, end, kappa)
    return False


@numba.njit(**OPTIONS)
def strips_block(z, start, main, minor, ray, last, row, outward, bounded):
    """Whether the surface stands above the sight line between line 1 and the target.

    Each strip is worked from the crossing of its near line up to that of its far line, which is
    the next strip's. A bulge rises at most kappa / 4 above its chord. `bounded`: ask first, with
    one comparison, whether the highest post around the sight line reaches the least height that
    could stand above it.
    """
    t, s, x0, y0, d20, d11, d02, ze, ir, level, rise, bend = ray
    inv_t = 1.0 / t
    j = 1 if outward else last - 1
    step = 1 if outward else -1
    for _ in range(1, last):
        u = x0 + j
        y = t * u - y0
        i = min(int(y), row - 1)
        w = y - i
        w_end = w + t
        side = i < row - 1 and w_end > 1.0
        here = start + j * main + i * minor
        if bounded:
            third = here + (2 * minor if side else minor)
            near = max(z[np.uint64(here)], z[np.uint64(here + minor)])
            far = max(z[np.uint64(here + main)], z[np.uint64(here + main + minor)])
            rest = max(z[np.uint64(third)], z[np.uint64(third + main)])
            if max(near, far, rest) < level + (rise + bend * u) * u:
                j += step
                continue
        v = y0 + i
        v1 = v + 1.0
        u1 = u + 1.0
        base = d20 * u * u + s * u
        lin = d11 * u
        base1 = d20 * u1 * u1 + s * u1
        lin1 = d11 * u1
        a = np.float64(z[np.uint64(here)])
        b = np.float64(z[np.uint64(here + minor)])
        c = np.float64(z[np.uint64(here + main)])
        d = np.float64(z[np.uint64(here + main + minor)])
        da = (a - ze) * (1.0 - a * ir) - (base + (lin + d02 * v) * v)
        db = (b - ze) * (1.0 - b * ir) - (base + (lin + d02 * v1) * v1)
        begin = da + w * (db - da)
        if begin > 0.0:
            return True
        dc = (c - ze) * (1.0 - c * ir) - (base1 + (lin1 + d02 * v) * v)
        dd = (d - ze) * (1.0 - d * ir) - (base1 + (lin1 + d02 * v1) * v1)
        twist = dd - dc - db + da
        if not side:
            if twist < 0.0:
                end = dc + w_end * (dd - dc)
                kappa = -twist * t
                if max(begin, end) > -0.25 * kappa and bulges(begin, end, kappa):
                    return True
        else:
            x = (1.0 - w) * inv_t
            middle = db + x * (dd - db)
            if middle > 0.0:
                return True
            if twist < 0.0:
                kappa = -twist * x * (1.0 - w)
                if max(begin, middle) > -0.25 * kappa and bulges(begin, middle, kappa):
                    return True
            # the second cell of the strip
            v2 = v1 + 1.0
            e = np.float64(z[np.uint64(here + 2 * minor)])
            f = np.float64(z[np.uint64(here + main + 2 * minor)])
            de = (e - ze) * (1.0 - e * ir) - (base + (lin + d02 * v2) * v2)
            df = (f - ze) * (1.0 - f * ir) - (base1 + (lin1 + d02 * v2) * v2)
            twist = df - dd - de + db
            if twist < 0.0:
                w_end = min(w_end - 1.0, 1.0)
                end = dd + w_end * (df - dd)
                kappa = -twist * (1.0 - x) * w_end
                if max(middle, end) > -0.25 * kappa and bulges(middle, end, kappa):
                    return True
        j += step
    return False


@numba.njit(**OPTIONS)
def axis_blocks(z, start, main, ray, last):
    """Whether a post stands above a sight line that runs along a row or column of posts."""
    for j in range(1, last):
        if excess(np.float64(z[start + j * main]), ray[X0] + j, 0.0, ray) > 0.0:
            return True
    return False


@numba.njit(**OPTIONS)
def target_visible(z, cols, row0, col0, r, c, height, air, outward, bounded):
    """Whether a target `height` above post (r, c) is seen; z is the elevation, flattened."""
    dx = c - col0
    dy = r - row0
    by_row = abs(dy) > abs(dx)
    sx = 1 if dx > 0.0 else -1
    sy = 1 if dy > 0.0 else -1
    base_r = int(math.floor(row0) if sy > 0 else math.ceil(row0))
    base_c = int(math.floor(col0) if sx > 0 else math.ceil(col0))
    x0 = sx * (base_c - col0)
    y0 = sy * (base_r - row0)
    last = sx * (c - base_c)
    row = sy * (r - base_r)
    main = sx
    minor = sy * cols
    ut = abs(dx)
    vt = abs(dy)
    d20 = air[D_XX]
    d02 = air[D_YY]
    if by_row:
        x0, y0 = y0, x0
        last, row = row, last
        main, minor = minor, main
        ut, vt = vt, ut
        d20, d02 = d02, d20
    d11 = sx * sy * air[D_XY]
    start = base_r * cols + base_c
    t = vt / ut
    top = z[r * cols + c] + height
    inv_r = air[INV_R]
    ze = air[Z_EYE]
    drop = d20 * ut * ut + (d11 * ut + d02 * vt) * vt
    s = ((top - ze) * (1.0 - top * inv_r) - drop) / ut
    # f <= (z - ze) (1 - ze / R') - drop, and the drop of a post at most two rows off the line is
    # at least that of the line less `off` for each step of u
    along = d20 + (d11 + d02 * t) * t
    off = 2.0 * abs(d11 + 2.0 * d02 * t)
    turn = 1.0 / (1.0 - ze * inv_r)
    level = ze + turn * (min(s, 0.0) - off) - 1e-6
    rise = turn * (s - off)
    bend = turn * along
    ray = (t, s, x0, y0, d20, d11, d02, ze, inv_r, level, rise, bend)
    if vt == 0.0:
        return not axis_blocks(z, start, main, ray, last)
    if outward:
        return not (
            own_cell_blocks(z, start, main, minor, ray, last)
            or strips_block(z, start, main, minor, ray, last, row, True, bounded)
        )
    return not (
        strips_block(z, start, main, minor, ray, last, row, False, bounded)
        or own_cell_blocks(z, start, main, minor, ray, last)
    )


@numba.njit(parallel=True, **OPTIONS)
def walk_rows(z, rows, row0, col0, height, range2, metres, air, outward, bounded, state):
    """Answer the targets of some rows: parallel over the rows.

    Parameters
    ----------
    z : (rows, cols) float32
        Elevation without voids [m].
    rows : (n,) int64
        Rows to answer.
    row0, col0 : float
        Post coordinates of the observer.
    height : float
        Target height [m].
    range2 : float
        Square of the range [m2].
    metres : (3,) float64
        Squared distance in metres by x x, x y and y y, x and y in index steps.
    air : tuple of 5 floats
        Eye elevation [m], 1 / R' [1/m] and the drop by x x, x y and y y [m].
    outward : bool
        Whether to begin at the observer.
    bounded : bool
        Whether to pass over strips by their highest post.
    state : (n, cols) uint8
        Written: 1 visible, 0 hidden, 255 outside the range.
    """
    cols = z.shape[1]
    flat = z.reshape(-1)
    for n in numba.prange(rows.size):
        r = rows[n]
        dy = r - row0
        for c in range(cols):
            dx = c - col0
            answer = NODATA
            if metres[0] * dx * dx + metres[1] * dx * dy + metres[2] * dy * dy <= range2:
                answer = HIDDEN
                if (dx == 0.0 and dy == 0.0) or target_visible(
                    flat, cols, row0, col0, r, c, height, air, outward, bounded
                ):
                    answer = VISIBLE
            state[n, c] = answer


class Walkers:
    """Walkers for one observer on one elevation array.

    Parameters
    ----------
    z : (rows, cols) float32
        Elevation without voids [m].
    post_map : PostMap
        Affine post map, its origin the observer.
    eye_elevation : float
        Elevation of the eye [m].
    range_m, k : float
        Range [m] and refraction coefficient.
    """

    def __init__(self, z, post_map, *, eye_elevation, range_m, k):
        self.z, self.row0, self.col0 = z, float(post_map.row0), float(post_map.col0)
        self.range2 = range_m**2 * (1.0 + 1e-12)
        (ex, ey), (nx, ny) = post_map.jacobian
        meridian, prime = post_map.radius_meridian, post_map.radius_prime_vertical
        self.metres = np.array([ex * ex + nx * nx, 2.0 * (ex * ey + nx * ny), ey * ey + ny * ny])
        half = 0.5 * (1.0 - k)
        self.air = (
            float(eye_elevation),
            (1.0 - k) / math.sqrt(meridian * prime),
            float(half * (nx * nx / meridian + ex * ex / prime)),
            float(half * 2.0 * (nx * ny / meridian + ex * ey / prime)),
            float(half * (ny * ny / meridian + ey * ey / prime)),
        )

    def answer(self, rows, *, outward, bounded=False):
        """Return the state of some rows; those side by side go to different threads."""
        order = np.concatenate([rows[0::2], rows[1::2]]).astype(np.int64)
        state = np.empty((order.size, self.z.shape[1]), dtype=np.uint8)
        walk_rows(
            self.z, order, self.row0, self.col0, 0.0, self.range2, self.metres, self.air, outward,
            bounded, state,
        )  # fmt: skip
        back = np.empty_like(state)
        half = (rows.size + 1) // 2
        back[0::2], back[1::2] = state[:half], state[half:]
        return back
