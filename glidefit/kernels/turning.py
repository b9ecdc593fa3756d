"""Mean turning rate of single tracks, from successive displacements that stand out of the noise."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.pairs import pairs_at_lag

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def turning_rates(
    frame: Ints,
    time_s: Floats,
    offsets: Ints,
    x: Floats,
    y: Floats,
    *,
    lag: int,
    shortest: float = 0.0,
) -> tuple[Floats, Floats, Floats]:
    """Mean turning rate of each track, of its first and of its second half.

    The angle from the displacement over ``lag`` frames to the next one, over the time between
    their middles; positive is clockwise on a screen whose y points down. Localization error
    widens the angles but does not turn them.

    Parameters
    ----------
    frame, time_s, x, y : (n,) arrays
    offsets : (m + 1,) array of int
        Rows of track k are ``offsets[k]:offsets[k + 1]``.
    lag : int
        In frames, >= 1; displacements over it should be far longer than the localization error.
    shortest : float
        Angles at a displacement shorter than this, in µm, are passed over: in a pause the noise
        turns.

    Returns
    -------
    whole, first, second : (m,) arrays
        In rad/s; NaN where a track has no pair of displacements.
    """
    m = len(offsets) - 1
    # Rows i, j, k one lag apart: row j ends one displacement and starts the next.
    first, middle = pairs_at_lag(frame, offsets, lag)
    after = np.full(len(frame), -1)
    after[first] = middle
    last = after[middle]
    there = last >= 0
    i, j, k = first[there], middle[there], last[there]
    one, two = (x[j] - x[i]) + 1j * (y[j] - y[i]), (x[k] - x[j]) + 1j * (y[k] - y[j])
    clear = np.minimum(np.abs(one), np.abs(two)) >= shortest
    i, j, k, one, two = i[clear], j[clear], k[clear], one[clear], two[clear]
    rate = np.angle(two * one.conj()) / ((time_s[k] - time_s[i]) / 2)
    owner = np.repeat(np.arange(m), np.diff(offsets))[j]
    half = (frame[offsets[:-1]] + frame[offsets[1:] - 1]) / 2

    def mean(chosen: NDArray[np.bool_]) -> Floats:
        count = np.bincount(owner[chosen], minlength=m)
        total = np.bincount(owner[chosen], weights=rate[chosen], minlength=m)
        return np.where(count > 0, total / np.maximum(count, 1), np.nan)

    early, late = frame[k] <= half[owner], frame[i] >= half[owner]
    return mean(np.ones(len(i), dtype=bool)), mean(early), mean(late)
