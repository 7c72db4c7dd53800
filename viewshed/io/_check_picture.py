"""The small picture of an elevation grid: tinted heights in relief, voids hatched, scale, place."""

from __future__ import annotations

import os
import uuid
from dataclasses import dataclass
from math import floor, log10
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from viewshed import extent
from viewshed.errors import OutputError
from viewshed.io._ground import light_on
from viewshed.io._png import png_of
from viewshed.io._sheet import Sheet
from viewshed.io.checkup import Checkup, crs_words, extent_words, told_share

if TYPE_CHECKING:
    from viewshed.grid import FloatArray

#: Pixels: the largest map, the margin, what is above, below and beside the map.
MAP, MARGIN, HEAD, FOOT, SIDE = (800, 700), 30, 74, 84, 170
#: Least width of the sheet [pixels].
LEAST_WIDTH = 640
DPI = 100
INK, SOFT = "#1d1b20", "#6b6670"
#: From the lowest ground to the highest, ever lighter, so that it reads in grey print too.
TINTS = (
    (0.36, 0.39, 0.42),
    (0.45, 0.54, 0.52),
    (0.62, 0.67, 0.56),
    (0.86, 0.80, 0.60),
    (1.00, 1.00, 0.96),
)
#: Voids: dark, and striped where there is room for stripes.
VOID, STRIPE = (0.30, 0.05, 0.35), (1.0, 0.83, 0.35)
#: Share of heights left out at both ends of the tints, so that a few peaks do not take them all.
CLIPPED = 0.5
#: Least lightness of ground that lies away from the light.
DEEPEST_SHADE = 0.62

Rgb = NDArray[np.uint8]


@dataclass(frozen=True)
class Plane:
    """What part of the plane of the CRS is drawn, stretched so that lengths are true in the middle.

    Attributes
    ----------
    left, top : float
        Corner [CRS units].
    pixel_x, pixel_y : float
        CRS units in a pixel, both positive.
    pixel_m : float
        Metres in a pixel.
    width, height : int
        Size [pixels].
    """

    left: float
    top: float
    pixel_x: float
    pixel_y: float
    pixel_m: float
    width: int
    height: int


