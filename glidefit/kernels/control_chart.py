"""Control chart of single values: centre line, limits and run rules."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.resampling import t_quantile

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

FEWEST = 5
# E|x1 - x2| / σ of two normal values, the d2 of control charts for ranges of two: 2/√π = 1.128.
D2 = 2 / math.sqrt(math.pi)
LIMIT_SIGMAS = 3.0
# What 3 sigma leave on both sides of a normal distribution: 0.27 %.
_LIMIT_LEVEL = math.erf(LIMIT_SIGMAS / math.sqrt(2))

UNLIKE = "unlike all other days"
BEYOND = "beyond the limits"
TWO_OF_THREE = "two of three days beyond two thirds of the way to the same limit"
EIGHT = "eight days in a row on the same side of the centre line"


def c4(n: int) -> float:
    """E[s] / σ of the standard deviation s of n normal values.

    ::

        c4 = √(2 / (n - 1)) Γ(n / 2) / Γ((n - 1) / 2)

    Raises
    ------
    ValueError
        For fewer than 2 values.

    References
    ----------
    ASTM E2587, table of factors; the closed form re-derived.
    """
    if n < 2:
        raise ValueError(f"n must be >= 2, is {n}")
    return math.sqrt(2 / (n - 1)) * math.exp(math.lgamma(n / 2) - math.lgamma((n - 1) / 2))


@dataclass(frozen=True, slots=True, kw_only=True)
class Chart:
    """Centre line, spread and limits of an individuals chart, and which values break a rule.

    Parameters
    ----------
    centre, sigma : float
        Mean, and spread from successive differences, of the values that are like the others.
    low, high : float
        centre ∓ 3 sigma.
    signals : tuple of tuples of str
        For each value the rules that it breaks.
    long_term : float
        Unbiased standard deviation s / c4 of the same values: larger than sigma where they
        wander.
    """

    centre: float
    sigma: float
    low: float
    high: float
    signals: tuple[tuple[str, ...], ...]
    long_term: float


def individuals_chart(values: Floats) -> Chart:
    """Individuals chart with the average moving range.

    ::

        sigma  = mean |x_i - x_(i-1)| / d2        d2 = 2/√π
        limits = mean(x) ∓ 3 sigma

    A single value far off widens the limits by which it is judged, so much that among ten days
    one that is 5 sigma off is found in one case of four. So a value that lies outside the 99.73 %
    prediction interval of all others is set apart first, and centre and limits come from the rest.

    Rules: a value set apart; one beyond the limits; two of three successive values beyond 2 sigma
    on one side; eight in a row on one side of the centre line.

    Parameters
    ----------
    values : (n,) array
        In the order of time, n >= 5, finite.

    Raises
    ------
    ValueError
        For fewer values, or one that is not finite.

    References
    ----------
    Western Electric, Statistical Quality Control Handbook (1956): limits, run rules. Prediction
    interval of one value: Hahn & Meeker, Statistical Intervals (1991). From memory; factors
    re-derived.
    """
    values = np.asarray(values, dtype=np.float64)
    if len(values) < FEWEST or not np.all(np.isfinite(values)):
        raise ValueError(f"a chart needs at least {FEWEST} finite values, there are {len(values)}")
    apart = unlike_the_others(values)
    rest = values[~apart]
    centre = float(np.mean(rest))
    sigma = float(np.mean(np.abs(np.diff(rest)))) / D2
    signals = run_signals(values - centre, sigma=sigma)
    return Chart(
        centre=centre,
        sigma=sigma,
        low=centre - LIMIT_SIGMAS * sigma,
        high=centre + LIMIT_SIGMAS * sigma,
        signals=tuple(
            (UNLIKE, *broken) if off else broken for broken, off in zip(signals, apart, strict=True)
        ),
        long_term=float(np.std(rest, ddof=1)) / c4(len(rest)),
    )


def unlike_the_others(values: Floats) -> Bools:
    """Values outside the prediction interval of all others, the farthest first, (n,).

    One value of normal ones is so in 0.27 % of cases, however few they are. At most a third of
    the values is taken out, and four are left.
    """
    apart = np.zeros(len(values), dtype=np.bool_)
    for _ in range(min(len(values) // 3, len(values) - 4)):
        left = np.flatnonzero(~apart)
        scores = _distances(values[left])
        worst = int(np.argmax(scores))
        if scores[worst] <= 1:
            break
        apart[left[worst]] = True
    return apart


def _distances(values: Floats) -> Floats:
    """Of each value to the mean of the others, in half widths of their prediction interval."""
    n = len(values) - 1
    others = np.array([np.delete(values, i) for i in range(n + 1)])
    spread = others.std(axis=1, ddof=1) * math.sqrt(1 + 1 / n) * t_quantile(_LIMIT_LEVEL, n - 1)
    off = np.abs(values - others.mean(axis=1))
    return np.where(off > 0, off / np.where(spread > 0, spread, np.inf), 0.0) + np.where(
        (spread == 0) & (off > 0), np.inf, 0.0
    )


def run_signals(distance: Floats, *, sigma: float) -> tuple[tuple[str, ...], ...]:
    """Rules broken by each value, from its distance to the centre line, (n,)."""
    found: list[tuple[str, ...]] = []
    for i, d in enumerate(distance):
        broken = []
        if abs(d) > LIMIT_SIGMAS * sigma:
            broken.append(BEYOND)
        side = math.copysign(1.0, d)
        far = distance * side > 2 * sigma
        if far[i] and far[max(0, i - 2) : i + 1].sum() >= 2:
            broken.append(TWO_OF_THREE)
        if i >= 7 and np.all(distance[i - 7 : i + 1] * side > 0):
            broken.append(EIGHT)
        found.append(tuple(broken))
    return tuple(found)
