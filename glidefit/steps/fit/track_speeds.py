"""Speeds of single tracks: read at one lag, conventional, and how much they truly differ."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import displacements, msd_fit
from glidefit.kernels.pairs import pairs_at_lag
from glidefit.steps.fit.intervals import Kept

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# A track's own speed is read at a lag of this share of the longest fitted one.
_SPEED_SHARE = 0.5


def track_speed(one: Kept, *, longest_s: float, parameters: Floats) -> Floats:
    """Speed of each track from one lag, noise and bend removed; NaN if it is too short."""
    return np.sqrt(np.maximum(_squared_speed(one, longest_s, parameters)[0], 0.0))


def frame_speed(one: Kept) -> tuple[Floats, Floats]:
    """Path and time from position to position, summed by track: the conventional speed."""
    t = one.tracks
    step = np.hypot(np.diff(t.x_um), np.diff(t.y_um))
    time = np.diff(t.time_s)
    inside = np.diff(t.index) == 0
    owner = t.index[1:][inside]
    path = np.bincount(owner, weights=step[inside], minlength=t.n_tracks)
    spent = np.bincount(owner, weights=time[inside], minlength=t.n_tracks)
    return path.astype(np.float64), spent.astype(np.float64)


def lasting_variance(
    members: Sequence[Kept], *, longest_s: float, parameters: Floats
) -> tuple[float, Floats]:
    """Variance of the true speed from track to track, and what each track adds to it.

    The covariance of v² in the first and the second half of the tracks, over 4 v²: measurement
    errors of the two halves are independent, so only what lasts remains. It may come out
    negative.
    """
    halves = [_squared_speed(one, longest_s, parameters)[1:] for one in members]
    first = np.concatenate([a for a, _ in halves])
    second = np.concatenate([b for _, b in halves])
    usable = np.isfinite(first) & np.isfinite(second)
    n = int(usable.sum())
    moved = np.zeros(len(first))
    if n < 3:
        return float("nan"), moved
    a, b = first[usable], second[usable]
    mean = float((a.mean() + b.mean()) / 2)
    product = (a - a.mean()) * (b - b.mean()) / (n - 1) / (4 * mean)
    value = float(product.sum())
    moved[usable] = product - value / n
    return value, moved


def _squared_speed(
    one: Kept, longest_s: float, parameters: Floats
) -> tuple[Floats, Floats, Floats]:
    """Squared speed of each track: whole, first half, second half."""
    t, frame_s = one.tracks, one.source.frame_s
    if not np.all(np.isfinite(parameters)):  # only the measured noise is known
        parameters = np.array([0.0, 0.0, 0.0, one.source.clean.noise_um**2])
    spans = displacements.frame_spans(t.frame, t.offsets)
    wanted = max(1, round(_SPEED_SHARE * longest_s / frame_s)) if np.isfinite(longest_s) else 1
    own = np.clip((spans - 1) // 4, 1, wanted)
    first, second = pairs_at_lag(t.frame, t.offsets, own)
    square = (t.x_um[second] - t.x_um[first]) ** 2 + (t.y_um[second] - t.y_um[first]) ** 2
    law = {
        int(lag): msd_fit.speed_law(
            lag * frame_s, exposure_s=one.source.exposure_s, values=parameters
        )
        for lag in np.unique(own)
    }
    scale, offset = np.array([law[int(lag)] for lag in own]).T
    owner = t.index[first]
    middle = t.frame[t.offsets[:-1]] + spans // 2

    def speed(chosen: Bools) -> Floats:
        count = np.bincount(owner[chosen], minlength=t.n_tracks)
        total = np.bincount(owner[chosen], weights=square[chosen], minlength=t.n_tracks)
        mean = np.where(count > 0, total / np.maximum(count, 1), np.nan)
        return np.asarray((mean - offset) / scale)

    whole = speed(np.ones(len(first), dtype=bool))
    early = speed(t.frame[second] < middle[owner])
    return whole, early, speed(t.frame[first] >= middle[owner])
