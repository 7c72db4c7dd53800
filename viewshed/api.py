"""From files to a result: what the command line and Python callers use.

A map is made in four steps: place the observers on the grid, read what their ranges reach,
compute what each sees (`viewshed.visibility`), and put the answers together.
"""

from __future__ import annotations

import logging
import math
import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.areas import cell_areas
from viewshed.atmosphere import Refraction, parse_refraction
from viewshed.combine import Combination
from viewshed.constants import DEFAULT_RANGE, LAYERS, NODATA, SURVEY_K, WHO_OBSERVERS
from viewshed.errors import InputError, ViewshedWarning
from viewshed.notes import noted
from viewshed.places import GREATEST_RANGE, Observer, Sector, Target, parse_length
from viewshed.placing import Placed, Window, common_window, named, place, told_of
from viewshed.postmap import fit_post_map
from viewshed.result import Inputs, MapResult, Question, View
from viewshed.tally import tally_up
from viewshed.visibility import compute, ground_at, usable_threads
from viewshed.wording import told_length, told_lengths, told_span

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from viewshed.grid import PostMap
    from viewshed.io.elevation import Terrain
    from viewshed.io.surface import Surface
    from viewshed.visibility import Visibility

    Progress = Callable[[float, float], None]

__all__ = ["MapResult", "map_visibility"]

#: A target this tall [m] looked for by eyes this low [m] is a structure entered as a target.
_TALL_TARGET, _LOW_EYE = 20.0, 3.0
#: Clearance is told up to here [m]: an obstacle a hair's breadth before the eye gives millions.
_GREATEST_CLEARANCE = np.float32(10_000.0)
#: What a cell costs on one thread, about [s], and how long a run may take without being announced.
_CELL_SECONDS, _LONG_RUN = 4e-8, 120.0

_log = logging.getLogger("viewshed")


def map_visibility(  # noqa: PLR0913 - one name for each thing a question is made of
    terrain: Terrain,
    observers: Observer | Sequence[Observer],
    *,
    target: Target | float = 0.0,
    range_m: float | str = DEFAULT_RANGE,
    refraction: Refraction | float | str = SURVEY_K,
    sector: Sector | None = None,
    layers: Sequence[str] | None = None,
    each: bool = False,
    surface: Surface | None = None,
    notes: Sequence[str] = (),
    threads: int | None = None,
    progress: Progress | None = None,
) -> MapResult:
    """Map what observers see of a terrain.

    Parameters
    ----------
    terrain : Terrain
        Elevation grid, from `viewshed.open_terrain`: what observers and targets stand on.
    observers : Observer or sequence of Observer
        Where the sight lines start. Target height, range and sector of an observer go before
        those given here.
    target : Target or float
        What is looked at in each cell: height above ground [m].
    range_m : float or str
        Farthest ground distance considered [m], or a text such as ``"30km"``.
    refraction : Refraction, float or str
        The air: k, or a text such as ``"K=4/3"`` or ``"survey"``.
    sector : Sector or None
        Bearings looked over; None is all around.
    layers : sequence of str, optional
        Any of ``visible`` (always there), ``clearance``, ``needed-height``, ``count`` (how many
        observers surely see a cell), ``count-unresolved`` and ``who`` (a bit for each observer, at
        most 32). Default: ``visible``, and ``count`` where there are several observers.
    each : bool
        Whether what each observer sees is kept beside the common answer.
    surface : Surface or None
        What blocks sight, from `viewshed.open_surface`; None is the ground.
    notes : sequence of str
        What was warned of when the inputs were opened and the result is to say too.
    threads : int or None
        Threads to use; None is one a processor. The answer is the same to the bit.
    progress : callable or None
        Called now and then with work done and work in all.

    Returns
    -------
    MapResult
        Arrays, grid and record; `MapResult.write` writes the files.

    Raises
    ------
    InputError
        If a value cannot be used: a range that is not positive, an observer outside the grid, on
        a void, under ground or under the surface, an unknown layer.
    DataError
        If the elevation cannot be read, is void all over, or was replaced while it was read.
    MemoryLimitError
        If the window does not fit in memory; nothing was read then.

    Examples
    --------
    >>> import viewshed
    >>> terrain = viewshed.open_terrain("sample_dem/elevation.tif")
    >>> result = viewshed.map_visibility(
    ...     terrain, viewshed.Observer(410385, 6204255), range_m=2000, refraction="survey"
    ... )
    >>> result.counts["unresolved"], result.refraction.describe()
    (0, 'k = 0.13 (K = 1.149)')
    """
    reach = parse_length(range_m) if isinstance(range_m, str) else float(range_m)
    if not 0.0 < reach <= GREATEST_RANGE:
        msg = f"range {reach:g} m: give a length above 0 and up to {told_length(GREATEST_RANGE)}"
        raise InputError(msg)
    given = named(observers)
    question = Question(
        target=target if isinstance(target, Target) else Target(float(target)),
        range_m=reach,
        sector=sector,
        refraction=(
            refraction if isinstance(refraction, Refraction) else parse_refraction(refraction)
        ),
        layers=_layers(layers, len(given)),
        each=each,
    )
    placed = [
        place(terrain.grid, one, target=question.target, range_m=reach, sector=sector)
        for one in given
    ]
    window = common_window([one.window for one in placed])
    _check_memory(window, placed, question, with_surface=surface is not None)
    _say_cost(placed, usable_threads(threads))
    heights, met = _read(terrain, surface, window)
    run = _Run(terrain, heights, window, question, placed)
    run.look(threads, progress)
    told = tuple(dict.fromkeys([*_notes(placed, run.views), *notes, *met]))
    for note in told:
        warnings.warn(note, ViewshedWarning, stacklevel=2)
    for fingerprint in heights.fingerprints:
        fingerprint.confirm()
    if (run.arrays["visible"] == NODATA).all():
        where = "" if all(one.sector is None for one in placed) else " and the sector"
        reaches = told_lengths(one.range_m for one in placed)
        msg = f"no known cell centre lies within the range of {reaches}{where}: widen it"
        raise InputError(msg)
    return run.result(terrain, surface, told)


