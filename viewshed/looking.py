"""The arrays of one run, filled observer by observer."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.areas import cell_areas
from viewshed.combine import Combination
from viewshed.errors import InputError
from viewshed.placing import Placed, Window, common_window, told_of
from viewshed.postmap import fit_post_map
from viewshed.result import Inputs, MapResult, Question, View
from viewshed.tally import tally_up
from viewshed.visibility import compute, ground_at

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from viewshed.grid import PostMap
    from viewshed.io.elevation import Terrain
    from viewshed.io.room import Room
    from viewshed.io.surface import Surface
    from viewshed.places import Observer
    from viewshed.visibility import Visibility

    Progress = Callable[[float, float], None]

__all__ = ["Heights", "Run"]

#: Clearance is told up to here [m]: an obstacle a hair's breadth before the eye gives millions.
_GREATEST_CLEARANCE = np.float32(10_000.0)
#: Rows that are copied or changed at a time.
_STRIP_ROWS = 256


@dataclass(frozen=True)
class Heights:
    """What was read: arrays of the common window and what is to be told of them."""

    ground: NDArray[np.float32]
    surface: NDArray[np.float32] | None
    median: float | None
    fingerprints: tuple[Any, ...]
    facts: dict[str, Any]


class Run:
    """The arrays of one run, filled observer by observer."""

    def __init__(
        self,
        terrain: Terrain,
        heights: Heights,
        window: Window,
        question: Question,
        placed: list[Placed],
        room: Room,
    ) -> None:
        self.grid = terrain.grid.window(*window)
        self.heights = heights
        self.window = window
        self.question = question
        self.placed = placed
        self.room = room
        self.areas = cell_areas(self.grid)
        self.views: list[View] = []
        self.kept: Window = (0, 0, 0, 0)
        self.arrays: dict[str, NDArray[Any]] = {}

    def look(self, threads: int | None, progress: Progress | None) -> None:
        """Compute what each observer sees and gather it."""
        single = len(self.placed) == 1 and not _needs_gathering(self.question.layers)
        common = None if single else Combination(
            self.grid.shape, self.question.layers, empty=self.room.empty
        )
        weights = [one.window[2] * one.window[3] for one in self.placed]
        total, before = sum(weights), 0
        for one, weight in zip(self.placed, weights, strict=True):
            tell = _share_of(progress, before, weight, total)
            before += weight
            seen, view, at = self._see(one, threads, tell)
            self.views.append(view)
            if common is None:
                self.arrays = {
                    "visible": seen.visible,
                    **({} if seen.clearance is None else {"clearance": seen.clearance}),
                    **({} if seen.needed_height is None else {"needed-height": seen.needed_height}),
                }
            else:
                common.add(seen, *at)
        if common is not None:
            self.arrays = common.layers()
        self.kept = common_window([view.window for view in self.views])

    def _see(
        self, one: Placed, threads: int | None, progress: Progress | None
    ) -> tuple[Visibility, View, tuple[int, int]]:
        """Compute for one observer; also where its window begins in the common one."""
        row0, col0 = one.window[0] - self.window[0], one.window[1] - self.window[1]
        rows, cols = one.window[2:]
        part = np.s_[row0 : row0 + rows, col0 : col0 + cols]
        ground = self._own(self.heights.ground, part)
        surface = self.heights.surface
        layers = self.question.layers
        at = (one.row - one.window[0], one.col - one.window[1])
        foot = _ground_under(ground, at, one)
        eye = _eye_height(one.observer, foot)
        post_map = fit_post_map(self.grid.window(row0, col0, rows, cols), *at, range_m=one.range_m)
        try:
            seen = compute(
                ground,
                post_map,
                surface=None if surface is None else self._own(surface, part),
                eye_height=eye,
                target_height=one.target_height,
                refraction_k=self.question.refraction.k,
                range_m=one.range_m,
                sector=one.sector,
                clearance="clearance" in layers,
                needed_height="needed-height" in layers,
                empty=self.room.empty,
                threads=threads,
                progress=progress,
            )
        except InputError as error:
            msg = f"{told_of(one.observer, one.x, one.y)}: {error}"
            raise InputError(msg) from error
        if seen.clearance is not None:
            for first in range(0, rows, _STRIP_ROWS):
                strip = seen.clearance[first : first + _STRIP_ROWS]
                np.minimum(strip, _GREATEST_CLEARANCE, out=strip)
        trimmed = _trim(post_map, (rows, cols), one.range_m)
        areas = self.areas.window(row0, col0, rows, cols)
        keep = self.question.each and len(self.placed) > 1
        inner = np.s_[trimmed[0] : trimmed[0] + trimmed[2], trimmed[1] : trimmed[1] + trimmed[3]]
        view = View(
            placed=one,
            ground=foot,
            eye_height=eye,
            post_map=post_map.moved(-row0, -col0),
            window=(row0 + trimmed[0], col0 + trimmed[1], *trimmed[2:]),
            tally=tally_up(seen.visible, post_map, areas, one.range_m).moved(-row0, -col0),
            visible=self._own(seen.visible, inner) if keep else None,
        )
        return seen, view, (row0, col0)

    def _own(self, array: NDArray[Any], part: tuple[slice, slice]) -> NDArray[Any]:
        """Give a part of an array, as an array of its own unless it is the whole."""
        cut = array[part]
        if cut.flags.c_contiguous:
            return cut
        own = self.room.empty(cut.shape, cut.dtype)
        for first in range(0, cut.shape[0], _STRIP_ROWS):
            own[first : first + _STRIP_ROWS] = cut[first : first + _STRIP_ROWS]
        return own

    def result(
        self, terrain: Terrain, surface: Surface | None, notes: tuple[str, ...]
    ) -> MapResult:
        """Cut everything to the rows and columns that hold cells within range."""
        row0, col0, rows, cols = self.kept
        part = np.s_[row0 : row0 + rows, col0 : col0 + cols]
        return MapResult(
            arrays={name: array[part] for name, array in self.arrays.items()},
            elevation=self.heights.ground[part],
            grid=self.grid.window(*self.kept),
            areas=self.areas.window(*self.kept),
            views=tuple(view.moved(row0, col0) for view in self.views),
            asked=self.question,
            inputs=Inputs(
                terrain=terrain,
                surface=surface,
                median_over_ground=self.heights.median,
                files=tuple(f.entries for f in self.heights.fingerprints),
                heights=self.heights.facts,
            ),
            warnings=notes,
        )


def _needs_gathering(layers: tuple[str, ...]) -> bool:
    return bool({"count", "count-unresolved", "who"} & set(layers))


def _share_of(
    progress: Progress | None, before: float, own: float, total: float
) -> Progress | None:
    """Turn the progress of one observer into that of the run."""
    if progress is None:
        return None
    return lambda done, pieces: progress(before + own * done / pieces, total)


def _ground_under(
    elevation: NDArray[np.float32], at: tuple[float, float], one: Placed
) -> float:
    try:
        return ground_at(elevation, *at)
    except InputError:
        msg = (
            f"{told_of(one.observer, one.x, one.y)} stands on or beside a void, so the ground "
            "under it is not known: move it or fill the void"
        )
        raise InputError(msg) from None


def _eye_height(observer: Observer, ground: float) -> float:
    if observer.eye_elevation is None:
        return float(observer.eye_height or 0.0)
    height = observer.eye_elevation - ground
    if height < 0.0:
        who = "" if observer.name == "observer" else f" of {observer.name!r}"
        msg = (
            f"the eye{who} at {observer.eye_elevation:g} m is {-height:.2f} m below the ground "
            f"under it ({ground:.2f} m): raise it"
        )
        raise InputError(msg)
    return height


def _trim(post_map: PostMap, shape: tuple[int, int], range_m: float) -> Window:
    """Find the part of a window that holds cells within range; the observer's cell stays in."""
    rows, cols = shape

    def reached(row: Any, col: Any) -> bool:
        east, north = post_map.en(row, col)
        return bool((np.hypot(east, north) <= range_m).any())

    top, bottom, left, right = 0, rows - 1, 0, cols - 1
    every_row, every_col = np.arange(float(rows)), np.arange(float(cols))
    while top < bottom and not reached(float(top), every_col):
        top += 1
    while bottom > top and not reached(float(bottom), every_col):
        bottom -= 1
    while left < right and not reached(every_row, float(left)):
        left += 1
    while right > left and not reached(every_row, float(right)):
        right -= 1
    top, bottom = min(top, math.floor(post_map.row0)), max(bottom, math.ceil(post_map.row0))
    left, right = min(left, math.floor(post_map.col0)), max(right, math.ceil(post_map.col0))
    return top, left, bottom + 1 - top, right + 1 - left
