"""Intervals of fractions at their limits, where a symmetric one would be nonsense."""

from __future__ import annotations

import numpy as np

from glidefit.evidence import Combined
from glidefit.kernels import fractions, resampling
from glidefit.results import Estimate

# How alike filaments of one chamber or day are taken to be when all of them glide, or none does,
# and the data cannot show it: the correlation that goes with a scatter of 0.16 from unit to unit
# about a fraction of one half. As if they were independent (0) the limit would be too near.
_ALIKE = 0.1


def all_or_none(combined: Combined, column: int, centre: float, level: float) -> Estimate:
    """A limit from counts where every filament has the property, or none has.

    Parameters
    ----------
    combined : Combined
        With filaments.
    column : int
    centre : float
        1 or 0.
    level : float
    """
    filaments = np.asarray(combined.filaments)[:, column]
    lowest = fractions.lowest_fraction_of_all(filaments, level=level, correlation=_ALIKE)
    every = centre == 1.0
    return Estimate(
        value=centre,
        low=lowest if every else float("nan"),
        high=float("nan") if every else 1 - lowest,
        level=level,
        covers=combined.covers,
        method=f"one-sided limit: beta-binomial, {'all' if every else 'none'} of "
        f"{filaments.sum():.0f} filaments (weighted by frames) in {len(filaments)} "
        f"{combined.covers}, correlation within them assumed to be {_ALIKE:g}",
    )


def inside(
    combined: Combined,
    column: int,
    centre: float,
    half: float,
    df: int,
    level: float,
    method: str,
) -> tuple[float, float, str]:
    """Interval of a fraction so near to its limit that a symmetric one would pass it.

    Parameters
    ----------
    combined : Combined
    column : int
    centre, half : float
        Middle and half width of the symmetric one.
    df : int
        Of its variance.
    level : float
    method : str
        Of the symmetric one.
    """
    variance = (half / resampling.t_quantile(level, df)) ** 2
    filaments = np.inf
    if combined.filaments is not None:
        filaments = float(combined.filaments[:, column].sum())
    low, high = fractions.interval_by_effective_count(
        centre, variance=variance, df=df, filaments=filaments, level=level
    )
    return low, high, f"{method}; near its limit, so from the effective count of filaments"
