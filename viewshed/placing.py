"""Observers placed on the grid: where they stand, what they reach, and what they ask."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace
from itertools import count
from typing import TYPE_CHECKING

from viewshed import geodesy
from viewshed.constants import MOST_OBSERVERS
from viewshed.errors import InputError
from viewshed.places import Observer
from viewshed.postmap import range_window
from viewshed.wording import told_number

if TYPE_CHECKING:
    from collections.abc import Sequence

    from viewshed.grid import Grid
    from viewshed.places import Sector, Target

__all__ = ["Placed", "common_window", "named", "place"]

#: A position this near to a post is that post [cells].
_SAME_POST = 1e-6

Window = tuple[int, int, int, int]


@dataclass(frozen=True)
class Placed:
    """An observer on the grid, with what it asks.

    Attributes
    ----------
    observer : Observer
        As it was given.
    row, col : float
        Post coordinates.
    x, y : float
        Position in the CRS of the grid.
    window : tuple of int
        First row and column, rows and columns that its range reaches.
    past : bool
        Whether the range reaches past the grid.
    target_height, range_m, sector
        What it asks: its own values, else those of the run [m].
    """

    observer: Observer
    row: float
    col: float
    x: float
    y: float
    window: Window
    past: bool
    target_height: float
    range_m: float
    sector: Sector | None


def named(observers: Observer | Sequence[Observer]) -> list[Observer]:
    """Give the observers as a list in which each of several has a name.

    Raises
    ------
    InputError
        If there is none, there are more than a count can hold, one is no `Observer`, or two have
        the same name.
    """
    try:
        found = [observers] if isinstance(observers, Observer) else list(observers)
    except TypeError:
        found = [observers]  # type: ignore[list-item]
    if not found:
        msg = "no observer was given; name at least one"
        raise InputError(msg)
    if len(found) > MOST_OBSERVERS:
        msg = f"{len(found)} observers are more than one map holds; give at most {MOST_OBSERVERS}"
        raise InputError(msg)
    for one in found:
        if not isinstance(one, Observer):
            msg = f"{one!r} is no observer; make it with viewshed.Observer(x, y)"
            raise InputError(msg)
    if len(found) == 1:
        return found
    given = Counter(one.name for one in found if one.name != "observer")
    twice = next((name for name, times in given.items() if times > 1), None)
    if twice is not None:
        msg = f"two observers are called {twice!r}; names tell results apart, so give each its own"
        raise InputError(msg)
    free = (name for name in map("observer {}".format, count(1)) if name not in given)
    return [replace(one, name=next(free)) if one.name == "observer" else one for one in found]


def place(
    grid: Grid, observer: Observer, *, target: Target, range_m: float, sector: Sector | None
) -> Placed:
    """Place an observer on a grid.

    Parameters
    ----------
    grid : Grid
        The elevation grid.
    observer : Observer
        The observer.
    target, range_m, sector
        What the run asks; an observer's own values go before.

    Returns
    -------
    Placed
        Where it stands and what it asks.

    Raises
    ------
    InputError
        If it is outside the grid or in its rim; the message names it.
    """
    x, y = observer.x, observer.y
    if observer.crs is not None:
        x, y = _in_grid_crs(grid, observer, x, y)
    row, col = geodesy.post_position(grid, x, y)
    # positions and cell sizes are written in decimals: within their rounding a post is meant
    row, col = (float(round(v)) if abs(v - round(v)) < _SAME_POST else float(v) for v in (row, col))
    if not _inside(grid, row, col):
        raise InputError(_outside(grid, observer, (x, y), (row, col)))
    reach = range_m if observer.range_m is None else observer.range_m
    window, past = range_window(grid, row, col, reach)
    own_target = observer.target_height
    return Placed(
        observer=observer,
        row=row,
        col=col,
        x=x,
        y=y,
        window=window,
        past=past,
        target_height=target.height if own_target is None else own_target,
        range_m=reach,
        sector=sector if observer.sector is None else observer.sector,
    )


def common_window(windows: Sequence[Window]) -> Window:
    """Give the window that holds all of some windows."""
    top, left = min(w[0] for w in windows), min(w[1] for w in windows)
    bottom = max(w[0] + w[2] for w in windows)
    right = max(w[1] + w[3] for w in windows)
    return top, left, bottom - top, right - left


def told_of(observer: Observer, x: float | None = None, y: float | None = None) -> str:
    """Name an observer in a message: its own name if it has one, and its place."""
    name = "" if observer.name == "observer" else f" {observer.name!r} at"
    text = f"the observer{name} {told_number(observer.x)},{told_number(observer.y)}"
    if observer.crs is not None and x is not None and y is not None:
        text += f" (here x {told_number(x)}, y {told_number(y)})"
    return text


def _in_grid_crs(grid: Grid, observer: Observer, x: float, y: float) -> tuple[float, float]:
    given, own = (geodesy.crs_from_user(crs) for crs in (observer.crs, grid.crs_wkt))
    try:
        return geodesy.transform_point(x, y, given, own)
    except InputError as error:
        msg = f"{told_of(observer)}: {error}"
        raise InputError(msg) from error


def _inside(grid: Grid, row: float, col: float) -> bool:
    return 0 <= row <= grid.rows - 1 and 0 <= col <= grid.cols - 1


def _outside(
    grid: Grid, observer: Observer, xy: tuple[float, float], at: tuple[float, float]
) -> str:
    """Say how an observer misses the grid and what may help."""
    who, (row, col) = told_of(observer, *xy), at
    if -0.5 <= row <= grid.rows - 0.5 and -0.5 <= col <= grid.cols - 0.5:
        return (
            f"{who} is in the rim of the elevation grid, less than half a cell from its edge, "
            "where the ground is not known between cell centres: move it inward"
        )
    left, bottom, right, top = (told_number(v) for v in grid.bounds)
    text = f"{who} is outside the elevation grid (x {left} to {right}, y {bottom} to {top}): "
    if observer.crs is None and _looks_like_degrees(grid, observer):
        return text + "it looks like longitude and latitude; if so, add --observer-crs EPSG:4326"
    if _is_swapped(grid, observer):
        return text + "with its two coordinates swapped it lies inside; x or longitude comes first"
    return text + "move it, add tiles, or say in which CRS it is given"


def _looks_like_degrees(grid: Grid, observer: Observer) -> bool:
    """Tell whether a position read as longitude and latitude lies in the grid."""
    return abs(observer.x) <= 360.0 and abs(observer.y) <= 90.0 and not geodesy.frame_of(
        grid.crs_wkt
    ).is_lonlat and _is_inside_as(grid, replace(observer, crs="EPSG:4326"))


def _is_inside_as(grid: Grid, observer: Observer) -> bool:
    try:
        x, y = _in_grid_crs(grid, observer, observer.x, observer.y)
        return _inside(grid, *geodesy.post_position(grid, x, y))
    except InputError:
        return False


def _is_swapped(grid: Grid, observer: Observer) -> bool:
    """Tell whether a position lies in the grid once its coordinates are swapped."""
    x, y = observer.y, observer.x
    try:
        if observer.crs is not None:
            x, y = _in_grid_crs(grid, observer, x, y)
        return _inside(grid, *(float(v) for v in geodesy.post_position(grid, x, y)))
    except InputError:
        return False
