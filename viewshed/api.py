"""From files to a result: what the command line and Python callers use.

A map is made in four steps: place the observers on the grid, read what their ranges reach,
compute what each sees (`viewshed.visibility`), and put the answers together.
"""

from __future__ import annotations

import logging
import warnings
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed.atmosphere import Refraction, parse_refraction
from viewshed.constants import DEFAULT_RANGE, LAYERS, SURVEY_K, WHO_OBSERVERS
from viewshed.errors import InputError, ViewshedWarning
from viewshed.looking import Heights, Run
from viewshed.notes import noted
from viewshed.places import GREATEST_RANGE, Observer, Sector, Target, parse_length
from viewshed.placing import Placed, Window, common_window, named, place
from viewshed.result import MapResult, Question, View
from viewshed.visibility import usable_threads
from viewshed.wording import told_length, told_lengths, told_span

if TYPE_CHECKING:
    import os
    from collections.abc import Callable, Sequence

    from viewshed.io.elevation import Terrain
    from viewshed.io.room import Room
    from viewshed.io.surface import Surface

    Progress = Callable[[float, float], None]

__all__ = ["MapResult", "map_visibility"]

#: A target this tall [m] looked for by eyes this low [m] is a structure entered as a target.
_TALL_TARGET, _LOW_EYE = 20.0, 3.0
#: What a cell costs on one thread, about [s], and how long a run may take without being announced.
_CELL_SECONDS, _LONG_RUN = 2.5e-8, 120.0

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
    memory: float | None = None,
    scratch: str | os.PathLike[str] | None = None,
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
    memory : float or None
        What the whole process may take [bytes], at least 750 MB. None is what the system has free,
        less a margin. The answer is the same to the bit.
    scratch : path or None
        Folder in which arrays that do not fit in memory lie as long as the result is kept; None is
        the system's folder for temporary files.
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
        a void, under ground or under the surface, an unknown layer, too little memory.
    DataError
        If the elevation cannot be read, is void all over, or was replaced while it was read.
    MemoryLimitError
        If the window does not fit in memory and this system cannot keep arrays in scratch files;
        nothing was read then.
    OutputError
        If the disk has no room for the scratch files.

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
    workers = usable_threads(threads)
    room = _room(
        window,
        placed,
        question,
        surface is not None,
        memory=memory,
        scratch=scratch,
        threads=workers,
    )
    _say_cost(placed, workers)
    heights, met = _read(terrain, surface, window, room)
    run = Run(terrain, heights, window, question, placed, room)
    run.look(threads, progress)
    told = tuple(dict.fromkeys([*_notes(placed, run.views), *notes, *met]))
    for note in told:
        warnings.warn(note, ViewshedWarning, stacklevel=2)
    for fingerprint in heights.fingerprints:
        fingerprint.confirm()
    if not any(sum(view.tally.counts.values()) for view in run.views):
        where = "" if all(one.sector is None for one in placed) else " and the sector"
        reaches = told_lengths(one.range_m for one in placed)
        msg = f"no known cell centre lies within the range of {reaches}{where}: widen it"
        raise InputError(msg)
    return run.result(terrain, surface, told)


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


def _room(
    window: Window,
    placed: list[Placed],
    question: Question,
    with_surface: bool,
    *,
    memory: float | None,
    scratch: str | os.PathLike[str] | None,
    threads: int,
) -> Room:
    """Make room for the arrays of a run, or refuse it where there is none."""
    from viewshed.io import _memory
    from viewshed.io.room import Room, can_map

    cells = [float(one.window[2] * one.window[3]) for one in placed]
    need = _memory.run_bytes(
        float(window[2] * window[3]),
        question.layers,
        own_cells=max(cells) if len(placed) > 1 else None,
        surface=with_surface,
        kept_cells=sum(cells) if question.each and len(placed) > 1 else 0.0,
        threads=threads,
    )
    limit = _memory.usable_memory() if memory is None else _memory.check_limit(memory)
    if limit < _memory.LEAST or not can_map():
        cure = None if len(placed) == 1 else "map fewer or nearer observers at a time"
        _memory.check_memory(need, limit, max(one.range_m for one in placed), cure)
    room = Room(limit, limit - _memory.LEAST, need - _memory.LEAST, scratch)
    if room.is_mapped:
        _log.info(
            "The run takes %s and may take %s of memory: scratch files in %s hold the rest",
            _memory.told_size(need),
            _memory.told_size(limit),
            room.folder,
        )
    return room


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


def _read(
    terrain: Terrain, surface: Surface | None, window: Window, room: Room
) -> tuple[Heights, list[str]]:
    """Read the common window; what the reader warns of becomes notes."""
    fingerprints = [terrain.fingerprint(*window, meanwhile=True)]
    if surface is not None:
        fingerprints.append(surface.fingerprint(*window, meanwhile=True))
    with noted(told=False) as notes:
        over, median = None, None
        if surface is not None:
            over = surface.read(*window, out=room.empty(window[2:], np.float32))
        ground = room.empty(window[2:], np.float32)
        reading = terrain.load(*window, cover=over, out=ground)
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
    return Heights(reading.elevation, over, median, tuple(fingerprints), facts), notes


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
