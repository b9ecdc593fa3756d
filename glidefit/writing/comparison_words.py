"""Comparisons as sentences with rounded numbers, for somebody who reads nothing else."""

from __future__ import annotations

import math
from collections.abc import Sequence

from glidefit.quantities import QUANTITIES
from glidefit.results import Comparison, ResponseCurve, ResponseParameter
from glidefit.writing.rounding import NONE, percent, probability, rounded, significant
from glidefit.writing.wording import counted, joined, named, visible

FRACTION = "motile_fraction"
# Larger and smaller, as a tag and in a sentence about the quantity.
_TAGS = {"speed_um_s": ("faster", "slower"), "persistence_length_um": ("longer", "shorter")}
_LENGTH = ("longer", "shorter")
_SIGNIFICANT = 0.05
_CURVES = {
    "michaelis-menten": "Michaelis-Menten",
    "hill": "Hill",
    "competitive": "competitive inhibition",
    "arrhenius": "Arrhenius",
    "saturation": "saturation",
    "linear": "straight line",
}


def label(quantity: str) -> str:
    """A quantity as text, whatever the key."""
    return QUANTITIES[quantity].label if quantity in QUANTITIES else visible(quantity)


def axis_label(quantity: str) -> str:
    """A quantity with its unit: "speed (µm/s)"."""
    unit = QUANTITIES[quantity].unit if quantity in QUANTITIES else ""
    return f"{label(quantity)} ({unit})" if unit else label(quantity)


def effect(c: Comparison) -> tuple[float, float, float]:
    """Value and interval: of the ratio, or of the difference of fractions."""
    if c.quantity == FRACTION:
        return c.difference.value, c.difference.low, c.difference.high
    return c.ratio.value, c.ratio.low, c.ratio.high


def p_value(c: Comparison) -> float:
    """P value of the ratio, or of the difference of fractions."""
    return c.difference.p_value if c.quantity == FRACTION else c.p_value


def differs(c: Comparison) -> bool:
    """True if the interval excludes "no difference"."""
    _, low, high = effect(c)
    middle = 0.0 if c.quantity == FRACTION else 1.0
    return low > middle or high < middle


def verdict(c: Comparison, *, family: int = 1) -> str:
    """A few words: "slower", "same within ±10 %", "not resolved"."""
    value, low, _ = effect(c)
    if math.isnan(low):
        return "no interval" if math.isfinite(value) else "no value"
    if differs(c):
        text = _tag(c, value)
        if c.equivalent:
            text += f", by less than {percent(c.margin)}"
        return f"{text}, not adjusted" if _by_chance(c, family) else text
    return f"same within ±{percent(c.margin)}" if c.equivalent else "not resolved"


def _middle(c: Comparison) -> float:
    return 0.0 if c.quantity == FRACTION else 1.0


def _tag(c: Comparison, value: float) -> str:
    more, less = _TAGS.get(c.quantity, ("higher", "lower"))
    return more if value >= _middle(c) else less


def _word(c: Comparison, value: float) -> str:
    more, less = _LENGTH if c.quantity == "persistence_length_um" else ("higher", "lower")
    return more if value >= _middle(c) else less


def _by_chance(c: Comparison, family: int) -> bool:
    """Different by itself, but not among all comparisons of the primary quantity."""
    return c.primary and family > 1 and not c.p_adjusted < _SIGNIFICANT


def main_sentence(c: Comparison, *, family: int) -> str:
    """The primary comparison in plain words.

    Parameters
    ----------
    c : Comparison
    family : int
        Number of comparisons for which its p value is adjusted.
    """
    value, low, high = effect(c)
    what, reference = label(c.quantity), named(c.reference)
    whose = f"that of {reference}"
    if not math.isfinite(value):
        return f"The {what} cannot be compared with {whose}."
    if math.isnan(low):
        return f"The {what} is {_than(c, value, whose)}; there is no interval."
    level = percent(_level(c))
    if differs(c):
        text = f"The {what} is {_than(c, value, whose)} ({level} interval {_interval(c)})."
        if _by_chance(c, family):
            text += (
                f" Among {family} comparisons a difference like this comes by chance more often "
                f"than once in twenty (adjusted p = {probability(c.p_adjusted)})."
            )
        return text
    if c.equivalent:
        near = f"{_one(c, c.equivalence_low)} to {_one(c, c.equivalence_high)}"
        return (
            f"The {what} is the same as {whose} within ±{percent(c.margin)} "
            f"({percent(c.equivalence_level)} interval {near})."
        )
    return (
        f"No difference in {what} from {reference} was found, but anything from {_one(c, low)} to "
        f"{_one(c, high)} remains open ({level} interval)."
    )


