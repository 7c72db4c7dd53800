"""Refraction: how much of the Earth's curve the air gives back.

Three ways of writing the same thing are in use, and mixing them up costs metres:

====== ============================================== ==========================
symbol meaning                                        trade
====== ============================================== ==========================
k      Earth radius / radius of the ray's curvature   surveying (0.13), sea (0.17)
K      effective Earth factor 1 / (1 - k)             radio (4/3)
m      refraction angle / angle at the Earth's centre older surveying (0.075)
====== ============================================== ==========================

Inside the package only k is used.
"""

from __future__ import annotations

import math
import re
import warnings
from dataclasses import dataclass

from viewshed.constants import RADIO_EARTH_FACTOR, SURVEY_K
from viewshed.errors import InputError, ViewshedWarning

#: Least effective Earth factor that is taken for real air over a whole sight line [1].
LEAST_EARTH_FACTOR = 0.5
#: Bare values in this closed span look like m [1].
LOOKS_LIKE_M = (0.06, 0.09)
#: Bare values above this look like the factor 1 - k [1].
LOOKS_LIKE_FACTOR = 0.5
#: Distance at which the effect of a misread value is told [m].
TOLD_AT = 30_000.0
#: Mean Earth radius (IUGG, 2 a + b over 3) used for that message only [m].
MEAN_RADIUS = 6_371_009.0

_WAYS = "write k=0.13, K=4/3, m=0.065, none, survey or radio"
_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?")


@dataclass(frozen=True)
class Refraction:
    """State of the air, the same along every sight line.

    Parameters
    ----------
    k : float
        Refraction coefficient [1], Earth radius over the radius of the ray's curvature; positive
        when rays bend down. At least -1 and less than 1.
    origin : str
        Where the value comes from, for the record: a name or the text that was given.

    Raises
    ------
    InputError
        If `k` is not a finite number, is 1 or more, or gives K below 0.5.

    References
    ----------
    .. [1] Hirt et al. (2010), J. Geophys. Res. 115, D21102, doi:10.1029/2010JD014067 (k).
    .. [2] Recommendation ITU-R P.310 (effective Earth radius factor K).

    Examples
    --------
    >>> air = Refraction(0.13, "survey")
    >>> air.describe()
    'k = 0.13 (K = 1.149)'
    """

    k: float
    origin: str = "given"

    def __post_init__(self) -> None:
        """Refuse what no air can be."""
        if isinstance(self.k, bool) or not isinstance(self.k, (int, float)):
            msg = f"refraction {self.k!r} is not a number; {_WAYS}"
            raise InputError(msg)
        if not math.isfinite(self.k):
            msg = f"refraction k = {self.k} is not a finite number; {_WAYS}"
            raise InputError(msg)
        if self.k >= 1.0:
            msg = (
                f"refraction k = {_short(self.k)} is refused: with k of 1 or more rays follow "
                f"the Earth and there is no horizon; {self._instead()}"
            )
            raise InputError(msg)
        if self.k < 1.0 - 1.0 / LEAST_EARTH_FACTOR:
            msg = (
                f"refraction k = {_short(self.k)} is K = {_short(1.0 / (1.0 - self.k))}: "
                f"K below {LEAST_EARTH_FACTOR} (k below -1) is refused; give a k of at least -1"
            )
            raise InputError(msg)

    def _instead(self) -> str:
        if _short(self.k) == "1":
            return "K=1 (k = 0) is no refraction, a radio path is K=4/3"
        value = _short(self.k)
        return f"if the effective Earth factor is meant write K={value} (k = {_k_of(self.k)})"

    @property
    def K(self) -> float:
        """Effective Earth factor 1 / (1 - k) [1]."""
        return 1.0 / (1.0 - self.k)

    @property
    def m(self) -> float:
        """Refraction angle over the angle at the Earth's centre, k / 2 [1]."""
        return 0.5 * self.k

    def describe(self) -> str:
        """Give k and K in the form that titles, tags and records carry."""
        return f"k = {_short(self.k)} (K = {self.K:.4g})"