def draw_picture(
    path: str | os.PathLike[str], checkup: Checkup, *, overwrite: bool = False
) -> None:
    """Draw the picture and write it as PNG, whole or not at all.

    The same grid gives the same bytes with the same libraries.

    Parameters
    ----------
    path : path
        File to write.
    checkup : Checkup
        What is drawn.
    overwrite : bool, optional
        Replace a file that is there.

    Raises
    ------
    OutputError
        As from `check_target`, if the file belongs to the elevation grid, or if it cannot be
        written. Nothing is left behind then.
    """
    check_target(path, overwrite=overwrite)
    final = Path(path)
    files = (file for tile in checkup.terrain.tiles for file in tile.files)
    if final.exists() and any(final.samefile(file) for file in files if file.exists()):
        msg = f"{final}: is a file of the elevation grid; give another name for the picture"
        raise OutputError(msg)
    data = _png(checkup)
    draft = final.with_name(f".{final.name}-{os.getpid()}-{uuid.uuid4().hex[:8]}")
    try:
        with draft.open("xb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        if draft.read_bytes() != data:
            msg = f"{final}: does not read back as written; the disk may be full"
            raise OutputError(msg)
        draft.replace(final)
    except OutputError:
        raise
    except OSError as error:
        reason = error.strerror or str(error)
        msg = f"{final}: cannot be written: {reason}; free some space or choose another folder"
        raise OutputError(msg) from error
    finally:
        draft.unlink(missing_ok=True)


def check_target(path: str | os.PathLike[str], *, overwrite: bool) -> None:
    """Refuse a file that cannot be written, before any work.

    Raises
    ------
    OutputError
        If the file exists and `overwrite` is not set, it is a folder, or its folder is missing or
        cannot be written into.
    """
    final = Path(path)
    if final.is_dir():
        msg = f"{final}: is a folder; give the name of a file for the picture"
        raise OutputError(msg)
    if os.path.lexists(final) and not overwrite:
        msg = f"{final}: exists; use --overwrite to replace it"
        raise OutputError(msg)
    if not final.parent.is_dir():
        msg = f"{final.parent}: no such folder; make it or choose another one for the picture"
        raise OutputError(msg)
    if not os.access(final.parent, os.W_OK | os.X_OK):
        msg = f"{final.parent}: is a folder that cannot be written into; choose another one"
        raise OutputError(msg)


def _png(checkup: Checkup) -> bytes:
    plane = _plane(checkup)
    width = max(LEAST_WIDTH, MARGIN + plane.width + SIDE)
    sheet = _Sheet(DPI, (width, HEAD + plane.height + FOOT))
    sheet.draw(checkup, plane)
    return png_of(sheet.canvas.pixels, DPI)


# --- the map ------------------------------------------------------------------------------------


def _plane(checkup: Checkup) -> Plane:
    """Choose the scale so that the whole grid fits."""
    grid = checkup.terrain.grid
    left, bottom, right, top = grid.bounds
    x, y = (left + right) / 2.0, (bottom + top) / 2.0
    unit_x, unit_y = extent.unit_lengths(grid, x, y)
    wide, tall = (right - left) * unit_x, (top - bottom) * unit_y
    pixel = max(wide / MAP[0], tall / MAP[1])
    # a grid far longer than wide still gets a line
    size = [max(4, round(length / pixel)) for length in (wide, tall)]
    return Plane(left, top, (right - left) / size[0], (top - bottom) / size[1], pixel, *size)


def _paint(checkup: Checkup, plane: Plane, span: tuple[float, float]) -> Rgb:
    """Draw the ground and its voids; what is outside the grid stays white."""
    grid, found = checkup.terrain.grid, checkup.found
    heights, voids = found.overview()
    light = _light(checkup, heights)
    x = plane.left + (np.arange(plane.width) + 0.5) * plane.pixel_x
    y = plane.top - (np.arange(plane.height) + 0.5) * plane.pixel_y
    row, col = grid.rowcol(x[None, :], y[:, None])
    inside = (row >= -0.5) & (row < grid.rows - 0.5) & (col >= -0.5) & (col < grid.cols - 0.5)
    i = np.where(inside, (row + 0.5) // found.by, 0).astype(np.intp)
    j = np.where(inside, (col + 0.5) // found.bx, 0).astype(np.intp)
    i, j = np.minimum(i, heights.shape[0] - 1), np.minimum(j, heights.shape[1] - 1)
    z, shade = heights[i, j], light[i, j]
    rgb = _tint(z, span) * shade[..., None]
    void = inside & (voids[i, j] > 0.0)
    _add_specks(void, checkup, plane, voids)
    rgb[void] = VOID
    down, right = np.indices(void.shape)
    rgb[_inner(void & np.isnan(z)) & ((down + right) % 12 < 6)] = STRIPE
    rgb[~inside & ~void] = 1.0
    return _pixels(rgb)


def _add_specks(
    void: NDArray[np.bool_], checkup: Checkup, plane: Plane, voids: FloatArray
) -> None:
    """Put every void into a mask, as a square of two pixels, so that none falls between pixels."""
    found = checkup.found
    i, j = np.nonzero(voids > 0.0)
    x, y = checkup.terrain.grid.xy((i + 0.5) * found.by - 0.5, (j + 0.5) * found.bx - 0.5)
    right = ((x - plane.left) / plane.pixel_x - 0.5).astype(np.intp)
    down = ((plane.top - y) / plane.pixel_y - 0.5).astype(np.intp)
    for shift in (0, 1):
        for other in (0, 1):
            row, col = np.minimum(down + shift, plane.height - 1), right + other
            void[row, np.minimum(col, plane.width - 1)] = True


def _light(checkup: Checkup, heights: NDArray[np.float32]) -> NDArray[np.float32]:
    """Give what is left of each tint on slopes, from the deepest shade to a little over one."""
    found, grid = checkup.found, checkup.terrain.grid
    t, (left, bottom, right, top) = grid.transform, grid.bounds
    unit_x, unit_y = extent.unit_lengths(grid, (left + right) / 2.0, (bottom + top) / 2.0)
    steps = np.array([[t.a * unit_x, t.b * unit_x], [t.d * unit_y, t.e * unit_y]])
    steps *= np.array([found.bx, found.by])
    light = light_on(heights, steps)
    return np.asarray(DEEPEST_SHADE + (1.02 - DEEPEST_SHADE) * np.clip(light / 0.85, 0, 1), "f4")


def _pixels(rgb: FloatArray) -> Rgb:
    return (np.clip(rgb, 0, 1) * 255 + 0.5).astype(np.uint8)


def _tint(heights: Any, span: tuple[float, float]) -> FloatArray:
    share = np.clip((np.nan_to_num(heights) - span[0]) / max(span[1] - span[0], 1e-6), 0.0, 1.0)
    at = np.linspace(0.0, 1.0, len(TINTS))
    return np.stack([np.interp(share, at, band) for band in np.transpose(TINTS)], axis=-1)


def _inner(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Give the pixels of a mask that are well inside it."""
    inner = mask.copy()
    for axis in (0, 1):
        for shift in (-2, -1, 1, 2):
            inner &= np.roll(mask, shift, axis)
    return inner


def _span(checkup: Checkup) -> tuple[float, float]:
    """Choose the heights that the tints run between."""
    heights = checkup.found.overview()[0]
    known = heights[np.isfinite(heights)]
    if not known.size:
        return 0.0, 1.0
    low, high = (float(v) for v in np.percentile(known, [CLIPPED, 100.0 - CLIPPED]))
    return (low, high) if high - low > 1e-3 else (low - 0.5, low + 0.5)


# --- the sheet ----------------------------------------------------------------------------------


class _Sheet(Sheet):
    """The sheet in pixels, right and down from its top left corner."""

    def draw(self, checkup: Checkup, plane: Plane) -> None:
        """Put everything in its place."""
        span, top = _span(checkup), HEAD
        self._line(MARGIN, 34, _title(checkup), 15, bold=True)
        self._line(MARGIN, 58, crs_words(checkup.terrain), 9, color=SOFT)
        self.image(_paint(checkup, plane, span), MARGIN, top)
        self.box(MARGIN, top, plane.width, plane.height, edge=INK, line=0.8, layer=3)
        self._key(checkup, MARGIN + plane.width + 26, top, span, plane)
        self._bar(plane, top + plane.height + 34)
        self._line(MARGIN, self.height - 16, extent_words(checkup.terrain), 9)
        self.canvas.finish()

    def _line(self, x: float, y: float, text: str, size: float, **style: Any) -> None:
        """Write a line, its middle left out if it would leave the sheet."""
        room = self.width - MARGIN / 2 - x
        fitted = self.fitted(text, size, room, bold=style.get("bold", False))
        self.write(x, y, fitted, size, **style)

    def _key(
        self, checkup: Checkup, x: float, y: float, span: tuple[float, float], plane: Plane
    ) -> None:
        """Draw the ramp of heights and the sign of voids."""
        if checkup.found.known:
            tall = max(40, min(260, plane.height - 70))
            ramp = np.linspace(span[1], span[0], tall)[:, None]
            self.write(x, y + 10, "Height [m]", 9, color=SOFT)
            self.image(_pixels(_tint(ramp, span)).repeat(22, axis=1), x, y + 20)
            self.box(x, y + 20, 22, tall, edge=SOFT, line=0.6, layer=3)
            digits = 0 if span[1] - span[0] >= 10 else 2
            found = checkup.found
            ends = {0.0: found.high > span[1], 0.5: False, 1.0: found.low < span[0]}
            for share, is_clipped in ends.items():
                text = f"{span[1] + share * (span[0] - span[1]):.{digits}f}"
                text += (" and more" if share == 0.0 else " and less") if is_clipped else ""
                self.write(x + 30, y + 20 + share * tall, text, 9, middle=True)
            y += tall + 40
        if checkup.voids:
            void = np.ones((14, 22), bool)
            rgb = np.empty((*void.shape, 3))
            rgb[:] = VOID
            down, right = np.indices(void.shape)
            rgb[_inner(np.pad(void, 2))[2:-2, 2:-2] & ((down + right) % 12 < 6)] = STRIPE
            self.image(_pixels(rgb), x, y)
            self.write(x + 30, y + 11, "void", 9)
            self._line(x, y + 30, told_share(checkup.voids, checkup.cells), 9, color=SOFT)

    def _bar(self, plane: Plane, y: float) -> None:
        """Draw a bar of a round length, true in the middle of the map."""
        length = _round_down(0.4 * max(plane.width, 250) * plane.pixel_m)
        whole = length / plane.pixel_m
        for i in range(4):
            fill = INK if i % 2 == 0 else "white"
            self.box(MARGIN + i * whole / 4, y - 6, whole / 4, 6, fill=fill, edge=INK, line=0.6)
        told = f"{length / 1000:g} km" if length >= 1000 else f"{length:g} m"
        self.write(MARGIN + whole + 8, y, f"{told} (true at the centre)", 9)


def _title(checkup: Checkup) -> str:
    paths = checkup.terrain.paths
    more = f" and {len(paths) - 1} more" if len(paths) > 1 else ""
    return f"{paths[0].name}{more}"


def _round_down(length: float) -> float:
    """Give the greatest 1, 2 or 5 times a power of ten that is not more than a length."""
    power = floor(log10(length))
    return max(
        step for lead in (1, 2, 5, 10) if (step := float(f"{lead}e{power}")) <= length * (1 + 1e-9)
    )
