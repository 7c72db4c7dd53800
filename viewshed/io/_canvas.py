"""Pixels that lines, discs, boxes, pictures and letters are drawn on, all of them smoothed.

Places are in pixels, right and down from the top left corner of the canvas.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache, partial
from importlib.util import find_spec
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageColor, ImageDraw, ImageFont

Floats = NDArray[np.floating[Any]]
#: Left, top, right and bottom [pixels].
Box = tuple[float, float, float, float]

#: Longest piece of a line that is looked at together with the pixels around it [pixels].
PIECE = 5.0
#: Pixels along the side of a pixel in which the inside of a polygon is counted.
FINER = 8
HALO = "white"
_FONTS = {False: "DejaVuSans.ttf", True: "DejaVuSans-Bold.ttf"}
#: No character, so that a font shows it as what it has no letter for.
_NO_CHARACTER = "\uffff"


class Letters(NamedTuple):
    """How a text is written.

    Attributes
    ----------
    size : float
        Size [pixels].
    color : str
        Colour.
    bold : bool
        Whether the letters are bold.
    halo : float
        Width of what is left white round the letters [pixels].
    """

    size: float
    color: str
    bold: bool = False
    halo: float = 0.0


class Canvas:
    """A white sheet of pixels.

    What is drawn is laid down by `finish`, the lowest layer first, and within a layer in the
    order in which it was drawn.

    Parameters
    ----------
    width, height : int
        Size [pixels].

    Attributes
    ----------
    pixels : numpy.ndarray, shape (height, width, 3), uint8
        Red, green and blue.
    """

    def __init__(self, width: int, height: int) -> None:
        self.pixels = np.full((height, width, 3), 255, np.uint8)
        self._covered = np.zeros(height * width, np.float32)
        self._later: list[tuple[float, Callable[[], object]]] = []

    def add(self, layer: float, draw: Callable[..., object], *args: Any, **style: Any) -> None:
        """Draw something with a method of this canvas, in a layer."""
        self._later.append((layer, partial(draw, *args, **style)))

    def finish(self) -> None:
        """Lay down everything that was drawn."""
        for _, draw in sorted(self._later, key=lambda one: one[0]):
            draw()
        self._later.clear()

    def picture(self, rgb: NDArray[np.uint8], x: int, y: int) -> None:
        """Lay pixels on pixels; they must lie on the canvas."""
        self.pixels[y : y + rgb.shape[0], x : x + rgb.shape[1]] = rgb

    def box(
        self, box: Box, *, fill: str | None = None, edge: str | None = None, width: float = 1.0
    ) -> None:
        """Draw an upright box along whole pixels; its edge lies half inside."""
        left, top, right, bottom = (round(v) for v in box)
        if fill is not None:
            self._fill((left, top, right, bottom), fill)
        if edge is None:
            return
        wide = max(1, round(width))
        out = wide // 2
        a, b, c, d = left - out, top - out, right - out, bottom - out
        for side in (
            (a, b, c + wide, b + wide),
            (a, d, c + wide, d + wide),
            (a, b, a + wide, d + wide),
            (c, b, c + wide, d + wide),
        ):
            self._fill(side, edge)

    def _fill(self, box: tuple[int, int, int, int], color: str) -> None:
        left, top, right, bottom = (max(v, 0) for v in box)
        self.pixels[top:bottom, left:right] = _rgb(color)

    def line(
        self,
        xs: Any,
        ys: Any,
        *,
        width: float,
        color: str,
        alpha: float = 1.0,
        dashes: tuple[float, float] | None = None,
        clip: Box | None = None,
    ) -> None:
        """Draw a line through points, upright and level ones along whole pixels.

        Parameters
        ----------
        xs, ys : array_like, shape (points,)
            The points.
        width : float
            Width [pixels].
        color : str
            Colour.
        alpha : float
            1 for a line that covers what is under it, less for one that lets it through.
        dashes : tuple of float, optional
            Length of a dash and of the gap after it [pixels].
        clip : tuple of float, optional
            Box outside which nothing is drawn.
        """
        points = np.stack([np.asarray(xs, float), np.asarray(ys, float)], axis=1)
        if len(points) == 2 and (points[0] == points[1]).any():
            low, high = points.min(axis=0), points.max(axis=0)
            wide = max(1, round(width))
            across = 1 if low[1] == high[1] else 0
            low[across] = round(low[across] - wide / 2)
            high[across] = low[across] + wide
            self.box((low[0], low[1], high[0], high[1]), fill=color)
            return
        starts, ends = points[:-1], points[1:]
        if dashes is not None:
            starts, ends = _dashes(starts, ends, dashes, 0.5 * width)
        self._strokes(*_pieces(starts, ends), 0.5 * width, color, alpha, clip)

    def discs(self, xs: Any, ys: Any, size: float, color: str) -> None:
        """Draw discs of a size, their diameter, about points."""
        middles = np.stack([np.asarray(xs, float), np.asarray(ys, float)], axis=1)
        self._strokes(middles, middles, 0.5 * size, color, 1.0, None)

    def polygon(self, corners: list[tuple[float, float]], fill: str) -> None:
        """Fill a small polygon."""
        points = np.array(corners)
        x, y = (int(v) for v in np.floor(points.min(axis=0)))
        wide, tall = (int(v) for v in np.ceil(points.max(axis=0)) - (x, y))
        mask = Image.new("L", (wide * FINER, tall * FINER))
        placed = [tuple(p) for p in (points - (x, y)) * FINER]
        ImageDraw.Draw(mask).polygon(placed, fill=255)
        self._stain(np.asarray(mask.reduce(FINER)), x, y, fill)

    def text(
        self,
        x: float,
        y: float,
        text: str,
        letters: Letters,
        *,
        align: str = "left",
        middle: bool = False,
        upright: bool = False,
    ) -> Box:
        """Write a line of text.

        Parameters
        ----------
        x, y : float
            Where its base line starts, is halved or ends.
        text : str
            What is written; the font must have its letters.
        letters : Letters
            How it is written.
        align : {"left", "center", "right"}
            What of the text stands at x.
        middle : bool
            Whether half the height of the letters stands at y, and not the base line.
        upright : bool
            Whether it is turned by a quarter, to be read from the right, its foot at x and its
            middle at y.

        Returns
        -------
        tuple of float
            Box of the letters.
        """
        font = font_of(letters.size, letters.bold)
        left, top, right, bottom = font.getbbox(text, anchor="ls")
        if upright:
            mask, _ = _mask(font, text, 0.0)
            turned = np.rot90(mask)[1:-1, 1:-1]
            tall, wide = turned.shape
            corner = round(x) - wide, round(y - tall / 2)
            self._stain(turned, *corner, letters.color)
            return *corner, corner[0] + wide, corner[1] + tall
        x -= {"left": 0.0, "center": 0.5, "right": 1.0}[align] * font.getlength(text)
        if middle:
            y -= 0.5 * (top + bottom)
        x, y = round(x), round(y)
        under = [(letters.halo, HALO)] if letters.halo else []
        for stroke, ink in [*under, (0.0, letters.color)]:
            mask, corner = _mask(font, text, stroke)
            self._stain(mask, x + corner[0], y + corner[1], ink)
        return x + left, y + top, x + right, y + bottom

    def _stain(self, mask: NDArray[np.uint8], x: int, y: int, color: str) -> None:
        """Colour pixels as far as a mask (255 is all) says."""
        height, width, _ = self.pixels.shape
        mask = mask[max(-y, 0) : max(height - y, 0), max(-x, 0) : max(width - x, 0)]
        x, y = max(x, 0), max(y, 0)
        under = self.pixels[y : y + mask.shape[0], x : x + mask.shape[1]]
        part = mask[..., None].astype(np.float32) / np.float32(255)
        under[:] = under + (_rgb(color) - under) * part + np.float32(0.5)

    def _strokes(
        self,
        starts: Floats,
        ends: Floats,
        radius: float,
        color: str,
        alpha: float,
        clip: Box | None,
    ) -> None:
        """Colour what lies within a radius of any of some pieces."""
        height, width, _ = self.pixels.shape
        left, top, right, bottom = clip or (0, 0, width, height)
        middle = 0.5 * (starts + ends)
        reach = radius + 1.0 + 0.5 * (np.hypot(*(ends - starts).T).max() if len(starts) else 0.0)
        inside = (middle > (left - reach, top - reach)) & (middle < (right + reach, bottom + reach))
        near = inside.all(axis=1)
        starts, along, middle = starts[near], (ends - starts)[near], middle[near]
        steps = np.arange(-int(np.ceil(reach)), int(np.ceil(reach)) + 1)
        x = (np.floor(middle[:, 0]).astype(np.int64)[:, None] + steps)[:, None, :]
        y = (np.floor(middle[:, 1]).astype(np.int64)[:, None] + steps)[:, :, None]
        right_of = (x + 0.5 - starts[:, 0, None, None]).astype(np.float32)
        below = (y + 0.5 - starts[:, 1, None, None]).astype(np.float32)
        dx, dy = (along[:, axis, None, None].astype(np.float32) for axis in (0, 1))
        square = np.maximum(dx * dx + dy * dy, np.float32(1e-12))
        share = np.clip((right_of * dx + below * dy) / square, 0, 1)
        apart = np.hypot(right_of - share * dx, below - share * dy)
        cover = np.minimum(np.float32(radius + 0.5) - apart, np.float32(1))
        on = (cover > 0) & (x >= left) & (x < right) & (y >= top) & (y < bottom)
        at = (y * width + x)[on]
        np.maximum.at(self._covered, at, cover[on])
        part = (self._covered[at] * np.float32(alpha))[:, None]
        flat = self.pixels.reshape(-1, 3)
        under = flat[at].astype(np.float32)
        flat[at] = (under + (_rgb(color) - under) * part + np.float32(0.5)).astype(np.uint8)
        self._covered[at] = 0


def _mask(
    font: ImageFont.FreeTypeFont, text: str, stroke: float
) -> tuple[NDArray[np.uint8], tuple[int, int]]:
    """Give what letters cover of pixels, a pixel kept free all round, and where it begins."""
    box = font.getbbox(text, anchor="ls", stroke_width=stroke)
    left, top = (int(np.floor(v)) - 1 for v in box[:2])
    right, bottom = (int(np.ceil(v)) + 1 for v in box[2:])
    image = Image.new("L", (right - left, bottom - top))
    draw = ImageDraw.Draw(image)
    draw.text((-left, -top), text, fill=255, font=font, anchor="ls", stroke_width=stroke)
    return np.asarray(image), (left, top)


def _pieces(starts: Floats, ends: Floats) -> tuple[Floats, Floats]:
    """Cut segments into short pieces."""
    along = ends - starts
    number = np.maximum(np.ceil(np.hypot(*along.T) / PIECE), 1).astype(np.intp)
    which = np.repeat(np.arange(len(starts)), number)
    n = np.arange(len(which)) - np.repeat(np.cumsum(number) - number, number)
    step = along[which] / number[which, None]
    first = starts[which] + n[:, None] * step
    return first, first + step


def _dashes(
    starts: Floats, ends: Floats, dashes: tuple[float, float], cap: float
) -> tuple[Floats, Floats]:
    """Cut segments that follow each other into dashes, less the round caps these will get."""
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*(ends - starts).T))])
    first = np.arange(0.0, along[-1], sum(dashes))
    points = np.concatenate([starts, ends[-1:]])

    def at(length: Floats) -> Floats:
        return np.stack([np.interp(length, along, axis) for axis in points.T], axis=1)

    return at(first + cap), at(np.maximum(first + dashes[0] - cap, first + cap))


def _rgb(color: str) -> NDArray[np.float32]:
    return np.array(ImageColor.getrgb(color)[:3], np.float32)


@lru_cache(maxsize=64)
def font_of(size: float, bold: bool) -> ImageFont.FreeTypeFont:
    """Give the font that comes with matplotlib, whatever the machine has, at a size [pixels]."""
    file = _font_folder() / _FONTS[bold]
    return ImageFont.truetype(str(file), size, layout_engine=ImageFont.Layout.BASIC)


def _font_folder() -> Path:
    """Find the fonts without loading matplotlib, which would take longer than the drawing."""
    spec = find_spec("matplotlib")
    for home in (spec and spec.submodule_search_locations) or ():
        folder = Path(home) / "mpl-data" / "fonts" / "ttf"
        if folder.is_dir():
            return folder
    import matplotlib

    return Path(matplotlib.get_data_path()) / "fonts" / "ttf"


@lru_cache(maxsize=4096)
def has_letter(letter: str) -> bool:
    """Tell whether the font has a letter for a character."""
    font = font_of(32.0, True)
    shown, missing = font.getmask(letter), font.getmask(_NO_CHARACTER)
    return letter.isascii() or shown.size != missing.size or bytes(shown) != bytes(missing)