@dataclass(frozen=True)
class _Heights:
    """What was read: arrays of the common window and what is to be told of them."""

    ground: NDArray[np.float32]
    surface: NDArray[np.float32] | None
    median: float | None
    fingerprints: tuple[Any, ...]
    facts: dict[str, Any]


class _Run:
    """The arrays of one run, filled observer by observer."""

    def __init__(
        self,
        terrain: Terrain,
        heights: _Heights,
        window: Window,
        question: Question,
        placed: list[Placed],
    ) -> None:
        self.grid = terrain.grid.window(*window)
        self.heights = heights
        self.window = window
        self.question = question
        self.placed = placed
        self.areas = cell_areas(self.grid)
        self.views: list[View] = []
        self.kept: Window = (0, 0, 0, 0)
        self.arrays: dict[str, NDArray[Any]] = {}

    def look(self, threads: int | None, progress: Progress | None) -> None:
        """Compute what each observer sees and gather it."""
        single = len(self.placed) == 1 and not _needs_gathering(self.question.layers)
        common = None if single else Combination(self.grid.shape, self.question.layers)
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
        ground = np.ascontiguousarray(self.heights.ground[part])
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
                surface=None if surface is None else np.ascontiguousarray(surface[part]),
                eye_height=eye,
                target_height=one.target_height,
                refraction_k=self.question.refraction.k,
                range_m=one.range_m,
                sector=one.sector,
                clearance="clearance" in layers,
                needed_height="needed-height" in layers,
                threads=threads,
                progress=progress,
            )
        except InputError as error:
            msg = f"{told_of(one.observer, one.x, one.y)}: {error}"
            raise InputError(msg) from error
        if seen.clearance is not None:
            np.minimum(seen.clearance, _GREATEST_CLEARANCE, out=seen.clearance)
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
            visible=np.ascontiguousarray(seen.visible[inner]) if keep else None,
        )
        return seen, view, (row0, col0)

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


def _layers(layers: Sequence[str] | None, observers: int) -> tuple[str, ...]:
    if layers is None:
        return ("visible",) if observers == 1 else ("visible", "count")
    unknown = [name for name in layers if name not in LAYERS]
    if unknown:
        msg = f"unknown layer {unknown[0]!r}: choose from {', '.join(LAYERS)}"
        raise InputError(msg)
    if "who" in layers and observers > WHO_OBSERVERS:
        msg = (
            f"layer 'who' has {WHO_OBSERVERS} bits and there are {observers} observers: ask for "
            "'count', keep what each sees, or map fewer at a time"
        )
        raise InputError(msg)
    return tuple(name for name in LAYERS if name in layers or name == "visible")