def other_sentence(others: Sequence[Comparison]) -> str:
    """Secondary quantities whose interval excludes no difference; empty without one."""
    clear = [
        f"{label(c.quantity)} {_one(c, effect(c)[0])} ({_interval(c)})"
        for c in others
        if differs(c)
    ]
    return f"Secondary, not adjusted: {joined(clear)}." if clear else ""


def _as_percent(c: Comparison) -> bool:
    """Ratios within a factor of two are told as percents more or less."""
    return c.quantity != FRACTION and 0.5 < c.ratio.value < 2


def _than(c: Comparison, value: float, whose: str) -> str:
    """The size of a difference with what it is compared with."""
    if c.quantity == FRACTION or _as_percent(c):
        return f"{_one(c, value)} than {whose}"
    return f"{significant(value, digits=2)} times {whose}"


def _one(c: Comparison, value: float) -> str:
    """One number in words: "12 % lower", "0.14 lower", "2.5 times"."""
    if c.quantity == FRACTION:
        return f"{significant(abs(value), digits=2)} {_word(c, value)}"
    if 0.5 < value < 2:
        return f"{percent(abs(value - 1))} {_word(c, value)}"
    return f"{significant(value, digits=2)} times"


def _interval(c: Comparison) -> str:
    """Ends of an interval on one side of no difference, the smaller one first."""
    _, low, high = effect(c)
    if c.quantity != FRACTION and not _as_percent(c):
        return f"{significant(low, digits=2)} to {significant(high, digits=2)}"
    ends = sorted(abs(x - _middle(c)) for x in (low, high))
    if c.quantity == FRACTION:
        return " to ".join(significant(x, digits=2) for x in ends)
    first, last = map(percent, ends)
    return f"{first.removesuffix(' %')} to {last}"


def _level(c: Comparison) -> float:
    return c.difference.level if c.quantity == FRACTION else c.ratio.level


def family_size(comparisons: Sequence[Comparison]) -> int:
    """Number of comparisons in the primary quantity that have a p value."""
    return sum(c.primary and math.isfinite(p_value(c)) for c in comparisons)


def curve_name(model: str) -> str:
    """A curve as text, whatever the key."""
    return _CURVES.get(model, visible(model))


def response_sentence(curve: ResponseCurve) -> str:
    """What a response curve says: its parameters, or that they are not determined."""
    what = visible(curve.label)
    series = f" of {named(curve.series)}" if curve.series else ""
    if not curve.model:
        return f"Speed{series} against {what}: no curve was fitted."
    parts = [parameter_text(p) for p in curve.parameters]
    return f"Speed{series} against {what} ({curve_name(curve.model)}): {joined(parts)}."


def parameter_text(p: ResponseParameter) -> str:
    """One parameter with interval and unit: "K_m 48 (44 to 52) µM"."""
    shown = rounded(p.value, p.low, p.high)
    unit = f" {p.unit}" if p.unit else ""
    if shown.value == NONE:
        bound = "" if shown.interval == "no interval" else f" ({shown.interval}{unit})"
        return f"{p.label} not determined{bound}"
    interval = "" if shown.interval == "no interval" else f" ({shown.interval})"
    return f"{p.label} {shown.value}{interval}{unit}"


def days_sentence(n_out: int, n_days: int) -> str:
    """How many days of a chart are out of control."""
    if n_out == 0:
        return f"All {counted(n_days, 'day')} are in control."
    return f"{n_out} of {counted(n_days, 'day')} {'is' if n_out == 1 else 'are'} out of control."
