"""From one scene to wedges of directions: everything the kernels need to know, octant by octant.

A wedge is the unit of work: some directions of one octant, swept on its own. The octant's frame
(see `viewshed.kernels.sweep`) is the grid's own, mirrored so that both axes grow outward.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.kernels import sweep as k

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from viewshed.grid import PostMap
    from viewshed.places import Sector

#: Most and fewest posts that a wedge is wide at the end of the range, about: few enough for the
#: nearest cache, many enough to outweigh what each line costs whatever its length.
_MOST_POSTS, _FEWEST_POSTS = 256, 48
#: Pieces that a run is cut into where that leaves them wide enough, so that many threads share it.
_PIECES = 192
#: Pieces an octant is cut into at least.
_LEAST_WEDGES = 8
#: Wedges are swept this much beyond the directions they answer, so that ties stay inside [t].
_TIE = 1e-12
#: Skew up to which an octant's sight lines meet its lines of posts in their order; more happens
#: only within some kilometres of a pole on a geographic grid.
MOST_SKEW = 0.65


@dataclass(frozen=True)
class Air:
    """Constants of the flat heights: a sphere-like Earth with its curve reduced by the air.

    Attributes
    ----------
    meridian, prime_vertical : float
        Principal radii of the ellipsoid at the observer [m].
    k : float
        Refraction coefficient [1].
    """

    meridian: float
    prime_vertical: float
    k: float

    @property
    def inverse_radius(self) -> float:
        """1 / R' with R' = sqrt(M P) / (1 - k) [1/m]."""
        return (1.0 - self.k) / math.sqrt(self.meridian * self.prime_vertical)

    def drop(self, east: Any, north: Any) -> Any:
        """Fall of a level surface below the observer's tangent plane [m], refraction included."""
        half = 0.5 * (1.0 - self.k)
        return half * (north * north / self.meridian + east * east / self.prime_vertical)


def corner_weights(row: float, col: float) -> Iterator[tuple[int, int, float]]:
    """Yield posts around a point and their bilinear weights, those of no weight left out."""
    r0, c0 = math.floor(row), math.floor(col)
    a, b = row - r0, col - c0
    for r, wr in ((r0, 1.0 - a), (r0 + 1, a)):
        for c, wc in ((c0, 1.0 - b), (c0 + 1, b)):
            if wr > 0.0 and wc > 0.0:
                yield r, c, wr * wc


@dataclass(frozen=True)
class Octant:
    """Parameters of one octant in its own frame, ready for the kernels."""

    ints: NDArray[np.int64]
    geo: NDArray[np.float64]
    coef_u: NDArray[np.float64]
    coef_v: NDArray[np.float64]
    own: NDArray[np.float64]
    to_east_north: NDArray[np.float64]
    straight: bool


@dataclass(frozen=True)
class Scene:
    """Everything a run has in common.

    Attributes
    ----------
    surface : (rows, cols) float32
        What blocks sight [m].
    ground : (rows, cols) float32 or None
        What targets stand on [m]; None where that is the surface.
    foot : float
        Surface under the observer [m].
    eye_over : float
        Height of the eye over it [m].
    spare : float
        Clearance where nothing at all stands between: that of eye and target over the ground [m].
    """

    surface: NDArray[np.float32]
    ground: NDArray[np.float32] | None
    post_map: PostMap
    air: Air
    foot: float
    eye_over: float
    target_height: float
    range_m: float
    sector: Sector | None
    shift: tuple[float, float]
    spare: float

    @property
    def affine(self) -> bool:
        """Whether p and q are the index offsets themselves."""
        return self.post_map.degree <= 1


def shift_of(post_map: PostMap) -> tuple[float, float]:
    """Find what the bilinear map of the observer's own cell misses the observer by, in p and q.

    Grid lines are straight between posts, so on a bent grid the observer is moved with the cell
    that holds it: then it lies on the side of every grid line that its row and column say.
    """
    p = q = 0.0
    for r, c, weight in corner_weights(post_map.row0, post_map.col0):
        dp, dq = post_map.pq(np.float64(r), np.float64(c))
        p += weight * float(dp)
        q += weight * float(dq)
    return p, q


