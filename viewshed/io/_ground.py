"""What is under the ink of the map: the ground in its light and the classes laid over it.

A `View` is a part of the map's local plane in pixels. For each pixel the cells under it are
found through the post map, summed in blocks, shaded and coloured.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from viewshed.constants import HIDDEN, UNRESOLVED, VISIBLE
from viewshed.io._steps import Step, step_colours

if TYPE_CHECKING:
    from viewshed.io.picture import Scene

Floats = NDArray[np.floating[Any]]
Rgb = NDArray[np.float32]

#: Side of one pixel of the map in pixels of the finer raster that is averaged into it.
SUPERSAMPLE = 2
#: Nodes along one side of the lattice on which page places are turned into row and column.
LATTICE = 65
#: Cells of a source strip that are summed at a time.
STRIP_CELLS = 4_000_000
#: Rows of the page that are painted at a time.
BAND = 64
#: Least tint of a pixel that holds any cell of a class, however few.
LEAST_TINT = 0.25
#: Lights of the hillshade: azimuth [degrees], weight; all 42 degrees high.
LIGHTS = ((315.0, 0.55), (265.0, 0.2), (5.0, 0.25))
LIGHT_HEIGHT = 42.0
#: Light on level ground, 0 to 1; the sea is plain and light, and nobody guesses that it is sea.
LIGHT_ON_FLAT = 0.8

# Plum against warm grey is a step in lightness as well as in hue, and it is no colour of water,
# wood or rock. Unresolved is a light ochre crossed by dark stripes, so grey print keeps it apart.
PLUM = (0.42, 0.16, 0.53)
OCHRE = (0.98, 0.79, 0.36)
STRIPE = (0.47, 0.28, 0.02)
PAPER = (1.0, 1.0, 1.0)
DOT = (0.55, 0.55, 0.55)


@dataclass(frozen=True)
class View:
    """Part of the local plane that is drawn: west and north edge [m], pixels, metres a pixel."""

    west: float
    north: float
    width: int
    height: int
    pixel: float

    def place(self, east: Any, north: Any) -> tuple[Any, Any]:
        """Pixel coordinates (right, down) of local coordinates [m]."""
        return (east - self.west) / self.pixel, (self.north - north) / self.pixel


def view_of(scene: Scene, width: int, height: int) -> View:
    """Choose the part of the local plane to draw so that it fits into a box of pixels."""
    rows, cols = scene.grid.shape
    edge_r = np.linspace(-0.5, rows - 0.5, 33)
    edge_c = np.linspace(-0.5, cols - 0.5, 33)
    rim_r = np.concatenate([edge_r, edge_r, np.full(33, -0.5), np.full(33, rows - 0.5)])
    rim_c = np.concatenate([np.full(33, -0.5), np.full(33, cols - 0.5), edge_c, edge_c])
    rim = scene.post_map.en(rim_r, rim_c)
    sides = []
    for (least, most), data in zip(scene.reach.box, rim, strict=True):
        low, high = max(least, data.min()), min(most, data.max())
        sides.append([min(low, high), max(low, high)])
    long = max(high - low for low, high in sides)
    for side in sides:
        grow = 0.5 * max(0.42 * long - (side[1] - side[0]), 0.0) + 0.035 * long
        side[0], side[1] = side[0] - grow, side[1] + grow
    (west, east_end), (south, north_end) = sides
    pixel = max((east_end - west) / width, (north_end - south) / height)
    size = (round((east_end - west) / pixel), round((north_end - south) / pixel))
    return View(west, north_end, min(size[0], width), min(size[1], height), pixel)


def paint(scene: Scene, view: View) -> tuple[Rgb, frozenset[str]]:
    """Draw ground and classes of a view.

    Parameters
    ----------
    scene : Scene
        What is drawn.
    view : View
        Part of the plane.

    Returns
    -------
    rgb : numpy.ndarray, shape (height, width, 3)
        Colours 0 to 1.
    found : frozenset of str
        Which of "unresolved", "void", "outside" and "mixed" (several cells share a pixel) occur.
    """
    lat_row, lat_col, right, down = _index_lattice(scene, view)
    window = _covered(scene, lat_row, lat_col)
    if window is None:
        return np.ones((view.height, view.width, 3), np.float32), frozenset()
    top, left, bottom, end = window
    cell = np.hypot(*scene.post_map.jacobian)[::-1]
    fine = view.pixel / SUPERSAMPLE
    by, bx = (max(1, int(np.ceil(fine / size - 1e-6))) for size in cell)
    cut = np.s_[top:bottom, left:end]
    count = None if scene.count is None else scene.count[cut]
    kinds = Kinds(scene.visible[cut], count, scene.steps)
    counts, height = blocks(kinds, scene.elevation[cut], by, bx)
    steps = scene.post_map.jacobian * np.array([bx, by])
    light = _hillshade(height, steps)
    mixed = by * bx > 1 or fine > 0.75 * cell.min()
    rgb = np.empty((view.height, view.width, 3), np.float32)
    found: set[str] = set()
    for first in range(0, view.height, BAND):
        here = down[first * SUPERSAMPLE : (first + BAND) * SUPERSAMPLE]
        row = (_spread(lat_row, right, here) - top + 0.5) / by
        col = (_spread(lat_col, right, here) - left + 0.5) / bx
        shares = _average(_nearest(counts, row, col)) / np.float32(255)
        shade = _average(_bilinear(light, row - 0.5, col - 0.5)[..., None])[..., 0]
        found |= colour(rgb[first : first + BAND], shares, shade, first, kinds.ramp)
    if mixed:
        found.add("mixed")
    return rgb, frozenset(found)


def _index_lattice(scene: Scene, view: View) -> tuple[Floats, Floats, Floats, Floats]:
    """Row and column of a coarse lattice of page places, and where the fine pixels lie in it."""
    right = np.linspace(0.0, view.width, LATTICE)
    down = np.linspace(0.0, view.height, LATTICE)
    row, col = index_of(scene, *plane(view, right[None, :], down[:, None]))
    across, along = (
        (np.arange(n * SUPERSAMPLE) + 0.5) / SUPERSAMPLE / n * (LATTICE - 1)
        for n in (view.width, view.height)
    )
    return row, col, across, along


def plane(view: View, right: Floats, down: Floats) -> tuple[Floats, Floats]:
    """Local coordinates [m] of pixel coordinates; broadcast."""
    east, north = view.west + right * view.pixel, view.north - down * view.pixel
    wide, tall = np.broadcast_arrays(east, north)
    return wide, tall


def index_of(scene: Scene, east: Floats, north: Floats) -> tuple[Floats, Floats]:
    """Post coordinates of local coordinates, good to a fraction of a pixel.

    Outside the window, where the polynomials are not to be trusted, the map goes on linearly.
    """
    post_map = scene.post_map
    jacobian = np.asarray(post_map.jacobian)
    inverse = np.linalg.inv(jacobian)
    last_row, last_col = scene.grid.rows - 1, scene.grid.cols - 1
    x, y = (
        inverse[0, 0] * east + inverse[0, 1] * north,
        inverse[1, 0] * east + inverse[1, 1] * north,
    )
    for _ in range(30):
        row, col = post_map.row0 + y, post_map.col0 + x
        in_row, in_col = np.clip(row, 0, last_row), np.clip(col, 0, last_col)
        e, n = post_map.en(in_row, in_col)
        off = (col - in_col, row - in_row)
        de = east - e - jacobian[0, 0] * off[0] - jacobian[0, 1] * off[1]
        dn = north - n - jacobian[1, 0] * off[0] - jacobian[1, 1] * off[1]
        x, y = (
            x + inverse[0, 0] * de + inverse[0, 1] * dn,
            y + inverse[1, 0] * de + inverse[1, 1] * dn,
        )
    return post_map.row0 + y, post_map.col0 + x


def _covered(scene: Scene, row: Floats, col: Floats) -> tuple[int, int, int, int] | None:
    """Part of the window that the view can touch: first row, first column, their ends."""
    rows, cols = scene.grid.shape
    top, left = (max(0, int(np.floor(v.min())) - 2) for v in (row, col))
    bottom = min(rows, int(np.ceil(row.max())) + 3)
    end = min(cols, int(np.ceil(col.max())) + 3)
    return (top, left, bottom, end) if top < bottom and left < end else None


class Kinds:
    """What cells are told apart: steps of the count (or visible as one), unresolved, hidden.

    Parameters
    ----------
    visible : numpy.ndarray, shape (rows, cols)
        The visible layer.
    count : numpy.ndarray, shape (rows, cols), optional
        How many observers see each cell.
    steps : sequence of (first, last)
        Steps of the count.

    Attributes
    ----------
    number : int
        How many kinds there are.
    ramp : numpy.ndarray or None
        Colours of the steps; None for visible as one.
    """

    def __init__(
        self,
        visible: NDArray[np.uint8],
        count: NDArray[np.uint16] | None = None,
        steps: Sequence[Step] = (),
    ) -> None:
        self.visible, self.count = visible, count
        self.ramp = step_colours(len(steps)) if steps else None
        self.number = max(1, len(steps)) + 2
        self._of_state = np.full(256, self.number, np.uint8)
        self._of_state[[VISIBLE, UNRESOLVED, HIDDEN]] = [0, self.number - 2, self.number - 1]
        self._of_count = np.zeros(1 << 16, np.uint8)
        for i, (first, last) in enumerate(steps):
            self._of_count[first : last + 1] = i

    def rows(self, part: slice) -> NDArray[np.uint8]:
        """Kinds of the cells of some rows; `number` where there is no answer."""
        kind = self._of_state[self.visible[part]]
        if self.count is not None:
            seen = kind == 0
            kind[seen] = self._of_count[self.count[part][seen]]
        return kind


#: Three kinds are counted at once, 21 bits each in one whole number.
_SHIFTS = (0, 21, 42)


def blocks(
    kinds: Kinds, elevation: NDArray[np.float32], by: int, bx: int
) -> tuple[NDArray[np.uint8], NDArray[np.float32]]:
    """Shares (of each kind, void, outside; 255 is all) and mean height of blocks."""
    rows, cols = elevation.shape
    out_rows, out_cols = -(-rows // by), -(-cols // bx)
    shares = np.zeros((out_rows, out_cols, kinds.number + 2), np.uint8)
    heights = np.full((out_rows, out_cols), np.nan, np.float32)
    strip = max(1, STRIP_CELLS // (cols * by))
    lengths = [np.minimum(b, n - np.arange(0, n, b)) for n, b in ((rows, by), (cols, bx))]
    packed = [np.zeros(256, np.uint64) for _ in range(0, kinds.number, 3)]
    for i in range(kinds.number):
        packed[i // 3][i] = 1 << _SHIFTS[i % 3]
    for first in range(0, out_rows, strip):
        part = slice(first * by, min(rows, (first + strip) * by))
        here = slice(first, min(out_rows, first + strip))
        cells = np.outer(lengths[0][here], lengths[1])
        kind = kinds.rows(part)
        sums = [_block_sums(table[kind], by, bx) for table in packed]
        counted = [(sums[i // 3] >> _SHIFTS[i % 3]) & 0x1FFFFF for i in range(kinds.number)]
        ground = elevation[part]
        known = np.isfinite(ground)
        some = cells
        if not known.all():
            some = _block_sums(known.astype(np.uint32), by, bx)
            ground = np.where(known, ground, np.float32(0))
        counted += [cells - some, np.maximum(some - sum(c.astype(np.int64) for c in counted), 0)]
        for layer, number in enumerate(counted):
            shares[here, :, layer] = -(-255 * number.astype(np.int64) // cells)
        total = _block_sums(ground, by, bx)
        heights[here] = np.where(some > 0, total / np.maximum(some, 1), np.nan)
    return shares, heights


def _block_sums(array: NDArray[Any], by: int, bx: int) -> NDArray[Any]:
    """Sum the blocks of an array; those at its ends can be smaller."""
    if by > 1:
        array = np.add.reduceat(array, np.arange(0, array.shape[0], by), axis=0)
    return np.add.reduceat(array, np.arange(0, array.shape[1], bx), axis=1) if bx > 1 else array


def _hillshade(height: NDArray[np.float32], jacobian: Floats) -> NDArray[np.float32]:
    """Light on the ground, 0 to 1; the relief is exaggerated so that any terrain reads."""
    level = np.float32(np.sin(np.radians(LIGHT_HEIGHT)))
    light = np.full(height.shape, level, np.float32)
    down, right = (
        np.gradient(height, axis=axis) if height.shape[axis] > 1 else np.zeros_like(height)
        for axis in (0, 1)
    )
    inverse = np.linalg.inv(jacobian).astype(np.float32)
    east = right * inverse[0, 0] + down * inverse[1, 0]
    north = right * inverse[0, 1] + down * inverse[1, 1]
    known = np.isfinite(east) & np.isfinite(north)
    stride = max(1, int(known.size / 400_000))
    slopes = np.hypot(east, north)[known][::stride]
    steep = float(np.percentile(slopes, 92)) if slopes.size else 0.0
    factor = np.float32(np.clip(0.75 / max(steep, 1e-9), 0.2, 8.0))
    east, north = east[known] * factor, north[known] * factor
    norm = np.sqrt(1 + east * east + north * north)
    total = np.zeros_like(norm)
    for azimuth, weight in LIGHTS:
        sun = np.float32(np.cos(np.radians(LIGHT_HEIGHT)))
        toward = (np.float32(np.sin(np.radians(azimuth))), np.float32(np.cos(np.radians(azimuth))))
        dot = (level - sun * (east * toward[0] + north * toward[1])) / norm
        total += np.float32(weight) * np.maximum(dot, 0)
    light[known] = total
    even: NDArray[np.float32] = np.minimum(light * np.float32(LIGHT_ON_FLAT / level), np.float32(1))
    return even


def _spread(lattice: Floats, right: Floats, down: Floats) -> Floats:
    """Values between the nodes of a lattice, linear along both axes."""
    i = np.minimum(down.astype(np.intp), LATTICE - 2)
    j = np.minimum(right.astype(np.intp), LATTICE - 2)
    v, u = (down - i)[:, None], (right - j)[None, :]
    rows = lattice[i] * (1 - v) + lattice[i + 1] * v
    values: Floats = rows[:, j] * (1 - u) + rows[:, j + 1] * u
    return values


def _nearest(values: NDArray[np.uint8], row: Floats, col: Floats) -> NDArray[np.uint8]:
    """Value of the block that holds each place; zero off the grid."""
    inside = (row >= 0) & (col >= 0) & (row < values.shape[0]) & (col < values.shape[1])
    i = np.where(inside, row, 0).astype(np.int32)
    j = np.where(inside, col, 0).astype(np.int32)
    return np.where(inside[..., None], values[i, j], np.uint8(0))


def _bilinear(values: NDArray[np.float32], row: Floats, col: Floats) -> NDArray[np.float32]:
    """Value between four blocks, held at the border."""
    last_row, last_col = values.shape[0] - 1, values.shape[1] - 1
    row, col = np.clip(row, 0, last_row), np.clip(col, 0, last_col)
    i = np.minimum(row.astype(np.int32), max(last_row - 1, 0))
    j = np.minimum(col.astype(np.int32), max(last_col - 1, 0))
    v, u = (row - i).astype(np.float32), (col - j).astype(np.float32)
    below, beside = min(1, last_row), min(1, last_col)
    upper = values[i, j] * (1 - u) + values[i, j + beside] * u
    lower = values[i + below, j] * (1 - u) + values[i + below, j + beside] * u
    value: NDArray[np.float32] = upper * (1 - v) + lower * v
    return value


def _average(fine: NDArray[Any]) -> NDArray[np.float32]:
    """Mean of each SUPERSAMPLE by SUPERSAMPLE square of fine pixels."""
    s = SUPERSAMPLE
    total = np.zeros((fine.shape[0] // s, fine.shape[1] // s, fine.shape[2]), np.float32)
    for i in range(s):
        for j in range(s):
            total += fine[i::s, j::s]
    mean: NDArray[np.float32] = np.divide(total, s * s, dtype=np.float32)
    return mean


def tint(share: Floats) -> Floats:
    """Strength of a class's colour where it holds a share of a pixel (see `draw_map`)."""
    return np.where(share > 0, np.maximum(np.sqrt(share), np.float32(LEAST_TINT)), np.float32(0))


