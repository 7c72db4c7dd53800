"""The page a person looks at first: ground, what is seen of it, and the question in words.

The map is drawn in true local coordinates of the first observer (geodesic distance and true
bearing), so north is up, the range is a circle and a ruler laid through the observer is right,
whatever CRS, cell shape or rotation the grid has. Only this drawing is resampled, never a result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from viewshed.constants import CAUTIONS, HIDDEN, UNRESOLVED, VISIBLE

if TYPE_CHECKING:
    from viewshed.grid import Grid, PostMap
    from viewshed.places import Sector

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
class Scene:
    """What is drawn.

    Parameters
    ----------
    elevation : numpy.ndarray, shape (rows, cols)
        Heights of the result's window [m], NaN for void.
    visible : numpy.ndarray, shape (rows, cols)
        The visible layer: 1, 0, 2 or 255.
    grid : Grid
        Grid of both arrays.
    post_map : PostMap
        True local coordinates seen from the observer in the middle of the map.
    observers : sequence of (x, y, name)
        Places of the observers [CRS units]; the first is the one of `post_map`.
    range_m : float
        Range [m].
    sector : Sector, optional
        Bearings looked over; None is all round.
    """

    elevation: NDArray[np.float32]
    visible: NDArray[np.uint8]
    grid: Grid
    post_map: PostMap
    observers: Sequence[tuple[float, float, str]]
    range_m: float
    sector: Sector | None = None


@dataclass(frozen=True)
class Words:
    """What the page says.

    Parameters
    ----------
    question : str
        The question in words; the title.
    refraction : str
        The air with k and K, as `Refraction.describe` gives it.
    dem_name : str
        Name of the elevation grid.
    crs_name : str
        Name of its CRS with the unit of its coordinates.
    summary : sequence of (label, value)
        Rows of the short table.
    cautions : sequence of str
        Sentences at the foot.
    made_with : str
        Program and version.
    """

    question: str
    refraction: str
    dem_name: str
    crs_name: str = ""
    summary: Sequence[tuple[str, str]] = ()
    cautions: Sequence[str] = CAUTIONS
    made_with: str = "viewshed"


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


def draw_map(path: str | Path, scene: Scene, words: Words, *, dpi: int = 200) -> None:
    """Draw the page and write it as PNG.

    The same input gives the same bytes with the same libraries; no date is written.

    Parameters
    ----------
    path : str or pathlib.Path
        File to write.
    scene : Scene
        What is drawn.
    words : Words
        What the page says.
    dpi : int
        Pixels an inch of an A4 page.

    Raises
    ------
    OSError
        If the file cannot be written.

    Notes
    -----
    Where several cells share a pixel its tint grows with the square root of their share, and is
    at least a quarter: a ridge one cell wide stays on the page (a linear share would fade it) and
    scattered single cells do not look like solid ground (as they would if any cell gave full
    colour).
    """
    import matplotlib  # noqa: PLC0415 - heavy, and not everyone draws
    from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    if scene.sector is not None and scene.sector.width_deg >= 360:
        scene = replace(scene, sector=None)
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        figure = Figure(figsize=(PAGE_WIDTH, PAGE_HEIGHT), dpi=dpi, facecolor="white")
        renderer: Any = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]
        Page(figure, renderer, dpi).compose(scene, words)
        figure.savefig(path, format="png", dpi=dpi, metadata={"Software": None})


# --- from the grid to the picture -----------------------------------------------------------------


def view_of(scene: Scene, width: int, height: int) -> View:
    """Choose the part of the local plane to draw so that it fits into a box of pixels."""
    rows, cols = scene.grid.shape
    edge_r = np.linspace(-0.5, rows - 0.5, 33)
    edge_c = np.linspace(-0.5, cols - 0.5, 33)
    rim_r = np.concatenate([edge_r, edge_r, np.full(33, -0.5), np.full(33, rows - 0.5)])
    rim_c = np.concatenate([np.full(33, -0.5), np.full(33, cols - 0.5), edge_c, edge_c])
    rim = scene.post_map.en(rim_r, rim_c)
    east, north = _wedge(scene)
    sides = []
    for reach, data in zip((east, north), rim, strict=True):
        low, high = max(reach.min(), data.min()), min(reach.max(), data.max())
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
    counts, height = _blocks(
        scene.visible[top:bottom, left:end], scene.elevation[top:bottom, left:end], by, bx
    )
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
        found |= _colour(rgb[first : first + BAND], shares, shade, first)
    if mixed:
        found.add("mixed")
    return rgb, frozenset(found)


def _wedge(scene: Scene) -> tuple[Floats, Floats]:
    """Local coordinates of the outline of what is in reach, observers included."""
    start, width = (0.0, 360.0)
    if scene.sector is not None:
        start, width = scene.sector.from_deg, scene.sector.width_deg
    bearing = np.radians(start + np.linspace(0.0, width, 361))
    x, y = (np.array([place[i] for place in scene.observers], float) for i in (0, 1))
    own = scene.post_map.en(*scene.grid.rowcol(x, y))
    return (
        np.concatenate([scene.range_m * np.sin(bearing), np.ravel(own[0])]),
        np.concatenate([scene.range_m * np.cos(bearing), np.ravel(own[1])]),
    )


def _index_lattice(scene: Scene, view: View) -> tuple[Floats, Floats, Floats, Floats]:
    """Row and column of a coarse lattice of page places, and where the fine pixels lie in it."""
    right = np.linspace(0.0, view.width, LATTICE)
    down = np.linspace(0.0, view.height, LATTICE)
    row, col = index_of(scene, *_plane(view, right[None, :], down[:, None]))
    across, along = (
        (np.arange(n * SUPERSAMPLE) + 0.5) / SUPERSAMPLE / n * (LATTICE - 1)
        for n in (view.width, view.height)
    )
    return row, col, across, along


def _plane(view: View, right: Floats, down: Floats) -> tuple[Floats, Floats]:
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


#: Visible, unresolved and hidden are counted at once, 21 bits each in one whole number.
_SHIFTS = (0, 21, 42)
_PACKED = np.zeros(256, np.uint64)
_PACKED[[VISIBLE, UNRESOLVED, HIDDEN]] = [1 << shift for shift in _SHIFTS]


def _blocks(
    visible: NDArray[np.uint8], elevation: NDArray[np.float32], by: int, bx: int
) -> tuple[NDArray[np.uint8], NDArray[np.float32]]:
    """Shares (visible, unresolved, hidden, void, outside; 255 is all) and mean height of blocks."""
    rows, cols = visible.shape
    out_rows, out_cols = -(-rows // by), -(-cols // bx)
    shares = np.zeros((out_rows, out_cols, 5), np.uint8)
    heights = np.full((out_rows, out_cols), np.nan, np.float32)
    strip = max(1, STRIP_CELLS // (cols * by))
    lengths = [np.minimum(b, n - np.arange(0, n, b)) for n, b in ((rows, by), (cols, bx))]
    for first in range(0, out_rows, strip):
        part = slice(first * by, min(rows, (first + strip) * by))
        here = slice(first, min(out_rows, first + strip))
        cells = np.outer(lengths[0][here], lengths[1])
        counts = _block_sums(_PACKED[visible[part]], by, bx)
        counted = [(counts >> shift) & 0x1FFFFF for shift in _SHIFTS]
        ground = elevation[part]
        known = np.isfinite(ground)
        some = cells
        if not known.all():
            some = _block_sums(known.astype(np.uint32), by, bx)
            ground = np.where(known, ground, np.float32(0))
        counted += [cells - some, np.maximum(some - sum(c.astype(np.int64) for c in counted), 0)]
        for layer, count in enumerate(counted):
            shares[here, :, layer] = -(-255 * count.astype(np.int64) // cells)
        sums = _block_sums(ground, by, bx)
        heights[here] = np.where(some > 0, sums / np.maximum(some, 1), np.nan)
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


def _colour(rgb: Rgb, shares: Rgb, shade: NDArray[np.float32], first_row: int) -> set[str]:
    """Fill a band of the page; tell which classes occur in it."""
    seen, unsure, hidden, void, outside = np.moveaxis(shares, -1, 0)
    judged = seen + unsure + hidden
    any_judged = np.maximum(judged, np.float32(1e-6))
    y, x = np.ogrid[first_row : first_row + rgb.shape[0], : rgb.shape[1]]
    stripe, dot = (x + y) % 9 < 3, (x % 8 < 2) & ((y + 4 * (x // 8 % 2)) % 8 < 2)
    light = shade[..., None]

    def lay(mask: Any, colour: Any) -> None:
        strength = np.asarray(mask, np.float32)[..., None]
        rgb[:] = rgb * (1 - strength) + np.asarray(colour, np.float32) * strength

    rgb[:] = PAPER
    lay(outside > 0, 0.93 + 0.05 * light)
    lay((void > 0.5) & (judged < 0.5) & dot, DOT)
    lay(judged > 0, (0.50 + 0.47 * light) * np.array([1.0, 0.995, 0.975], np.float32))
    unsure_tint = tint(unsure / any_judged)
    lay(unsure_tint, np.array(OCHRE, np.float32) * (0.82 + 0.2 * light).clip(0, 1))
    lay(unsure_tint * stripe, STRIPE)
    lay(tint(seen / any_judged), np.array(PLUM, np.float32) * (0.5 + 0.75 * light))
    np.clip(rgb, 0, 1, out=rgb)
    kinds = {"unresolved": unsure, "void": void, "outside": outside}
    return {name for name, share in kinds.items() if bool((share > 0).any())}


# --- the page -------------------------------------------------------------------------------------

#: Page [inches], A4 upright, and what is kept free at its sides.
PAGE_WIDTH, PAGE_HEIGHT = 8.27, 11.69
MARGIN = 0.55
#: Room for the coordinates under the map, and for scale, legend and table [inches].
UNDER_MAP, BAND_HEIGHT = 0.45, 1.75
INK = "#1d1b20"
SOFT = "#6b6670"
RULE = "#b9b4bd"
HALO = "white"


class Page:
    """An A4 page in pixels, right and down from its top left corner.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        Figure of the size of the page.
    renderer : matplotlib.backends.backend_agg.RendererAgg
        Measures text.
    dpi : int
        Pixels an inch.
    """

    def __init__(self, figure: Any, renderer: Any, dpi: int) -> None:
        self.dpi = dpi
        self.renderer = renderer
        self.width, self.height = round(PAGE_WIDTH * dpi), round(PAGE_HEIGHT * dpi)
        self.axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
        self.axes.set(xlim=(0, self.width), ylim=(self.height, 0))
        self.axes.set_axis_off()
        self.left, self.right = MARGIN * dpi, self.width - MARGIN * dpi
        self.fonts = _fonts()

    def compose(self, scene: Scene, words: Words) -> None:
        """Put everything in its place."""
        top, foot = self._heading(scene, words), self._foot(words)
        tall = foot - top - (UNDER_MAP + BAND_HEIGHT) * self.dpi
        room = round(self.right - self.left), max(round(tall), self.dpi)
        view = view_of(scene, *room)
        rgb, found = paint(scene, view)
        left = round(self.left + 0.5 * (room[0] - view.width))
        box = MapBox(self, scene, view, left, round(top))
        box.draw(rgb)
        bottom = box.coordinates(words.crs_name)
        self._band((bottom, foot - 5 * self.dpi / 72), scene, words, found, box)

    def write(self, x: float, y: float, text: str, size: float, **style: Any) -> None:
        """Write one line; y is its base line."""
        bold = style.pop("bold", False)
        halo = style.pop("halo", 0)
        label = self.axes.text(
            x,
            y,
            _printable(text, self.fonts[bold]),
            fontproperties=self.fonts[bold],
            fontsize=size,
            parse_math=False,
            **{"color": INK, "va": "baseline", **style},
        )
        if halo:
            from matplotlib.patheffects import withStroke  # noqa: PLC0415

            label.set_path_effects([withStroke(linewidth=halo, foreground=HALO)])

    def length(self, text: str, size: float, *, bold: bool = False) -> float:
        """Width of a line of text [pixels]."""
        font = self.fonts[bold].copy()
        font.set_size(size)
        text = _printable(text, font)
        return float(self.renderer.get_text_width_height_descent(text, font, ismath=False)[0])

    def wrapped(self, text: str, size: float, width: float, *, bold: bool = False) -> list[str]:
        """Break a text into lines that fit a width; a word that does not fit is cut."""
        lines: list[str] = []
        for word in text.split():
            longer = f"{lines[-1]} {word}" if lines else word
            if lines and self.length(longer, size, bold=bold) <= width:
                lines[-1] = longer
            else:
                lines.append(self.fitted(word, size, width, bold=bold))
        return lines

    def fitted(self, text: str, size: float, width: float, *, bold: bool = False) -> str:
        """Leave out the middle of a text that is wider than there is room."""
        if self.length(text, size, bold=bold) <= width:
            return text
        keep = len(text)
        while keep > 2:
            keep -= max(1, keep // 20)
            short = f"{text[: (keep + 1) // 2]}\u2026{text[len(text) - keep // 2 :]}"
            if self.length(short, size, bold=bold) <= width:
                return short
        return "\u2026"

    def line(self, xs: Any, ys: Any, width: float = 0.6, color: str = INK, **style: Any) -> None:
        """Draw a line, cut off at a rectangle if one is given; its width is in points."""
        from matplotlib.lines import Line2D  # noqa: PLC0415

        clip = style.pop("clip", None)
        line = Line2D(xs, ys, linewidth=width, color=color, **style)
        self.axes.add_line(line)
        if clip is not None:
            line.set_clip_path(clip)

    def box(self, x: float, y: float, width: float, height: float, **style: Any) -> None:
        """Draw a rectangle from its top left corner."""
        from matplotlib.patches import Rectangle  # noqa: PLC0415

        self.axes.add_patch(Rectangle((x, y), width, height, **style))

    def image(self, rgb: Rgb, x: float, y: float) -> None:
        """Lay pixels on the page one to one."""
        x, y = round(x), round(y)
        whole = (np.clip(rgb, 0, 1) * 255 + 0.5).astype(np.uint8)
        extent = (x, x + rgb.shape[1], y + rgb.shape[0], y)
        self.axes.imshow(whole, extent=extent, interpolation="nearest", aspect="auto", zorder=1)
        self.axes.set(xlim=(0, self.width), ylim=(self.height, 0))

    def _heading(self, scene: Scene, words: Words) -> float:
        """Write the question and what was asked it of; give where the map can begin."""
        pt, room = self.dpi / 72.0, self.right - self.left
        y = 0.5 * self.dpi + 7 * pt
        self.write(self.left, y, "WHAT CAN BE SEEN", 7.5, color=SOFT, bold=True)
        self.write(self.right, y, words.made_with, 7.5, color=SOFT, ha="right")
        y += 5 * pt
        self.line((self.left, self.right), (y, y), 1.6)
        title = words.question[:1].upper() + words.question[1:]
        for size in (15.0, 13.5, 12.0, 10.5, 9.0):
            lines = self.wrapped(title, size, room, bold=True)
            if len(lines) <= 2 + (size < 13):
                break
        y += 6 * pt
        for text in lines[:4]:
            y += 1.28 * size * pt
            self.write(self.left, y, text, size, bold=True)
        facts = [f"Refraction {words.refraction}", f"range {told_length(scene.range_m)}"]
        if scene.sector is not None:
            ends = (scene.sector.from_deg % 360, scene.sector.to_deg % 360)
            facts.append("sector {:g}\u00b0 to {:g}\u00b0".format(*ends))
        told = "   \u00b7   ".join(facts)
        y += 16 * pt
        self.write(self.left, y, told, 9)
        left_over = room - self.length(told, 9) - 0.3 * self.dpi
        name = self.fitted(f"Elevation: {words.dem_name}", 9, left_over)
        self.write(self.right, y, name, 9, ha="right")
        return y + 9 * pt

    def _band(
        self,
        ends: tuple[float, float],
        scene: Scene,
        words: Words,
        found: frozenset[str],
        box: MapBox,
    ) -> None:
        """Scale and north at the left, legend in the middle, the short table at the right."""
        width, (y, bottom) = self.right - self.left, ends
        self._scale(self.left, y, 0.25 * width, box.view)
        self._north(self.left + 0.25 * width - 10, y, box)
        self._legend(self.left + 0.30 * width, y, scene, found)
        self._table(self.left + 0.645 * width, (y, bottom), 0.355 * width, words)

    def _heads(self, x: float, y: float, text: str) -> float:
        pt = self.dpi / 72.0
        self.write(x, y + 7 * pt, text, 7.5, color=SOFT, bold=True)
        return y + 13 * pt

    def _scale(self, x: float, y: float, room: float, view: View) -> None:
        pt = self.dpi / 72.0
        y = self._heads(x, y, "SCALE")
        length = round_down(0.74 * room * view.pixel)
        whole, tall = length / view.pixel, 4.5 * pt
        y += 10 * pt
        for i in range(4):
            fill = INK if i % 2 == 0 else "white"
            self.box(x + i * whole / 4, y, whole / 4, tall, fc=fill, ec=INK, lw=0.6, zorder=3)
        unit, factor = ("km", 1000.0) if length >= 1000 else ("m", 1.0)
        for share in (0.0, 0.5, 1.0):
            text = f"{share * length / factor:g}" + (f" {unit}" if share == 1.0 else "")
            ha = "left" if share == 0 else "center"
            self.write(x + share * whole, y - 3 * pt, text, 7.5, ha=ha)
        notes = "Distances and bearings are true from the observer; north is up."
        y += tall + 3 * pt
        for text in self.wrapped(notes, 7, room):
            y += 9.5 * pt
            self.write(x, y, text, 7, color=SOFT)

    def _north(self, x: float, y: float, box: MapBox) -> None:
        """Arrow to true north, in the top right corner of the map's frame when that is free."""
        from matplotlib.patches import Polygon  # noqa: PLC0415

        pt = self.dpi / 72.0
        tip, foot, half = y + 9 * pt, y + 33 * pt, 6 * pt
        x -= half
        for side, fill in ((-1, INK), (1, "white")):
            corners = [(x, tip), (x + side * half, foot), (x, foot - 5 * pt)]
            self.axes.add_patch(Polygon(corners, fc=fill, ec=INK, lw=0.7, joinstyle="miter"))
        self.write(x, y + 7 * pt, "N", 8.5, ha="center", bold=True)

    def _legend(self, x: float, y: float, scene: Scene, found: frozenset[str]) -> None:
        pt = self.dpi / 72.0
        y = self._heads(x, y, "LEGEND")
        swatches = {
            "visible": ("visible", 0),
            "unresolved": ("unresolved: view crosses a void", 1),
            "hidden": ("hidden by known terrain", 2),
            "void": ("void: height not known", 3),
            "outside": (
                "outside the range" if scene.sector is None else "outside range or sector",
                4,
            ),
        }
        wide, tall, step = round(22 * pt), round(9 * pt), 13.5 * pt
        shade = np.linspace(0.45, 0.9, wide, dtype=np.float32)[None, :].repeat(tall, axis=0)
        for name, (text, layer) in swatches.items():
            if name in {"unresolved", "void", "outside"} and name not in found:
                continue
            shares = np.zeros((tall, wide, 5), np.float32)
            shares[..., layer] = 1
            if name == "visible" and "mixed" in found:
                text += ", paler where in part"  # noqa: PLW2901
                part = np.linspace(1.0, 0.0, wide, dtype=np.float32) ** 2
                shares[..., 0], shares[..., 2] = part, 1 - part
            rgb = np.ones((tall, wide, 3), np.float32)
            _colour(rgb, shares, shade, 0)
            self.image(rgb, x, y)
            self.box(round(x), round(y), wide, tall, fc="none", ec=SOFT, lw=0.5, zorder=3)
            self.write(x + wide + 6 * pt, y + 7.5 * pt, text, 8)
            y += step
        several = "observers" if len(scene.observers) > 1 else "observer"
        middle = (x + 0.5 * wide, y + 0.5 * tall)
        self.mark(*middle)
        self.write(x + wide + 6 * pt, y + 7.5 * pt, several, 8)
        y += step
        self.line((x, x + wide), (y + 0.5 * tall,) * 2, 1.3)
        self.write(x + wide + 6 * pt, y + 7.5 * pt, f"range, {told_length(scene.range_m)}", 8)

    def mark(self, x: float, y: float) -> None:
        """Draw an observer."""
        for size, color in ((9.5, HALO), (7.5, INK), (4.6, HALO), (2.2, INK)):
            style = {"marker": "o", "markersize": size, "markeredgewidth": 0, "zorder": 6}
            self.line([x], [y], 0, color, **style)

    def _table(self, x: float, ends: tuple[float, float], width: float, words: Words) -> None:
        """Write label and value of each row, as large as the room allows."""
        pt = self.dpi / 72.0
        y = self._heads(x, ends[0], "RESULT") - 2 * pt
        for size in (8.0, 7.5, 7.0, 6.5, 6.0, 5.5):
            gap = 1.45 * size * pt
            own_line = [
                self.length(label + value, size) + 8 * pt > width for label, value in words.summary
            ]
            if y + gap * (len(own_line) + 0.85 * sum(own_line) + 0.4) <= ends[1]:
                break
        for (label, value), below in zip(words.summary, own_line, strict=True):
            if y + gap * (1.4 + 0.85 * below) > ends[1]:
                break
            y += gap
            self.write(x, y, self.fitted(label, size, width), size, color=SOFT)
            y += 0.85 * gap * below
            self.write(x + width, y, self.fitted(value, size, width), size, ha="right")
            self.line((x, x + width), (y + 0.35 * size * pt,) * 2, 0.4, RULE)

    def _foot(self, words: Words) -> float:
        """Write the cautions; give the height of the rule over them."""
        pt, text = self.dpi / 72.0, " ".join(words.cautions)
        for size in (6.8, 6.2, 5.6, 5.0):
            lines = self.wrapped(text, size, self.right - self.left)
            if len(lines) <= 5:
                break
        y = self.height - 0.45 * self.dpi - len(lines) * 1.35 * size * pt
        top = y - 12 * pt
        self.line((self.left, self.right), (top, top), 0.8)
        self.write(self.left, y - 3 * pt, "READ WITH CARE", 7, color=SOFT, bold=True)
        for line in lines:
            y += 1.35 * size * pt
            self.write(self.left, y, line, size)
        return top


