"""Numbers in words: lengths, coordinates and spans as results tell them."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable


def told_length(metres: float) -> str:
    """Write a length with the unit that suits it."""
    return f"{metres / 1000.0:g} km" if metres >= 1000.0 else f"{metres:g} m"


def told_distance(metres: float) -> str:
    """Write a distance that was found, to a tenth of a kilometre or to the metre."""
    return f"{metres / 1000:.1f} km" if metres >= 1000 else f"{metres:.0f} m"


def told_area(square_metres: float, *, small: bool = False) -> str:
    """Write an area in square kilometres, or in square metres where those are small."""
    return f"{square_metres:,.0f} m2" if small else f"{square_metres / 1e6:,.2f} km2"


def told_number(value: float) -> str:
    """Write a coordinate without needless digits."""
    return f"{value:.8f}".rstrip("0").rstrip(".") if abs(value) < 1000 else f"{value:.10g}"


def told_span(values: Iterable[float]) -> str:
    """Write values as one number or from the least to the greatest.

    Examples
    --------
    >>> told_span([2.0, 1.7, 2.0]), told_span([50.0])
    ('1.7 to 2', '50')
    """
    found = sorted(set(values))
    return f"{found[0]:g}" if len(found) == 1 else f"{found[0]:g} to {found[-1]:g}"


def told_lengths(values: Iterable[float]) -> str:
    """Write lengths as one or from the least to the greatest, each with its unit."""
    found = sorted(set(values))
    low, high = told_length(found[0]), told_length(found[-1])
    return low if low == high else f"{low} to {high}"