def _needs_gathering(layers: tuple[str, ...]) -> bool:
    return bool({"count", "count-unresolved", "who"} & set(layers))


def _share_of(
    progress: Progress | None, before: float, own: float, total: float
) -> Progress | None:
    """Turn the progress of one observer into that of the run."""
    if progress is None:
        return None
    return lambda done, pieces: progress(before + own * done / pieces, total)


def _check_memory(
    window: Window, placed: list[Placed], question: Question, *, with_surface: bool
) -> None:
    """Refuse a run whose arrays do not fit in memory."""
    from viewshed.io._memory import available_memory, check_memory, run_bytes

    cells = [float(one.window[2] * one.window[3]) for one in placed]
    need = run_bytes(
        float(window[2] * window[3]),
        question.layers,
        own_cells=max(cells) if len(placed) > 1 else None,
        surface=with_surface,
        kept_cells=sum(cells) if question.each and len(placed) > 1 else 0.0,
    )
    cure = None if len(placed) == 1 else "map fewer or nearer observers at a time"
    check_memory(need, available_memory(), max(one.range_m for one in placed), cure)


def _say_cost(placed: list[Placed], threads: int) -> None:
    """Say before a long run what it will cost."""
    cells = sum(float(one.window[2] * one.window[3]) for one in placed)
    seconds = cells * _CELL_SECONDS / threads
    if len(placed) > 1 and seconds > _LONG_RUN:
        minutes = seconds / 60.0
        time = f"{minutes:.0f} minutes" if minutes < 120 else f"{minutes / 60.0:.1f} hours"
        _log.warning(
            "%d observers look at %.3g cells in all: about %s; Ctrl-C stops it, nothing is left",
            len(placed),
            cells,
            time,
        )


def _read(terrain: Terrain, surface: Surface | None, window: Window) -> tuple[_Heights, list[str]]:
    """Read the common window; what the reader warns of becomes notes."""
    fingerprints = [terrain.fingerprint(*window)]
    if surface is not None:
        fingerprints.append(surface.fingerprint(*window))
    with noted(told=False) as notes:
        over, median = None, None
        if surface is not None:
            over = surface.read(*window)
        reading = terrain.load(*window, cover=over)
        if over is not None:
            from viewshed.io.surface import compare

            median = compare(over, reading.elevation)
    if terrain.void_height is not None and not reading.voids_set:
        notes.append(
            f"the voids were stated to be {terrain.void_height.height:g} m and none was found in "
            "range (and in the mask, if there is one)"
        )
    facts: dict[str, Any] = {
        "voids_set": reading.voids_set,
        "undeclared_voids": reading.undeclared_voids,
        "void_mask_files": fingerprints[0].mask_entries,
    }
    if reading.overlap is not None:
        first, second, difference = reading.overlap
        facts["overlap"] = {"first": first, "second": second, "difference_m": difference}
    return _Heights(reading.elevation, over, median, tuple(fingerprints), facts), notes


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


def _notes(placed: list[Placed], views: list[View]) -> list[str]:
    """Say what the user should know of the question itself."""
    notes = []
    past = [one for one in placed if one.past]
    if past:
        if len(placed) == 1:
            whose = f"the range of {told_length(past[0].range_m)} reaches"
        elif len(past) == 1:
            whose = f"the range of {past[0].observer.name!r} reaches"
        else:
            whose = f"the ranges of {len(past)} observers reach"
        notes.append(f"{whose} past the elevation grid; what lies beyond is not in the result")
    tall = [
        view
        for view in views
        if view.placed.target_height > _TALL_TARGET and view.eye_height < _LOW_EYE
    ]
    if tall:
        targets = told_span(view.placed.target_height for view in tall)
        eyes = told_span(round(view.eye_height, 2) for view in tall)
        notes.append(
            f"a target {targets} m tall seen from an eye at {eyes} m: this maps where such a thing "
            "could be seen from here, not where one such thing is seen from; for the zone of "
            "visibility of a structure make its top the observer"
        )
    return notes


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
