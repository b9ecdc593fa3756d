"""Least standard errors that any estimator can have: the Cramér-Rao bound of a gliding track."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

BOUND_PARAMETERS = (
    "speed",
    "rotational_diffusion",
    "longitudinal_diffusion",
    "localization_variance",
    "speed_variance",
    "turning_rate",
    "turning_rate_variance",
    "sideways_diffusion",
)


def exposed_wiener(start: Floats, exposure: float) -> Floats:
    """Covariance of the means of a Wiener process over exposures that do not overlap.

    With W(0) = 0, variance t and means over ``start`` to ``start + exposure`` (T)::

        cov(i, j) = start_i + T/2 for i before j, start_i + T/3 for i = j

    Parameters
    ----------
    start : (n,) array
        Increasing by at least the exposure, >= 0.
    exposure : float

    Returns
    -------
    (n, n) array
    """
    covariance = np.minimum.outer(start, start) + exposure / 2
    covariance[np.diag_indices_from(covariance)] -= exposure / 6
    return np.asarray(covariance)


def exposed_integral(start: Floats, exposure: float) -> Floats:
    """Covariance of the means over exposures of the integral of a Wiener process from 0.

    Without exposure ``s² (3 t - s) / 6`` for s before t; with it the mean of that over both
    exposures, the earlier of the two times being s where they are the same exposure.

    Parameters and returned array as in `exposed_wiener`.
    """
    a, T = start, exposure
    mean = a + T / 2
    square = a**2 + a * T + T**2 / 3
    cube = a**3 + 1.5 * a**2 * T + a * T**2 + T**3 / 4
    before = 3 * np.multiply.outer(square, mean) - cube[:, None]
    covariance = np.triu(before, 1) + np.triu(before, 1).T
    early_early_late = a**3 + 4 / 3 * a**2 * T + 2 / 3 * a * T**2 + 2 / 15 * T**3
    early_cube = a**3 + a**2 * T + 0.5 * a * T**2 + T**3 / 10
    covariance[np.diag_indices_from(covariance)] = 3 * early_early_late - early_cube
    return np.asarray(covariance / 6)


def track_information(
    time_s: Floats,
    *,
    speed: float,
    rotational_diffusion: float,
    localization_error: float,
    longitudinal_diffusion: float = 0.0,
    speed_spread: float = 0.0,
    turning_rate_spread: float = 0.0,
    sideways_diffusion: float = 0.0,
    exposure_s: float = 0.0,
) -> Floats:
    """Fisher information of one track, its position and orientation unknown.

    Along and across the path, deviations from it being small, the positions are Gaussian::

        along   x0 + v t + sqrt(2 D_par) W            + localization error
        across  y0 + v (θ0 t + ω t²/2 + sqrt(2 D_r) ∫W dt) + sqrt(2 D_perp) W + localization error

    averaged over the exposures, with covariances (K1 and K3 of `exposed_wiener` and
    `exposed_integral`, s_v and s_ω the spreads of v and ω between tracks, t the middles of the
    exposures, u the mean of t²/2 over them)::

        Σ_along  = σ² + 2 D_par K1 + s_v² t tᵀ
        Σ_across = σ² + 2 D_r v² K3 + 2 D_perp K1 + v² s_ω² u uᵀ

    and for parameters a, b of mean μ and covariance Σ, with B the columns of x0 or (y0, θ0)::

        I_ab = ∂aμᵀ P ∂bμ + tr(P ∂aΣ P ∂bΣ) / 2,   P = Σ⁻¹ - Σ⁻¹ B (Bᵀ Σ⁻¹ B)⁻¹ Bᵀ Σ⁻¹

    the information of what does not change when the track is moved or rotated. A turning rate
    bends a path without telling its speed, so ∂μ_across/∂v = 0. Across, the speed is the track's
    own, of which the positions along have told ``1/w² = 1/s_v² + q`` (`own_speed_hides`).

    Parameters
    ----------
    time_s : (n,) array
        Starts of the exposures, n >= 3.
    speed, rotational_diffusion, localization_error, longitudinal_diffusion : float
        In µm/s, rad²/s, µm, µm²/s.
    sideways_diffusion : float
        In µm²/s.
    speed_spread, turning_rate_spread : float
        Between tracks, in µm/s and rad/s.
    exposure_s : float

    Returns
    -------
    (8, 8) array
        In the order of `BOUND_PARAMETERS`.

    References
    ----------
    Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993), eq. 3.31, for
    the Gaussian with parameters in mean and covariance, from memory; flat location and
    orientation and the covariances derived, confirmed by simulated scores.
    """
    start = time_s - time_s[0]
    middle = start + exposure_s / 2
    curve = (start**2 + start * exposure_s + exposure_s**2 / 3) / 2
    ones, none = np.ones_like(middle), np.zeros((len(start), len(start)))
    unit = np.eye(len(start))
    wiener, integral = exposed_wiener(start, exposure_s), exposed_integral(start, exposure_s)
    drawn, curved = np.outer(middle, middle), np.outer(curve, curve)

    turning = 2 * rotational_diffusion * integral + turning_rate_spread**2 * curved
    along = localization_error**2 * unit + 2 * longitudinal_diffusion * wiener
    information = _gaussian_information(
        along + speed_spread**2 * drawn,
        unknown=ones[:, None],
        means=np.stack([middle, *[0 * ones] * 7]),
        covariances=[none, none, 2 * wiener, unit, drawn, none, none, none],
    )
    across = _gaussian_information(
        localization_error**2 * unit + speed**2 * turning + 2 * sideways_diffusion * wiener,
        unknown=np.stack([ones, middle], axis=1),
        means=np.stack([*[0 * ones] * 5, speed * curve, *[0 * ones] * 2]),
        covariances=[
            2 * speed * turning,
            2 * speed**2 * integral,
            none,
            unit,
            none,
            none,
            speed**2 * curved,
            2 * wiener,
        ],
    )
    told = _gaussian_information(
        along, unknown=ones[:, None], means=middle[None, :], covariances=[none]
    )
    own_speed_hides(across, speed_variance=speed_spread**2, told=float(told[0, 0]))
    return information + across


def own_speed_hides(across: Floats, *, speed_variance: float, told: float) -> None:
    """Take from the information across what a speed of the track's own hides, in place.

    With J across for the track's own speed, its variance w² given the positions along, and
    r = 1 / (1 + s_v² q), by which the mean speed moves what is expected of it::

        I_θθ = J_θθ - c w² J_vθ J_vθᵀ,  I_vθ = r c J_vθ,  I_vv = r² c J_vv,  c = 1 / (1 + w² J_vv)

    Parameters
    ----------
    across : (p, p) array
        J, the speed first.
    speed_variance, told : float
        s_v², and q, the information that the positions along have of the track's speed.
    """
    moved = 1 / (1 + speed_variance * told)
    variance = speed_variance * moved
    kept = 1 / (1 + variance * across[0, 0])
    with_speed = across[0].copy()
    across -= kept * variance * np.outer(with_speed, with_speed)
    across[0] = across[:, 0] = moved * kept * with_speed
    across[0, 0] = moved**2 * kept * with_speed[0]


def _gaussian_information(
    covariance: Floats, *, unknown: Floats, means: Floats, covariances: Sequence[Floats]
) -> Floats:
    """I_ab of `track_information` from Σ, B, ∂μ (p, n) and ∂Σ."""
    inverse = np.linalg.inv(covariance)
    seen = inverse @ unknown
    inverse -= seen @ np.linalg.solve(unknown.T @ seen, seen.T)
    weighted = [inverse @ slope for slope in covariances]
    traces = [[np.sum(a * b.T) / 2 for b in weighted] for a in weighted]
    return np.asarray(means @ inverse @ means.T + np.array(traces))


def least_standard_errors(
    information: Floats, *, unknown: Sequence[str], n_tracks: int = 1
) -> dict[str, float]:
    """Least standard errors of the unknown parameters, from alike tracks.

    Parameters
    ----------
    information : (8, 8) array
        Of one track, from `track_information`.
    unknown : sequence of str
        Parameters that are fitted, from `BOUND_PARAMETERS`; the others are known.
    n_tracks : int

    Returns
    -------
    dict of str: float
        In the units of the parameters.

    Raises
    ------
    numpy.linalg.LinAlgError
        Where a parameter cannot be determined.
    """
    rows = [BOUND_PARAMETERS.index(name) for name in unknown]
    covariance = np.linalg.inv(n_tracks * information[np.ix_(rows, rows)])
    return {
        name: float(np.sqrt(variance))
        for name, variance in zip(unknown, np.diag(covariance), strict=True)
    }


def least_relative_error_of_ratio(
    information: Floats,
    *,
    speed: float,
    rotational_diffusion: float,
    unknown: Sequence[str],
    n_tracks: int = 1,
) -> float:
    """Least standard error of v/D_r, relative to its value; parameters as before."""
    rows = [BOUND_PARAMETERS.index(name) for name in unknown]
    covariance = np.linalg.inv(n_tracks * information[np.ix_(rows, rows)])
    slope = np.zeros(len(rows))
    slope[list(unknown).index("speed")] = 1 / speed
    slope[list(unknown).index("rotational_diffusion")] = -1 / rotational_diffusion
    return float(np.sqrt(slope @ covariance @ slope))
