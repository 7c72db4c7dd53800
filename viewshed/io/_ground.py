"""What is under the ink of the map: the ground in its light and the classes laid over it.

A `View` is a part of the map's local plane in pixels. For each pixel the cells under it are
found through the post map, summed in blocks, shaded and coloured.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from viewshed.constants import HIDDEN, UNRESOLVED, VISIBLE
from viewshed.io._steps import Step, step_colours
from viewshed.kernels import page
from viewshed.visibility import usable_threads

if TYPE_CHECKING:
    from viewshed.io.picture import Scene

Floats = NDArray[np.floating[Any]]
Rgb = NDArray[np.uint8]

#: Side of one pixel of the map in pixels of the finer raster that is averaged into it.
SUPERSAMPLE = 2
#: Nodes along one side of the lattice on which page places are turned into row and column.
LATTICE = 65
#: Cells of a source strip that are summed at a time.
STRIP_CELLS = 4_000_000
#: Rows of the page that are painted at a time.
BAND = 64
#: Slopes that are looked at to choose how much the relief is exaggerated, about.
SLOPES = 200_000
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
DOT = (0.55, 0.55, 0.55)
INKS = np.array([PLUM, OCHRE, STRIPE, DOT])
#: Classes that the painting tells of, in its order.
CLASSES = ("unresolved", "void", "outside")


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
    rgb : numpy.ndarray, shape (height, width, 3), uint8
        Colours.
    found : frozenset of str
        Which of "unresolved", "void", "outside" and "mixed" (several cells share a pixel) occur.
    """
    lattice = _index_lattice(scene, view)
    window = _covered(scene, *lattice)
    rgb = np.full((view.height, view.width, 3), 255, np.uint8)
    if window is None:
        return rgb, frozenset()
    cell = np.hypot(*scene.post_map.jacobian)[::-1]
    fine = view.pixel / SUPERSAMPLE
    by, bx = (max(1, int(np.ceil(fine / size - 1e-6))) for size in cell)
    kinds = Kinds(scene.steps)
    shares, height = blocks(kinds, scene, window, (by, bx))
    light = light_on(height, scene.post_map.jacobian * np.array([bx, by]))
    place = np.array([window[0], window[1], by, bx, SUPERSAMPLE], np.int64)
    marks = np.zeros(len(CLASSES), np.uint8)

    def band(first: int) -> None:
        ends = first, min(first + BAND, view.height)
        _paint(rgb, (shares, light), (lattice, place), ends, kinds.ramp, marks)

    _each(band, range(0, view.height, BAND))
    found = {name for name, mark in zip(CLASSES, marks, strict=True) if mark}
    if by * bx > 1 or fine > 0.75 * cell.min():
        found.add("mixed")
    return rgb, frozenset(found)


def _each(
    work: Callable[[int], None], pieces: Iterable[int], rest: Callable[[], None] | None = None
) -> None:
    """Do pieces of work on all processors; rest after each."""
    with ThreadPoolExecutor(usable_threads(None)) as crew:
        for _ in crew.map(work, pieces):
            if rest is not None:
                rest()


