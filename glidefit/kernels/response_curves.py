"""Curves of speed against concentration, temperature or motor density, and their fit.

Every curve is a scale (µm/s) times a shape: what a day does to all of its points at once is a
factor on the scale. The scales of the days are fitted beside the parameters of the shape, so that
these are free of the differences between days.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.least_squares import LeastSquaresFit, fit_least_squares

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

GAS_CONSTANT = 8.314462618e-3  # kJ/(mol K), CODATA 2018
ZERO_CELSIUS = 273.15
REFERENCE_CELSIUS = 25.0

# On which scale the points scatter alike: "relative" compares logarithms.
LINKS: Mapping[str, Callable[[Floats], Floats]] = {"relative": np.log, "constant": lambda v: v}


@dataclass(frozen=True, slots=True, kw_only=True)
class Shape:
    """A curve without its scale.

    ``of(x, inhibitor, **parameters)`` is 1 at saturation, or at a reference. Parameters that are
    positive are fitted as logarithms.
    """

    name: str
    formula: str
    scale: str  # what the scale is
    parameters: tuple[str, ...]
    positive: frozenset[str]
    of: Callable[..., Floats]
    first_guess: Callable[[Floats, Floats, Floats], dict[str, float]]


def michaelis_menten(x: Floats, inhibitor: Floats, *, half: float) -> Floats:
    """x / (half + x)."""
    return x / (half + x)


def hill(x: Floats, inhibitor: Floats, *, half: float, exponent: float) -> Floats:
    """x^n / (half^n + x^n), 0 at x = 0."""
    with np.errstate(over="ignore", divide="ignore"):
        return np.asarray(1 / (1 + (half / x) ** exponent))


def competitive(x: Floats, inhibitor: Floats, *, half: float, inhibition: float) -> Floats:
    """x / (half (1 + inhibitor / inhibition) + x)."""
    return x / (half * (1 + inhibitor / inhibition) + x)


def arrhenius(x: Floats, inhibitor: Floats, *, activation: float) -> Floats:
    """exp(-E_a / R (1/T - 1/T0)), x in °C, E_a in kJ/mol, T0 = 25 °C."""
    inverse = 1 / (x + ZERO_CELSIUS) - 1 / (REFERENCE_CELSIUS + ZERO_CELSIUS)
    return np.exp(-activation / GAS_CONSTANT * inverse)


def saturation(x: Floats, inhibitor: Floats, *, density: float) -> Floats:
    """1 - exp(-x / density).

    With N motors in reach, each attached a share f of the time, some motor pulls a share
    1 - (1 - f)^N of the time; N in proportion to x gives this shape.

    References
    ----------
    Uyeda, Kron & Spudich, J. Mol. Biol. 214, 699 (1990); formula from memory.
    """
    return -np.expm1(-x / density)


def q10(activation: float, *, celsius: float = 20.0) -> float:
    """Factor from a temperature to one 10 K above, for an activation energy in kJ/mol."""
    cold, warm = celsius + ZERO_CELSIUS, celsius + 10 + ZERO_CELSIUS
    return math.exp(activation / GAS_CONSTANT * (1 / cold - 1 / warm))


def straight(x: Floats, inhibitor: Floats, *, slope: float, middle: float) -> Floats:
    """1 + slope (x - middle)."""
    return 1 + slope * (x - middle)


def _half_guess(x: Floats, inhibitor: Floats, y: Floats) -> dict[str, float]:
    """Concentration at which half of the largest value is reached."""
    plain = inhibitor <= inhibitor.min()
    order = np.argsort(x[plain])
    xs, ys = x[plain][order], y[plain][order]
    above = np.flatnonzero(ys >= ys.max() / 2)
    return {"half": float(max(xs[above[0]], 1e-12 + xs.max() * 1e-3))}


SHAPES = {
    shape.name: shape
    for shape in (
        Shape(
            name="michaelis-menten",
            formula="v = v_max c / (K_m + c)",
            scale="v_max",
            parameters=("half",),
            positive=frozenset({"half"}),
            of=michaelis_menten,
            first_guess=_half_guess,
        ),
        Shape(
            name="hill",
            formula="v = v_max cⁿ / (Kⁿ + cⁿ)",
            scale="v_max",
            parameters=("half", "exponent"),
            positive=frozenset({"half", "exponent"}),
            of=hill,
            first_guess=lambda x, i, y: _half_guess(x, i, y) | {"exponent": 1.0},
        ),
        Shape(
            name="competitive",
            formula="v = v_max c / (K_m (1 + i / K_i) + c)",
            scale="v_max",
            parameters=("half", "inhibition"),
            positive=frozenset({"half", "inhibition"}),
            of=competitive,
            first_guess=lambda x, i, y: (
                _half_guess(x, i, y)
                | {"inhibition": float(np.median(i[i > 0])) if np.any(i > 0) else 1.0}
            ),
        ),
        Shape(
            name="arrhenius",
            formula="v = v(25 °C) exp(−E_a/R (1/T − 1/298.15 K))",
            scale="v(25 °C)",
            parameters=("activation",),
            positive=frozenset(),
            of=arrhenius,
            first_guess=lambda x, i, y: {"activation": 50.0},
        ),
        Shape(
            name="saturation",
            formula="v = v_max (1 − exp(−c / c_s))",
            scale="v_max",
            parameters=("density",),
            positive=frozenset({"density"}),
            of=saturation,
            first_guess=lambda x, i, y: {"density": _half_guess(x, i, y)["half"] / math.log(2)},
        ),
    )
}


def linear_shape(x: Floats) -> Shape:
    """The straight line, as its value at the mean of x and its relative slope."""
    middle, reach = float(np.mean(x)), float(np.ptp(x)) or 1.0

    def guess(x: Floats, inhibitor: Floats, y: Floats) -> dict[str, float]:
        slope = float(np.polyfit(x, y, 1)[0]) / max(float(np.mean(y)), 1e-300)
        # Small enough that the first line is above zero at every point.
        return {"slope": float(np.clip(slope, -0.9 / reach, 0.9 / reach))}

    return Shape(
        name="linear",
        formula=f"v = v₀ (1 + b (c − {middle:.4g}))",
        scale="v₀",
        parameters=("slope",),
        positive=frozenset(),
        of=functools.partial(straight, middle=middle),
        first_guess=guess,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseFit:
    """A fitted curve.

    ``values`` holds log scales of days as "day_0", "day_1", … and the parameters of the shape,
    positive ones as logarithms.
    """

    shape: Shape
    scatter: str
    x: Floats
    inhibitor: Floats
    y: Floats
    day: Ints
    fit: LeastSquaresFit
    covariance: Floats  # in the order of fit.varied
    residual_variance: float
    df: int

    @property
    def n_days(self) -> int:
        """Number of log scales."""
        return int(self.day.max()) + 1

    @property
    def criterion(self) -> float:
        """Akaike's information criterion for small samples, from the residuals.

        ::

            AICc = n ln(SSE / n) + 2 k + 2 k (k + 1) / (n - k - 1)

        with k the fitted parameters and the variance. Infinite where n is too small for it.

        References
        ----------
        Hurvich & Tsai, Biometrika 76, 297 (1989); from memory.
        """
        n, k = len(self.y), len(self.fit.varied) + 1
        if n - k - 1 <= 0:
            return math.inf
        squares = max(float(self.fit.residual @ self.fit.residual), 1e-300)
        return n * math.log(squares / n) + 2 * k + 2 * k * (k + 1) / (n - k - 1)

    def shape_values(self) -> dict[str, float]:
        """Parameters of the shape on their own scale."""
        return own_scale(self.shape, self.fit.values)


def fit_response(
    x: Floats,
    y: Floats,
    day: Ints,
    *,
    shape: Shape,
    scatter: str = "relative",
    inhibitor: Floats | None = None,
) -> ResponseFit:
    """Fit a curve to points of several days by least squares.

    The model of a point of day d is ``exp(a_d) × shape(x)``: each day has a scale of its own.

    Parameters
    ----------
    x, y : (n,) arrays
        y > 0 for relative scatter.
    day : (n,) array of int
        Day of each point, from 0, each with a point.
    shape : Shape
    scatter : {"relative", "constant"}
        Whether logarithms or the values themselves scatter alike about the curve.
    inhibitor : (n,) array, optional
        Second concentration.

    Raises
    ------
    ValueError
        For fewer points than parameters and one more, or values that have no logarithm.
    """
    link = LINKS[scatter]
    inhibitor = np.zeros(len(x)) if inhibitor is None else inhibitor
    n_days = int(day.max()) + 1
    df = len(x) - n_days - len(shape.parameters)
    if df < 1:
        raise ValueError(f"{len(x)} points are too few")
    if scatter == "relative" and not np.all(y > 0):
        raise ValueError("values must be > 0 for relative scatter")
    start = _start(shape, x, inhibitor, y, day, n_days)
    residual = functools.partial(curve_residual, shape, link, x, inhibitor, link(y), day)
    fit = fit_least_squares(residual, start)
    variance = float(fit.residual @ fit.residual) / df
    return ResponseFit(
        shape=shape,
        scatter=scatter,
        x=x,
        inhibitor=inhibitor,
        y=y,
        day=day,
        fit=fit,
        covariance=_covariance(fit.jacobian, variance),
        residual_variance=variance,
        df=df,
    )


def _start(
    shape: Shape, x: Floats, inhibitor: Floats, y: Floats, day: Ints, n_days: int
) -> dict[str, float]:
    guess = shape.first_guess(x, inhibitor, y)
    g = shape.of(x, inhibitor, **guess)
    start = {}
    for d in range(n_days):
        own = day == d
        top, bottom = float(np.sum(y[own] * g[own])), float(np.sum(g[own] ** 2))
        start[f"day_{d}"] = math.log(max(top / max(bottom, 1e-300), 1e-12))
    return start | {k: math.log(v) if k in shape.positive else v for k, v in guess.items()}


def own_scale(shape: Shape, values: Mapping[str, float]) -> dict[str, float]:
    out = {}
    for name in shape.parameters:
        value = values[name]
        out[name] = math.exp(min(max(value, -300.0), 300.0)) if name in shape.positive else value
    return out


def curve_residual(
    shape: Shape,
    link: Callable[[Floats], Floats],
    x: Floats,
    inhibitor: Floats,
    target: Floats,
    day: Ints,
    values: Mapping[str, float],
) -> Floats:
    scales = np.exp([values[f"day_{d}"] for d in range(int(day.max()) + 1)])
    model = scales[day] * shape.of(x, inhibitor, **own_scale(shape, values))
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(link(model) - target)


def _covariance(jacobian: Floats, variance: float) -> Floats:
    """variance (JᵀJ)⁻¹; NaN where the data do not determine every parameter."""
    size = np.sqrt((jacobian**2).sum(axis=0))
    n_parameters = jacobian.shape[1]
    unknown = np.full((n_parameters, n_parameters), np.nan)
    if not (np.all(np.isfinite(jacobian)) and np.all(size > 0)):
        return unknown
    _, singular, vt = np.linalg.svd(jacobian / size, full_matrices=False)
    if singular[-1] < 1e-9 * singular[0]:
        return unknown
    return np.asarray((vt.T / singular**2) @ vt * variance / np.outer(size, size))
