"""Round numbers for rulers, rings and edges."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.floating[Any]]


def ticks(values: Floats, others: Floats, places: Floats) -> list[tuple[float, str]]:
    """Round values along an edge: their places and labels; none where the grid is turned away."""
    change = np.diff(values)
    span = float(abs(values[-1] - values[0]))
    one_way = bool((change > 0).all() or (change < 0).all())
    if not one_way or span < float(abs(others[-1] - others[0])):
        return []
    step = next(s for s in _round_steps(span / 7.0) if s >= span / 7.0)
    order = 1 if change[0] > 0 else -1
    first = np.ceil(values.min() / step)
    digits = max(0, -int(np.floor(np.log10(step) + 1e-9)))
    found = []
    for i in range(int(np.floor(values.max() / step) - first) + 1):
        value = (first + i) * step
        place = float(np.interp(value, values[::order], places[::order]))
        found.append((place, f"{value:,.{digits}f}".replace(",", "\u2009").replace("-", "\u2212")))
    return found


def ring_distances(range_m: float) -> list[float]:
    """Distances of the rings [m]: round ones inside the range and the range itself."""
    step = next(s for s in _round_steps(range_m / 4.0) if s >= range_m / 4.0)
    inner = [step * i for i in range(1, 5) if step * i < range_m * 0.88]
    return [*inner, range_m]


def round_down(length: float) -> float:
    """Greatest 1, 2 or 5 times a power of ten that is not more than a length."""
    return max(s for s in _round_steps(length / 10) if s <= length)


def _round_steps(low: float) -> list[float]:
    power = int(np.floor(np.log10(low)))
    return [float(f"{lead}e{power + i}") for i in range(3) for lead in (1, 2, 5)]
