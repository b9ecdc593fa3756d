"""Limits of a fraction at 0 or 1, or so near that a symmetric interval would leave its range."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.resampling import t_quantile

Floats = NDArray[np.float64]


def lowest_fraction_of_all(filaments: Floats, *, level: float, correlation: float) -> float:
    """One-sided lower limit of a fraction when all filaments of all units have the property.

    Within a unit (a chamber, a day) filaments are alike: its own fraction is drawn from a beta
    distribution of mean f and variance ``correlation`` f (1 − f). The limit is the f at which
    all of them have it in 1 − level of experiments ::

        Π_units Π_{k < m} (f (1 − c) + k c) / (1 − c + k c) = 1 − level

    Parameters
    ----------
    filaments : (u,) array
        Number in each unit, need not be whole.
    level : float
        Confidence, between 0 and 1.
    correlation : float
        Between filaments of a unit, 0 to below 1; 0 is the exact binomial limit.

    References
    ----------
    Beta-binomial distribution (Pólya urn); for correlation 0 the limit of Clopper & Pearson,
    Biometrika 26, 404 (1934), (1 − level)^(1/n). Formula re-derived.
    """
    from scipy.optimize import brentq
    from scipy.special import gammaln

    if not 0 <= correlation < 1:
        raise ValueError(f"correlation must be 0 to below 1, is {correlation:g}")
    total = float(np.sum(filaments))
    if not total > 0:
        return 0.0
    if correlation == 0:
        return float((1 - level) ** (1 / total))
    size = (1 - correlation) / correlation
    wanted = math.log(1 - level)

    def excess(fraction: float) -> float:
        a = fraction * size
        chance = gammaln(a + filaments) - gammaln(a) - gammaln(size + filaments) + gammaln(size)
        return float(np.sum(chance)) - wanted

    return float(brentq(excess, 1e-12, 1.0))


def interval_by_effective_count(
    fraction: float, *, variance: float, df: float, filaments: float, level: float
) -> tuple[float, float]:
    """Interval of a fraction that stays between 0 and 1, from the count that its variance is worth.

    Clopper and Pearson's limits with ::

        n = min(f (1 − f) / variance, filaments) (t(filaments − 1) / t(df))²

    in place of a count.

    Parameters
    ----------
    fraction : float
        Between 0 and 1, neither of them.
    variance : float
        Of the fraction, > 0.
    df : float
        Degrees of freedom of the variance.
    filaments : float
        Their number.
    level : float

    References
    ----------
    Korn & Graubard, Survey Methodology 24, 193 (1998); from memory.
    """
    from scipy.special import betaincinv

    count = min(fraction * (1 - fraction) / variance, filaments)
    count *= (t_quantile(level, max(filaments - 1, 1)) / t_quantile(level, df)) ** 2
    tail, with_it = (1 - level) / 2, count * fraction
    low = betaincinv(with_it, count - with_it + 1, tail)
    high = betaincinv(with_it + 1, count - with_it, 1 - tail)
    return float(low), float(high)