def _index_lattice(scene: Scene, view: View) -> Floats:
    """Row and column of a coarse lattice of page places."""
    right = np.linspace(0.0, view.width, LATTICE)
    down = np.linspace(0.0, view.height, LATTICE)
    return np.stack(index_of(scene, *plane(view, right[None, :], down[:, None])))


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
    steps : sequence of (first, last)
        Steps of the count.

    Attributes
    ----------
    number : int
        How many kinds there are.
    table : numpy.ndarray, shape (256 + 65536,), uint8
        Kind of each state, then of each count of a visible cell; `number` where there is no
        answer.
    ramp : numpy.ndarray, shape (steps, 3)
        Colours of the steps; none for visible as one.
    """

    def __init__(self, steps: Sequence[Step] = ()) -> None:
        self.ramp = ramp_of(len(steps))
        self.number = max(1, len(steps)) + 2
        self.table = np.full(256 + (1 << 16), self.number, np.uint8)
        self.table[[VISIBLE, UNRESOLVED, HIDDEN]] = [0, self.number - 2, self.number - 1]
        self.table[256:] = 0
        for i, (first, last) in enumerate(steps):
            self.table[256 + first : 256 + last + 1] = i


def counted(scene: Scene) -> NDArray[np.int64]:
    """Cells that are seen by 0, 1, 2, ... observers."""
    rows, cols = scene.visible.shape
    strip = max(1, STRIP_CELLS // cols)
    seen = np.zeros((-(-rows // strip), 1 << 16), np.int64)

    def work(first: int) -> None:
        part = slice(first, first + strip)
        arrays = _plain(scene.visible[part]), _plain(_counts(scene, part))
        page.count_seen(*arrays, seen[first // strip])

    _each(work, range(0, rows, strip), scene.rest)
    return np.asarray(seen.sum(axis=0))


def ramp_of(steps: int) -> Floats:
    """Give the colours of steps for `colour`; none where there are none."""
    return step_colours(steps).astype(np.float64) if steps else np.zeros((0, 3))


def blocks(
    kinds: Kinds, scene: Scene, window: tuple[int, int, int, int], size: tuple[int, int]
) -> tuple[NDArray[np.uint8], NDArray[np.float32]]:
    """Shares (of each kind, void, outside; 255 is all) and mean height of blocks of cells.

    Parameters
    ----------
    kinds : Kinds
        What is told apart.
    scene : Scene
        Gives the arrays, which are read strip by strip and never copied as a whole.
    window : tuple of int
        First row, first column and their ends.
    size : tuple of int
        Rows and columns of a block.
    """
    top, left, bottom, end = window
    rows, cols, (by, bx) = bottom - top, end - left, size
    out_rows, out_cols = -(-rows // by), -(-cols // bx)
    shares = np.empty((out_rows, out_cols, kinds.number + 2), np.uint8)
    heights = np.empty((out_rows, out_cols), np.float32)
    place = np.array([left, end, by, bx], np.int64)
    strip = max(1, STRIP_CELLS // (cols * by))

    def work(first: int) -> None:
        here = slice(first, min(out_rows, first + strip))
        part = slice(top + here.start * by, min(top + here.stop * by, bottom))
        tallies = np.zeros((here.stop - first, out_cols, kinds.number + 2), np.int32)
        page.sum_blocks(
            *(_plain(scene.visible[part]), _plain(_counts(scene, part))),
            *(_plain(scene.elevation[part]), kinds.table, place),
            *(tallies, np.zeros(tallies.shape[:2]), shares[here], heights[here]),
        )

    _each(work, range(0, out_rows, strip), scene.rest)
    return shares, heights


def _counts(scene: Scene, part: slice) -> NDArray[np.uint16]:
    return np.empty((0, 0), np.uint16) if scene.count is None else scene.count[part]


def _plain(array: NDArray[Any]) -> NDArray[Any]:
    """Give an array as the kernels are compiled for; it is copied where it lies otherwise."""
    return np.require(array, requirements=["C", "W", "E"])


def light_on(height: NDArray[np.float32], jacobian: Floats) -> NDArray[np.float32]:
    """Light on the ground, 0 to 1; the relief is exaggerated so that any terrain reads."""
    sun = np.cos(np.radians(LIGHT_HEIGHT))
    level = float(np.sin(np.radians(LIGHT_HEIGHT)))
    azimuth, weight = np.array(LIGHTS).T
    toward = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
    suns = np.stack([sun * toward[0], sun * toward[1], weight], axis=1)
    inverse = np.linalg.inv(jacobian)
    stride = max(1, height.size // SLOPES)
    slopes = np.empty(-(-height.size // stride))
    page.steepness(height, inverse, stride, slopes)
    slopes = slopes[np.isfinite(slopes)]
    steep = float(np.percentile(slopes, 92)) if slopes.size else 0.0
    factor = float(np.clip(0.75 / max(steep, 1e-9), 0.2, 8.0))
    light = np.empty(height.shape, np.float32)

    def band(first: int) -> None:
        ends = first, min(first + BAND, height.shape[0])
        page.shade(height, inverse, factor, level, suns, LIGHT_ON_FLAT / level, *ends, light)

    _each(band, range(0, height.shape[0], BAND))
    return light


def colour(shares: NDArray[np.uint8], light: NDArray[np.float32], ramp: Floats) -> Rgb:
    """Colour pixels by the shares of their classes and the light on them.

    With a ramp, the colours of steps, the light on the ground is held back so that it cannot turn
    one step into the next.

    Parameters
    ----------
    shares : numpy.ndarray, shape (height, width, kinds + 2)
        Shares of the steps (or of visible as one), unresolved, hidden, void and outside; 255 is
        all.
    light : numpy.ndarray, shape (height, width)
        Light on the ground, 0 to 1.
    ramp : numpy.ndarray, shape (steps, 3)
        Colours of the steps; none for visible as one.
    """
    height, width = light.shape
    rgb = np.empty((height, width, 3), np.uint8)
    corners = np.stack(np.meshgrid([0.0, height], [0.0, width], indexing="ij")) - 0.5
    place = np.array([0, 0, 1, 1, 1], np.int64)
    marks = np.zeros(len(CLASSES), np.uint8)
    _paint(rgb, (shares, light), (corners, place), (0, height), ramp, marks)
    return rgb


def _paint(
    rgb: Rgb,
    ground: tuple[NDArray[np.uint8], NDArray[np.float32]],
    where: tuple[Floats, NDArray[np.int64]],
    rows: tuple[int, int],
    ramp: Floats,
    marks: NDArray[np.uint8],
) -> None:
    """Colour some rows; shares and light, lattice and place are as in `page.paint`."""
    nodes = np.empty((2, where[0].shape[2]))
    means = np.empty((rgb.shape[1], ground[0].shape[2] + 1))
    page.paint(*ground, *where, *rows, INKS, ramp, LEAST_TINT, nodes, means, marks, rgb)
