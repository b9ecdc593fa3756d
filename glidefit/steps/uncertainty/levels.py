"""Means of what is there, their resamples, and what each level alone brings to the error."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import ChamberEvidence
from glidefit.kernels import resampling

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def mean_of(values: Floats) -> Floats:
    """Mean over rows of what is there, NaN where nothing is."""
    there = np.isfinite(values)
    count = there.sum(axis=0)
    total = np.where(there, values, 0.0).sum(axis=0)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def drawn_means(values: Floats, *, n_resamples: int, rng: np.random.Generator) -> Floats:
    """Means of drawn rows (b, p), stretched so that their variance is unbiased."""
    there = np.isfinite(values)
    units = there.sum(axis=0)
    counts = resampling.draw_counts(len(values), n_resamples=n_resamples, rng=rng)
    weight = counts @ there.astype(np.float64)
    total = counts @ np.where(there, values, 0.0)
    mean = mean_of(values)
    drawn = np.where(weight > 0, total / np.maximum(weight, 1), mean)
    stretch = np.sqrt(units / np.maximum(units - 1, 1))
    return np.where(units > 1, mean + stretch * (drawn - mean), np.nan)


def spread_of(draws: Floats) -> Floats:
    """Standard deviation over resamples about their centre, (p,); NaN without resamples."""
    known = np.isfinite(draws).all(axis=0)
    out = np.full(draws.shape[1], np.nan)
    out[known] = draws[:, known].std(axis=0)
    return out


def chamber_error(
    values: Floats, day_of_chamber: Ints, *, n_resamples: int, rng: np.random.Generator
) -> Floats:
    """Error of the condition's mean from drawing chambers within their days.

    A day with one chamber cannot tell; it is taken to be like the others.
    """
    days = np.unique(day_of_chamber)
    variance = np.array(
        [
            spread_of(drawn_means(values[day_of_chamber == d], n_resamples=n_resamples, rng=rng))
            ** 2
            * np.sum(day_of_chamber == d)
            for d in days
        ]
    )  # of one chamber, by day
    share = np.mean([1 / np.sum(day_of_chamber == d) for d in days]) / len(days)
    return np.asarray(np.sqrt(mean_of(variance) * share))


def inner_error(
    chambers: Sequence[ChamberEvidence],
    day_of_chamber: Ints,
    columns: slice,
    level: str,
    n_resamples: int,
    rng: np.random.Generator,
) -> Floats:
    """Error of the condition's mean from drawing recordings, or tracks, within each chamber."""
    variance = []
    for chamber in chambers:
        influence, parent = chamber.influence[:, columns], chamber.recording_of_track
        if level == "recordings":
            fields = np.unique(parent)
            influence = np.array([influence[parent == f].sum(axis=0) for f in fields])
            parent = np.zeros(len(fields), dtype=np.int64)
        size = np.bincount(parent, minlength=int(parent.max()) + 1)
        if not np.any(size > 1):
            variance.append(np.full(influence.shape[1], np.nan))
            continue
        # Within each parent the spread is about its own mean; stretched to be unbiased.
        stretch = np.sqrt(size / np.maximum(size - 1, 1))[:, None]
        sums = resampling.resampled_sums(parent, influence, n_resamples=n_resamples, rng=rng)
        centre = np.array([influence[parent == p].sum(axis=0) for p in range(len(size))])
        moved = ((sums - centre) * stretch).sum(axis=1)
        known = np.isfinite(chamber.values[columns])
        variance.append(np.where(known, moved.var(axis=0), np.nan))
    by_chamber = np.array(variance)
    days = np.unique(day_of_chamber)
    by_day = np.array(
        [mean_of(by_chamber[day_of_chamber == d]) / np.sum(day_of_chamber == d) for d in days]
    )
    return np.asarray(np.sqrt(mean_of(by_day) / len(days)))
