"""Variances from other conditions: when they are alike, and intervals that stay at their level.

A condition says little of its own scatter: three days leave two degrees of freedom. Chambers of
other conditions, or the many days of one of them, say more if they scatter alike. All squares are
relative to the condition's own scale, so that fast and slow conditions compare.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.components import nested_components
from glidefit.kernels.resampling import t_quantile

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Two mean squares are alike unless the condition's own is larger at the 25 % level or smaller at
# the 1 % level. The first is what Bancroft advises for pooling after a test (a laxer one lets
# coverage fall to 89 % where the own spread is twice that of the others); what it sends back to the
# own interval has a large own square, so that overall coverage is above the level, of which the
# second spends a part: 95.3 to 96.8 % are left where all scatter alike, for 1 to 9 degrees of
# freedom (a second test at 2.5 % would leave 94.3 % to two chambers).
LARGER_AT, SMALLER_AT = 0.25, 0.01
_NODES = 100


@dataclass(frozen=True, slots=True, kw_only=True)
class Scatter:
    """How one quantity of one condition scatters, relative to its value squared.

    ``day_square`` is the variance of day means (all days alike, however many chambers they have)
    and ``chamber_square`` that of chambers about the mean of their day; NaN where a level does not
    repeat. ``chamber_share`` is the mean over days of 1 / chambers: what a chamber's variance adds
    to that of a day's mean. ``filament`` is the part of a chamber's variance that its filaments
    bring.
    """

    days: int
    chambers: int
    day_square: float
    chamber_square: float
    chamber_df: int
    chamber_share: float
    filament: float

    @property
    def day_df(self) -> int:
        """Degrees of freedom of ``day_square``."""
        return self.days - 1


def scatter(values: Floats, day: Ints, filament: Floats) -> Scatter:
    """Mean squares of relative chamber values.

    Parameters
    ----------
    values : (n,) array
        Finite.
    day : (n,) array of int
        From 0, none left out.
    filament : (n,) array
        Sampling variance of each chamber.
    """
    size = np.bincount(day)
    means = np.bincount(day, weights=values) / size
    nested = nested_components(values, day)
    return Scatter(
        days=len(size),
        chambers=len(values),
        day_square=float(means.var(ddof=1)) if len(size) > 1 else math.nan,
        chamber_square=nested.within_mean_square,
        chamber_df=nested.within_df,
        chamber_share=float(np.mean(1 / size)),
        filament=float(np.mean(filament)),
    )


def alike(own: float, own_df: int, others: float, others_df: int) -> bool:
    """Whether a mean square may be taken for one of the same expectation as others.

    F test, at the levels `LARGER_AT` and `SMALLER_AT`.

    References
    ----------
    Bancroft, Biometrics 20, 427 (1964): preliminary tests at the 25 % level; from memory.
    """
    from scipy.special import fdtri

    if not (own_df > 0 and others_df > 0 and others > 0):
        return False
    low, high = fdtri(own_df, others_df, SMALLER_AT), fdtri(own_df, others_df, 1 - LARGER_AT)
    return bool(low <= own / others <= high)


def pooled_chambers(
    own: Scatter, others: Sequence[Scatter], *, level: float
) -> tuple[float, int] | None:
    """Half width over the chambers of one day, with the chamber variance of all conditions.

    What filaments bring may differ between conditions: each mean square is scaled by what is
    expected of the condition's own over what is expected of its own.

    Returns
    -------
    half_width : float
        Relative.
    df : int
        Of Student's t; or None if the condition does not scatter like the others.
    """
    there = [one for one in others if one.chamber_df > 0]
    df = sum(one.chamber_df for one in there)
    if own.chamber_df < 1 or df < 1:
        return None
    beyond = _beyond_filaments(there)
    squares = sum(
        one.chamber_df * one.chamber_square * _ratio(beyond + own.filament, beyond + one.filament)
        for one in there
    )
    if not alike(own.chamber_square, own.chamber_df, squares / df, df):
        return None
    total = own.chamber_df + df
    square = (own.chamber_df * own.chamber_square + squares) / total
    return t_quantile(level, total) * math.sqrt(square / own.chambers), total


def borrowed_days(own: Scatter, lender: Scatter, *, level: float) -> tuple[float, int] | None:
    """Half width over days, with the day variance of a condition that has many.

    The variance of the lender's day means holds its day × condition part. It is adjusted for
    different numbers of chambers a day and of filaments a chamber, with factors that keep the
    level whatever the days bring (`second_factor`). A condition of one day is compared by its
    chambers, which is all that it can show.

    Returns
    -------
    half_width : float
        Relative.
    df : int
        Of the lender's days; or None if the two do not scatter alike.
    """
    both = [one for one in (own, lender) if one.chamber_df > 0]
    beyond = _beyond_filaments(both)
    least = (beyond + own.filament) * own.chamber_share
    lenders_least = (beyond + lender.filament) * lender.chamber_share
    change = least - lenders_least
    expected = max(lender.day_square + change, least)
    if own.days > 1:
        fits = alike(own.day_square, own.day_df, expected, lender.day_df)
    else:
        chambers = max(lender.chamber_square - lender.filament, 0.0) + own.filament
        fits = alike(own.chamber_square, own.chamber_df, chambers, lender.chamber_df)
    if not fits:
        return None
    first = t_quantile(level, lender.day_df) ** 2
    square = first * lender.day_square
    if change != 0 and least > 0:
        df = sum(one.chamber_df for one in both)
        # Rounded away from nothing, which is the safe side, so that few factors are computed.
        share = min(math.copysign(math.ceil(20 * abs(change) / least) / 20, change), 0.95)
        factor = second_factor(level, lender.day_df, max(df, 1), share)
        square = max(square + factor * change, t_quantile(level, math.inf) ** 2 * least)
    return math.sqrt(square / own.days), lender.day_df


def _beyond_filaments(them: Sequence[Scatter]) -> float:
    """Chamber variance without what filaments bring, pooled; 0 where nothing is known."""
    df = sum(one.chamber_df for one in them)
    total = sum(one.chamber_df * (one.chamber_square - one.filament) for one in them)
    return max(total / df, 0.0) if df else 0.0


def _ratio(wanted: float, there: float) -> float:
    return wanted / there if there > 0 else 1.0


@functools.lru_cache(maxsize=1024)
def second_factor(level: float, df: int, other_df: int, share: float) -> float:
    """What the second of two mean squares is to be multiplied with in a squared half width.

    A mean of variance V = A + B, of which A and B have mean squares a and b, is held by ::

        value ± sqrt(t(df)² a + factor b)

    in at least ``level`` of experiments, whatever B is of V, from nothing to ``share``: the
    probability is concave in that part, because P(Z² < x) is concave in x, so that it is lowest
    at its ends; at nothing it is Student's t. The factor is the smallest that keeps the level at
    the other end. Where B is taken off (``share`` < 0, V = A − |B|), it is the largest that does,
    found on a grid, since there the probability is not concave.

    Parameters
    ----------
    level : float
        Confidence.
    df, other_df : int
        Degrees of freedom of the two mean squares.
    share : float
        B / V at its largest, below 1.

    References
    ----------
    Banerjee, Sankhyā 22, 221 (1960), from memory: t² of each mean square is always enough. The
    smaller factor is derived here.
    """
    if not share < 1:
        raise ValueError(f"share must be < 1, is {share:g}")
    from scipy.optimize import brentq

    first = t_quantile(level, df) ** 2
    shares = [share] if share > 0 else list(share * np.linspace(0.125, 1, 8))

    def beyond(factor: float) -> float:
        return min(_held(first, factor, df, other_df, s) for s in shares) - level

    if share < 0:
        return float(brentq(beyond, 0.0, first)) if beyond(first) < 0 else first
    # Below this the probability would fall from the level as soon as B is not nothing.
    least = first / df * (df - 1) / (1 + first / df)
    if beyond(least) >= 0:
        return least
    return float(brentq(beyond, least, max(first, t_quantile(level, other_df) ** 2)))


def _held(first: float, second: float, df: int, other_df: int, share: float) -> float:
    """P(Z² < first (1 − share) χ²/df + second share χ²'/other_df)."""
    from scipy.special import erf

    a = first * (1 - share) * _chi_square(df)[:, None]
    b = second * share * _chi_square(other_df)[None, :]
    return float(np.mean(erf(np.sqrt(np.maximum(a + b, 0) / 2))))


@functools.lru_cache(maxsize=256)
def _chi_square(df: int) -> Floats:
    """χ²/df at the middles of equal probabilities."""
    from scipy.special import chdtri

    upper = 1 - (np.arange(_NODES) + 0.5) / _NODES
    return np.asarray(chdtri(df, upper) / df)
