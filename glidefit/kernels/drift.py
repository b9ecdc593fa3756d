"""Stage drift: motion that resting objects share."""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d
from scipy.special import chdtrc

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Chance of subtracting a drift that is not there.
SIGNIFICANCE = 1e-3


def track_velocities(frame: Ints, offsets: Ints, x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Least-squares velocity of each track and the error per unit noise.

    Returns
    -------
    velocity : (m,) complex as (m, 2) array
        µm per frame; NaN under three positions.
    error : (m,) array
        Standard error of one component for a localization error of 1.
    """
    velocity = np.full((len(offsets) - 1, 2), np.nan)
    error = np.full(len(offsets) - 1, np.nan)
    for k, (a, b) in enumerate(itertools.pairwise(offsets)):
        if b - a < 3:
            continue
        t = frame[a:b] - frame[a:b].mean()
        power = float(t @ t)
        velocity[k] = t @ x[a:b] / power, t @ y[a:b] / power
        error[k] = power**-0.5
    return velocity, error


def resting_together(
    velocity: Floats, error: Floats, *, noise: float, slack: float, fastest: float, eligible: Bools
) -> Bools:
    """The largest set of tracks that share one slow velocity: objects at rest on a moving stage.

    Gliding filaments point everywhere; only resting objects agree in speed and direction.

    Parameters
    ----------
    velocity : (m, 2) array
        µm per frame.
    error : (m,) array
        As in `track_velocities`.
    noise : float
        Localization error in µm.
    slack : float
        Disagreement in µm per frame that is allowed beyond the noise.
    fastest : float
        Drift faster than this, in µm per frame, is not believed.
    eligible : (m,) array of bool
        Tracks long enough to be judged.

    Returns
    -------
    (m,) array of bool
    """
    best = np.zeros(len(error), dtype=bool)
    usable = eligible & np.isfinite(error) & (np.hypot(*velocity.T) <= fastest)
    for k in np.flatnonzero(usable):
        apart = np.hypot(*(velocity - velocity[k]).T)
        near = usable & (apart <= slack + 4 * noise * np.hypot(error, error[k]))
        if near.sum() > best.sum():
            best = near
    return best


def common_displacement(frame: Ints, index: Ints, x: Floats, n_frames: int) -> Floats:
    """Displacement d(frame) that objects share, from ``x = a_object + d_frame`` by least squares.

    Parameters
    ----------
    frame, index : (n,) arrays of int
        Frame and object of each row.
    x : (n,) array
        One coordinate.
    n_frames : int

    Returns
    -------
    (n_frames,) array
        0 on average; frames without an object are interpolated.
    """
    seen = np.bincount(frame, minlength=n_frames)
    owned = np.maximum(np.bincount(index), 1)
    shift = np.zeros(n_frames)
    for _ in range(50):
        place = np.bincount(index, weights=x - shift[frame]) / owned
        left = np.bincount(frame, weights=x - place[index], minlength=n_frames)
        new = np.asarray(left / np.maximum(seen, 1), dtype=np.float64)
        new -= new[seen > 0].mean()
        done = np.abs(new - shift).max() < 1e-9
        shift = new
        if done:
            break
    known = np.flatnonzero(seen)
    return np.interp(np.arange(n_frames), known, shift[known])


def smooth(displacement: Floats) -> Floats:
    """Drift curve without the noise of single frames: line plus a Gaussian mean of the rest."""
    t = np.arange(len(displacement), dtype=np.float64)
    line = np.polyval(np.polyfit(t, displacement, 1), t)
    width = max(2.0, len(displacement) / 40)
    return np.asarray(line + gaussian_filter1d(displacement - line, width, mode="nearest"))


def drift_is_significant(x: Floats, y: Floats, seen: Ints, *, noise: float) -> bool:
    """Whether cubic polynomials through the common displacement explain more than noise would.

    The explained sum of squares over (noise²/objects) is χ² with 6 degrees of freedom.
    """
    t = np.linspace(-1, 1, len(x))
    weight = np.sqrt(seen)
    explained = 0.0
    for d in (x, y):
        basis = np.vander(t, 4) * weight[:, None]
        q, _ = np.linalg.qr(basis)
        explained += float(np.sum((q.T @ (d * weight)) ** 2))
    if noise == 0:
        return explained > 0
    return float(chdtrc(6, explained / noise**2)) < SIGNIFICANCE
