"""What localization error and exposure do to displacements, and how to take them out again."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Below this argument the dilogarithm below has lost more digits than its series lacks.
_INVERSE_SERIES = 0.1
# Below this τ the dilogarithm no longer shows in a double, and soon 1/τ would overflow.
_NO_BACKGROUND = 1e-100


def _check_exposure(exposure: float, longest: float) -> None:
    if not 0 <= exposure <= longest:
        raise ValueError(f"exposure must be from 0 to {longest:g} s, is {exposure:g} s")


def brownian_msd(
    lag: Floats,
    *,
    diffusion: float,
    localization_error: float = 0.0,
    exposure: float = 0.0,
    dimensions: int = 2,
) -> Floats:
    """Mean squared displacement of Brownian motion with blur and localization error.

    ``2 d diffusion (lag - exposure/3) + 2 d localization_error²``; extended to lag 0 it may be
    negative, and must not be clipped there.

    Parameters
    ----------
    lag : (n,) array
        Lags in s, all > 0.
    diffusion : float
        In µm²/s.
    localization_error : float
        Standard deviation of one coordinate of the moving particle, in µm.
    exposure : float
        In s, from 0 to the smallest lag.
    dimensions : int
        d, >= 1.

    Returns
    -------
    (n,) array
        In µm².

    Raises
    ------
    ValueError
        For a lag that is not positive, an exposure out of range or no dimension.

    References
    ----------
    Michalet, Phys. Rev. E 82, 041914 (2010); Berglund, Phys. Rev. E 82, 011917 (2010).
    """
    if np.any(lag <= 0):
        raise ValueError(f"lags must be > 0 s, the smallest is {lag.min():g} s")
    if dimensions < 1:
        raise ValueError(f"dimensions must be >= 1, is {dimensions}")
    _check_exposure(exposure, float(lag.min()))
    per_coordinate = diffusion * (lag - exposure / 3) + localization_error**2
    return 2 * dimensions * per_coordinate


def step_covariance(*, diffusion: float, localization_error: float, exposure: float) -> float:
    """Covariance of successive Brownian steps of one coordinate, in µm².

    ``diffusion exposure / 3 - localization_error²``; steps further apart are independent.
    Units as in `brownian_msd`.
    """
    return diffusion * exposure / 3 - localization_error**2


def covariance_estimate(
    steps: Floats, *, frame_interval: float, exposure: float
) -> tuple[float, float]:
    """Diffusion and localization variance of Brownian steps, from their covariance.

    With Δ the steps, δ the frame interval and R = exposure / (6δ)::

        diffusion             = ⟨Δ_n²⟩ / (2δ) + ⟨Δ_n Δ_n+1⟩ / δ
        localization_variance = R ⟨Δ_n²⟩ + (2R - 1) ⟨Δ_n Δ_n+1⟩

    Both are without bias and either may come out negative. Directed motion is to be removed
    first. Of coordinates the mean is returned.

    Parameters
    ----------
    steps : (n,) or (n, d) array
        Displacements between successive frames in µm; NaN where a frame is missing.
    frame_interval, exposure : float
        In s; exposure from 0 to the frame interval, needed for the localization variance only.

    Returns
    -------
    diffusion : float
        In µm²/s.
    localization_variance : float
        Per coordinate, in µm².

    Raises
    ------
    ValueError
        Without two successive steps, or for an exposure out of range.

    References
    ----------
    Vestergaard, Blainey & Flyvbjerg, Phys. Rev. E 89, 022726 (2014).
    """
    _check_exposure(exposure, frame_interval)
    products = steps[1:] * steps[:-1]
    present = np.isfinite(products)
    if not present.any():
        raise ValueError("there are no two successive steps")
    square = float(np.mean(steps[np.isfinite(steps)] ** 2))
    product = float(np.mean(products[present]))
    ratio = exposure / (6 * frame_interval)
    diffusion = square / (2 * frame_interval) + product / frame_interval
    return diffusion, ratio * square + (2 * ratio - 1) * product


def noise_to_motion(
    *, diffusion: float, localization_error: float, frame_interval: float, exposure: float
) -> float:
    """ε = localization_error² / (diffusion δ) - exposure / (3δ), the noise in units of the steps.

    Units as in `covariance_estimate`; diffusion > 0.
    """
    if diffusion <= 0:
        raise ValueError(f"diffusion must be > 0, is {diffusion:g} µm²/s")
    return (localization_error**2 / diffusion - exposure / 3) / frame_interval


def covariance_relative_sd(n_steps: int, *, noise: float) -> float:
    """Standard deviation of the diffusion of `covariance_estimate` over its value.

    ``√((6 + 4ε + 2ε²) / N + 4 (1 + ε)² / N²)`` for N steps of one coordinate and the noise ε of
    `noise_to_motion`; over √d for the mean of d coordinates.
    """
    if n_steps < 2:
        raise ValueError(f"n_steps must be >= 2, is {n_steps}")
    return math.sqrt((6 + 4 * noise + 2 * noise**2) / n_steps + 4 * (1 + noise) ** 2 / n_steps**2)


def known_noise_estimate(
    steps: Floats, *, localization_error: float, frame_interval: float, exposure: float
) -> float:
    """Diffusion in µm²/s from Brownian steps when the localization error is known.

    ``(⟨Δ²⟩ - 2 localization_error²) / (2 (1 - 2R) δ)``; arguments as in `covariance_estimate`.

    Raises
    ------
    ValueError
        Without a step, or for an exposure out of range.
    """
    _check_exposure(exposure, frame_interval)
    present = steps[np.isfinite(steps)]
    if not present.size:
        raise ValueError("there is no step")
    square = float(np.mean(present**2))
    return (square - 2 * localization_error**2) / (2 * (frame_interval - exposure / 3))


def known_noise_relative_sd(
    n_steps: int, *, noise: float, frame_interval: float, exposure: float
) -> float:
    """Standard deviation of `known_noise_estimate` over its value, for one coordinate.

    ``√((2 + 4ε + 3ε²) / N) / (1 - 2R)``; arguments as in `covariance_relative_sd`.
    """
    if n_steps < 1:
        raise ValueError(f"n_steps must be >= 1, is {n_steps}")
    kept = 1 - exposure / (3 * frame_interval)
    return math.sqrt((2 + 4 * noise + 3 * noise**2) / n_steps) / kept


def _check_spot(spot_sd: float, pixel_size: float, photons: float, background: float) -> None:
    if min(spot_sd, pixel_size, photons) <= 0 or background < 0:
        raise ValueError("spot_sd, pixel_size and photons must be > 0, background >= 0")


def precision_by_centroid(
    *, spot_sd: float, pixel_size: float, photons: float, background: float
) -> float:
    """Localization error of a spot, in the unit of `spot_sd` and `pixel_size` (for example µm).

    With s, a, N, b in the order of the parameters: ``(s² + a²/12) / N + 8π s⁴ b² / (a² N²)`` is
    its square, per coordinate. Not for the long axis of a filament.

    Parameters
    ----------
    spot_sd : float
        Standard deviation of the spot's image, > 0.
    pixel_size : float
        In the same unit, > 0.
    photons : float
        Photons of the spot, > 0.
    background : float
        Standard deviation of the background in photons per pixel, >= 0.

    Raises
    ------
    ValueError
        For a number out of its range.

    References
    ----------
    Thompson, Larson & Webb, Biophys. J. 82, 2775 (2002).
    """
    _check_spot(spot_sd, pixel_size, photons, background)
    counting = (spot_sd**2 + pixel_size**2 / 12) / photons
    ground = 8 * math.pi * spot_sd**4 * background**2 / (pixel_size * photons) ** 2
    return math.sqrt(counting + ground)


def _pixelated(spot_sd: float, pixel_size: float, photons: float, background: float) -> Floats:
    """Variance of a spot widened by its pixels, over photons; and 2π s_a² b² / (N a²)."""
    _check_spot(spot_sd, pixel_size, photons, background)
    wide = spot_sd**2 + pixel_size**2 / 12
    return np.array([wide, 2 * math.pi * wide * (background / pixel_size) ** 2]) / photons


def precision_by_least_squares(
    *, spot_sd: float, pixel_size: float, photons: float, background: float
) -> float:
    """Localization error of a spot fitted with a Gaussian by least squares, per coordinate.

    Its square is ``(s_a²/N) (16/9 + 8π s_a² b² / (N a²))`` with s_a² = s² + a²/12. Arguments as in
    `precision_by_centroid`, but ``background²`` is the number of background photons per pixel.

    References
    ----------
    Mortensen et al., Nat. Methods 7, 377 (2010).
    """
    floor, tau = _pixelated(spot_sd, pixel_size, photons, background)
    return math.sqrt(floor * (16 / 9 + 4 * tau))


def precision_by_likelihood(
    *, spot_sd: float, pixel_size: float, photons: float, background: float
) -> float:
    """Localization error of a spot fitted with a Gaussian by maximum likelihood, per coordinate.

    Its square is ``(s_a²/N) / (1 + ∫₀¹ ln u / (1 + u/τ) du)`` with τ = 2π s_a² b² / (N a²); the
    integral is ``τ Li₂(-1/τ)``. Arguments and reference as in `precision_by_least_squares`.
    """
    floor, tau = _pixelated(spot_sd, pixel_size, photons, background)
    if tau < _NO_BACKGROUND:
        return math.sqrt(floor)
    from scipy.special import spence

    inverse = 1 / tau
    if inverse < _INVERSE_SERIES:
        # 1 + Li₂(-x)/x = x/4 - x²/9 + x³/16 - …, where the sum itself would cancel.
        information = sum(-((-inverse) ** (k - 1)) / k**2 for k in range(2, 20))
    else:
        information = 1 + float(spence(1 + inverse)) * tau
    return math.sqrt(floor / information)


def msd_relative_variance(lag_steps: NDArray[np.int64], *, n_steps: int) -> Floats:
    """Variance over square of one track's time-averaged MSD: pure diffusion in the plane.

    All overlapping windows of n frames in a track of N steps are averaged, K = N - n + 1::

        n <= K:  (4n²K + 2K + n - n³) / (6nK²)
        n > K:   1 + (K³ - 4nK² + 4n - K) / (6n²K)

    Parameters
    ----------
    lag_steps : (m,) array of int
        Lags n in frames, from 1 to N.
    n_steps : int
        N; the track has N + 1 positions.

    Returns
    -------
    (m,) array
        Twice as much for a single coordinate.

    Raises
    ------
    ValueError
        For a lag outside 1 to N.

    References
    ----------
    Qian, Sheetz & Elson, Biophys. J. 60, 910 (1991).
    """
    if np.any((lag_steps < 1) | (lag_steps > n_steps)):
        raise ValueError(f"lags must be from 1 to {n_steps} frames")
    n = lag_steps.astype(np.float64)
    k = n_steps - n + 1
    short = (4 * n**2 * k + 2 * k + n - n**3) / (6 * n * k**2)
    long = 1 + (k**3 - 4 * n * k**2 + 4 * n - k) / (6 * n**2 * k)
    result: Floats = np.where(n <= k, short, long)
    return result
