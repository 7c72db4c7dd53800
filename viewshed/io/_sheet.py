"""The sheet that the page is drawn on: lines, boxes, pixels and text.

Everything is placed in pixels of the page; widths of lines and sizes of text are in points.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from viewshed.io._canvas import HALO, Box, Canvas, Letters, font_of, has_letter

#: Page [inches], A4 upright, and what is kept free at its sides.
PAGE_WIDTH, PAGE_HEIGHT = 8.27, 11.69
MARGIN = 0.55
INK = "#1d1b20"
SOFT = "#6b6670"
RULE = "#b9b4bd"


class Sheet:
    """A page in pixels, right and down from its top left corner.

    Parameters
    ----------
    dpi : int
        Pixels an inch.
    size : (width, height), optional
        Its size [pixels]; A4 upright unless given.
    """

    def __init__(self, dpi: int, size: tuple[int, int] | None = None) -> None:
        self.dpi = dpi
        self.width, self.height = size or (round(PAGE_WIDTH * dpi), round(PAGE_HEIGHT * dpi))
        self.canvas = Canvas(self.width, self.height)
        self.left, self.right = MARGIN * dpi, self.width - MARGIN * dpi
        self._lengths: dict[tuple[str, float, bool], float] = {}

    def write(self, x: float, y: float, text: str, size: float, **style: Any) -> None:
        """Write one line; y is its base line."""
        pt = self.dpi / 72.0
        layer, halo = style.pop("layer", 3), 0.5 * style.pop("halo", 0.0) * pt
        letters = Letters(size * pt, style.pop("color", INK), style.pop("bold", False), halo)
        self.canvas.add(layer, self.canvas.text, x, y, printable(text), letters, **style)

    def length(self, text: str, size: float, *, bold: bool = False) -> float:
        """Width of a line of text [pixels]."""
        key = (text, size, bold)
        if key not in self._lengths:
            font = font_of(size * self.dpi / 72.0, bold)
            self._lengths[key] = font.getlength(printable(text))
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
        """Draw a line, cut off at a box if one is given."""
        pt = self.dpi / 72.0
        layer = style.pop("layer", 2)
        self.canvas.add(layer, self.canvas.line, xs, ys, width=width * pt, color=color, **style)

    def box(self, x: float, y: float, width: float, height: float, **style: Any) -> None:
        """Draw a box from its top left corner; the width of its edge is in points."""
        layer, edge_width = style.pop("layer", 1), style.pop("line", 1.0) * self.dpi / 72.0
        box: Box = (x, y, x + width, y + height)
        self.canvas.add(layer, self.canvas.box, box, width=edge_width, **style)

    def image(self, rgb: NDArray[np.uint8], x: float, y: float) -> None:
        """Lay pixels on the page one to one."""
        self.canvas.add(1, self.canvas.picture, rgb, round(x), round(y))

    def mark(self, xs: Any, ys: Any, size: float = 9.5) -> None:
        """Draw observers as rings with a dot, or as dots where that is too small [points]."""
        layers = ((1.0, HALO), (0.79, INK), (0.484, HALO), (0.232, INK))
        for share, color in layers if size > 7 else layers[:2]:
            whole = size * share * self.dpi / 72.0
            self.canvas.add(6, self.canvas.discs, xs, ys, whole, color)


def is_writable(text: str) -> bool:
    """Tell whether the page's font has every letter of a text."""
    return printable(text) == text


def printable(text: str) -> str:
    """Put a box for what the font cannot write and a space for what is no character."""
    spaced = (c if c.isprintable() else " " for c in text)
    return "".join(c if has_letter(c) else "\u25a1" for c in spaced)
