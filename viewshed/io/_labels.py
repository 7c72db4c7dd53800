"""Where names can stand on a map so that none covers another, nor an observer."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import cache, partial
from itertools import chain, islice
from math import cos, hypot, inf, pi, sin
from typing import NamedTuple

Box = tuple[float, float, float, float]
Line = tuple[float, float, float, float]

#: Sides of an observer on which a name is tried, best first: right and down, as on the page.
_SIDES = ((1, 0), (-1, 0), (0, -1), (0, 1), (1, -1), (-1, -1), (1, 1), (-1, 1))
#: Length of the line to a name that finds no room close by [points].
_AWAY = (12.0, 20.0, 30.0, 42.0, 56.0, 72.0, 90.0)
#: Directions in which such a line is tried: up and down before sideways.
_TURNS = tuple(pi * n / 12 for n in (18, 6, 16, 20, 4, 8, 14, 22, 2, 10, 0, 12))
#: Up to so many names are also tried with lines alone, which suits rows of observers.
_FEW = 12
#: Room kept free round a name [points].
_GAP = 1.5


class Label(NamedTuple):
    """A name: the number of its observer, its middle, the line to it if it stands apart."""

    number: int
    x: float
    y: float
    leader: Line | None


class Limits(NamedTuple):
    """What another order of the names needs: how many stay out, and how long all lines are."""

    missed: float
    length: float


class Room:
    """What is taken of a map, in pixels of the page.

    Parameters
    ----------
    left, top, right, bottom : float
        Its frame.
    """

    def __init__(self, left: float, top: float, right: float, bottom: float) -> None:
        self.frame = (left, top, right, bottom)
        self.taken: list[Box] = []
        self.lines: list[Line] = []

    def holds(self, x: float, y: float, dx: float, dy: float) -> bool:
        """Tell whether a box of half sides dx, dy round a place lies inside the frame."""
        left, top, right, bottom = self.frame
        return left <= x - dx and x + dx <= right and top <= y - dy and y + dy <= bottom

    def is_free(self, x: float, y: float, dx: float, dy: float) -> bool:
        """Tell whether such a box lies inside the frame and clear of all that is taken."""
        if not self.holds(x, y, dx, dy):
            return False
        for u, v, du, dv in self.taken:
            if abs(x - u) < dx + du and abs(y - v) < dy + dv:
                return False
        box = x, y, dx, dy
        return not any(_meets(line, box) for line in self.lines)

    def take(self, x: float, y: float, dx: float, dy: float) -> None:
        """Keep such a box for something."""
        self.taken.append((x, y, dx, dy))

    def is_clear(self, line: Line) -> bool:
        """Tell whether a line crosses nothing that is taken."""
        for box in self.taken:
            if _meets(line, box):
                return False
        return not any(_cross(line, other) for other in self.lines)


def place_names(
    room: Room,
    places: list[tuple[float, float]],
    sizes: list[tuple[float, float]],
    *,
    radius: float,
    point: float,
) -> list[Label]:
    """Place names beside observers, or apart from them at the end of a line.

    Parameters
    ----------
    room : Room
        The map, on which the observers have taken their boxes; the names take theirs.
    places : list of (x, y)
        Observers [pixels].
    sizes : list of (half width, half height)
        Half sides of their names [pixels]; those of no width are left out.
    radius : float
        Half the size of an observer's mark [pixels].
    point : float
        Pixels in a point.

    Returns
    -------
    list of Label
        Those for which there is room.
    """
    best: tuple[tuple[int, float], list[Label], Room] | None = None
    limits = Limits(inf, inf)
    shown = {i for i, at in enumerate(places) if sizes[i][0] > 0 and room.holds(*at, 0, 0)}
    number = 13 if len(places) <= 30 else 3
    for beside in [True, False] if len(places) <= _FEW else [True]:
        passes = _passes(room, places, sizes, (radius, point, beside))
        for order in islice(_orders(places), number):
            trial = Room(*room.frame)
            trial.lines = list(room.lines)
            named = [i for i in order if i in shown]
            found = _place(trial, named, passes, sizes, _GAP * point, limits)
            score = (len(found), -_length(trial.lines))
            if best is None or score > best[0]:
                best = score, found, trial
                limits = Limits(len(shown) - len(found), -score[1])
    if best is None:
        return []
    room.taken += best[2].taken
    room.lines = best[2].lines
    return best[1]


def _length(lines: list[Line]) -> float:
    return sum(hypot(x2 - x1, y2 - y1) for x1, y1, x2, y2 in lines)


def _orders(places: list[tuple[float, float]]) -> Iterator[list[int]]:
    """Orders in which names are placed; which is best depends on how the observers stand."""
    every = range(len(places))
    if not places:
        return
    x0, y0 = (sum(p[axis] for p in places) / len(places) for axis in (0, 1))
    yield list(every)
    yield sorted(every, key=lambda i: -hypot(places[i][0] - x0, places[i][1] - y0))
    yield sorted(every, key=lambda i: hypot(places[i][0] - x0, places[i][1] - y0))
    for axis in (0, 1):
        along = sorted(every, key=lambda i, a=axis: places[i][a])  # type: ignore[misc]
        yield along
        yield along[::-1]
        yield along[::2] + along[1::2]
        yield along[1::2] + along[::2]


#: Middle of a name and the line to it, if any.
Try = tuple[float, float, Line | None]


def _passes(
    room: Room,
    places: list[tuple[float, float]],
    sizes: list[tuple[float, float]],
    how: tuple[float, float, bool],
) -> list[Callable[[int], list[Try]]]:
    """Tell where each name can stand, clear of what is taken before any name is placed.

    All names that can stand beside their observers come first, if wanted.
    """
    radius, point, beside = how
    gap = _GAP * point
    middle = sum(x for x, _ in places) / max(len(places), 1)

    def tries_of(sides: tuple[tuple[int, int], ...], i: int) -> list[Try]:
        place, half = places[i], sizes[i]
        tries = _beside(place, half, radius + gap, sides)
        if sides != _SIDES:
            out = 0.0 if beside else (-0.9 if place[0] < middle else 0.9)
            tries = chain(tries, _apart(place, half, (radius, point), out))
        return [one for one in tries if _fits(room, one, half, gap)]

    ways = [_SIDES, ()] if beside else [_SIDES[:2]]
    return [cache(partial(tries_of, sides)) for sides in ways]


def _fits(room: Room, one: Try, half: tuple[float, float], gap: float) -> bool:
    x, y, leader = one
    return room.is_free(x, y, half[0] + gap, half[1] + gap / 2) and (
        leader is None or room.is_clear(leader)
    )


def _place(
    room: Room,
    order: list[int],
    passes: list[Callable[[int], list[Try]]],
    sizes: list[tuple[float, float]],
    gap: float,
    limits: Limits,
) -> list[Label]:
    """Place names in an order, each where it fits first.

    It is left unfinished once another order is known to do no worse.
    """
    found: list[Label] = []
    for tries_of in passes:
        done, missed = {label.number for label in found}, 0
        for i in order:
            if i in done:
                continue
            fit = next((one for one in tries_of(i) if _fits(room, one, sizes[i], gap)), None)
            if fit is None:
                missed += 1
            else:
                x, y, leader = fit
                room.take(x, y, *sizes[i])
                if leader is not None:
                    room.lines.append(leader)
                found.append(Label(i, x, y, leader))
            same = missed == limits.missed and _length(room.lines) >= limits.length
            if tries_of is passes[-1] and (missed > limits.missed or same):
                return found
    return found


def _beside(
    place: tuple[float, float],
    half: tuple[float, float],
    off: float,
    sides: tuple[tuple[int, int], ...],
) -> Iterator[Try]:
    for right, down in sides:
        near = off if 0 in (right, down) else 0.7 * off
        x = place[0] + right * (near + half[0])
        y = place[1] + down * (near + half[1])
        yield x, y, None


def _apart(
    place: tuple[float, float], half: tuple[float, float], units: tuple[float, float], out: float
) -> Iterator[Try]:
    """Try names at the end of a line: over or under its end, or reaching left or right of it."""
    radius, point = units
    for away in _AWAY:
        for turn in _TURNS:
            right, down = cos(turn), sin(turn)
            near, far = 1.5 * radius, radius + away * point
            end = (place[0] + far * right, place[1] + far * down)
            line = (place[0] + near * right, place[1] + near * down, *end)
            if abs(right) > 0.9:
                yield end[0] + half[0] * (1.08 if right > 0 else -1.08), end[1], line
                continue
            y = end[1] + half[1] * (1.2 if down > 0 else -1.2)
            for shift in (out or 0.8 * right, -0.9, 0.9):
                yield end[0] + half[0] * shift, y, line


def _meets(line: Line, box: Box) -> bool:
    """Tell whether a line touches a box, by clipping it."""
    x1, y1, x2, y2 = line
    x, y, dx, dy = box
    if (
        (x1 <= x - dx and x2 <= x - dx)
        or (x1 >= x + dx and x2 >= x + dx)
        or (y1 <= y - dy and y2 <= y - dy)
        or (y1 >= y + dy and y2 >= y + dy)
    ):
        return False
    low, high = 0.0, 1.0
    for start, step, middle, half in ((x1, x2 - x1, x, dx), (y1, y2 - y1, y, dy)):
        if step == 0.0:
            continue
        ends = sorted(((middle - half - start) / step, (middle + half - start) / step))
        low, high = max(low, ends[0]), min(high, ends[1])
    return low < high


def _cross(one: Line, other: Line) -> bool:
    """Tell whether two lines cross."""

    def side(line: Line, x: float, y: float) -> float:
        return (line[2] - line[0]) * (y - line[1]) - (line[3] - line[1]) * (x - line[0])

    return (
        side(one, *other[:2]) * side(one, *other[2:]) < 0
        and side(other, *one[:2]) * side(other, *one[2:]) < 0
    )


def closest(places: list[tuple[float, float]]) -> float:
    """Give the distance from an observer to its nearest neighbour, the median of all [pixels]."""
    if len(places) < 2:
        return float("inf")
    nearest = sorted(
        min(hypot(x - u, y - v) for j, (u, v) in enumerate(places) if j != i)
        for i, (x, y) in enumerate(places)
    )
    return nearest[len(nearest) // 2]
