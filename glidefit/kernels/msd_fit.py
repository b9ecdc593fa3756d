"""The active-Brownian MSD fitted on the logarithmic scale, and what each track adds to it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.active_brownian import gliding_msd
from glidefit.kernels.least_squares import fit_least_squares

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

PARAMETERS = (
    "speed",
    "rotational_diffusion",
    "longitudinal_diffusion",
    "localization_variance",
)
MIN_LAGS = 5  # four parameters and one to spare
# A model value below this share of the measured one is not followed further: its logarithm
# would run away while least squares is still looking for its way.
_FLOOR = 1e-3
# D_r t beyond which the series of the model loses its meaning for a negative D_r.
_MOST_NEGATIVE_BEND = -3.0
# Deviation on the logarithmic scale there: finite, since slopes are taken across the edge.
_FORBIDDEN = 1e3


@dataclass(frozen=True, slots=True, kw_only=True)
class LagCurve:
    """Sums over the pairs of every track at each lag, for one frame interval and exposure.

    Parameters
    ----------
    lag_s : (l,) array
    sums : (m, l) array
        Squared displacements in µm², weighted.
    counts : (m, l) array
        Weights they go with.
    exposure_s : float
    """

    lag_s: Floats
    sums: Floats
    counts: Floats
    exposure_s: float

    @property
    def value(self) -> Floats:
        """Mean squared displacement, (l,) µm²; NaN without pairs."""
        total = self.counts.sum(axis=0)
        return np.where(total > 0, self.sums.sum(axis=0) / np.where(total > 0, total, 1), np.nan)

    @property
    def influence(self) -> Floats:
        """What each track adds to the logarithm of the MSD when drawn once more, (m, l)."""
        scale = self.value * self.counts.sum(axis=0)
        return (self.sums - self.value * self.counts) / np.where(scale > 0, scale, np.nan)

    def up_to(self, longest_s: float) -> LagCurve:
        """The lags that are not longer and have pairs."""
        use = (self.lag_s <= longest_s * (1 + 1e-9)) & (self.counts.sum(axis=0) > 0)
        return LagCurve(
            lag_s=self.lag_s[use],
            sums=self.sums[:, use],
            counts=self.counts[:, use],
            exposure_s=self.exposure_s,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class MsdFit:
    """Parameters in the order of `PARAMETERS`, and what each track adds to them."""

    values: Floats  # (4,)
    influence: Floats  # (m, 4), tracks of the curves one after the other
    problem: str


def log_spaced_lags(longest: int) -> Ints:
    """Lags 1, 2, 3 … in frames, every one up to 8, then growing by about a fifth."""
    lags, lag = [], 1
    while lag <= longest:
        lags.append(lag)
        lag = max(lag + 1, round(lag * 1.2)) if lag >= 8 else lag + 1
    return np.array(lags, dtype=np.int64)


def model_values(curve: LagCurve, values: Mapping[str, float]) -> Floats:
    """The fitted MSD at the lags of a curve, (l,) µm²."""
    return gliding_msd(curve.lag_s, exposure=curve.exposure_s, **values)


def speed_law(lag_s: float, *, exposure_s: float, values: Floats) -> tuple[float, float]:
    """``scale`` and ``offset`` of MSD = scale v² + offset at one lag, the other parameters known.

    Parameters
    ----------
    lag_s : float
    exposure_s : float
        At most ``lag_s``.
    values : (4,) array
        In the order of `PARAMETERS`; the speed is not used.

    Returns
    -------
    scale : float
        In s².
    offset : float
        In µm².
    """
    lag = np.array([lag_s])
    named = dict(zip(PARAMETERS, map(float, values), strict=True))
    offset = float(gliding_msd(lag, exposure=exposure_s, **(named | {"speed": 0.0}))[0])
    return float(
        gliding_msd(lag, exposure=exposure_s, **(named | {"speed": 1.0}))[0]
    ) - offset, offset


def fit_msd(curves: Sequence[LagCurve], *, start: Mapping[str, float] | None = None) -> MsdFit:
    """Fit ``log MSD`` at every lag of the curves with equal weight.

    On the logarithmic scale no lag rules by its size, which the linear scale leaves to the
    longest and least certain.

    Parameters
    ----------
    curves : sequence of LagCurve
        Already cut to the longest lag; curves of several frame intervals share the parameters.
    start : mapping, optional
        First guess; taken from the curves if left out.

    Returns
    -------
    MsdFit
        NaN with a ``problem`` if the curves do not determine the parameters.

    References
    ----------
    Bailey et al., Phys. Rev. E 106, L052602 (2022): full expression, logarithmic scale.
    """
    n_tracks = sum(len(curve.sums) for curve in curves)
    points = sum(len(curve.lag_s) for curve in curves)
    if points < MIN_LAGS:
        return _failed(n_tracks, f"{points} lags have pairs, {MIN_LAGS} are needed")
    if any(np.any(curve.value <= 0) for curve in curves):
        return _failed(n_tracks, "a mean squared displacement is zero")
    logs = [np.log(curve.value) for curve in curves]

    def residual(values: Mapping[str, float]) -> Floats:
        if values["rotational_diffusion"] * max(c.lag_s[-1] for c in curves) < _MOST_NEGATIVE_BEND:
            return np.full(points, _FORBIDDEN)
        return np.concatenate(
            [
                np.log(np.maximum(model_values(c, values), _FLOOR * c.value)) - log
                for c, log in zip(curves, logs, strict=True)
            ]
        )

    if start is None or np.all(residual(start) == _FORBIDDEN):
        start = _first_guess(curves[0])
    fit = fit_least_squares(residual, start)
    if fit.problem:
        return _failed(n_tracks, fit.problem)
    influence = np.zeros((n_tracks, len(PARAMETERS)))
    solve = np.linalg.solve(fit.jacobian.T @ fit.jacobian, fit.jacobian.T)
    row = point = 0
    for curve in curves:
        rows, columns = slice(row, row + len(curve.sums)), slice(point, point + len(curve.lag_s))
        influence[rows] = curve.influence @ solve[:, columns].T
        row, point = rows.stop, columns.stop
    values = np.array([fit.values[name] for name in PARAMETERS])
    return MsdFit(values=values, influence=influence, problem="")


def longest_lag(
    curves: Sequence[LagCurve], *, bend: float, at_least: float, at_most: float
) -> tuple[float, MsdFit]:
    """The lag over which D_r t reaches ``bend``, found together with the fit up to it.

    Shorter lags tell noise from motion, longer ones carry the turning; beyond D_r t ≈ 0.3 the
    few independent pieces of path only add scatter.

    Parameters
    ----------
    curves : sequence of LagCurve
    bend : float
        Wanted D_r t in rad².
    at_least, at_most : float
        In s.

    Returns
    -------
    lag : float
        In s.
    fit : MsdFit
        With that longest lag.
    """
    lag = at_least
    tried: list[float] = []
    while True:
        tried.append(lag)
        fit = fit_msd([curve.up_to(lag) for curve in curves])
        turning = fit.values[1]
        wanted = bend / turning if turning > 0 else at_most
        # At most doubling: a D_r read off a few short lags may be far off.
        wanted = float(np.clip(wanted, at_least, min(at_most, 2 * lag)))
        if abs(np.log(wanted / lag)) < 0.2 or len(tried) == 12:
            return lag, fit
        lag = wanted


def _first_guess(curve: LagCurve) -> dict[str, float]:
    near = max(1, len(curve.lag_s) // 3)
    speed = float(np.sqrt(curve.value[near]) / curve.lag_s[near])
    longest = curve.lag_s[-1]
    straight = curve.value[-1] / (speed * longest) ** 2
    return {
        "speed": speed,
        "rotational_diffusion": float(np.clip(3 * (1 - straight), 0.02, 2)) / longest,
        "longitudinal_diffusion": 0.05 * curve.value[0] / curve.lag_s[0],
        "localization_variance": 0.02 * curve.value[0],
    }


def _failed(n_tracks: int, problem: str) -> MsdFit:
    return MsdFit(
        values=np.full(len(PARAMETERS), np.nan),
        influence=np.zeros((n_tracks, len(PARAMETERS))),
        problem=problem,
    )
