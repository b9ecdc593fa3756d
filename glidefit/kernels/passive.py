"""Tracks of tracers without propulsion: how they diffuse, and whether they move on at all."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from glidefit.kernels.heading_filter import COMPILED, LOG_2PI
from glidefit.kernels.pairs import pairs_at_lag

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Displacements are compared once their median square is this many σ² (noise alone gives 4 σ² in
# the mean), at most so many frames apart.
_CLEAR_SQUARE, _LONGEST = 20.0, 64


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def diffusing_log_density(
    time_s: Floats,
    x: Floats,
    y: Floats,
    offsets: Ints,
    error: Floats,
    diffusion: float,
    exposure_s: float,
    innovation: Floats,
) -> Floats:
    """Log density of every position given those before it in its track, for free diffusion.

    Displacements Δ of one coordinate, over times h, are Gaussian with localization error σ and
    blur of the exposure e::

        Var Δ_j = 2 D (h_j - e / 3) + σ_(j-1)² + σ_j²,   Cov(Δ_j, Δ_(j+1)) = D e / 3 - σ_j²

    Parameters
    ----------
    time_s, x, y : (n,) arrays
        Start of the exposure in s, positions in µm.
    offsets : (m + 1,) array of int
        Track k owns the rows ``offsets[k]:offsets[k + 1]``.
    error : (n,) array
        Variance of a coordinate's localization error, in µm².
    diffusion : float
        In µm²/s, the mean of all directions.
    exposure_s : float
    innovation : (n, 2) array
        Gets the deviations from what is predicted, of variance 1; NaN for first positions.

    Returns
    -------
    (n,) array
        Densities in 1/µm²; 0 for the first position of a track.

    References
    ----------
    Berglund, Phys. Rev. E 82, 011917 (2010): displacements with blur; the factors of determinant
    and inverse of a tridiagonal matrix.
    """
    density = np.zeros(len(x))
    innovation[:] = np.nan
    blur = diffusion * exposure_s / 3
    for k in range(len(offsets) - 1):
        spread, shared, left_x, left_y = 1.0, 0.0, 0.0, 0.0
        for j in range(offsets[k] + 1, offsets[k + 1]):
            own = 2 * diffusion * (time_s[j] - time_s[j - 1]) - 2 * blur + error[j - 1] + error[j]
            pull = shared / spread
            left_x = x[j] - x[j - 1] - pull * left_x
            left_y = y[j] - y[j - 1] - pull * left_y
            spread = own - pull * shared
            shared = blur - error[j]
            square = (left_x * left_x + left_y * left_y) / spread
            density[j] = -0.5 * square - math.log(spread) - LOG_2PI
            innovation[j, 0] = left_x / math.sqrt(spread)
            innovation[j, 1] = left_y / math.sqrt(spread)
    return density


def directedness(
    frame: Ints, offsets: Ints, x: Floats, y: Floats, *, noise: float
) -> tuple[Floats, Floats]:
    """How much successive displacements of each track have in common, and of how many.

    The mean of their products over that of their squares: 1 for a straight path and 0 for
    diffusion, within 1 / √(2 n) of n. They are taken over so many frames that they stand out of
    the noise.

    Returns
    -------
    share, number : (m,) arrays
        NaN where there are none; pairs that overlap count as so many that do not.
    """
    lag, z = 1, x + 1j * y
    while True:
        first, second = pairs_at_lag(frame, offsets, lag)
        square = np.abs(z[second] - z[first]) ** 2
        further = pairs_at_lag(frame, offsets, 2 * lag)[0]
        if 2 * lag > _LONGEST or not len(further):
            break
        if np.median(square) > _CLEAR_SQUARE * noise**2:
            break
        lag *= 2
    after = np.full(len(frame), -1)
    after[first] = second
    last = after[second]
    there = last >= 0
    i, j, k = first[there], second[there], last[there]
    one, two = z[j] - z[i], z[k] - z[j]
    owner = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))[j]
    m = len(offsets) - 1
    products = _by_track(owner, (one * two.conj()).real, m)
    squares = _by_track(owner, (np.abs(one) ** 2 + np.abs(two) ** 2) / 2, m)
    share = np.where(squares > 0, products / np.where(squares > 0, squares, 1.0), np.nan)
    return share, np.bincount(owner, minlength=m) / lag


def _by_track(owner: Ints, values: Floats, m: int) -> Floats:
    return np.bincount(owner, weights=values, minlength=m).astype(np.float64)


def squared_speed(
    frame: Ints, time_s: Floats, offsets: Ints, x: Floats, y: Floats
) -> tuple[Floats, Floats]:
    """What each track adds to v² T² and to T², for a steady velocity v.

    Products of two displacements over a quarter of the track, a frame between them: neither
    diffusion nor localization error has a part in their mean.

    Returns
    -------
    products, squares : (m,) arrays
        In µm² and s²; 0 for tracks of fewer than four frames.
    """
    spans = frame[offsets[1:] - 1] - frame[offsets[:-1]] + 1
    m, z = len(offsets) - 1, x + 1j * y
    lag = np.maximum(spans // 4, 1)
    first, second = pairs_at_lag(frame, offsets, lag)
    after = np.full(len(frame), -1)
    after[first] = second
    # The second displacement starts with the position behind the end of the first.
    following = np.minimum(second + 1, len(frame) - 1)
    owner = np.repeat(np.arange(m), np.diff(offsets))
    last = after[following]
    there = (owner[following] == owner[second]) & (following > second) & (last >= 0)
    i, j, k, n = first[there], second[there], following[there], last[there]
    product = ((z[j] - z[i]) * (z[n] - z[k]).conj()).real
    square = (time_s[j] - time_s[i]) * (time_s[n] - time_s[k])
    return _by_track(owner[i], product, m), _by_track(owner[i], square, m)
