"""Intervals of fitted response curves: profiles, and what the differences between days add."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.least_squares import fit_least_squares
from glidefit.kernels.resampling import t_quantile
from glidefit.kernels.response_curves import LINKS, ResponseFit, curve_residual, own_scale

Floats = NDArray[np.float64]

_FARTHEST = 12.0  # e-folds that a profile is followed before its side counts as open


@dataclass(frozen=True, slots=True, kw_only=True)
class Bounds:
    """An estimate with its standard error and interval, on the scale it is fitted on."""

    value: float
    error: float
    low: float  # infinite where the data set no bound
    high: float
    df: float


def shape_bounds(fitted: ResponseFit, name: str, *, level: float) -> Bounds:
    """Interval of a parameter of the shape; what days differ by in scale is not in it.

    By profile for positive parameters, else value ± t × error.
    """
    n = fitted.fit.varied.index(name)
    value, error = fitted.fit.values[name], math.sqrt(max(fitted.covariance[n, n], 0.0))
    if name in fitted.shape.positive:
        low, high = profile_interval(fitted, {name: 1.0}, level=level)
    else:
        half = t_quantile(level, fitted.df) * error
        low, high = value - half, value + half
    return Bounds(value=value, error=error, low=low, high=high, df=fitted.df)


def scale_bounds(fitted: ResponseFit, *, level: float) -> Bounds:
    """Interval of the log scale, the mean over days, by Student's t over what each day says of it.

    The estimate is linear in the points: ``sum L_i y_i``. A factor on all points of one of D days
    moves it by 1/D of its logarithm, whatever the shape, so that a day says::

        v_d = a_d + D sum over the points of d of L_i r_i

    with residuals r. The v_d are independent, their mean is the estimate, and their spread holds
    both what days differ by and what the points leave open in the shape. The interval is no
    narrower than the profile for the days as they were. With one day there is only that profile,
    and the interval covers that day.
    """
    n = fitted.n_days
    names = [f"day_{d}" for d in range(n)]
    value = float(np.mean([fitted.fit.values[name] for name in names]))
    inner = float(fitted.covariance[:n, :n].mean())
    if fitted.shape.positive:
        low, high = profile_interval(fitted, dict.fromkeys(names, 1 / n), level=level)
    else:
        half = t_quantile(level, fitted.df) * math.sqrt(max(inner, 0.0))
        low, high = value - half, value + half
    if n == 1:
        return Bounds(value=value, error=math.sqrt(inner), low=low, high=high, df=fitted.df)
    gradient = np.zeros((len(fitted.fit.varied), 1))
    gradient[:n] = 1 / n
    error = float(_error_over_days(fitted, gradient)[0])
    half = t_quantile(level, n - 1) * error
    return Bounds(
        value=value,
        error=error,
        low=min(low, value - half),
        high=max(high, value + half),
        df=n - 1,
    )


def _error_over_days(fitted: ResponseFit, gradient: Floats) -> Floats:
    """Standard error, from the spread of days, of sums of fitted values, (l,).

    Parameters
    ----------
    fitted : ResponseFit
        Of D > 1 days.
    gradient : (p, l) array
        Weights of the fitted values; those of the days are 1/D each.
    """
    n = fitted.n_days
    linear = gradient.T @ fitted.covariance @ fitted.fit.jacobian.T / fitted.residual_variance
    moved = -linear * fitted.fit.residual  # the residual is curve less point
    of_day = np.array([moved[:, fitted.day == d].sum(axis=1) for d in range(n)])
    scales = np.array([fitted.fit.values[f"day_{d}"] for d in range(n)])
    says = scales[:, np.newaxis] + n * of_day
    return np.asarray(says.std(axis=0, ddof=1) / math.sqrt(n))


def curve_bounds(
    fitted: ResponseFit, x: Floats, inhibitor: Floats, *, level: float
) -> tuple[Floats, Floats, Floats]:
    """The curve of the mean day with its pointwise interval, (l,) each, in the unit of y.

    By linear propagation on the logarithmic scale, Student's t over days as in `scale_bounds`.
    """
    f, n = fitted, fitted.n_days
    names = f.fit.varied
    base = {name: f.fit.values[name] for name in names}

    def log_curve(values: Mapping[str, float]) -> Floats:
        a = np.mean([values[f"day_{d}"] for d in range(n)])
        g = f.shape.of(x, inhibitor, **own_scale(f.shape, values))
        return np.asarray(a + np.log(np.where(g > 0, g, np.nan)))

    centre = log_curve(base)
    gradient = np.zeros((len(names), len(x)))
    gradient[:n] = 1 / n
    for k, name in enumerate(names[n:], start=n):
        step = 1e-5 * max(abs(base[name]), 1e-2)
        up = log_curve({**base, name: base[name] + step})
        down = log_curve({**base, name: base[name] - step})
        gradient[k] = (up - down) / (2 * step)
    inner = np.einsum("kx,kl,lx->x", gradient, f.covariance, gradient)
    half = t_quantile(level, f.df) * np.sqrt(np.maximum(inner, 0.0))
    if n > 1:
        # No narrower than for the days as they were.
        half = np.maximum(half, t_quantile(level, n - 1) * _error_over_days(f, gradient))
    return np.exp(centre), np.exp(centre - half), np.exp(centre + half)


def profile_interval(
    fitted: ResponseFit, weights: Mapping[str, float], *, level: float
) -> tuple[float, float]:
    """Interval of a weighted sum of fitted values by profile, on the scale they are fitted on.

    All values between the ends leave the sum of squares, the others fitted anew, below::

        SSE(optimum) + residual variance × t(df)²

    Parameters
    ----------
    fitted : ResponseFit
    weights : mapping
        Of names in ``fitted.fit.values``.
    level : float
        Confidence, between 0 and 1.

    Returns
    -------
    low, high : float
        Infinite on a side on which the sum of squares never gets there.

    References
    ----------
    Bates & Watts, Nonlinear Regression Analysis and Its Applications (1988), section 6.1.
    """
    limit = t_quantile(level, fitted.df)
    names = fitted.fit.varied
    vector = np.array([weights.get(name, 0.0) for name in names])
    error = math.sqrt(max(float(vector @ fitted.covariance @ vector), 0.0))
    centre = float(sum(w * fitted.fit.values[name] for name, w in weights.items()))
    if not math.isfinite(error) or error == 0:
        return -math.inf, math.inf
    ends = []
    for side in (-1.0, 1.0):
        profile = _Profile(fitted, weights, centre=centre, side=side, limit=limit)
        ends.append(profile.end(limit * error))
    return ends[0], ends[1]


class _Profile:
    """How far the sum of squares has risen, in standard errors, at a distance to one side."""

    def __init__(
        self,
        fitted: ResponseFit,
        weights: Mapping[str, float],
        *,
        centre: float,
        side: float,
        limit: float,
    ) -> None:
        self._fitted, self._weights = fitted, dict(weights)
        self._centre, self._side, self._limit = centre, side, limit
        self._least = float(fitted.fit.residual @ fitted.fit.residual)
        self._last = dict(fitted.fit.values)

    def rise(self, distance: float) -> float:
        """Root of the rise of the sum of squares over the residual variance."""
        f = self._fitted
        target = self._centre + self._side * distance
        # The heaviest member follows from the others, so that the sum is held.
        held = max(self._weights, key=lambda name: abs(self._weights[name]))
        rest = {name: w for name, w in self._weights.items() if name != held}
        link = LINKS[f.scatter]
        target_y = link(f.y)

        def residual(values: Mapping[str, float]) -> Floats:
            known = target - sum(w * values[name] for name, w in rest.items())
            whole = {**values, held: known / self._weights[held]}
            return curve_residual(f.shape, link, f.x, f.inhibitor, target_y, f.day, whole)

        start = {name: value for name, value in self._last.items() if name != held}
        found = fit_least_squares(residual, start)
        if np.all(np.isfinite(found.residual)):
            self._last = {**found.values, held: self._last[held]}
        squares = float(found.residual @ found.residual)
        return math.sqrt(max(squares - self._least, 0.0) / f.residual_variance)

    def end(self, step: float) -> float:
        """Where the rise reaches its limit; infinite if it never does."""
        inside, outside = 0.0, step
        while self.rise(outside) < self._limit:
            inside, outside = outside, 1.6 * outside
            if outside > max(_FARTHEST, 4 * step):
                return self._side * math.inf
        from scipy.optimize import brentq

        found = brentq(
            lambda d: self.rise(d) - self._limit, inside, outside, xtol=1e-4 * step, rtol=1e-5
        )
        return self._centre + self._side * float(found)
