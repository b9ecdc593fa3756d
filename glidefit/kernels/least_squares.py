"""Nonlinear least squares: the one front of lmfit through which every curve is fitted."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class LeastSquaresFit:
    """Optimum of a sum of squared residuals.

    ``problem`` is empty if the optimum can be believed.
    """

    values: dict[str, float]
    errors: dict[str, float]  # standard errors for independent residuals; NaN if not determined
    residual: Floats
    jacobian: Floats  # (n residuals, n varied parameters), in the order of ``varied``
    varied: tuple[str, ...]
    problem: str


def fit_least_squares(
    residual: Callable[[Mapping[str, float]], Floats],
    start: Mapping[str, float],
    *,
    fixed: frozenset[str] = frozenset(),
    limits: Mapping[str, tuple[float, float]] | None = None,
) -> LeastSquaresFit:
    """Minimise the sum of squares of ``residual(values)`` from ``start``.

    Parameters
    ----------
    residual : callable
        Maps parameter values to an (n,) array.
    start : mapping
        First guess of every parameter; its sizes also scale the steps.
    fixed : set of str
        Parameters held at their start.
    limits : mapping, optional
        (lowest, highest) of a parameter.

    Returns
    -------
    LeastSquaresFit
    """
    import lmfit

    names = [name for name in start if name not in fixed]
    scale = {name: abs(start[name]) or 1.0 for name in start}
    parameters = lmfit.Parameters()
    for name, first in start.items():
        low, high = (limits or {}).get(name, (-np.inf, np.inf))
        # lmfit sees parameters of the size of one, so that its steps suit all of them.
        parameters.add(
            name,
            value=first / scale[name],
            vary=name not in fixed,
            min=low / scale[name],
            max=high / scale[name],
        )

    def scaled(p: lmfit.Parameters) -> Floats:
        return residual({name: p[name].value * scale[name] for name in start})

    out = lmfit.minimize(
        scaled,
        parameters,
        method="least_squares",
        nan_policy="propagate",  # the trust region draws back from where the model ends
        jac="3-point",
        x_scale="jac",
        ftol=1e-13,
        xtol=1e-13,
        gtol=1e-13,
        max_nfev=20_000,
        calc_covar=False,
    )
    values = {name: float(out.params[name].value * scale[name]) for name in start}
    jacobian = _jacobian(residual, values, names, scale)
    left = residual(values)
    errors = _standard_errors(jacobian, left, names)
    problem = "" if out.success else f"the fit did not settle: {out.message}"
    if not np.all(np.isfinite(list(errors.values()))):
        problem = problem or "the data do not determine every parameter"
    return LeastSquaresFit(
        values=values,
        errors=errors,
        residual=left,
        jacobian=jacobian,
        varied=tuple(names),
        problem=problem,
    )


def _jacobian(
    residual: Callable[[Mapping[str, float]], Floats],
    values: Mapping[str, float],
    names: list[str],
    scale: Mapping[str, float],
) -> Floats:
    """Central differences at the optimum, (n residuals, n names)."""
    columns = []
    for name in names:
        step = 1e-5 * max(abs(values[name]), 1e-3 * scale[name])
        above = residual({**values, name: values[name] + step})
        below = residual({**values, name: values[name] - step})
        columns.append((above - below) / (2 * step))
    return np.array(columns).T


def _standard_errors(jacobian: Floats, residual: Floats, names: list[str]) -> dict[str, float]:
    """From the curvature, scaled by the residual variance with n - p degrees of freedom."""
    n, p = jacobian.shape
    size = np.sqrt((jacobian**2).sum(axis=0))
    unknown = dict.fromkeys(names, float("nan"))
    if n <= p or not np.all(size > 0) or not np.all(np.isfinite(jacobian)):
        return unknown
    _, singular, vt = np.linalg.svd(jacobian / size, full_matrices=False)
    if singular[-1] < 1e-10 * singular[0]:
        return unknown
    covariance = (vt.T / singular**2) @ vt * float(residual @ residual) / (n - p)
    return dict(zip(names, np.sqrt(np.diag(covariance)) / size, strict=True))
