"""Drawing units with replacement, level by level, and intervals that know how few there are.

Units form a tree: days hold chambers, chambers hold recordings, recordings hold tracks. A level
is described by the parent of each of its units, an array of int from 0. A resample is kept as the
number of times that each unit was drawn, so that a resampled estimate is a weighted one.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Units × resamples that are drawn at once: 10 MB of scratch, and little outside the cache.
_CELLS_AT_ONCE = 250_000


def draw_counts(n: int, *, n_resamples: int, rng: np.random.Generator) -> Ints:
    """How often each of n units is drawn when n are drawn with replacement.

    Parameters
    ----------
    n : int
        Number of units, >= 1.
    n_resamples : int
        Number of resamples, >= 1.
    rng : Generator

    Returns
    -------
    (n_resamples, n) array of int
        Multinomial; each row sums to n.

    Raises
    ------
    ValueError
        For a number below 1.
    """
    if n < 1:
        raise ValueError(f"n must be >= 1, is {n}")
    return level_draws(np.zeros(n, dtype=np.int64), n_resamples=n_resamples, rng=rng)


def level_draws(child_parent: Ints, *, n_resamples: int, rng: np.random.Generator) -> Ints:
    """How often each unit is drawn when each parent's children are drawn within it.

    The units above are held fixed: the spread over such resamples is what this level alone
    brings, and the variances of the levels add up. (The product of independent draws of two
    levels is something else: a unit drawn twice would hold the same children twice.)

    Parameters
    ----------
    child_parent : (n,) array of int
        Parent of each unit, >= 0, in any order.
    n_resamples : int
        Number of resamples, >= 1.
    rng : Generator

    Returns
    -------
    (n_resamples, n) array of int
        Within each parent each row sums to the number of its children.

    Raises
    ------
    ValueError
        Without a unit, for a negative parent or a number of resamples below 1.
    """
    order, _ = _families(child_parent, n_resamples)
    counts = np.empty((n_resamples, len(child_parent)), dtype=np.int64)
    for rows, drawn in _drawn(child_parent, n_resamples=n_resamples, rng=rng):
        counts[rows, order] = drawn
    return counts


def resampled_sums(
    child_parent: Ints, values: Floats, *, n_resamples: int, rng: np.random.Generator
) -> Floats:
    """Sums of the children's values in each parent, over resamples of the children.

    The draws are those of `level_draws` with the same generator, but never held all at once.

    Parameters
    ----------
    child_parent : (n,) array of int
        Parent of each unit, >= 0, in any order.
    values : (n, q) array
    n_resamples : int
        Number of resamples, >= 1.
    rng : Generator

    Returns
    -------
    (n_resamples, n_parents, q) array
        n_parents is one more than the largest parent; 0 for a parent without children.

    Raises
    ------
    ValueError
        As in `level_draws`, or unless there is one row of values a unit.
    """
    if values.ndim != 2 or len(values) != len(child_parent):
        raise ValueError(f"values have shape {values.shape} for {len(child_parent)} units")
    order, sizes = _families(child_parent, n_resamples)
    parents = np.flatnonzero(sizes)
    starts = np.cumsum(sizes[parents]) - sizes[parents]
    columns = np.ascontiguousarray(values[order].T)
    sums = np.zeros((n_resamples, len(sizes), values.shape[1]))
    for rows, drawn in _drawn(child_parent, n_resamples=n_resamples, rng=rng):
        weights = drawn.astype(np.float64)
        # Sums of numpy, not products of BLAS, whose last bits may depend on its threads.
        for j, column in enumerate(columns):
            sums[rows, parents, j] = np.add.reduceat(weights * column, starts, axis=1)
    return sums


def nested_draws(
    parents: Sequence[Ints], *, n_resamples: int, rng: np.random.Generator
) -> tuple[Ints, ...]:
    """How often each unit of each level is drawn, all levels at once, from the top down.

    Every copy of a drawn unit draws its own children anew, as many as there are.

    Parameters
    ----------
    parents : sequence of (n,) arrays of int
        From the highest level to the lowest, each the parent of every unit of the level below:
        day of each chamber, chamber of each recording, recording of each track.
    n_resamples : int
        Number of resamples, >= 1.
    rng : Generator

    Returns
    -------
    tuple of (n_resamples, n) arrays of int
        One more than there are arrays in `parents`: days, chambers, recordings, tracks.

    Raises
    ------
    ValueError
        Without a level, or for a parent that is not there or has no child.
    """
    if not parents:
        raise ValueError("there is no level to draw from")
    _, sizes = _families(parents[0], n_resamples)
    counts = [draw_counts(len(sizes), n_resamples=n_resamples, rng=rng)]
    for level, child_parent in enumerate(parents):
        order, sizes = _families(child_parent, n_resamples)
        if len(sizes) != counts[-1].shape[1] or sizes.min() < 1:
            raise ValueError(f"level {level}: its units are not the parents that the next one has")
        drawn = np.empty((n_resamples, len(child_parent)), dtype=np.int64)
        for members, copies in zip(np.split(order, np.cumsum(sizes)), counts[-1].T, strict=False):
            share = np.full(len(members), 1 / len(members))
            drawn[:, members] = rng.multinomial(copies * len(members), share)
        counts.append(drawn)
    return tuple(counts)


def _families(child_parent: Ints, n_resamples: int) -> tuple[Ints, Ints]:
    """Order that puts children by parent, and the number of children of each parent."""
    if n_resamples < 1:
        raise ValueError(f"n_resamples must be >= 1, is {n_resamples}")
    if len(child_parent) < 1 or child_parent.min() < 0:
        raise ValueError("there is no unit, or one with a negative parent")
    return np.argsort(child_parent, kind="stable"), np.bincount(child_parent)


def _drawn(
    child_parent: Ints, *, n_resamples: int, rng: np.random.Generator
) -> Iterator[tuple[slice, Ints]]:
    """Counts of some resamples at a time, children by parent; the same however they are cut."""
    _, sizes = _families(child_parent, n_resamples)
    n = len(child_parent)
    size = np.repeat(sizes, sizes).astype(np.float64)
    first = np.repeat(np.cumsum(sizes) - sizes, sizes)
    at_once = max(1, _CELLS_AT_ONCE // n)
    for start in range(0, n_resamples, at_once):
        rows = slice(start, min(start + at_once, n_resamples))
        uniform = rng.random((rows.stop - start, n))
        uniform *= size
        drawn = uniform.astype(np.int64)
        drawn += first
        drawn += np.arange(len(drawn))[:, np.newaxis] * n
        yield rows, np.bincount(drawn.ravel(), minlength=drawn.size).reshape(drawn.shape)


def small_sample_factor(n: int) -> float:
    """√(n / (n - 1)): what makes the variance of a bootstrapped mean of n units unbiased.

    Raises
    ------
    ValueError
        For fewer than 2 units, whose spread is unknown.
    """
    if n < 2:
        raise ValueError(f"the spread of {n} units is unknown, there must be at least 2")
    return math.sqrt(n / (n - 1))


def t_quantile(level: float, df: float) -> float:
    """Half width of a two-sided interval at `level`, in standard errors, by Student's t.

    Parameters
    ----------
    level : float
        Confidence, between 0 and 1, for example 0.95.
    df : float
        Degrees of freedom, > 0, need not be whole.

    Raises
    ------
    ValueError
        For a number out of its range.
    """
    if not 0 < level < 1:
        raise ValueError(f"level must be between 0 and 1, is {level:g}")
    if not df > 0:
        raise ValueError(f"df must be > 0, is {df:g}")
    from scipy.special import stdtrit

    return float(stdtrit(df, (1 + level) / 2))


def student_interval(values: Floats, *, level: float) -> tuple[float, float]:
    """Confidence interval of the mean of independent values, by Student's t.

    Parameters
    ----------
    values : (n,) array
        At least 2, one a unit of the highest level.
    level : float
        Confidence, between 0 and 1.

    Returns
    -------
    low, high : float
        In the unit of the values.

    Raises
    ------
    ValueError
        For fewer than 2 values or a level out of range.
    """
    n = len(values)
    if n < 2:
        raise ValueError(f"the spread of {n} values is unknown, there must be at least 2")
    mean = float(np.mean(values))
    half = t_quantile(level, n - 1) * float(np.std(values, ddof=1)) / math.sqrt(n)
    return mean - half, mean + half
