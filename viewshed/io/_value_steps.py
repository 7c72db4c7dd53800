"""What steps the values of an elevation grid come in: whole metres, feet turned into metres, ..."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

FOOT, US_FOOT = 0.3048, 1200.0 / 3937.0

#: Values of a strip that are tried first.
_FEW = 4096
#: Rounding of a float32 that was worked out in float32 [of the value], about its last bit.
_ROUNDING = 1.3e-7
#: A step has to be this many times as large as the rounding, or anything would fit it.
_TELLING = 16.0
#: What rounding to centimetres moves a height by, and a little more [m].
_TO_CENTIMETRES = 0.0051


@dataclass(frozen=True)
class Rounding:
    """What heights are rounded to: a step that all of them are whole multiples of.

    Attributes
    ----------
    metres : float
        Its size [m].
    name : str
        What it is called, such as "whole metres".
    slack : float
        How far a height may be off [m].
    """

    metres: float
    name: str
    slack: float = 0.0


def _steps() -> list[Rounding]:
    """Give the steps that are looked for, the largest first."""
    names = {
        1.0: "whole",
        0.5: "halves of a",
        0.25: "quarters of a",
        0.125: "eighths of a",
        0.1: "tenths of a",
        0.01: "hundredths of a",
        0.001: "thousandths of a",
    }
    found = []
    for size, one, many in (
        (1.0, "metre", "metres"),
        (FOOT, "foot", "feet"),
        (US_FOOT, "US survey foot", "US survey feet"),
    ):
        for part, name in names.items():
            found.append(Rounding(part * size, f"{name} {many if part == 1.0 else one}"))
        found += [Rounding(n * size, f"steps of {n} {many}") for n in (2, 5, 10, 20, 50, 100)]
    found.append(Rounding(FOOT - 1e-9, "whole feet, rounded to centimetres", _TO_CENTIMETRES))
    return sorted(found, key=lambda step: -step.metres)


@dataclass
class StepFinder:
    """Finds the largest step that fits all heights it is shown.

    Attributes
    ----------
    left : list of Rounding
        The steps that fit so far, the largest first.
    """

    left: list[Rounding] = field(default_factory=_steps)

    def add(self, heights: NDArray[np.float32]) -> None:
        """Look at some heights [m], all of them known."""
        if self.left and heights.size:
            self._keep(heights[:: max(1, heights.size // _FEW)])
        if self.left and heights.size > _FEW:
            self._keep(heights)

    def _keep(self, heights: NDArray[np.float32]) -> None:
        values = heights.astype(np.float64)
        rounding = _ROUNDING * np.abs(values)
        worst = float(rounding.max())
        kept = []
        for step in self.left:
            off = np.abs(values - step.metres * np.rint(values / step.metres))
            telling = step.metres > _TELLING * max(worst, step.slack)
            if telling and bool(np.all(off <= rounding + step.slack)):
                kept.append(step)
        self.left = kept

    def found(self, low: float, high: float) -> Rounding | None:
        """Give the largest step that fits heights between two ends [m] and occurs in them."""
        return next((step for step in self.left if high - low >= 2.0 * step.metres), None)
