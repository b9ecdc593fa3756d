"""Variance components of chambers nested in days, and of conditions crossed with days."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True)
class NestedComponents:
    """Analysis of variance of units nested in groups; NaN where a level does not repeat.

    ``between`` and ``within`` are the variance components, not clipped: noise makes ``between``
    negative where it is small. ``units`` (n0) is the number of units that a group counts as.
    """

    between: float
    within: float
    between_mean_square: float
    within_mean_square: float
    between_df: int
    within_df: int
    units: float


def nested_components(values: Floats, group: Ints) -> NestedComponents:
    """Unbiased components of units in groups of unequal size.

    With N units in a groups of n_i::

        MSB = sum n_i (mean_i - mean)^2 / (a - 1)        E = within + n0 between
        MSW = sum (y_ij - mean_i)^2 / (N - a)            E = within
        n0  = (N - sum n_i^2 / N) / (a - 1)

    Where no group has two units, both are one: ``between`` is then the variance of the units.

    Parameters
    ----------
    values : (n,) array
        Finite.
    group : (n,) array of int
        Group of each unit.

    Raises
    ------
    ValueError
        Without a unit, or unless there is one group a unit.

    References
    ----------
    Searle, Casella & McCulloch, Variance Components (1992), section 3.6: unbalanced one-way
    classification, ANOVA estimators. Formula re-derived.
    """
    if values.ndim != 1 or values.shape != group.shape or len(values) == 0:
        raise ValueError(f"values have shape {values.shape}, groups {group.shape}")
    _, member = np.unique(group, return_inverse=True)
    size = np.bincount(member).astype(np.float64)
    means = np.bincount(member, weights=values) / size
    n, a = len(values), len(size)
    within_square = between_square = units = float("nan")
    if n > a:
        within_square = float(np.sum((values - means[member]) ** 2)) / (n - a)
    if a > 1:
        between_square = float(np.sum(size * (means - values.mean()) ** 2)) / (a - 1)
        units = (n - float(np.sum(size**2)) / n) / (a - 1)
    return NestedComponents(
        between=(between_square - (within_square if n > a else 0.0)) / units,
        within=within_square,
        between_mean_square=between_square,
        within_mean_square=within_square,
        between_df=a - 1,
        within_df=n - a,
        units=units,
    )


def interaction_mean_square(table: Floats) -> float:
    """Mean square of what row and column effects leave of a two-way table.

    Its expectation is the interaction variance plus the mean variance of a cell.

    Parameters
    ----------
    table : (r, c) array
        At least 2 × 2, finite.

    Raises
    ------
    ValueError
        For a smaller table.

    References
    ----------
    Searle, Casella & McCulloch (1992), section 4.3: two-way crossed classification.
    """
    if table.ndim != 2 or min(table.shape) < 2:
        raise ValueError(f"the table is {table.shape}, it must be at least 2 × 2")
    rows, columns = table.mean(axis=1, keepdims=True), table.mean(axis=0, keepdims=True)
    rest = table - rows - columns + table.mean()
    return float(np.sum(rest**2) / ((table.shape[0] - 1) * (table.shape[1] - 1)))


def mean_square_draws(
    mean_square: float, *, df: int, n_draws: int, rng: np.random.Generator
) -> Floats:
    """Expectations that are compatible with a mean square, (n_draws,).

    ``mean_square × df / χ²(df)``: their quantiles are the ends of chi-square intervals, and
    functions of several have generalized confidence intervals (components among them).

    Raises
    ------
    ValueError
        For fewer degrees of freedom than 1.

    References
    ----------
    Weerahandi, J. Am. Stat. Assoc. 88, 899 (1993): generalized confidence intervals; from memory.
    """
    if df < 1:
        raise ValueError(f"df must be >= 1, is {df}")
    return np.asarray(mean_square * df / rng.chisquare(df, n_draws))