class MapBox:
    """The map's frame on the page with what is drawn over the ground."""

    def __init__(self, page: Page, scene: Scene, view: View, left: int, top: int) -> None:
        self.page, self.scene, self.view = page, scene, view
        self.left, self.top = left, top
        self.bottom, self.right = top + view.height, left + view.width

    def at(self, east: Any, north: Any) -> tuple[Any, Any]:
        """Place on the page of local coordinates."""
        right, down = self.view.place(east, north)
        return self.left + right, self.top + down

    def holds(self, x: float, y: float, dx: float, dy: float) -> bool:
        """Tell whether a box of half sides dx, dy round a place lies inside the frame."""
        return (
            self.left <= x - dx
            and x + dx <= self.right
            and self.top <= y - dy
            and y + dy <= self.bottom
        )

    def draw(self, rgb: Rgb) -> None:
        """Draw ground, rings, sector, observers and the frame."""
        from matplotlib.patches import Rectangle  # noqa: PLC0415

        page, view = self.page, self.view
        page.image(rgb, self.left, self.top)
        size = (view.width, view.height)
        clip = Rectangle((self.left, self.top), *size, transform=page.axes.transData)
        rings = ring_distances(self.scene.range_m)
        for distance in rings:
            self._ring(distance, clip, last=distance == rings[-1])
        if self.scene.sector is not None:
            for end in (self.scene.sector.from_deg, self.scene.sector.to_deg):
                reach = np.array([0.0, self.scene.range_m])
                a = np.radians(end)
                self._over(*self.at(reach * np.sin(a), reach * np.cos(a)), clip, 1.2, "-")
        marks = self._marks()
        self._ring_labels(rings, marks)
        page.box(self.left, self.top, *size, fc="none", ec=INK, lw=0.9, zorder=7)

    def _over(self, xs: Any, ys: Any, clip: Any, width: float, dashes: Any) -> None:
        for wide, color in ((width + 1.4, HALO), (width, INK)):
            style = {"linestyle": dashes if color == INK else "-", "zorder": 4}
            alpha = 0.55 if color == HALO else 1.0
            self.page.line(xs, ys, wide, color, clip=clip, alpha=alpha, **style)

    def _bearings(self) -> Floats:
        sector = self.scene.sector
        start, width = (0.0, 360.0) if sector is None else (sector.from_deg, sector.width_deg)
        return np.asarray(np.radians(start + np.linspace(0.0, width, 721)))

    def _ring(self, distance: float, clip: Any, *, last: bool) -> None:
        a = self._bearings()
        xs, ys = self.at(distance * np.sin(a), distance * np.cos(a))
        self._over(xs, ys, clip, 1.3 if last else 0.6, "-" if last else (0, (4, 3)))

    def _marks(self) -> list[tuple[float, float, float, float]]:
        """Draw the observers; give the boxes (middle, half sides) they take."""
        page, pt = self.page, self.page.dpi / 72.0
        taken = []
        for x, y, name in self.scene.observers:
            e, n = self.scene.post_map.en(*self.scene.grid.rowcol(x, y))
            px, py = self.at(float(e), float(n))
            if not self.holds(px, py, 0, 0):
                continue
            page.mark(px, py)
            taken.append((px, py, 6 * pt, 6 * pt))
            name = page.fitted(name, 8, 0.3 * self.view.width, bold=True)  # noqa: PLW2901
            if not name or (name == "observer" and len(self.scene.observers) == 1):
                continue
            half = 0.5 * page.length(name, 8, bold=True)
            side = 1 if px + 2 * half + 10 * pt < self.right else -1
            middle = px + side * (half + 8 * pt)
            style = {"ha": "center", "halo": 2.2, "zorder": 7, "bold": True}
            page.write(middle, py + 3 * pt, name, 8, **style)
            taken.append((middle, py, half, 6 * pt))
        return taken

    def _ring_labels(
        self, rings: list[float], taken: list[tuple[float, float, float, float]]
    ) -> None:
        """Write the distances where they are inside the frame and clear of the observers."""
        page, pt = self.page, self.page.dpi / 72.0
        sector = self.scene.sector
        narrow = sector is not None and sector.width_deg < 70
        if sector is None or sector.width_deg > 359:
            bearings = [45.0, 135.0, 315.0, 225.0, *np.arange(0.0, 360.0, 15.0)]
        elif narrow:
            bearings = [sector.to_deg, sector.from_deg]
        else:
            bearings = [sector.from_deg + sector.width_deg * f for f in (0.5, 0.35, 0.65, 0.2, 0.8)]
        best: list[tuple[float, float, str]] = []
        for bearing in bearings:
            a = np.radians(bearing)
            found: list[tuple[float, float, str]] = []
            for distance in rings:
                text = told_length(distance)
                half, tall = 0.5 * page.length(text, 7.5) + 3 * pt, 6 * pt
                x, y = self.at(distance * np.sin(a), distance * np.cos(a))
                if narrow:
                    out = 1 if bearing == bearings[0] else -1
                    gap = half * abs(np.cos(a)) + tall * abs(np.sin(a)) + 2 * pt
                    x, y = x + out * gap * np.cos(a), y + out * gap * np.sin(a)
                clear = all(
                    abs(x - u) > half + du or abs(y - v) > tall + dv
                    for u, v, du, dv in [*taken, *((p, q, half, tall) for p, q, _ in found)]
                )
                if clear and self.holds(x, y, half, tall):
                    found.append((x, y, text))
            if len(found) > len(best):
                best = found
        for x, y, text in best:
            page.write(x, y + 2.7 * pt, text, 7.5, ha="center", halo=2.4, zorder=5)

    def coordinates(self, crs_name: str) -> float:
        """Tick the grid's own coordinates along two sides; give where the next thing can begin."""
        page, pt = self.page, self.page.dpi / 72.0
        view, count = self.view, 129
        edges = (np.linspace(0.0, view.width, count), np.linspace(0.0, view.height, count))
        low = _plane(view, edges[0], np.full(count, float(view.height)))
        side = _plane(view, np.zeros(count), edges[1])
        xs = self.scene.grid.xy(*index_of(self.scene, *low))
        ys = self.scene.grid.xy(*index_of(self.scene, *side))
        for place, text in ticks(xs[0], xs[1], edges[0]):
            x = self.left + place
            half = 0.5 * page.length(text, 7)
            if self.left - 10 * pt <= x - half and x + half <= self.right + 10 * pt:
                page.line((x, x), (self.bottom, self.bottom + 3 * pt), 0.7)
                page.write(x, self.bottom + 10.5 * pt, text, 7, ha="center", color=SOFT)
        for place, text in ticks(ys[1], ys[0], edges[1]):
            y = self.top + place
            half = 0.5 * page.length(text, 7)
            if self.top <= y - half and y + half <= self.bottom:
                page.line((self.left - 3 * pt, self.left), (y, y), 0.7)
                style = {"ha": "right", "va": "center", "rotation": 90, "rotation_mode": "default"}
                page.write(self.left - 4.5 * pt, y, text, 7, color=SOFT, **style)
        if crs_name:
            text = page.fitted(f"Coordinates: {crs_name}", 7, page.right - page.left)
            end = self.right if page.length(text, 7) < self.right - page.left else page.right
            page.write(end, self.bottom + 20.5 * pt, text, 7, ha="right", color=SOFT)
        return self.bottom + UNDER_MAP * page.dpi