def _own_cell(
    scene: Scene, by_row: bool, signs: tuple[int, int], base: tuple[int, int]
) -> tuple[NDArray[np.float64], bool]:
    """Corners of the observer's own cell in an octant, and the differences at the observer."""
    pm = scene.post_map
    rows, cols = scene.surface.shape
    start = (pm.row0, pm.col0) if by_row else (pm.col0, pm.row0)
    x0, y0 = signs[0] * (base[0] - start[0]), signs[1] * (base[1] - start[1])
    f = np.full((2, 2), np.nan)
    u = np.empty((2, 2))
    v = np.empty((2, 2))
    mains = base[0] + signs[0] * np.array([[0], [1]])
    minors = base[1] + signs[1] * np.array([[0, 1]])
    all_p, all_q = pm.pq(*((mains, minors) if by_row else (minors, mains)))
    for j in (0, 1):
        for i in (0, 1):
            main, minor = base[0] + signs[0] * j, base[1] + signs[1] * i
            r, c = (main, minor) if by_row else (minor, main)
            p, q = float(all_p[j, i]) - scene.shift[0], float(all_q[j, i]) - scene.shift[1]
            u[j, i], v[j, i] = (signs[0] * (q if by_row else p), signs[1] * (p if by_row else q))
            if scene.affine:
                u[j, i], v[j, i] = x0 + j, y0 + i
            if 0 <= r < rows and 0 <= c < cols:
                east, north = pm.jacobian @ (p, q)
                rise = _rise_from_observer(scene.surface, pm.row0, pm.col0, r, c)
                curve = 1.0 - float(scene.surface[r, c]) * scene.air.inverse_radius
                f[j, i] = (rise - scene.eye_over) * curve - scene.air.drop(east, north)
    own = np.zeros(k.N_OWN)
    own[k.O_U : k.O_U + 4], own[k.O_V : k.O_V + 4] = u.ravel(), v.ravel()
    own[k.O_F : k.O_F + 4] = f.ravel()
    own[k.O_F0 : k.O_F0 + 4] = _bilinear(f, -x0, -y0)
    own[k.O_UA : k.O_UA + 3] = _bilinear(u, -x0, -y0)[1:]
    own[k.O_VA : k.O_VA + 3] = _bilinear(v, -x0, -y0)[1:]
    if scene.affine:
        own[k.O_UA : k.O_UA + 3] = 1.0, 0.0, 0.0
        own[k.O_VA : k.O_VA + 3] = 0.0, 1.0, 0.0
    own[k.O_X1], own[k.O_Y0], own[k.O_Y1] = x0 + 1.0, y0, y0 + 1.0
    return own, bool(np.isfinite(f).all())


def _rise_from_observer(
    elevation: NDArray[np.float32], row: float, col: float, r: int, c: int
) -> float:
    """Height of a corner post over the surface under the observer [m], without cancelling.

    Written as a sum of differences between posts, each with its weight, so that it stays sharp
    when the observer is a billionth of a cell away from the post.
    """
    own = float(elevation[r, c])
    return sum(w * (own - float(elevation[a, b])) for a, b, w in corner_weights(row, col))


def _bilinear(
    corner: NDArray[np.float64], a: float, b: float
) -> tuple[float, float, float, float]:
    """Value and differences (along, across, mixed) of a bilinear patch at (a, b) in [0, 1)."""
    if b == 0.0:  # unknown corners of no weight must not spoil the edge the observer stands on
        along = corner[1, 0] - corner[0, 0]
    else:
        along = (corner[1, 0] - corner[0, 0]) * (1.0 - b) + (corner[1, 1] - corner[0, 1]) * b
    if a == 0.0:
        across = corner[0, 1] - corner[0, 0]
    else:
        across = (corner[0, 1] - corner[0, 0]) * (1.0 - a) + (corner[1, 1] - corner[1, 0]) * a
    twist = corner[1, 1] - corner[1, 0] - corner[0, 1] + corner[0, 0]
    value = 0.0
    for j, wj in ((0, 1.0 - a), (1, a)):
        for i, wi in ((0, 1.0 - b), (1, b)):
            if wj * wi > 0.0:
                value += wj * wi * corner[j, i]
    return float(value), float(along), float(across), float(twist)


