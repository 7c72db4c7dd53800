"""From files to a result and back to files: what the command line and Python callers use.

A map is made in four steps: place the observer on the grid, read what the range reaches, compute
(`viewshed.visibility`), and say in words and numbers what came out.
"""

from __future__ import annotations

import math
import warnings
from typing import TYPE_CHECKING, Any

import numpy as np

from viewshed import geodesy
from viewshed.atmosphere import Refraction, parse_refraction
from viewshed.constants import DEFAULT_RANGE, LAYERS, NODATA, SURVEY_K
from viewshed.errors import InputError, ViewshedWarning
from viewshed.places import Observer, Sector, Target, parse_length
from viewshed.postmap import fit_post_map, range_window
from viewshed.result import MapResult, told_length, told_number
from viewshed.visibility import compute, ground_at

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from viewshed.grid import Grid, PostMap
    from viewshed.io.elevation import Terrain
    from viewshed.visibility import Visibility

__all__ = ["MapResult", "map_visibility"]

#: A target this tall [m] looked for by eyes this low [m] is a structure entered as a target.
_TALL_TARGET, _LOW_EYE = 20.0, 3.0
#: Memory of the page, the writers and the scratch arrays, beside the arrays of the window [bytes].
_OVERHEAD = 500e6
#: A position this near to a post is that post [cells].
_SAME_POST = 1e-6
#: Clearance is told up to here [m]: an obstacle a hair's breadth before the eye gives millions.
_GREATEST_CLEARANCE = np.float32(10_000.0)
#: Half way round the Earth, about [m].
_GREATEST_RANGE = 2e7



def _place(terrain: Terrain, observer: Observer) -> tuple[float, float, float, float]:
    """Post coordinates (row, col) of the observer, and its x and y in the grid's CRS."""
    grid = terrain.grid
    x, y = observer.x, observer.y
    if observer.crs is not None:
        given, own = (geodesy.crs_from_user(crs) for crs in (observer.crs, grid.crs_wkt))
        x, y = geodesy.transform_point(x, y, given, own)
    row, col = geodesy.post_position(grid, x, y)
    # positions and cell sizes are written in decimals: within their rounding a post is meant
    row, col = (round(v) if abs(v - round(v)) < _SAME_POST else v for v in (row, col))
    if 0 <= row <= grid.rows - 1 and 0 <= col <= grid.cols - 1:
        return float(row), float(col), x, y
    told = f"the observer {told_number(observer.x)},{told_number(observer.y)}"
    if observer.crs is not None:
        told += f" (here x {told_number(x)}, y {told_number(y)})"
    if -0.5 <= row <= grid.rows - 0.5 and -0.5 <= col <= grid.cols - 0.5:
        msg = (
            f"{told} is in the rim of the elevation grid, less than half a cell from its edge, "
            "where the ground is not known between cell centres: move it inward"
        )
    else:
        left, bottom, right, top = (told_number(v) for v in grid.bounds)
        msg = (
            f"{told} is outside the elevation grid (x {left} to {right}, y {bottom} to {top}): "
            "move it, add tiles, or say in which CRS it is given"
        )
    raise InputError(msg)


def _check_memory(
    window: tuple[int, int, int, int], layers: tuple[str, ...], range_m: float
) -> None:
    from viewshed.io._memory import available_memory, check_memory

    cells = window[2] * window[3]
    each = 4 + 1 + 2
    if len(layers) > 1:
        each += 6
    if "needed-height" in layers:
        each += 4
    check_memory(cells * each + _OVERHEAD, available_memory(), range_m)


def _trim(post_map: PostMap, shape: tuple[int, int], range_m: float) -> tuple[slice, slice]:
    """Rows and columns of the window that hold cells within range."""
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
    return slice(top, bottom + 1), slice(left, right + 1)


def _layers(layers: Sequence[str]) -> tuple[str, ...]:
    unknown = [name for name in layers if name not in LAYERS]
    if unknown:
        msg = f"unknown layer {unknown[0]!r}: choose from {', '.join(LAYERS)}"
        raise InputError(msg)
    return tuple(name for name in LAYERS if name in layers or name == "visible")


def _ground_under(
    elevation: NDArray[np.float32], at: tuple[float, float], place: tuple[float, float]
) -> float:
    try:
        return ground_at(elevation, *at)
    except InputError:
        msg = (
            f"the observer {told_number(place[0])},{told_number(place[1])} stands on or beside a "
            "void, so the ground under it is not known: move it or fill the void"
        )
        raise InputError(msg) from None


def _eye_height(observer: Observer, ground: float) -> float:
    if observer.eye_elevation is None:
        return float(observer.eye_height or 0.0)
    height = observer.eye_elevation - ground
    if height < 0.0:
        msg = (
            f"the eye at {observer.eye_elevation:g} m is {-height:.2f} m below the ground under it "
            f"({ground:.2f} m): raise it"
        )
        raise InputError(msg)
    return height


