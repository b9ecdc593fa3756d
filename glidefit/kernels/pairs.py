"""Pairs of positions of one track a given number of frames apart, gaps left out."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]


def pairs_at_lag(frame: Ints, offsets: Ints, lag: Ints | int) -> tuple[Ints, Ints]:
    """Rows of the first and of the second position of every pair.

    Parameters
    ----------
    frame : (n,) array of int
        Strictly increasing within a track.
    offsets : (m + 1,) array of int
        Track k owns the rows ``offsets[k]:offsets[k + 1]``.
    lag : int or (m,) array of int
        In frames, >= 1, of all tracks or of each.

    Returns
    -------
    first, second : (p,) arrays of int
        ``frame[second] - frame[first]`` is the lag of their track.

    Raises
    ------
    ValueError
        For a lag below 1.
    """
    lags = np.broadcast_to(np.asarray(lag, dtype=np.int64), (len(offsets) - 1,))
    if np.any(lags < 1):
        raise ValueError(f"lags must be >= 1 frame, the smallest is {lags.min()}")
    track = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))
    # One increasing number a row, in which tracks lie too far apart to meet.
    stride = int(frame.max(initial=0)) + int(lags.max(initial=1)) + 1
    key = track * stride + frame
    wanted = key + lags[track]
    found = np.minimum(np.searchsorted(key, wanted), len(key) - 1)
    first = np.flatnonzero(key[found] == wanted)
    return first, found[first]