def colour(
    rgb: Rgb, shares: Rgb, shade: NDArray[np.float32], first_row: int, ramp: Rgb | None = None
) -> set[str]:
    """Fill a band of the page; tell which classes occur in it.

    With a ramp, the colours of steps, the light on the ground is held back so that it cannot turn
    one step into the next.
    """
    steps = shares[..., :-4]
    unsure, hidden, void, outside = np.moveaxis(shares[..., -4:], -1, 0)
    seen = steps.sum(axis=-1)
    judged = seen + unsure + hidden
    any_judged = np.maximum(judged, np.float32(1e-6))
    y, x = np.ogrid[first_row : first_row + rgb.shape[0], : rgb.shape[1]]
    stripe, dot = (x + y) % 9 < 3, (x % 8 < 2) & ((y + 4 * (x // 8 % 2)) % 8 < 2)
    light = shade[..., None]

    def lay(mask: Any, colour: Any) -> None:
        strength = np.asarray(mask, np.float32)[..., None]
        rgb[:] = rgb * (1 - strength) + np.asarray(colour, np.float32) * strength

    if ramp is None:
        bare, ink = 0.50 + 0.47 * light, np.array(PLUM, np.float32) * (0.5 + 0.75 * light)
    else:
        mix = steps @ ramp / np.maximum(seen, np.float32(1e-6))[..., None]
        bare, ink = 0.76 + 0.20 * light, mix * (0.88 + 0.15 * light)
    rgb[:] = PAPER
    lay(outside > 0, (0.93 if ramp is None else 0.95) + 0.05 * light)
    lay((void > 0.5) & (judged < 0.5) & dot, DOT)
    lay(judged > 0, bare * np.array([1.0, 0.995, 0.975], np.float32))
    unsure_tint = tint(unsure / any_judged)
    lay(unsure_tint, np.array(OCHRE, np.float32) * (0.82 + 0.2 * light).clip(0, 1))
    lay(unsure_tint * stripe, STRIPE)
    lay(tint(seen / any_judged), ink)
    np.clip(rgb, 0, 1, out=rgb)
    kinds = {"unresolved": unsure, "void": void, "outside": outside}
    return {name for name, share in kinds.items() if bool((share > 0).any())}