def map_visibility(  # noqa: PLR0913 - one name for each thing a question is made of
    terrain: Terrain,
    observer: Observer,
    *,
    target: Target | float = 0.0,
    range_m: float | str = DEFAULT_RANGE,
    refraction: Refraction | float | str = SURVEY_K,
    sector: Sector | None = None,
    layers: Sequence[str] = ("visible",),
    threads: int | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> MapResult:
    """Map what one observer sees of a terrain.

    Parameters
    ----------
    terrain : Terrain
        Elevation grid, from `viewshed.open_terrain`.
    observer : Observer
        Where the sight lines start.
    target : Target or float
        What is looked at in each cell: height above ground [m].
    range_m : float or str
        Farthest ground distance considered [m], or a text such as ``"30km"``.
    refraction : Refraction, float or str
        The air: k, or a text such as ``"K=4/3"`` or ``"survey"``.
    sector : Sector or None
        Bearings looked over; None is all around.
    layers : sequence of str
        Any of ``visible`` (always there), ``clearance`` and ``needed-height``.
    threads : int or None
        Threads to use; None is one a processor. The answer is the same to the bit.
    progress : callable or None
        Called now and then with pieces of work done and in all.

    Returns
    -------
    MapResult
        Arrays, grid and record; `MapResult.write` writes the files.

    Raises
    ------
    InputError
        If a value cannot be used: a range that is not positive, an observer outside the grid, on
        a void or under ground, an unknown layer.
    DataError
        If the elevation cannot be read or is void all over.
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
    range_m = parse_length(range_m) if isinstance(range_m, str) else float(range_m)
    if not 0.0 < range_m <= _GREATEST_RANGE:
        msg = f"range {range_m:g} m: give a length above 0 and up to {told_length(_GREATEST_RANGE)}"
        raise InputError(msg)
    wanted = _layers(layers)
    goal = target if isinstance(target, Target) else Target(float(target))
    air = refraction if isinstance(refraction, Refraction) else parse_refraction(refraction)
    row, col, x, y = _place(terrain, observer)
    notes: list[str] = []
    window, past = range_window(terrain.grid, row, col, range_m)
    if past:
        notes.append(
            f"the range of {told_length(range_m)} reaches past the elevation grid; what lies "
            "beyond is not in the result"
        )
    _check_memory(window, wanted, range_m)
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", ViewshedWarning)
        elevation = terrain.read(*window)
    notes += [str(w.message) for w in caught if issubclass(w.category, ViewshedWarning)]
    at = (row - window[0], col - window[1])
    eye_height = _eye_height(observer, _ground_under(elevation, at, (x, y)))
    if goal.height > _TALL_TARGET and eye_height < _LOW_EYE:
        notes.append(
            f"a target {goal.height:g} m tall seen from an eye at {eye_height:g} m: this maps "
            "where such a thing could be seen from here, not where one such thing is seen from; "
            "for the zone of visibility of a structure make its top the observer"
        )
    for note in notes:
        warnings.warn(note, ViewshedWarning, stacklevel=2)
    grid = terrain.grid.window(*window)
    post_map = fit_post_map(grid, *at, range_m=range_m)
    seen = compute(
        elevation,
        post_map,
        eye_height=eye_height,
        target_height=goal.height,
        refraction_k=air.k,
        range_m=range_m,
        sector=sector,
        clearance="clearance" in wanted,
        needed_height="needed-height" in wanted,
        threads=threads,
        progress=progress,
    )
    if seen.clearance is not None:
        np.minimum(seen.clearance, _GREATEST_CLEARANCE, out=seen.clearance)
    if (seen.visible == NODATA).all():
        where = "" if sector is None else " and the sector"
        reach = f"{told_length(range_m)}{where}"
        msg = f"no known cell centre lies within the range of {reach}: widen it"
        raise InputError(msg)
    return _cropped(
        seen,
        elevation,
        grid,
        post_map,
        {
            "terrain": terrain,
            "observer": observer,
            "position": (x, y),
            "eye_height": eye_height,
            "target": goal,
            "range_m": range_m,
            "refraction": air,
            "sector": sector,
            "layers": wanted,
            "warnings": tuple(notes),
        },
    )


def _cropped(
    seen: Visibility,
    elevation: NDArray[np.float32],
    grid: Grid,
    post_map: PostMap,
    facts: dict[str, Any],
) -> MapResult:
    """Cut the result to the rows and columns that hold cells within range."""
    rows, cols = _trim(post_map, elevation.shape, facts["range_m"])
    # the observer's cell stays in, so that the ground under it stays known
    r0, c0 = post_map.row0, post_map.col0
    rows = slice(min(rows.start, math.floor(r0)), max(rows.stop, math.ceil(r0) + 1))
    cols = slice(min(cols.start, math.floor(c0)), max(cols.stop, math.ceil(c0) + 1))

    def cut(array: NDArray[Any] | None) -> Any:
        return None if array is None else array[rows, cols]

    return MapResult(
        visible=cut(seen.visible),
        clearance=cut(seen.clearance),
        needed_height=cut(seen.needed_height),
        elevation=cut(elevation),
        grid=grid.window(
            rows.start, cols.start, rows.stop - rows.start, cols.stop - cols.start
        ),
        post_map=post_map.moved(rows.start, cols.start),
        **facts,
    )