def _octant(
    scene: Scene, by_row: bool, signs: tuple[int, int], clearance: bool, bend: float
) -> Octant:
    """Parameters of the octant whose main axis is rows or columns, with the signs of both axes."""
    pm = scene.post_map
    rows, cols = scene.surface.shape
    start = (pm.row0, pm.col0) if by_row else (pm.col0, pm.row0)
    base = tuple(
        math.floor(s) if sign > 0 else math.ceil(s) for s, sign in zip(start, signs, strict=True)
    )
    n_main = rows if by_row else cols
    last_line = n_main - 1 - base[0] if signs[0] > 0 else base[0]

    swap = np.array([[0.0, signs[1]], [signs[0], 0.0]]) if by_row else np.diag(signs)
    frame = pm.jacobian @ swap
    e, n = frame[0], frame[1]
    half = 0.5 * (1.0 - scene.air.k)
    radii = (half / scene.air.meridian, half / scene.air.prime_vertical)

    geo = np.zeros(k.N_FLOATS)
    geo[k.X0], geo[k.Y0] = (s * (b - o) for s, b, o in zip(signs, base, start, strict=True))
    geo[k.SCALE] = pm.scale
    geo[k.INV_R] = scene.air.inverse_radius
    geo[k.Z_EYE] = scene.foot + scene.eye_over
    geo[k.TARGET] = scene.target_height
    geo[k.SPARE] = scene.spare
    geo[k.RANGE2] = scene.range_m**2 * (1.0 + 1e-12)
    geo[k.D20] = radii[0] * n[0] ** 2 + radii[1] * e[0] ** 2
    geo[k.D11] = 2.0 * (radii[0] * n[0] * n[1] + radii[1] * e[0] * e[1])
    geo[k.D02] = radii[0] * n[1] ** 2 + radii[1] * e[1] ** 2
    geo[k.G20] = e[0] ** 2 + n[0] ** 2
    geo[k.G11] = 2.0 * (e[0] * e[1] + n[0] * n[1])
    geo[k.G02] = e[1] ** 2 + n[1] ** 2
    geo[k.EPS] = 1e-10 / max(rows, cols, 100)

    own, own_known = _own_cell(scene, by_row, signs, (base[0], base[1]))
    ints = np.zeros(k.N_INTS, dtype=np.int64)
    ints[k.MAIN_IS_ROW], ints[k.SIGN_MAIN], ints[k.SIGN_MINOR] = by_row, *signs
    ints[k.BASE_MAIN], ints[k.BASE_MINOR] = base
    ints[k.LAST_LINE] = last_line
    ints[k.DEGREE] = pm.cp.shape[0] - 1
    ints[k.OWN_KNOWN] = own_known
    ints[k.WANT_CLEARANCE] = clearance
    ints[k.HAS_GROUND] = scene.ground is not None
    ints[k.OWN_DIAGONAL] = not by_row
    ints[k.MARGIN] = 3 + math.ceil(4.0 * bend)
    _bearing_fields(scene.sector, frame, ints, geo)
    coef_u, coef_v = _octant_polynomials(scene, by_row, signs)
    # does the observer's own row or column run straight, with the observer on it?
    straight = geo[k.Y0] == 0.0 and not coef_v[:, 0].any()
    ints[k.OWN_AXIS] = not straight and signs[1] > 0
    return Octant(ints, geo, coef_u, coef_v, own, frame, bool(straight))