def ticks(values: Floats, others: Floats, places: Floats) -> list[tuple[float, str]]:
    """Round values along an edge: their places and labels; none where the grid is turned away."""
    change = np.diff(values)
    span = float(abs(values[-1] - values[0]))
    one_way = bool((change > 0).all() or (change < 0).all())
    if not one_way or span < float(abs(others[-1] - others[0])):
        return []
    step = next(s for s in _round_steps(span / 7.0) if s >= span / 7.0)
    order = 1 if change[0] > 0 else -1
    first = np.ceil(values.min() / step)
    digits = max(0, -int(np.floor(np.log10(step) + 1e-9)))
    found = []
    for i in range(int(np.floor(values.max() / step) - first) + 1):
        value = (first + i) * step
        place = float(np.interp(value, values[::order], places[::order]))
        found.append((place, f"{value:,.{digits}f}".replace(",", "\u2009").replace("-", "\u2212")))
    return found


def ring_distances(range_m: float) -> list[float]:
    """Distances of the rings [m]: round ones inside the range and the range itself."""
    step = next(s for s in _round_steps(range_m / 4.0) if s >= range_m / 4.0)
    inner = [step * i for i in range(1, 5) if step * i < range_m * 0.88]
    return [*inner, range_m]


def round_down(length: float) -> float:
    """Greatest 1, 2 or 5 times a power of ten that is not more than a length."""
    return max(s for s in _round_steps(length / 10) if s <= length)


def _round_steps(low: float) -> list[float]:
    power = int(np.floor(np.log10(low)))
    return [float(f"{lead}e{power + i}") for i in range(3) for lead in (1, 2, 5)]


def told_length(metres: float) -> str:
    """Length in words, metres below one kilometre."""
    return f"{metres / 1000:.6g} km" if metres >= 1000 else f"{metres:.4g} m"


def _fonts() -> dict[bool, Any]:
    """Regular and bold font that come with matplotlib, whatever the machine has."""
    import matplotlib  # noqa: PLC0415
    from matplotlib.font_manager import FontProperties  # noqa: PLC0415

    folder = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    names = {False: "DejaVuSans.ttf", True: "DejaVuSans-Bold.ttf"}
    return {bold: FontProperties(fname=str(folder / name)) for bold, name in names.items()}


def _printable(text: str, font: Any) -> str:
    """Put a box for what the font cannot write and a space for what is no character."""
    from matplotlib.font_manager import get_font  # noqa: PLC0415

    known = get_font(font.get_file()).get_charmap()
    spaced = (c if c.isprintable() else " " for c in text)
    return "".join(c if ord(c) in known else "\u25a1" for c in spaced)
