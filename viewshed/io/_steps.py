"""Steps of a count of observers, and colours in which they tell apart, in grey print as well."""

from math import ceil

import numpy as np
from numpy.typing import NDArray

#: Most steps that a map can show and a reader tell apart.
MOST_STEPS = 6
# From pale rose over plum to ink: each darker than the one before by about the same, so that grey
# print keeps them apart, and turning from warm to cold, so that colour does too. No step is as
# light as hidden ground.
_RAMP = np.array(
    [
        (0.96, 0.67, 0.71),
        (0.85, 0.50, 0.63),
        (0.70, 0.36, 0.60),
        (0.49, 0.26, 0.54),
        (0.30, 0.17, 0.43),
        (0.14, 0.10, 0.25),
    ]
)
#: Widths of equal steps that are read with ease: these times a power of ten.
_ROUND = (1, 2, 3, 4, 5, 10)

Step = tuple[int, int]


def steps_of(cells: NDArray[np.int64]) -> list[Step]:
    """Choose steps for a count.

    Parameters
    ----------
    cells : numpy.ndarray of int, shape (n,)
        How many cells are seen by 0, 1, 2, ... observers.

    Returns
    -------
    list of (first, last)
        At most six, from 1 to the greatest count that occurs, without gaps; none where nothing is
        seen. Each number is a step of its own where there are few; else equal or growing widths,
        whichever tells more of the map apart.
    """
    seen = np.flatnonzero(cells[1:]) + 1
    if not seen.size:
        return []
    most = int(seen[-1])
    if most <= MOST_STEPS:
        return [(i, i) for i in range(1, most + 1)]
    ways = [_growing(most), _equal(most)]
    told = [_told_apart(np.array([cells[a : b + 1].sum() for a, b in way])) for way in ways]
    return ways[int(told[1] > told[0])]


def _growing(most: int) -> list[Step]:
    """Widths that grow by about the same factor."""
    ends = [1]
    for left in range(MOST_STEPS - 1, 0, -1):
        factor = (most / ends[-1]) ** (1.0 / left)
        ends.append(min(most, max(ends[-1] + 1, round(ends[-1] * factor))))
    return _between(ends)


def _equal(most: int) -> list[Step]:
    """Equal round widths."""
    least = ceil(most / MOST_STEPS)
    width = next(w for p in range(6) for lead in _ROUND if (w := lead * 10**p) >= least)
    return _between([*range(width, most, width), most])


def _between(ends: list[int]) -> list[Step]:
    return [(first + 1, last) for first, last in zip([0, *ends[:-1]], ends, strict=True)]


def _told_apart(cells: NDArray[np.int64]) -> float:
    """Entropy of the shares: most where the steps cover alike."""
    shares = cells[cells > 0] / cells.sum()
    return float(-(shares * np.log(shares)).sum())


def told_step(step: Step) -> str:
    """Write a step as its one number or its first and last."""
    first, last = step
    return f"{first}" if first == last else f"{first}\u2013{last}"


def step_colours(steps: int) -> NDArray[np.float32]:
    """Give the colours of a number of steps, from the fewest to the most observers.

    Parameters
    ----------
    steps : int
        1 to 6.

    Returns
    -------
    numpy.ndarray, shape (steps, 3), float32
        Red, green, blue from 0 to 1.
    """
    last = MOST_STEPS - 1
    ends = {1: (3.5, 3.5), 2: (1.0, 4.0), 3: (0.5, 4.5)}.get(steps, (0.0, float(last)))
    at = np.linspace(*ends, steps)
    nodes = np.arange(MOST_STEPS)
    return np.stack([np.interp(at, nodes, c) for c in _RAMP.T], axis=1).astype(np.float32)
