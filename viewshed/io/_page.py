"""The page of the map: heading, frame, scale, legend, table and the sentences at the foot.

Everything is placed in pixels of the page. matplotlib is loaded when a page is drawn.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.io._ground import Floats, Rgb, View, colour, index_of, paint, plane, view_of

if TYPE_CHECKING:
    from viewshed.io.picture import Scene, Words

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
            from matplotlib.patheffects import withStroke

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
        from matplotlib.lines import Line2D

        clip = style.pop("clip", None)
        line = Line2D(xs, ys, linewidth=width, color=color, **style)
        self.axes.add_line(line)
        if clip is not None:
            line.set_clip_path(clip)

    def box(self, x: float, y: float, width: float, height: float, **style: Any) -> None:
        """Draw a rectangle from its top left corner."""
        from matplotlib.patches import Rectangle

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
        y += 16 * pt
        self.write(self.left, y, self.fitted(f"Elevation: {words.dem_name}", 9, room), 9)
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
        from matplotlib.patches import Polygon

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
            colour(rgb, shares, shade, 0)
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
        from matplotlib.patches import Rectangle

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
            wide = page.length(text, 7.5) + 2 * pt
            page.box(x - wide / 2, y - 4.5 * pt, wide, 9 * pt, fc=HALO, ec="none", zorder=4.9)
            page.write(x, y + 2.7 * pt, text, 7.5, ha="center", halo=2.4, zorder=5)

    def coordinates(self, crs_name: str) -> float:
        """Tick the grid's own coordinates along two sides; give where the next thing can begin."""
        page, pt = self.page, self.page.dpi / 72.0
        view, count = self.view, 129
        edges = (np.linspace(0.0, view.width, count), np.linspace(0.0, view.height, count))
        low = plane(view, edges[0], np.full(count, float(view.height)))
        side = plane(view, np.zeros(count), edges[1])
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
    import matplotlib
    from matplotlib.font_manager import FontProperties

    folder = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    names = {False: "DejaVuSans.ttf", True: "DejaVuSans-Bold.ttf"}
    return {bold: FontProperties(fname=str(folder / name)) for bold, name in names.items()}


def _printable(text: str, font: Any) -> str:
    """Put a box for what the font cannot write and a space for what is no character."""
    from matplotlib.font_manager import get_font

    known = get_font(font.get_file()).get_charmap()
    spaced = (c if c.isprintable() else " " for c in text)
    return "".join(c if ord(c) in known else "\u25a1" for c in spaced)
