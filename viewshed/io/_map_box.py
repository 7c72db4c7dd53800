"""The map's frame on the page, with what is drawn over the ground."""

from __future__ import annotations

import re
from collections import Counter
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.io._canvas import HALO
from viewshed.io._ground import Rgb, View, index_of, plane
from viewshed.io._labels import Room, closest, place_names
from viewshed.io._reach import joint_outline
from viewshed.io._round import ring_distances, ticks
from viewshed.io._sheet import INK, SOFT, Sheet
from viewshed.wording import told_length

if TYPE_CHECKING:
    from viewshed.io.picture import Scene

#: Most observers whose ranges are drawn one by one; of more, the edge of all together.
MOST_RINGS = 12
#: Most observers of whom it is tried to name each.
MOST_NAMES = 100
#: Sizes of the mark of an observer [points].
MARK, SMALL_MARK, DOT = 9.5, 6.5, 4.0
#: A dash of a ring and the gap after it [points].
DASHES = 2.4, 1.8
#: Room for the coordinates under the map [inches].
UNDER_MAP = 0.45


class MapBox:
    """The map's frame on the page with what is drawn over the ground.

    Parameters
    ----------
    page : Sheet
        The page.
    scene : Scene
        What is drawn.
    view : View
        Part of the local plane in the frame.
    left, top : int
        Its corner on the page [pixels].
    """

    def __init__(self, page: Sheet, scene: Scene, view: View, left: int, top: int) -> None:
        self.page, self.scene, self.view = page, scene, view
        self.left, self.top = left, top
        self.bottom, self.right = top + view.height, left + view.width
        self.room = Room(self.left, self.top, self.right, self.bottom)
        self.places = [
            (float(x), float(y)) for x, y in zip(*self.at(*scene.reach.places.T), strict=True)
        ]
        self.mark_size = self._mark_size()
        self.named = 0

    def at(self, east: Any, north: Any) -> tuple[Any, Any]:
        """Place on the page of local coordinates."""
        right, down = self.view.place(east, north)
        return self.left + right, self.top + down

    def draw(self, rgb: Rgb) -> None:
        """Draw ground, ranges, sectors, observers with their names, and the frame."""
        page, view = self.page, self.view
        page.image(rgb, self.left, self.top)
        clip = (self.left, self.top, self.right, self.bottom)
        alone = len(self.scene.observers) == 1
        rings = ring_distances(self.scene.observers[0].range_m) if alone else []
        for distance in rings[:-1]:
            self._ring(distance, clip)
        self._outlines(clip)
        self._observers()
        self._distances(rings)
        page.box(self.left, self.top, view.width, view.height, edge=INK, line=0.9, layer=7)

    def _over(self, xs: Any, ys: Any, clip: Any, width: float, dashes: Any = None) -> None:
        for wide, color in ((width + 1.4, HALO), (width, INK)):
            style = {"dashes": dashes} if color == INK else {"alpha": 0.55}
            self.page.line(xs, ys, wide, color, clip=clip, layer=4, **style)

    def _ring(self, distance: float, clip: Any) -> None:
        """Draw a ring inside the range of the one observer."""
        sector = self.scene.observers[0].sector
        start, width = (0.0, 360.0) if sector is None else (sector.from_deg, sector.width_deg)
        a = np.radians(start + np.linspace(0.0, width, 721))
        dashes = tuple(part * self.page.dpi / 72.0 for part in DASHES)
        self._over(*self.at(distance * np.sin(a), distance * np.cos(a)), clip, 0.6, dashes)

    def _outlines(self, clip: Any) -> None:
        """Draw the edge of what each observer reaches, and of all together."""
        outlines = self.scene.reach.outlines
        if 1 < len(outlines) <= MOST_RINGS:
            for rim in outlines:
                self._over(*self.at(*rim), clip, 0.5)
        for edge in outlines if len(outlines) == 1 else joint_outline(outlines):
            self._over(*self.at(*edge), clip, 1.3)

    def _mark_size(self) -> float:
        """Size of the marks at which most observers stand clear of each other [points]."""
        if len(self.places) == 1:
            return MARK
        apart = 0.0
        if len(self.places) <= MOST_NAMES:
            apart = closest(self.places) * 72.0 / self.page.dpi
        return next((size for size in (MARK, SMALL_MARK) if size < 0.9 * apart), DOT)

    def _observers(self) -> None:
        """Draw the observers and the names for which there is room."""
        page, pt = self.page, self.page.dpi / 72.0
        shown = [place for place in self.places if self.room.holds(*place, 0, 0)]
        page.mark([x for x, _ in shown], [y for _, y in shown], self.mark_size)
        radius = 0.5 * self.mark_size * pt
        for place in shown:
            self.room.take(*place, radius, radius)
        if len(self.places) > MOST_NAMES:
            return
        size = 8.0 if len(self.places) <= MOST_RINGS else 7.0
        names = self._names(size)
        halves = [(0.5 * page.length(n, size, bold=True) if n else 0.0, 5 * pt) for n in names]
        for label in place_names(self.room, self.places, halves, radius=radius, point=pt):
            style = {"align": "center", "halo": 2.2, "layer": 7, "bold": True}
            page.write(label.x, label.y + 0.375 * size * pt, names[label.number], size, **style)
            if label.leader is not None:
                x1, y1, x2, y2 = label.leader
                for width, color in ((2.0, HALO), (0.7, INK)):
                    page.line((x1, x2), (y1, y2), width, color, layer=5.5)
            self.named += 1

    def _names(self, size: float) -> list[str]:
        """Names as they are written on the map; of "observer 7" the number.

        Long ones are shortened; where that makes two alike, they become numbers.
        """
        names = [marker.name for marker in self.scene.observers]
        if names == ["observer"]:
            return [""]
        names = [re.sub(r"^observer (?=\d+$)", "", name) for name in names]
        room = 0.3 * self.view.width
        short = [self.page.fitted(name, size, room, bold=True) for name in names]
        alike = Counter(short)
        return [
            f"({n})" if alike[text] > 1 and text != name else text
            for n, (text, name) in enumerate(zip(short, names, strict=True), 1)
        ]

    def _distances(self, rings: list[float]) -> None:
        """Write distances on the rings of one observer, or on ranges of several that differ."""
        observers, places = self.scene.observers, self.scene.reach.places
        if rings:
            self._on_rings(rings)
        elif len(observers) <= MOST_RINGS and len({m.range_m for m in observers}) > 1:
            for marker, rim, place in zip(
                observers, self.scene.reach.outlines, places, strict=True
            ):
                arc = rim if marker.sector is None else rim[:, 1:-1]
                self._on_outline(told_length(marker.range_m), arc, place)

    def _on_outline(self, text: str, arc: Any, place: Any) -> None:
        """Write the range on its outline where it is free and farthest from the others."""
        pt = self.page.dpi / 72.0
        half, tall = 0.5 * self.page.length(text, 7.5) + 3 * pt, 6 * pt
        others = [p for p in self.places if p != self.at(*place)]
        best = None
        for east, north in arc[:, :: max(1, arc.shape[1] // 48)].T:
            x, y = self.at(east, north)
            if self.room.is_free(x, y, half, tall):
                lonely = min(((x - u) ** 2 + (y - v) ** 2 for u, v in others), default=0.0)
                if best is None or lonely > best[0]:
                    best = (lonely, x, y)
        if best is not None:
            self._distance(text, best[1], best[2])

    def _distance(self, text: str, x: float, y: float) -> None:
        page, pt = self.page, self.page.dpi / 72.0
        wide = page.length(text, 7.5) + 2 * pt
        self.room.take(x, y, 0.5 * wide, 6 * pt)
        page.box(x - wide / 2, y - 4.5 * pt, wide, 9 * pt, fill=HALO, layer=4.9)
        page.write(x, y + 2.7 * pt, text, 7.5, align="center", halo=2.4, layer=5)

    def _on_rings(self, rings: list[float]) -> None:
        """Write the distances along the bearing on which most are clear of the observer."""
        page, pt = self.page, self.page.dpi / 72.0
        sector = self.scene.observers[0].sector
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
                apart = all(abs(x - p) > 2 * half or abs(y - q) > 2 * tall for p, q, _ in found)
                if apart and self.room.is_free(x, y, half, tall):
                    found.append((x, y, text))
            if len(found) > len(best):
                best = found
        for x, y, text in best:
            self._distance(text, x, y)

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
                page.write(x, self.bottom + 10.5 * pt, text, 7, align="center", color=SOFT)
        for place, text in ticks(ys[1], ys[0], edges[1]):
            y = self.top + place
            half = 0.5 * page.length(text, 7)
            if self.top <= y - half and y + half <= self.bottom:
                page.line((self.left - 3 * pt, self.left), (y, y), 0.7)
                page.write(self.left - 4.5 * pt, y, text, 7, color=SOFT, upright=True)
        if crs_name:
            text = page.fitted(f"Coordinates: {crs_name}", 7, page.right - page.left)
            end = self.right if page.length(text, 7) < self.right - page.left else page.right
            page.write(end, self.bottom + 20.5 * pt, text, 7, align="right", color=SOFT)
        return self.bottom + UNDER_MAP * page.dpi