def parse_refraction(text: str | float) -> Refraction:
    """Read a refraction as a user writes it.

    Parameters
    ----------
    text : str or float
        A number (taken as k), ``k=0.13``, ``K=1.333`` or ``K=4/3``, ``m=0.065``, ``none``,
        ``survey`` or ``radio``. Capital K and small k are different things.

    Returns
    -------
    Refraction

    Raises
    ------
    InputError
        If the text is none of these or the value is refused by `Refraction`.

    Warns
    -----
    ViewshedWarning
        If a bare number looks like m (0.06 to 0.09) or like the factor 1 - k (above 0.5).

    Examples
    --------
    >>> parse_refraction("K=4/3").k
    0.25
    >>> parse_refraction("m=0.075").describe()
    'k = 0.15 (K = 1.176)'
    """
    if isinstance(text, (int, float)):
        refraction = Refraction(float(text) if not isinstance(text, bool) else text, "given")
        _warn_if_unusual(refraction.k)
        return refraction
    if not isinstance(text, str):
        msg = f"refraction {text!r} is not a number or a text; {_WAYS}"
        raise InputError(msg)
    word = text.strip()
    named = {"none": 0.0, "survey": SURVEY_K, "radio": 1.0 - 1.0 / RADIO_EARTH_FACTOR}
    if word.lower() in named:
        return Refraction(named[word.lower()], word.lower())
    symbol, equals, value = (part.strip() for part in word.partition("="))
    if not equals:
        refraction = Refraction(_number(word, text), word)
        _warn_if_unusual(refraction.k)
        return refraction
    return _from_symbol(symbol, _number(value, text), f"{symbol}={value}")


def apart_m(k: float, other_k: float, distance_m: float = TOLD_AT) -> float:
    """Height by which two readings of the air differ at a distance.

    Parameters
    ----------
    k, other_k : float
        Refraction coefficients [1].
    distance_m : float
        Ground distance [m].

    Returns
    -------
    float
        Difference of the drop (1 - k) d^2 / (2 R) [m], never negative.
    """
    return abs(other_k - k) * distance_m**2 / (2.0 * MEAN_RADIUS)


def _from_symbol(symbol: str, value: float, origin: str) -> Refraction:
    if symbol == "k":
        return Refraction(value, origin)
    if symbol == "m":
        if value >= LOOKS_LIKE_FACTOR:
            msg = (
                f"refraction {origin} is k = {_short(2 * value)}: k of 1 or more is refused; "
                f"if the effective Earth factor is meant write K={_short(value)}"
            )
            raise InputError(msg)
        return Refraction(2.0 * value, origin)
    if symbol == "K":
        if value < LEAST_EARTH_FACTOR:
            cure = f"; if the coefficient is meant write k={_short(value)}" if value > -1 else ""
            msg = f"refraction {origin} is refused: K is at least {LEAST_EARTH_FACTOR}{cure}"
            raise InputError(msg)
        return Refraction(1.0 - 1.0 / value, origin)
    msg = f"refraction {origin!r} is not understood; {_WAYS}"
    raise InputError(msg)


def _warn_if_unusual(k: float) -> None:
    value = _short(k)
    if LOOKS_LIKE_M[0] <= k <= LOOKS_LIKE_M[1]:
        others = [(f"m = {value}", f"m={value} (k = {_short(2.0 * k)})", 2.0 * k)]
    elif k > LOOKS_LIKE_FACTOR:
        others = [
            (f"the factor 1 - k = {value}", f"k={_short(1.0 - k)}", 1.0 - k),
            (f"K = {value}", f"K={value} (k = {_k_of(k)})", 1.0 - 1.0 / k),
        ]
    else:
        return
    readings = "; ".join(
        f"if you meant {what} write {cure}, "
        f"{apart_m(k, other):.0f} m apart at {TOLD_AT / 1000:.0f} km"
        for what, cure, other in others
    )
    text = f"k = {value} is unusual; {readings}; if k is meant write k={value}"
    warnings.warn(text, ViewshedWarning, stacklevel=3)


def _number(value: str, text: str) -> float:
    """Value of a plain number or, for K, of a fraction such as 4/3."""
    upper, slash, lower = (part.strip() for part in value.partition("/"))
    parts = [upper, lower] if slash else [upper]
    if all(_NUMBER.fullmatch(part) for part in parts):
        numbers = [float(part) for part in parts]
        if all(math.isfinite(n) for n in numbers) and (len(numbers) == 1 or numbers[1] != 0.0):
            return numbers[0] if len(numbers) == 1 else numbers[0] / numbers[1]
        msg = f"refraction {text!r} is not a finite number; {_WAYS}"
        raise InputError(msg)
    if value.strip("+-").lower() in {"nan", "inf", "infinity"}:
        msg = f"refraction {text!r} is not a finite number; {_WAYS}"
        raise InputError(msg)
    comma = "; write the decimals with a point" if re.fullmatch(r"[+-]?\d+,\d+", value) else ""
    msg = f"refraction {text!r} is not understood{comma}; {_WAYS}"
    raise InputError(msg)


def _k_of(earth_factor: float) -> str:
    return _short(1.0 - 1.0 / earth_factor)


def _short(value: float) -> str:
    """Up to five significant digits, no exponent for everyday values, no negative zero."""
    return f"{value + 0.0:.5g}"
