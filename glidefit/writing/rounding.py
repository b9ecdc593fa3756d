"""Numbers as a reader sees them: rounded by their interval, and no further."""

from __future__ import annotations

import math
from dataclasses import dataclass

_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
NONE = "–"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rounded:
    """A value and its interval as text, rounded to the same place."""

    value: str  # "0.80", "–" if there is none
    interval: str  # "0.77 to 0.83", "at least 12" or "no interval"

    def __str__(self) -> str:
        if self.value == NONE:
            return NONE if self.interval == "no interval" else self.interval
        if self.interval == "no interval":
            return f"{self.value}, no interval"
        return f"{self.value} ({self.interval})"


def decimals(uncertainty: float) -> int:
    """Decimal places to which two significant digits of an uncertainty (> 0) reach.

    Negative to the left of the point. A carry changes the place: 9.96 is 10, so 0.

    References
    ----------
    JCGM 100:2008 (GUM), 7.2.6.
    """
    if not (uncertainty > 0 and math.isfinite(uncertainty)):
        raise ValueError(f"an uncertainty is > 0, this is {uncertainty:g}")
    return 1 - _exponent(uncertainty, digits=2)


def rounded(value: float, low: float, high: float) -> Rounded:
    """A value and the ends of its interval, rounded to two digits of half the interval.

    A lopsided interval, or one open on a side, is judged by its shorter arm. Without any interval
    three digits are given. A zero that ends all the numbers is left out.

    Parameters
    ----------
    value, low, high : float
        NaN where there is none; an infinite end is an open one.
    """
    value, low, high = (x if math.isfinite(x) else math.nan for x in (value, low, high))
    finite = [x for x in (value, low, high) if not math.isnan(x)]
    if not finite:
        return Rounded(value=NONE, interval="no interval")
    places = _places(value, low, high)
    largest = max(abs(x) for x in finite)
    power = 0
    if largest > 0 and not 1e-3 <= largest < 1e6:
        power = math.floor(math.log10(largest))
    texts = _aligned((value, low, high), places=places, power=power)
    return Rounded(
        value=_scaled(texts[0], power),
        interval=_interval(texts[1], texts[2], power),
    )


def significant(value: float, *, digits: int = 3) -> str:
    """A number alone, with this many significant digits; "–" for NaN."""
    if not math.isfinite(value):
        return NONE
    if value != 0 and not 1e-3 <= abs(value) < 1e6:
        power = _exponent(abs(value), digits=digits)
        return _scaled(_fixed(value / 10.0**power, digits - 1), power)
    return _fixed(value, _digits_place(value, digits=digits))


def probability(p: float) -> str:
    """A p value: two digits, never below 0.0001."""
    if not math.isfinite(p):
        return NONE
    return "< 0.0001" if p < 0.0001 else significant(p, digits=2)


def percent(part: float, whole: float = 1.0) -> str:
    """A share in percent, whole numbers from 10 % on; "–" of nothing, "< 0.1 %" of a little."""
    if not (math.isfinite(part) and whole > 0):
        return NONE
    share = 100 * part / whole
    if 0 < share < 0.05:
        return "< 0.1 %"
    return f"{_fixed(share, 0 if share >= 9.95 or share == 0 else 1)} %"


def _exponent(positive: float, *, digits: int) -> int:
    """Power of ten of a number after rounding to some digits."""
    return int(f"{positive:.{digits - 1}e}".split("e")[1])


def _digits_place(value: float, *, digits: int) -> int:
    return digits - 1 if value == 0 else digits - 1 - _exponent(abs(value), digits=digits)


def _places(value: float, low: float, high: float) -> int:
    width = (high - low) / 2
    arms = [arm for arm in (value - low, high - value) if arm > 0]
    if arms and not min(arms) > 0.2 * width:
        # A lopsided interval, or one open on a side: its shorter arm says what is known best,
        # and an end keeps two digits of its own.
        width = min(arms)
        ends = [abs(x) for x in (low, high) if x != 0 and not math.isnan(x)]
        return max(decimals(width), *(_digits_place(end, digits=2) for end in ends))
    if width > 0:
        return decimals(width)
    return max(_digits_place(x, digits=3) for x in (value, low, high) if not math.isnan(x))


def _aligned(numbers: tuple[float, ...], *, places: int, power: int) -> list[str]:
    """Texts with the same decimals; "" for NaN."""
    shift = max(places + power, 0) if power else places
    texts = ["" if math.isnan(x) else _fixed(x / 10.0**power, shift) for x in numbers]
    if all(t.endswith("0") for t in texts if t) and any("." in t for t in texts):
        texts = [t[:-1].removesuffix(".") for t in texts]
    return texts


def _interval(low: str, high: str, power: int) -> str:
    if not low and not high:
        return "no interval"
    if not high:
        return f"at least {_scaled(low, power)}"
    if not low:
        return f"at most {_scaled(high, power)}"
    return f"{_scaled(low, power)} to {_scaled(high, power)}"


def _scaled(text: str, power: int) -> str:
    return f"{text}{_power(power)}" if text else NONE


def _power(power: int) -> str:
    return f" × 10{str(power).translate(_SUPERSCRIPTS)}" if power else ""


def _fixed(value: float, places: int) -> str:
    """Fixed decimals with a true minus sign; places below 0 round left of the point."""
    text = f"{round(value, places):.{max(places, 0)}f}"
    if text.startswith("-"):
        return text[1:] if not text.strip("-0.") else f"−{text[1:]}"
    return text
