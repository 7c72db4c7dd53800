"""The arrays of one run, filled observer by observer."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed._jit import announce
from viewshed.areas import cell_areas
from viewshed.combine import Combination
from viewshed.crew import run_jobs
from viewshed.errors import InputError
from viewshed.io._memory import windows_at_once
from viewshed.kernels.sweep import sweep
from viewshed.placing import Placed, Window, common_window, told_of
from viewshed.postmap import fit_post_map
from viewshed.result import Inputs, MapResult, Question, View
from viewshed.tally import reached_window, tally_up
from viewshed.visibility import compute, ground_at, usable_threads

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from viewshed.crew import Share
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
        """Compute what each observer sees and gather it.

        Parameters
        ----------
        threads : int or None
            Threads to use; None is one a processor.
        progress : callable or None
            Called now and then with work done and work in all.

        Raises
        ------
        InputError
            If an observer cannot stand where it is or cannot see from there; it names the first.
        """
        single = len(self.placed) == 1 and not _needs_gathering(self.question.layers)
        common = None if single else Combination(
            self.grid.shape, self.question.layers, empty=self.room.empty
        )
        footing = [self._footing(one) for one in self.placed]  # before anything long begins
        views: dict[int, View] = {}

        def job(number: int) -> Callable[[Share], None]:
            def see(share: Share) -> None:
                one = self.placed[number]
                seen, views[number] = self._see(one, footing[number], share)
                if common is None:
                    self.arrays = _arrays_of(seen)
                else:
                    common.add(seen, *self._corner(one), number)

            return see

        announce(sweep)
        sizes = [one.window[2] * one.window[3] for one in self.placed]
        workers = usable_threads(threads)
        run_jobs(
            [job(number) for number in range(len(self.placed))],
            threads=workers,
            at_once=windows_at_once(
                max(sizes),
                workers,
                self.question.layers,
                surface=self.heights.surface is not None,
            ),
            weights=sizes,
            progress=progress,
        )
        if common is not None:
            self.arrays = common.layers()
        self.views = [views[number] for number in range(len(self.placed))]
        self.kept = common_window([view.window for view in self.views])

    def _corner(self, one: Placed) -> tuple[int, int]:
        """Where the window of an observer begins in the common one."""
        return one.window[0] - self.window[0], one.window[1] - self.window[1]

    def _footing(self, one: Placed) -> tuple[float, float]:
        """Elevation of the ground under an observer, and height of its eye above it [m]."""
        at = (one.row - self.window[0], one.col - self.window[1])
        foot = _ground_under(self.heights.ground, at, one)
        return foot, _eye_height(one.observer, foot)

    def _see(
        self, one: Placed, footing: tuple[float, float], share: Share
    ) -> tuple[Visibility, View]:
        """Compute for one observer."""
        row0, col0 = self._corner(one)
        rows, cols = one.window[2:]
        part = np.s_[row0 : row0 + rows, col0 : col0 + cols]
        surface = self.heights.surface
        layers = self.question.layers
        at = (one.row - one.window[0], one.col - one.window[1])
        foot, eye = footing
        post_map = fit_post_map(self.grid.window(row0, col0, rows, cols), *at, range_m=one.range_m)
        try:
            seen = compute(
                self._own(self.heights.ground, part),
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
                turn=self.room.turn,
                share=share,
            )
        except InputError as error:
            msg = f"{told_of(one.observer, one.x, one.y)}: {error}"
            raise InputError(msg) from error
        if seen.clearance is not None:
            for first in range(0, rows, _STRIP_ROWS):
                strip = seen.clearance[first : first + _STRIP_ROWS]
                np.minimum(strip, _GREATEST_CLEARANCE, out=strip)
        top, left, high, wide = reached_window(post_map, (rows, cols), one.range_m)
        areas = self.areas.window(row0, col0, rows, cols)
        keep = self.question.each and len(self.placed) > 1
        inner = np.s_[top : top + high, left : left + wide]
        view = View(
            placed=one,
            ground=foot,
            eye_height=eye,
            post_map=post_map.moved(-row0, -col0),
            window=(row0 + top, col0 + left, high, wide),
            tally=tally_up(seen.visible, post_map, areas, one.range_m).moved(-row0, -col0),
            visible=self._own(seen.visible, inner) if keep else None,
        )
        return seen, view

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
            rest=self.room.release if self.room.is_mapped else None,
        )


def _needs_gathering(layers: tuple[str, ...]) -> bool:
    return bool({"count", "count-unresolved", "who"} & set(layers))


def _arrays_of(seen: Visibility) -> dict[str, NDArray[Any]]:
    """Give the layers of the only observer."""
    found = {
        "visible": seen.visible,
        "clearance": seen.clearance,
        "needed-height": seen.needed_height,
    }
    return {name: array for name, array in found.items() if array is not None}


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
