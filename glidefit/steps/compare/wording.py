"""How a comparison was judged and what that costs, in plain words."""

from __future__ import annotations

import math

from glidefit.kernels.paired import Difference
from glidefit.steps.compare.pairing import (
    BORROWED,
    BY_CHAMBER,
    BY_DAY,
    CHAMBERS_OF_A_DAY,
    NOTHING,
    SAMPLES,
    WITHIN_A_DAY,
    Arrangement,
)


def method(arrangement: Arrangement, difference: Difference) -> str:
    """The test in one line."""
    if not difference.known:
        return ""
    df = f"{difference.df:.3g} degree{'s' if difference.df != 1 else ''} of freedom"
    pairs = len(arrangement.units)
    n, m = map(len, arrangement.samples)
    return {
        BY_CHAMBER: f"Student's t, {df}, over {pairs} days, chambers paired within them",
        BY_DAY: f"Student's t, {df}, over {pairs} days, each paired with itself",
        CHAMBERS_OF_A_DAY: f"Student's t, {df}, over {pairs} chambers of one day, each paired "
        "with itself",
        WITHIN_A_DAY: f"Welch's t, {df} (Satterthwaite), {n} against {m} chambers of one day",
        SAMPLES: f"Welch's t, {df} (Satterthwaite), {n} against {m} days, not paired",
        BORROWED: f"Student's t, {df}, {n} against {m} days with a common spread, not paired",
    }[arrangement.kind]


def no_interval(arrangement: Arrangement, difference: Difference) -> str:
    """Why a comparison has no interval; empty if it has one."""
    if difference.known:
        return ""
    if arrangement.kind == NOTHING:
        return "no interval: nothing repeats by which the difference could be judged"
    return "no interval: it is the same in all of them"


def note(
    condition: str,
    reference: str,
    arrangement: Arrangement,
    *,
    days: tuple[int, int, int],
    spread: float,
) -> str:
    """How condition and reference were compared, and what the design costs.

    Parameters
    ----------
    days : (of the condition, of the reference, shared)
    spread : float
        Relative SD between days of one condition; NaN if unknown.
    """
    own, others, shared = days
    pairs = len(arrangement.units)
    if arrangement.kind in (BY_CHAMBER, BY_DAY):
        within = sum(map(len, arrangement.pairs))
        how = (
            f"in {within} chambers of {pairs} days both were filmed"
            if arrangement.kind == BY_CHAMBER
            else f"both were filmed on the same {pairs} days"
        )
        text = (
            f"Paired: {how}, so that what a day does to both is taken out. Judged against how "
            "the ratio differs from day to day."
        )
        if pairs == 2:
            text += " Two days say little of that: a third would make the interval far narrower."
        left = own + others - 2 * shared
        if left and arrangement.kind == BY_DAY:
            text += (
                f" {_days(left)} that only one of them has {'is' if left == 1 else 'are'} left out."
            )
        return text
    return {
        CHAMBERS_OF_A_DAY: "Paired by chamber, on one day: the interval covers other chambers of "
        "that day, not other days.",
        WITHIN_A_DAY: "They share one day and are compared between the chambers of that day: the "
        "interval covers other chambers of that day, not other days. Film both on further days "
        "to say more.",
        SAMPLES: _unpaired(shared, spread),
        BORROWED: f"{condition if own == 1 else reference} has one day, and it is none of the "
        f"other's: days are taken to differ as those of {reference if own == 1 else condition} do. "
        + _unpaired(shared, spread),
        NOTHING: _too_little(condition, reference, days),
    }[arrangement.kind]


def _unpaired(shared: int, spread: float) -> str:
    which = "No day is shared" if shared == 0 else "Only one day is shared"
    size = (
        f" (one day differs from another by {100 * spread:.2g} %)" if math.isfinite(spread) else ""
    )
    return (
        f"Not paired: {which.lower()}, so what days differ by{size} stands in the interval in "
        "full. Film both on the same days: the same number of days then says more."
    )


def _too_little(condition: str, reference: str, days: tuple[int, int, int]) -> str:
    own, others, shared = days
    if not own or not others:
        return f"{condition if not own else reference} has no speed to compare."
    if shared:
        return (
            "They share one day on which one of them has a single chamber: how much another "
            "chamber would differ has not been seen. Film a second chamber of each, better a "
            "second day."
        )
    return (
        f"{condition} and {reference} have one day each and it is not the same: what the days "
        "differ by cannot be told from what the conditions differ by. Film both on one day."
    )


def _days(n: int) -> str:
    return f"{n} day{'' if n == 1 else 's'}"