def _octant_polynomials(
    scene: Scene, by_row: bool, signs: tuple[int, int]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Polynomials of u and v in the offsets along and across the main axis."""
    pm = scene.post_map
    cp, cq = pm.cp.copy(), pm.cq.copy()
    cp[0, 0] -= scene.shift[0]
    cq[0, 0] -= scene.shift[1]
    if by_row:  # x is across, y along
        cp, cq = cp.T, cq.T
    power = np.arange(cp.shape[0])
    sign = np.multiply.outer(float(signs[0]) ** power, float(signs[1]) ** power)
    first, second = (cq, cp) if by_row else (cp, cq)
    return np.ascontiguousarray(signs[0] * first * sign), np.ascontiguousarray(
        signs[1] * second * sign
    )


def _bend(pm: PostMap, rows: int, cols: int) -> float:
    """Farthest that the map takes a post of the window away from an affine grid [cells]."""
    if pm.cp.shape[0] <= 2:
        return 0.0
    r, c = np.meshgrid(np.linspace(0, rows - 1, 9), np.linspace(0, cols - 1, 9), indexing="ij")
    p, q = pm.pq(r, c)
    return float(max(np.abs(p - (c - pm.col0)).max(), np.abs(q - (r - pm.row0)).max()))


def skew_of(pm: PostMap, rows: int, cols: int) -> float:
    """Greatest change of the direction t that bending makes in the window."""
    if pm.cp.shape[0] <= 2:
        return 0.0
    r, c = np.meshgrid(np.linspace(0, rows - 1, 33), np.linspace(0, cols - 1, 33), indexing="ij")
    x, y = c - pm.col0, r - pm.row0
    far = np.maximum(np.abs(x), np.abs(y))
    p, q = pm.pq(r, c)
    off = np.maximum(np.abs(p - x), np.abs(q - y))[far > 1.0] / far[far > 1.0]
    return float(4.0 * off.max() + 1e-6) if off.size else 1e-6


def _bearing_fields(
    sector: Sector | None,
    frame: NDArray[np.float64],
    ints: NDArray[np.int64],
    geo: NDArray[np.float64],
) -> None:
    """Edges of the sector as directions in the octant's frame, turned so that inside is >= 0."""
    if sector is None or sector.width_deg >= 360.0:
        return
    inverse = np.linalg.inv(frame)
    turn = -math.copysign(1.0, np.linalg.det(frame))
    edges = []
    for bearing in (sector.from_deg, sector.to_deg):
        b = math.radians(bearing)
        edge = turn * (inverse @ (math.sin(b), math.cos(b)))
        edges.append(edge / np.abs(edge).max())
    ints[k.HAS_BEARINGS] = 1
    ints[k.WIDE_BEARINGS] = sector.width_deg > 180.0
    geo[k.B_FROM_U], geo[k.B_FROM_V] = edges[0]
    geo[k.B_TO_U], geo[k.B_TO_V] = edges[1]


def _touches(sector: Sector | None, octant: Octant, low: float, high: float) -> bool:
    """Whether directions low..high of an octant can lie in the sector (a little to spare)."""
    if sector is None or sector.width_deg >= 360.0:
        return True
    bearings = []
    for t in (low, high):
        east, north = octant.to_east_north @ (1.0, t)
        bearings.append(math.degrees(math.atan2(east, north)))
    half = abs((bearings[1] - bearings[0] + 180.0) % 360.0 - 180.0) / 2.0 + 1e-6
    middle = bearings[0] + ((bearings[1] - bearings[0] + 180.0) % 360.0 - 180.0) / 2.0
    sector_middle = sector.from_deg + sector.width_deg / 2.0
    apart = abs((middle - sector_middle + 180.0) % 360.0 - 180.0)
    return apart <= half + sector.width_deg / 2.0


Wedge = tuple[Octant, "NDArray[np.float64]"]


def wedge_counts(scene: Scene) -> dict[tuple[bool, int, int], int]:
    """Wedges that each octant is cut into: by row, sign along and sign across.

    Octants that reach farther, as those of an observer near a corner do, get more of them.
    """
    pm = scene.post_map
    rows, cols = scene.surface.shape
    step = min(np.hypot(*pm.jacobian[:, 0]), np.hypot(*pm.jacobian[:, 1]))
    reach = scene.range_m / step
    lines, weights = {}, {}
    for by_row, main, minor in itertools.product((False, True), (1, -1), (1, -1)):
        down = pm.row0 if (main if by_row else minor) < 0 else rows - 1 - pm.row0
        right = pm.col0 if (minor if by_row else main) < 0 else cols - 1 - pm.col0
        along, across = (down, right) if by_row else (right, down)
        length = min(along, reach)
        width = min(across, length)
        lines[by_row, main, minor] = length
        weights[by_row, main, minor] = length * width - 0.5 * width * width
    total = max(sum(weights.values()), 1.0)
    if scene.sector is not None:
        total *= min(scene.sector.width_deg, 360.0) / 360.0
    return {
        key: max(
            _LEAST_WEDGES,
            math.ceil(length / _MOST_POSTS),
            min(math.ceil(_PIECES * weights[key] / total), math.ceil(length / _FEWEST_POSTS)),
        )
        for key, length in lines.items()
    }


def wedges(scene: Scene, clearance: bool) -> tuple[list[Wedge], list[Octant]]:
    """Wedges to sweep and axes to walk. They depend on the scene alone, not on the threads."""
    rows, cols = scene.surface.shape
    pm = scene.post_map
    counts = wedge_counts(scene)
    spare, bend = skew_of(pm, rows, cols), _bend(pm, rows, cols)
    pieces: list[Wedge] = []
    axes: list[Octant] = []
    for by_row in (False, True):
        for main in (1, -1):
            for minor in (1, -1):
                octant = _octant(scene, by_row, (main, minor), clearance, bend)
                if octant.ints[k.LAST_LINE] < 1:
                    continue
                if octant.straight and minor > 0:
                    axes.append(octant)
                count = counts[by_row, main, minor]
                edges = np.linspace(0.0, 1.0, count + 1)
                for n in range(count):
                    low, high = float(edges[n]), float(edges[n + 1])
                    swept = (max(low - _TIE, 0.0), high + _TIE)
                    answered = (low, high)
                    if n == 0:
                        swept, answered = (-spare, swept[1]), (-np.inf, high)
                    if n == count - 1:
                        swept, answered = (swept[0], 1.0 + spare + _TIE), (answered[0], np.inf)
                    if _touches(scene.sector, octant, *swept):
                        pieces.append((octant, np.array((*answered, *swept))))
    return pieces, axes


