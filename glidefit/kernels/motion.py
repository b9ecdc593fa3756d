"""What single tracks show of their motion: noise, spread, advance, extent, jumps."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# A displacement counts as out of the noise once its mean square is this many σ²
# (the noise alone gives 4 σ²).
_CLEAR_SQUARE = 20.0
# Probability with which pure noise passes for motion.
_FALSE_MOTION = 1e-4
# A path that is this many times longer than the extent it stays in goes round in place.
_IN_PLACE_RATIO = 6.0
# Mean cosine between successive displacements from which a track makes a net advance.
_ADVANCE = 0.4
# MSD growth below this exponent is bounded; free diffusion has 1.
_BOUNDED_EXPONENT = 0.5


def localization_noise(frame: Ints, offsets: Ints, x: Floats, y: Floats) -> Floats:
    """Localization error that each track shows across its own heading.

    From second differences ``e = r0 - 2 r1 + r2`` of three successive frames: the part of ``e``
    across the chord ``r2 - r0`` has variance 6 σ² for a straight path or a resting object, since
    chord and second difference are independent. The median makes it robust to jumps; turning
    makes it too large, by little as long as a frame's turn moves the tip by less than σ.

    Parameters
    ----------
    frame : (n,) array of int
    offsets : (m + 1,) array of int
        Rows of track k are ``offsets[k]:offsets[k + 1]``.
    x, y : (n,) arrays
        Positions in µm.

    Returns
    -------
    (m,) array
        In µm; NaN for a track without three successive frames.
    """
    noise = np.full(len(offsets) - 1, np.nan)
    first = np.arange(len(frame) - 2)
    track = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))
    if len(first) < 1:
        return noise
    good = (frame[2:] - frame[:-2] == 2) & (track[2:] == track[:-2])
    i = first[good]
    chord_x, chord_y = x[i + 2] - x[i], y[i + 2] - y[i]
    bend_x, bend_y = x[i] - 2 * x[i + 1] + x[i + 2], y[i] - 2 * y[i + 1] + y[i + 2]
    length = np.hypot(chord_x, chord_y)
    across = np.abs(chord_x * bend_y - chord_y * bend_x) / np.where(length > 0, length, 1.0)
    owner = track[i]
    order = np.lexsort((across, owner))
    across, owner = across[order], owner[order]
    start = np.searchsorted(owner, np.arange(len(noise)))
    count = np.searchsorted(owner, np.arange(len(noise)), side="right") - start
    some = count > 0
    middle = (
        across[start[some] + (count[some] - 1) // 2] + across[start[some] + count[some] // 2]
    ) / 2
    noise[some] = 1.4826 * middle / np.sqrt(6.0)
    return noise


def noise_along(frame: Ints, offsets: Ints, x: Floats, y: Floats, heading: Floats) -> Floats:
    """Localization error that each track shows along its body, where the body's heading is known.

    As `localization_noise`, from the part of the second differences along the heading of the
    middle position. An end of a filament is known less well than its centreline, and so is the
    midpoint along it. A speed that changes from frame to frame adds to it.

    Parameters
    ----------
    heading : (n,) array
        In rad; its sign does not matter.

    Returns
    -------
    (m,) array
        In µm; NaN for a track without three successive frames.
    """
    noise = np.full(len(offsets) - 1, np.nan)
    bend_x, bend_y = x[:-2] - 2 * x[1:-1] + x[2:], y[:-2] - 2 * y[1:-1] + y[2:]
    along = np.abs(bend_x * np.cos(heading[1:-1]) + bend_y * np.sin(heading[1:-1]))
    track = np.repeat(np.arange(len(noise)), np.diff(offsets))
    good = (frame[2:] - frame[:-2] == 2) & (track[2:] == track[:-2])
    for k in np.unique(track[2:][good]):
        own = along[good & (track[2:] == k)]
        noise[k] = 1.4826 * float(np.median(own)) / np.sqrt(6.0)
    return noise


def common_noise(noise: Floats, n_positions: Ints) -> float:
    """Localization error of a recording from that of its tracks, robust to tracks that wriggle.

    The weighted 30 % quantile over tracks: turning, pivoting and free diffusion only add.

    Returns
    -------
    float
        In µm; NaN if no track has three successive frames.
    """
    some = np.isfinite(noise)
    if not some.any():
        return float("nan")
    order = np.argsort(noise[some])
    weight = np.cumsum(n_positions[some][order])
    return float(noise[some][order][np.searchsorted(weight, 0.3 * weight[-1])])


def spread_limit(n_positions: Ints, *, multiple: float) -> Floats:
    """Largest spread, in multiples of the localization error, that still counts as rest.

    ``multiple``, or for short tracks what chance alone allows: the spread squared of n positions
    at rest is σ² χ²/(2n - 2) with 2n - 2 degrees of freedom.
    """
    freedom = np.maximum(2.0 * (np.asarray(n_positions) - 1), 2.0)
    return np.asarray(np.maximum(multiple, np.sqrt(chdtri(freedom, _FALSE_MOTION) / freedom)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Motion:
    """Measures of m tracks, each an (m,) array."""

    spread_um: Floats  # standard deviation of positions about their mean, per coordinate
    lag: Ints  # frames after which displacements stand out of the noise; 0 if never
    advance: Floats  # mean cosine between successive displacements, noise removed; NaN if unknown
    speed_um_frame: Floats  # displacement after `lag` frames, noise removed, per frame
    extent_um: Floats  # diagonal of the box around the track
    exponent: Floats  # growth of the MSD from `lag` to four times that; NaN if unknown
    longest_step_um: Floats  # per elapsed frame
    median_step_um: Floats  # per elapsed frame


def measure(frame: Ints, offsets: Ints, x: Floats, y: Floats, *, noise: float) -> Motion:
    """Measure the motion of every track.

    Parameters
    ----------
    frame, offsets, x, y
        As in `localization_noise`.
    noise : float
        Localization error in µm.
    """
    rows = [_measure_one(frame[a:b], x[a:b], y[a:b], noise) for a, b in itertools.pairwise(offsets)]
    table = np.array(rows, dtype=np.float64).reshape(-1, 8)
    return Motion(
        spread_um=table[:, 0],
        lag=table[:, 1].astype(np.int64),
        advance=table[:, 2],
        speed_um_frame=table[:, 3],
        extent_um=table[:, 4],
        exponent=table[:, 5],
        longest_step_um=table[:, 6],
        median_step_um=table[:, 7],
    )


def _measure_one(frame: Ints, x: Floats, y: Floats, noise: float) -> tuple[float, ...]:
    n = len(x)
    nan = float("nan")
    if n < 2:
        return 0.0, 0, nan, nan, 0.0, nan, 0.0, 0.0
    spread = float(np.sqrt((x.var() + y.var()) / 2 * n / (n - 1)))
    extent = float(np.hypot(np.ptp(x), np.ptp(y)))
    step = np.hypot(np.diff(x), np.diff(y)) / np.diff(frame)
    steps = float(step.max()), float(np.median(step))
    z = np.full(frame[-1] - frame[0] + 1, complex(nan, nan))
    z[frame - frame[0]] = x + 1j * y
    lag, square = _clear_lag(z, noise)
    if lag == 0:
        return spread, 0, nan, nan, extent, nan, *steps
    speed = float(np.sqrt(max(square - 4 * noise**2, 0.0))) / lag
    advance, exponent = _advance(z, lag, noise), _exponent(z, lag, noise)
    return spread, lag, advance, speed, extent, exponent, *steps


def _clear_lag(z: NDArray[np.complex128], noise: float) -> tuple[int, float]:
    """Shortest lag whose displacements stand out of the noise, and their mean square."""
    lag = 1
    while lag < len(z):
        step = z[lag:] - z[:-lag]
        square = _mean_square(step)
        if square >= _CLEAR_SQUARE * noise**2 and square > 0:
            return lag, square
        lag += max(1, lag // 2)
    return 0, float("nan")


def _mean_square(step: NDArray[np.complex128]) -> float:
    """Mean |step|² without the gaps; the largest twentieth is left out, so one jump cannot rule."""
    square = np.sort((step * step.conj()).real[np.isfinite(step.real)])
    keep = len(square) - len(square) // 20
    return float(square[:keep].mean()) if keep else float("nan")


def _advance(z: NDArray[np.complex128], lag: int, noise: float) -> float:
    """Mean cosine between a displacement and the next that shares no position with it."""
    step = z[lag:] - z[:-lag]
    one, two = step[: -(lag + 1)], step[lag + 1 :]
    both = np.isfinite(one.real) & np.isfinite(two.real)
    if not both.any():
        return float("nan")
    one, two = one[both], two[both]
    product = (one * two.conj()).real
    size = ((one * one.conj()).real + (two * two.conj()).real) / 2
    calm = size <= np.quantile(size, 0.95) if len(size) >= 20 else np.ones(len(size), dtype=bool)
    power = float(size[calm].sum()) - 4 * noise**2 * int(calm.sum())
    return float(product[calm].sum()) / power if power > 0 else float("nan")


def _exponent(z: NDArray[np.complex128], lag: int, noise: float) -> float:
    """Growth of the mean squared displacement from ``lag`` to four times as long."""
    far = min(4 * lag, (len(z) - 1) // 2)
    if far <= lag:
        return float("nan")
    near_square = _mean_square(z[lag:] - z[:-lag]) - 4 * noise**2
    far_square = _mean_square(z[far:] - z[:-far]) - 4 * noise**2
    if not (near_square > 0 and far_square > 0):
        return 0.0
    return float(np.log(far_square / near_square) / np.log(far / lag))


def in_place(motion: Motion, n_frames: Ints, *, extent: float) -> Bools:
    """True for tracks that stay within ``extent`` µm though their path is far longer."""
    path = motion.speed_um_frame * n_frames
    inside = motion.extent_um <= extent
    bounded = (motion.exponent < _BOUNDED_EXPONENT) | (path > _IN_PLACE_RATIO * motion.extent_um)
    return np.asarray(inside & bounded & (motion.lag > 0))


def advancing(motion: Motion) -> Bools:
    """True for tracks that make a net advance, as a first look says, or are too short for it."""
    # Where no pair of displacements exists, nothing speaks against an advance.
    return np.asarray((motion.lag > 0) & ~(motion.advance < _ADVANCE))
