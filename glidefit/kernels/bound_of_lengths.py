"""The Cramér-Rao bound of many tracks of different lengths, from spectra that are found once."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.bound import (
    BOUND_PARAMETERS,
    exposed_integral,
    exposed_wiener,
    own_speed_hides,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LENGTH_PARAMETERS = BOUND_PARAMETERS[:5]
FEWEST_POSITIONS = 3
# Between lengths of this ratio information is read off a straight line. It grows at most as their
# 7th power, where noise hides the turning: then the line is 2 % too high.
_RATIO = 1.06
# Positions farther apart than this many tell each other nothing more of diffusion and noise.
_LONGEST = 800


@dataclass(frozen=True, slots=True, kw_only=True)
class _Spectrum:
    """Both covariances of a track made diagonal, free of where it lies and points.

    Parameters
    ----------
    along, across : arrays
        Eigenvalues of K1 and K3 of `track_information`, for a frame interval of 1.
    middle : array
        Middles of the exposures in the eigenvectors of ``along``.
    """

    along: Floats
    across: Floats
    middle: Floats


@lru_cache(maxsize=512)
def _spectrum(n: int, exposed: float) -> _Spectrum:
    start = np.arange(n, dtype=np.float64)
    middle = start + exposed / 2
    place = np.stack([np.ones(n), middle], axis=1)
    basis = np.linalg.qr(place, mode="complete").Q
    of_place, of_both = basis[:, 1:], basis[:, 2:]
    along, vectors = np.linalg.eigh(of_place.T @ exposed_wiener(start, exposed) @ of_place)
    across = np.linalg.eigvalsh(of_both.T @ exposed_integral(start, exposed) @ of_both)
    return _Spectrum(
        along=np.maximum(along, 0.0),
        across=np.maximum(across, 0.0),
        middle=vectors.T @ (of_place.T @ middle),
    )


def information_of_lengths(
    n_positions: Ints,
    *,
    frame_s: float,
    speed: float,
    rotational_diffusion: float,
    localization_error: float,
    longitudinal_diffusion: float = 0.0,
    speed_spread: float = 0.0,
    exposure_s: float = 0.0,
) -> Floats:
    """Fisher information of all tracks together, each seen in every frame from first to last.

    The sum of `track_information` over the tracks, within 2 % of it. Positions and orientation
    are unknown, and D_perp = 0: then one basis makes the covariance diagonal whatever the
    parameters are, and a track costs a few sums over its positions.

    Parameters
    ----------
    n_positions : (m,) array of int
        Of each track; those of fewer than 3 tell nothing.
    frame_s, exposure_s : float
        ``exposure_s`` at most ``frame_s``.
    speed, rotational_diffusion, localization_error, longitudinal_diffusion : float
        In µm/s, rad²/s, µm, µm²/s.
    speed_spread : float
        Between tracks, in µm/s.

    Returns
    -------
    (5, 5) array
        In the order of `LENGTH_PARAMETERS`.
    """
    model = {
        "frame_s": frame_s,
        "exposed": round(exposure_s / frame_s, 9),
        "speed": speed,
        "turn": rotational_diffusion,
        "variance": localization_error**2,
        "diffusion": longitudinal_diffusion,
        "spread": speed_spread**2,
    }
    total = np.zeros((len(LENGTH_PARAMETERS),) * 2)
    for n, count in _on_grid(n_positions).items():
        total += count * _information(n, **model)
    return total


def _grid(longest: int) -> list[int]:
    grid = [FEWEST_POSITIONS]
    while grid[-1] < min(longest, _LONGEST):
        grid.append(min(max(grid[-1] + 1, round(_RATIO * grid[-1])), _LONGEST))
    return grid


def _on_grid(n_positions: Ints) -> dict[float, float]:
    """Lengths of the grid, and how many tracks lie there: one between two counts for both."""
    told = n_positions[n_positions >= FEWEST_POSITIONS]
    counts: dict[float, float] = {}
    if not len(told):
        return counts
    grid = _grid(int(told.max()))
    for n, count in zip(*np.unique(told, return_counts=True), strict=True):
        if n >= _LONGEST:
            counts[float(n)] = counts.get(float(n), 0.0) + float(count)
            continue
        place = int(np.searchsorted(grid, n))
        high = grid[place]
        low = grid[place - 1] if place else high
        share = (n - low) / (high - low) if high > low else 1.0
        for length, part in ((float(low), 1 - share), (float(high), share)):
            if part > 0:
                counts[length] = counts.get(length, 0.0) + part * float(count)
    return counts


def _information(
    n: float,
    *,
    frame_s: float,
    exposed: float,
    speed: float,
    turn: float,
    variance: float,
    diffusion: float,
    spread: float,
) -> Floats:
    """Of one track; one longer than the longest looked at is so many times that one."""
    spectrum = _spectrum(int(min(n, _LONGEST)), exposed)
    times = max(n / _LONGEST, 1.0)
    information = np.zeros((len(LENGTH_PARAMETERS),) * 2)

    walk = 2 * frame_s * spectrum.along  # slope of the variance along by D_par
    weight = 1 / (variance + diffusion * walk)
    middle = frame_s * spectrum.middle
    seen = weight * middle
    square = times * float(seen @ middle)
    # The spread of speeds adds a matrix of rank one, s_v² t tᵀ.
    left = 1 / (1 + spread * square)
    slopes = np.stack([walk, np.ones_like(walk)])
    of_seen = times * slopes @ seen**2
    lost = spread * left
    information[0, 0] = left * square
    information[2:4, 2:4] = (
        times * (slopes * weight**2) @ slopes.T
        - 2 * lost * times * (slopes * weight * seen**2) @ slopes.T
        + lost**2 * np.outer(of_seen, of_seen)
    ) / 2
    information[2:4, 4] = information[4, 2:4] = left**2 * of_seen / 2
    information[4, 4] = (left * square) ** 2 / 2

    bend = 2 * frame_s**3 * spectrum.across
    weight = 1 / (variance + speed**2 * turn * bend)
    slopes = np.stack([2 * speed * turn * bend, speed**2 * bend, np.ones_like(bend)]) * weight
    across = times * slopes @ slopes.T / 2
    own_speed_hides(across, speed_variance=spread, told=square)
    information[np.ix_([0, 1, 3], [0, 1, 3])] += across
    return information


def own_speed_errors(
    n_positions: Ints,
    *,
    frame_s: float,
    localization_error: float,
    longitudinal_diffusion: float = 0.0,
    exposure_s: float = 0.0,
) -> Floats:
    """Least standard error of each track's own speed from its positions along, (m,) in µm/s.

    Parameters as in `information_of_lengths`; infinite below 3 positions.
    """
    exposed, variance = round(exposure_s / frame_s, 9), localization_error**2
    errors = np.full(len(n_positions), np.inf)
    told = n_positions >= FEWEST_POSITIONS
    if not told.any():
        return errors
    grid = _grid(int(n_positions.max()))
    square = []
    for n in grid:
        spectrum = _spectrum(n, exposed)
        weight = 1 / (variance + 2 * longitudinal_diffusion * frame_s * spectrum.along)
        square.append(frame_s**2 * float(weight @ spectrum.middle**2))
    known = np.minimum(n_positions[told], _LONGEST)
    longer = n_positions[told] / known
    errors[told] = np.exp(-np.interp(np.log(known), np.log(grid), np.log(square)) / 2)
    errors[told] /= np.sqrt(longer)
    return errors
