"""The page of the map: heading, frame, scale, legend, table and the sentences at the foot."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from viewshed.io._ground import View, colour, paint, ramp_of, view_of
from viewshed.io._map_box import MOST_NAMES, MOST_RINGS, UNDER_MAP, MapBox
from viewshed.io._round import round_down
from viewshed.io._sheet import INK, RULE, SOFT, Sheet
from viewshed.io._steps import Step, told_step
from viewshed.wording import told_length

if TYPE_CHECKING:
    from viewshed.io.picture import Scene, Words

#: Room for scale, legend and table [inches].
BAND_HEIGHT = 1.75


class Page(Sheet):
    """The whole page."""

    def compose(self, scene: Scene, words: Words) -> None:
        """Put everything in its place."""
        top, foot = self._heading(scene, words), self._foot(words)
        tall = foot - top - (UNDER_MAP + BAND_HEIGHT) * self.dpi
        room = round(self.right - self.left), max(round(tall), self.dpi)
        view = view_of(scene, *room)
        rgb, self.found = paint(scene, view)
        left = round(self.left + 0.5 * (room[0] - view.width))
        box = MapBox(self, scene, view, left, round(top))
        box.draw(rgb)
        bottom = box.coordinates(words.crs_name)
        self._band((bottom, foot - 5 * self.dpi / 72), words, box)
        self.canvas.finish()

    def _heading(self, scene: Scene, words: Words) -> float:
        """Write the question and what was asked it of; give where the map can begin."""
        pt, room = self.dpi / 72.0, self.right - self.left
        y = 0.5 * self.dpi + 7 * pt
        self.write(self.left, y, "WHAT CAN BE SEEN", 7.5, color=SOFT, bold=True)
        self.write(self.right, y, words.made_with, 7.5, color=SOFT, align="right")
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
        words: Words,
        box: MapBox,
    ) -> None:
        """Scale and north at the left, legend in the middle, the short table at the right."""
        width, (y, bottom) = self.right - self.left, ends
        self._scale(self.left, y, 0.25 * width, box)
        self._north(self.left + 0.25 * width - 10, y, box)
        self._legend((self.left + 0.30 * width, y), (0.32 * width, bottom), box)
        self._table(self.left + 0.645 * width, (y, bottom), 0.355 * width, words)

    def _heads(self, x: float, y: float, text: str) -> float:
        pt = self.dpi / 72.0
        self.write(x, y + 7 * pt, text, 7.5, color=SOFT, bold=True)
        return y + 13 * pt

    def _scale(self, x: float, y: float, room: float, box: MapBox) -> None:
        pt = self.dpi / 72.0
        y = self._heads(x, y, "SCALE")
        length = round_down(0.74 * room * box.view.pixel)
        whole, tall = length / box.view.pixel, 4.5 * pt
        y += 10 * pt
        for i in range(4):
            fill = INK if i % 2 == 0 else "white"
            self.box(x + i * whole / 4, y, whole / 4, tall, fill=fill, edge=INK, line=0.6)
        unit, factor = ("km", 1000.0) if length >= 1000 else ("m", 1.0)
        for share in (0.0, 0.5, 1.0):
            text = f"{share * length / factor:g}" + (f" {unit}" if share == 1.0 else "")
            align = "left" if share == 0 else "center"
            self.write(x + share * whole, y - 3 * pt, text, 7.5, align=align)
        notes = "Distances and bearings are true from the observer; north is up."
        if len(box.scene.observers) > 1:
            notes = f"North is up. Distances are true to {_stretch(box.view)} all over the map."
        y += tall + 3 * pt
        for text in self.wrapped(notes, 7, room - 20 * pt):
            y += 9.5 * pt
            self.write(x, y, text, 7, color=SOFT)

    def _north(self, x: float, y: float, box: MapBox) -> None:
        """Draw an arrow to true north."""
        pt = self.dpi / 72.0
        tip, foot, half = y + 9 * pt, y + 33 * pt, 6 * pt
        x -= half
        for side, fill in ((-1, INK), (1, "white")):
            corners = [(x, tip), (x + side * half, foot), (x, foot - 5 * pt)]
            self.canvas.add(1, self.canvas.polygon, corners, fill)
            xs, ys = zip(*corners, corners[0], strict=True)
            self.canvas.add(1, self.canvas.line, xs, ys, width=0.7 * pt, color=INK)
        self.write(x, y + 7 * pt, "N", 8.5, align="center", bold=True)

    def _legend(self, place: tuple[float, float], room: tuple[float, float], box: MapBox) -> None:
        """Say what the colours and lines mean, in as many rows as there are."""
        pt, scene = self.dpi / 72.0, box.scene
        (x, y), (width, bottom) = place, room
        y = self._heads(x, y, "LEGEND")
        rows = self._classes(scene, self.found)
        lines = self._lines(box)
        if scene.steps:
            y = self._ramp(x, y, width, scene.steps)
        step = min(13.5 * pt, (bottom - y) / (len(rows) + len(lines)))
        wide, tall = round(22 * pt), round(min(9 * pt, 0.8 * step))
        size = self._size([text for _, text in [*rows, *lines]], width - wide - 6 * pt)
        size = min(size, 0.62 * step / pt)
        shade = np.linspace(0.45, 0.9, wide, dtype=np.float32)[None, :].repeat(tall, axis=0)
        for kind, text in rows:
            shares = np.zeros((tall, wide, 5), np.uint8)
            shares[..., kind] = 255
            if kind == 0 and "mixed" in self.found:
                part = np.rint(255 * np.linspace(1.0, 0.0, wide) ** 2)
                shares[..., 0], shares[..., 2] = part, 255 - part
            self.image(colour(shares, shade, ramp_of(1 if scene.steps else 0)), x, y)
            self.box(round(x), round(y), wide, tall, edge=SOFT, line=0.5, layer=3)
            self._said(x + wide, y + 0.5 * tall, text, size)
            y += step
        for line, text in lines:
            middle = y + 0.5 * tall
            if line:
                self.line((x, x + wide), (middle, middle), 1.3)
            else:
                self.mark([x + 0.5 * wide], [middle], box.mark_size)
            self._said(x + wide, middle, text, size)
            y += step

    def _size(self, texts: list[str], width: float) -> float:
        """Size at which the longest of some texts fits a width [points]."""
        return min(8.0, *(8.0 * width / max(self.length(text, 8.0), 1.0) for text in texts))

    def _said(self, x: float, middle: float, text: str, size: float) -> None:
        pt = self.dpi / 72.0
        self.write(x + 6 * pt, middle + 0.36 * size * pt, text, size)

    def _classes(self, scene: Scene, found: frozenset[str]) -> list[tuple[int, str]]:
        """Classes that occur: their layer among the shares, and what they are."""
        sectors = any(marker.sector is not None for marker in scene.observers)
        partly = ", paler where in part" if "mixed" in found else ""
        every = {
            "visible": f"visible{partly}",
            "unresolved": "unresolved: view crosses a void",
            "hidden": "hidden by known terrain",
            "void": "void: height not known",
            "outside": "outside range or sector" if sectors else "outside the range",
        }
        shown = {"hidden", *found} | (set() if scene.steps else {"visible"})
        return [(i, text) for i, (name, text) in enumerate(every.items()) if name in shown]

    def _lines(self, box: MapBox) -> list[tuple[bool, str]]:
        """Say what the marks (False) and lines (True) on the map are."""
        observers = box.scene.observers
        least, most = (f(marker.range_m for marker in observers) for f in (min, max))
        if len(observers) == 1:
            return [(False, "observer"), (True, f"range, {told_length(most)}")]
        named = ""
        if box.named < len(observers) <= MOST_NAMES:
            named = ", not all named"
        rows = [(False, f"{len(observers)} observers{named}")]
        reach = told_length(most)
        reach = reach if least == most else f"{told_length(least)} to {reach}"
        if len(observers) <= MOST_RINGS:
            rows.append((True, f"range, {reach}"))
        elif box.scene.reach.outlines:
            rows.append((True, f"edge of all ranges, {reach} each"))
        return rows

    def _ramp(self, x: float, y: float, width: float, steps: list[Step]) -> float:
        """Draw the steps side by side with their numbers; give where the next row can begin."""
        pt = self.dpi / 72.0
        mixed = "mixed" in self.found
        text = f"seen by so many{', paler where in part' if mixed else ' observers'}"
        self.write(x, y + 6.5 * pt, text, self._size([text], width))
        y += 10.5 * pt
        each, tall = round(min(30 * pt, width / len(steps))), round(13 * pt)
        told = [told_step(step) for step in steps]
        size = self._size(told, 0.94 * each)
        ramp = ramp_of(len(steps))
        shade = np.linspace(0.45, 0.95, each, dtype=np.float32)[None, :].repeat(tall, axis=0)
        for i, label in enumerate(told):
            shares = np.zeros((tall, each, len(steps) + 4), np.uint8)
            shares[..., i] = 255
            left = round(x) + i * each
            self.image(colour(shares, shade, ramp), left, y)
            self.box(left, round(y), each, tall, edge=SOFT, line=0.5, layer=3)
            self.write(left + 0.5 * each, y + tall + 8 * pt, label, size, align="center")
        return y + tall + 13 * pt

    def _table(self, x: float, ends: tuple[float, float], width: float, words: Words) -> None:
        """Write label and value of each row, as large as the room allows; the first stands out."""
        pt = self.dpi / 72.0
        y = self._heads(x, ends[0], "RESULT") - 2 * pt
        for size in (8.0, 7.5, 7.0, 6.5, 6.0, 5.5):
            gap = 1.45 * size * pt
            sizes = [size] * len(words.summary)
            if sizes:
                sizes[0] = self._main_size(*words.summary[0], size, width)
            own_line = [
                self.length(label + value, s, bold=s > size) + 8 * pt > width
                for (label, value), s in zip(words.summary, sizes, strict=True)
            ]
            if y + gap * (len(own_line) + 0.85 * sum(own_line) + 0.8) <= ends[1]:
                break
        for (label, value), s, below in zip(words.summary, sizes, own_line, strict=True):
            main = s > size
            if y + gap * (1.4 + 0.85 * below) > ends[1]:
                break
            y += gap * (1.25 if main else 1.0)
            color, rule = (INK, 0.9) if main else (SOFT, 0.4)
            self.write(x, y, self.fitted(label, s, width, bold=main), s, color=color, bold=main)
            y += 0.85 * gap * below * s / size
            text = self.fitted(value, s, width, bold=main)
            self.write(x + width, y, text, s, align="right", bold=main)
            line = (y + 0.35 * size * pt,) * 2
            self.line((x, x + width), line, rule, INK if main else RULE)

    def _main_size(self, label: str, value: str, size: float, width: float) -> float:
        """Size of the row that stands out: larger, as far as label and value fit one line."""
        room = width - 8 * self.dpi / 72.0
        full = self.length(label + value, 1.25 * size, bold=True)
        return max(1.25 * size * min(1.0, room / full), 1.01 * size)

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


def _stretch(view: View) -> str:
    """Greatest error of a distance on the map, for an Earth that is a ball, in words."""
    far = max(abs(view.west), abs(view.west + view.width * view.pixel))
    high = max(abs(view.north), abs(view.north - view.height * view.pixel))
    angle = min(np.hypot(far, high) / 6.371e6, 3.0)
    percent = 100.0 * (angle / np.sin(angle) - 1.0)
    return f"{max(percent, 0.01):.1g} %"
