"""The sheet that the page is drawn on: lines, boxes, pixels and text.

Everything is placed in pixels of the page. matplotlib is loaded when a page is drawn.
"""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

#: Page [inches], A4 upright, and what is kept free at its sides.
PAGE_WIDTH, PAGE_HEIGHT = 8.27, 11.69
MARGIN = 0.55
INK = "#1d1b20"
SOFT = "#6b6670"
RULE = "#b9b4bd"
HALO = "white"


class Sheet:
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
        self._lengths: dict[tuple[str, float, bool], float] = {}

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
        key = (text, size, bold)
        if key not in self._lengths:
            font = self.fonts[bold].copy()
            font.set_size(size)
            shown = _printable(text, font)
            extent = self.renderer.get_text_width_height_descent(shown, font, ismath=False)
            self._lengths[key] = float(extent[0])
        return self._lengths[key]

    def _is_within(self, words: list[str], size: float, width: float, *, bold: bool) -> bool:
        """Tell whether words fit in a line; the line is measured where their sum is no answer."""
        gap = self.length("a b", size, bold=bold) - self.length("ab", size, bold=bold)
        total = sum(self.length(word, size, bold=bold) + gap for word in words)
        if abs(total - width) > 0.04 * width:
            return total < width
        return self.length(" ".join(words), size, bold=bold) <= width

    def wrapped(self, text: str, size: float, width: float, *, bold: bool = False) -> list[str]:
        """Break a text into lines that fit a width; a word that does not fit is cut."""
        lines: list[list[str]] = []
        for word in text.split():
            if lines and self._is_within([*lines[-1], word], size, width, bold=bold):
                lines[-1].append(word)
            else:
                lines.append([self.fitted(word, size, width, bold=bold)])
        return [" ".join(words) for words in lines]

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

    def image(self, rgb: NDArray[np.float32], x: float, y: float) -> None:
        """Lay pixels on the page one to one."""
        x, y = round(x), round(y)
        whole = (np.clip(rgb, 0, 1) * 255 + 0.5).astype(np.uint8)
        extent = (x, x + rgb.shape[1], y + rgb.shape[0], y)
        self.axes.imshow(whole, extent=extent, interpolation="nearest", aspect="auto", zorder=1)
        self.axes.set(xlim=(0, self.width), ylim=(self.height, 0))

    def mark(self, xs: Any, ys: Any, size: float = 9.5) -> None:
        """Draw observers as rings with a dot, or as dots where that is too small [points]."""
        layers = ((1.0, HALO), (0.79, INK), (0.484, HALO), (0.232, INK))
        for share, color in layers if size > 7 else layers[:2]:
            style = {"marker": "o", "markersize": size * share, "markeredgewidth": 0, "zorder": 6}
            self.line(xs, ys, 0, color, **style)


def _fonts() -> dict[bool, Any]:
    """Regular and bold font that come with matplotlib, whatever the machine has."""
    import matplotlib
    from matplotlib.font_manager import FontProperties

    folder = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    names = {False: "DejaVuSans.ttf", True: "DejaVuSans-Bold.ttf"}
    return {bold: FontProperties(fname=str(folder / name)) for bold, name in names.items()}


def is_writable(text: str) -> bool:
    """Tell whether the page's font has every letter of a text."""
    font = _fonts()[True]
    return _printable(text, font) == text


def _printable(text: str, font: Any) -> str:
    """Put a box for what the font cannot write and a space for what is no character."""
    known = _letters(font.get_file())
    spaced = (c if c.isprintable() else " " for c in text)
    return "".join(c if ord(c) in known else "\u25a1" for c in spaced)


@lru_cache(maxsize=2)
def _letters(file: str) -> frozenset[int]:
    """Give the codes of the letters of a font."""
    from matplotlib.font_manager import get_font

    return frozenset(get_font(file).get_charmap())
