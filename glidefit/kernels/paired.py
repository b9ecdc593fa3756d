"""Differences of two means by Student's t: paired, of two samples, against a borrowed spread."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.resampling import t_quantile

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """A difference of means with its standard error and degrees of freedom.

    Intervals and p value follow from these three, so that they agree with each other: the p value
    is below 1 - level exactly when the interval at that level excludes zero.
    """

    value: float
    error: float  # NaN if nothing repeats
    df: float

    @property
    def known(self) -> bool:
        """True if there is an interval: the spread is known, and is not zero."""
        return math.isfinite(self.error) and self.error > 0 and self.df > 0

    def interval(self, level: float) -> tuple[float, float]:
        """Two-sided confidence interval; NaN without a spread."""
        if not self.known:
            return math.nan, math.nan
        half = t_quantile(level, self.df) * self.error
        return self.value - half, self.value + half

    @property
    def p_value(self) -> float:
        """Two-sided p value of no difference; NaN without a spread."""
        if not self.known:
            return math.nan
        from scipy.special import stdtr

        return float(2 * stdtr(self.df, -abs(self.value) / self.error))


def paired_difference(differences: Floats) -> Difference:
    """Mean of paired differences, by Student's t with n - 1 degrees of freedom.

    Parameters
    ----------
    differences : (n,) array
        One a pair; of one pair there is a value and no error.

    Raises
    ------
    ValueError
        Without a pair.
    """
    n = len(differences)
    if n < 1:
        raise ValueError("there is no pair")
    value = float(np.mean(differences))
    if n < 2:
        return Difference(value=value, error=math.nan, df=0)
    return Difference(
        value=value, error=float(np.std(differences, ddof=1)) / math.sqrt(n), df=n - 1
    )


def welch_difference(first: Floats, second: Floats) -> Difference:
    """Difference of the means of two samples, each with a spread of its own.

    ::

        error² = s1²/n1 + s2²/n2
        df     = error⁴ / [(s1²/n1)²/(n1 - 1) + (s2²/n2)²/(n2 - 1)]

    Parameters
    ----------
    first, second : (n,) and (m,) arrays
        At least two values each.

    Raises
    ------
    ValueError
        For a sample of fewer than two values.

    References
    ----------
    Welch, Biometrika 34, 28 (1947); Satterthwaite, Biometrics Bull. 2, 110 (1946); from memory.
    """
    n, m = len(first), len(second)
    if min(n, m) < 2:
        raise ValueError(f"the samples have {n} and {m} values, there must be at least 2")
    one, two = float(np.var(first, ddof=1)) / n, float(np.var(second, ddof=1)) / m
    both = one + two
    df = both**2 / (one**2 / (n - 1) + two**2 / (m - 1)) if both > 0 else 0.0
    return Difference(value=float(np.mean(first) - np.mean(second)), error=math.sqrt(both), df=df)


def borrowed_difference(first: Floats, second: Floats) -> Difference:
    """Difference of the means of two samples that share one spread, known from either.

    The way out where one of them holds a single value.

    Parameters
    ----------
    first, second : (n,) and (m,) arrays
        At least one value each, and three together.

    Raises
    ------
    ValueError
        For fewer values.
    """
    n, m = len(first), len(second)
    if min(n, m) < 1 or n + m < 3:
        raise ValueError(f"the samples have {n} and {m} values, the spread is unknown")
    squares = float(np.sum((first - first.mean()) ** 2) + np.sum((second - second.mean()) ** 2))
    df = n + m - 2
    return Difference(
        value=float(np.mean(first) - np.mean(second)),
        error=math.sqrt(squares / df * (1 / n + 1 / m)),
        df=df,
    )
