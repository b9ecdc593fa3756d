"""What a number of days reaches: expected half width of an interval, power of a t test."""

from __future__ import annotations

import functools
import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from glidefit.kernels.resampling import t_quantile

Floats = NDArray[np.float64]

_NODES = 200


def mean_of_spread(df: int) -> float:
    """E[s] / σ of a standard deviation s with ``df`` degrees of freedom, by its chi distribution.

    ::

        E[s] / σ = √(2 / df) Γ((df + 1) / 2) / Γ(df / 2)

    Raises
    ------
    ValueError
        For df below 1.

    References
    ----------
    Factor c4 of control charts, ASTM E2587, tables; formula re-derived.
    """
    if df < 1:
        raise ValueError(f"df must be >= 1, is {df}")
    return math.sqrt(2 / df) * math.exp(math.lgamma((df + 1) / 2) - math.lgamma(df / 2))


def expected_half_width(variance: ArrayLike, *, n: int, level: float) -> Floats:
    """Expected half width of Student's t interval for the mean of n independent values.

    ::

        t(n - 1) × E[s] / √n

    Parameters
    ----------
    variance : array
        Variance of one value, >= 0.
    n : int
        Number of values (days), >= 2.
    level : float
        Confidence, between 0 and 1.

    Raises
    ------
    ValueError
        For a number out of its range.
    """
    if n < 2:
        raise ValueError(f"the spread of {n} values is unknown, there must be at least 2")
    factor = t_quantile(level, n - 1) * mean_of_spread(n - 1) / math.sqrt(n)
    return np.asarray(factor * np.sqrt(np.asarray(variance, dtype=np.float64)))


def power_of_t_test(effect: ArrayLike, *, df: int, level: float) -> Floats:
    """Power of a two-sided t test, by the noncentral t distribution.

    T = (Z + effect) / √(χ²/df): the chance of \\|T\\| above its quantile is averaged over χ² by
    Gauss-Legendre nodes on its probability. Absolute error below 1e-5.

    Parameters
    ----------
    effect : array
        Noncentrality: true difference over its standard error; infinite where there is no error.
    df : int
        Degrees of freedom, >= 1.
    level : float
        1 - size of the test, for example 0.95.

    Raises
    ------
    ValueError
        For a number out of its range.

    References
    ----------
    Johnson, Kotz & Balakrishnan, Continuous Univariate Distributions 2 (1995), chapter 31.
    """
    if df < 1:
        raise ValueError(f"df must be >= 1, is {df}")
    from scipy.special import ndtr

    spread, weights = _spreads(df)
    limit = t_quantile(level, df) * spread
    shift = np.abs(np.asarray(effect, dtype=np.float64))[..., np.newaxis]
    rejected = ndtr(shift - limit) + ndtr(-shift - limit)
    return np.asarray(rejected @ weights)


@functools.cache
def _spreads(df: int) -> tuple[Floats, Floats]:
    """Values of √(χ²/df), and the probability that each stands for."""
    from scipy.special import chdtri

    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    return np.sqrt(chdtri(df, (1 - nodes) / 2) / df), weights / 2


def binomial_p_value(held: int, n: int, *, share: float) -> float:
    """p value of the exact two-sided binomial test that ``held`` of n come of this share.

    Raises
    ------
    ValueError
        For a count outside 0 to n.
    """
    from scipy.stats import binomtest

    return float(binomtest(held, n, share).pvalue)
