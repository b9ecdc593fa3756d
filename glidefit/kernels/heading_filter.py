"""One step of a filter over position, heading, speed and turning rate of a gliding filament.

The state of a track is an array ``s`` of 20 numbers: the means of x, y, heading a, speed v and
turning rate w, then the upper triangle of their covariance, row by row::

    s = [x, y, a, v, w,  xx, xy, xa, xv, xw,  yy, ya, yv, yw,  aa, av, aw,  vv, vw,  ww]

Within a time h the heading ends ``turn = ω h + A`` further on, and the displacement is that of
the speed along the heading φ at its mean over the time, shortened by its variation about that
mean. A, the mean B of the heading's noise and its early-weighted mean C (for the mean position)
are the integrals of 1, u and u² over dW, u from 1 to 0: variances 1, 1/3 and 1/5, covariances
(A, B) 1/2, (A, C) 1/3, (B, C) 1/4 times 2 D_r h. Means and covariances of v (cos φ, sin φ) for a
Gaussian (v, φ) are exact: E[v exp(iδ)] = exp(-S/2) (v + i c) with S = Var φ and c = Cov(v, φ), and
with any Gaussian z by the lemma of Stein, Cov(z, g) = Σ Cov(z, u_j) E[∂g/∂u_j].
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# What `advance` and `observe` are given of the model.
SPEED, SPEED_VARIANCE, TURN_NOISE, TURNING_RATE, TURNING_RATE_VARIANCE = 0, 1, 2, 3, 4
ALONG_NOISE, ACROSS_NOISE, ERROR_VARIANCE, PER_PATH, EXPOSURE = 5, 6, 7, 8, 9
N_MODEL, N_STATE = 10, 20

# No branch for each division, and a few operations in one; not the rest of fast arithmetic.
COMPILED: dict[str, Any] = {
    "cache": True,
    "error_model": "numpy",
    "fastmath": {"contract", "arcp", "nsz"},
}

_LOG_2PI = math.log(2 * math.pi)
# A track whose speed is thought lower than this share of the mean turns as if it had that.
_SLOWEST = 0.05


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _turn(s: Floats, model: Floats, h: float) -> tuple[float, float, float, float]:
    """Mean turn, its slopes by v and w, and the variance 2 D_r h of its noise."""
    if model[PER_PATH] > 0:
        scale = max(s[3] / model[SPEED], _SLOWEST)
        return s[4] * h * scale, s[4] * h / model[SPEED], h * scale, model[TURN_NOISE] * h * scale
    return s[4] * h, 0.0, h, model[TURN_NOISE] * h


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _displacement(
    s: Floats,
    shape: tuple[float, float, float, float, float],
    turn: tuple[float, float, float, float],
    noise: tuple[float, float],
) -> tuple[float, ...]:
    """Moments of the displacement ``length v (cos φ, sin φ)`` + noise along and across φ.

    ``shape`` is (length, share f of the turn in φ, variance of φ's own noise, its covariance
    with the noise of the turn, variance of the shortening). Returned: mean (2), covariance with
    x, y, new heading, v, w (5 × 2), variance (xx, xy, yy), and for `_overlap` cos φ, sin φ, c,
    mean length factor and Var φ.
    """
    length, f, own, with_turn, ripple = shape
    bend, by_v, by_w, _ = turn
    x_phi = s[7] + f * (by_v * s[8] + by_w * s[9])
    y_phi = s[11] + f * (by_v * s[12] + by_w * s[13])
    a_phi = s[14] + f * (by_v * s[15] + by_w * s[16])
    v_phi = s[15] + f * (by_v * s[17] + by_w * s[18])
    w_phi = s[16] + f * (by_v * s[18] + by_w * s[19])
    spread = a_phi + f * (by_v * v_phi + by_w * w_phi) + own
    a_phi += by_v * v_phi + by_w * w_phi + with_turn
    a_v = s[15] + by_v * s[17] + by_w * s[18]

    cos, sin = math.cos(s[2] + f * bend), math.sin(s[2] + f * bend)
    shrink = math.exp(-0.5 * spread)
    reach = length * shrink
    along, across = reach * s[3], reach * v_phi
    mean_x, mean_y = along * cos - across * sin, along * sin + across * cos

    xa, xb = reach * (s[8] - v_phi * x_phi), along * x_phi
    ya, yb = reach * (s[12] - v_phi * y_phi), along * y_phi
    aa, ab = reach * (a_v - v_phi * a_phi), along * a_phi
    va, vb = reach * (s[17] - v_phi * v_phi), along * v_phi
    wa, wb = reach * (s[18] - v_phi * w_phi), along * w_phi

    double = shrink * shrink * shrink * shrink  # exp(-2 S)
    square, half = s[3] * s[3] + s[17], 0.5 * length * length
    real, imaginary = double * (square - 4 * v_phi * v_phi), double * 4 * s[3] * v_phi
    ahead = 0.5 * (1 + double)
    on = half * (square + real) - along * along + along * along * ripple
    on += noise[0] * ahead + noise[1] * (1 - ahead)
    off = half * (square - real) - across * across + noise[0] * (1 - ahead) + noise[1] * ahead
    mixed = half * imaginary - along * across
    return (
        mean_x,
        mean_y,
        xa * cos - xb * sin,
        xa * sin + xb * cos,
        ya * cos - yb * sin,
        ya * sin + yb * cos,
        aa * cos - ab * sin,
        aa * sin + ab * cos,
        va * cos - vb * sin,
        va * sin + vb * cos,
        wa * cos - wb * sin,
        wa * sin + wb * cos,
        on * cos * cos - 2 * mixed * cos * sin + off * sin * sin,
        (on - off) * cos * sin + mixed * (cos * cos - sin * sin),
        on * sin * sin + 2 * mixed * cos * sin + off * cos * cos,
        cos,
        sin,
        v_phi,
        reach,
        spread,
    )


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _end(
    s: Floats, model: Floats, h: float, turn: tuple[float, float, float, float]
) -> tuple[float, ...]:
    """Moments of the displacement in the time h."""
    bend, _, _, q = turn
    length = h * (1 - bend * bend / 24 - q / 12)
    noise = (model[ALONG_NOISE] * h, model[ACROSS_NOISE] * h)
    shape = (length, 0.5, q / 3, q / 2, q * q / 180)
    moments: tuple[float, ...] = _displacement(s, shape, turn, noise)
    return moments


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _middle(
    s: Floats, model: Floats, h: float, turn: tuple[float, float, float, float]
) -> tuple[float, ...]:
    """Moments of the displacement from the start to the mean position over the time h."""
    bend, _, _, q = turn
    length = 0.5 * h * (1 - bend * bend / 36 - q / 15)
    noise = (model[ALONG_NOISE] * h / 3, model[ACROSS_NOISE] * h / 3)
    shape = (length, 1 / 3, q / 5, q / 3, 0.0)
    moments: tuple[float, ...] = _displacement(s, shape, turn, noise)
    return moments


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _overlap(
    s: Floats,
    model: Floats,
    h: float,
    turn: tuple[float, float, float, float],
    end: tuple[float, ...],
    middle: tuple[float, ...],
) -> tuple[float, float, float, float]:
    """Covariance of end (x, y) with middle (x, y): xx, xy, yx, yy; to second order in the noise."""
    _, by_v, by_w, q = turn
    c1, c2, k = end[17], middle[17], end[18] * middle[18]
    lift = by_v * s[15] + by_w * s[16]
    both = by_v * by_v * s[17] + 2 * by_v * by_w * s[18] + by_w * by_w * s[19]
    phi = s[14] + (5 / 6) * lift + both / 6 + q / 4
    apart = math.exp(-0.5 * (end[19] + middle[19]) + phi)
    ahead = 0.5 * (apart + math.exp(-0.5 * (end[19] + middle[19]) - phi))
    aside = apart - ahead
    along, across = 0.5 * h * model[ALONG_NOISE], 0.5 * h * model[ACROSS_NOISE]
    on = k * (s[17] - 2 * c1 * c2 + c1 * c2 * phi + 0.5 * s[3] * s[3] * phi * phi)
    off = k * (s[3] * s[3] * phi + s[17] * phi + c1 * c2)
    on += along * ahead + across * aside
    off += along * aside + across * ahead
    on_off = k * s[3] * c1 * (1 - phi)
    off_on = k * s[3] * c2 * (1 - phi)
    cos, sin, cos2, sin2 = end[15], end[16], middle[15], middle[16]
    x_on, x_off = on * cos - off_on * sin, on_off * cos - off * sin
    y_on, y_off = on * sin + off_on * cos, on_off * sin + off * cos
    return (
        x_on * cos2 - x_off * sin2,
        x_on * sin2 + x_off * cos2,
        y_on * cos2 - y_off * sin2,
        y_on * sin2 + y_off * cos2,
    )


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _moved(s: Floats, turn: tuple[float, float, float, float], d: tuple[float, ...]) -> None:
    """Add the displacement d and the turn to the state."""
    bend, by_v, by_w, q = turn
    xa = s[7] + by_v * s[8] + by_w * s[9]
    ya = s[11] + by_v * s[12] + by_w * s[13]
    av = s[15] + by_v * s[17] + by_w * s[18]
    aw = s[16] + by_v * s[18] + by_w * s[19]
    s[14] += by_v * (s[15] + av) + by_w * (s[16] + aw) + q
    s[15], s[16] = av, aw
    s[0] += d[0]
    s[1] += d[1]
    s[2] += bend
    s[5] += 2 * d[2] + d[12]
    s[6] += d[3] + d[4] + d[13]
    s[10] += 2 * d[5] + d[14]
    s[7], s[11] = xa + d[6], ya + d[7]
    s[8] += d[8]
    s[12] += d[9]
    s[9] += d[10]
    s[13] += d[11]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def advance(s: Floats, model: Floats, h: float) -> None:
    """The state after the time h."""
    turn = _turn(s, model, h)
    _moved(s, turn, _end(s, model, h, turn))


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def begin(s: Floats, model: Floats, x: float, y: float, variance: float) -> None:
    """The state after the first position, nothing known before of the place.

    ``s`` holds heading, speed and turning rate with their covariance, zero elsewhere.
    """
    s[0], s[1] = x, y
    if model[EXPOSURE] > 0:
        turn = _turn(s, model, model[EXPOSURE])
        end = _end(s, model, model[EXPOSURE], turn)
        middle = _middle(s, model, model[EXPOSURE], turn)
        xx, xy, yx, yy = _overlap(s, model, model[EXPOSURE], turn, end, middle)
        _moved(s, turn, end)
        s[0] -= middle[0]
        s[1] -= middle[1]
        s[5] += middle[12] - 2 * xx
        s[6] += middle[13] - xy - yx
        s[10] += middle[14] - 2 * yy
        s[7] -= middle[6]
        s[11] -= middle[7]
        s[8] -= middle[8]
        s[12] -= middle[9]
        s[9] -= middle[10]
        s[13] -= middle[11]
    s[5] += variance
    s[10] += variance


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def observe(
    s: Floats, model: Floats, x: float, y: float, variance: float, innovation: Floats
) -> float:
    """Expose, condition on the position (x, y), and return the log of its predicted density.

    The state is left at the end of the exposure; ``innovation`` (2,) gets the deviation from
    the prediction, independent and of variance 1 if the model holds.
    """
    if model[EXPOSURE] > 0:
        h = model[EXPOSURE]
        turn = _turn(s, model, h)
        end = _end(s, model, h, turn)
        middle = _middle(s, model, h, turn)
        o = _overlap(s, model, h, turn, end, middle)
        rx, ry = x - s[0] - middle[0], y - s[1] - middle[1]
        xx = s[5] + 2 * middle[2] + middle[12]
        xy = s[6] + middle[3] + middle[4] + middle[13]
        yy = s[10] + 2 * middle[5] + middle[14]
        # Covariance of what the state becomes with the mean position.
        x0, x1 = s[5] + middle[2] + end[2] + o[0], s[6] + middle[3] + end[4] + o[1]
        y0, y1 = s[6] + middle[4] + end[3] + o[2], s[10] + middle[5] + end[5] + o[3]
        a0 = s[7] + turn[1] * s[8] + turn[2] * s[9] + middle[6]
        a1 = s[11] + turn[1] * s[12] + turn[2] * s[13] + middle[7]
        v0, v1, w0, w1 = s[8] + middle[8], s[12] + middle[9], s[9] + middle[10], s[13] + middle[11]
        _moved(s, turn, end)
    else:
        rx, ry = x - s[0], y - s[1]
        xx, xy, yy = s[5], s[6], s[10]
        x0, x1, y0, y1, a0, a1 = s[5], s[6], s[6], s[10], s[7], s[11]
        v0, v1, w0, w1 = s[8], s[12], s[9], s[13]
    cross = (x0, x1, y0, y1, a0, a1, v0, v1, w0, w1)
    spread = (xx + variance, xy, yy + variance)
    density: float = _conditioned(s, (rx, ry), spread, cross, innovation)
    return density


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _conditioned(
    s: Floats,
    residual: tuple[float, float],
    spread: tuple[float, float, float],
    cross: tuple[float, ...],
    innovation: Floats,
) -> float:
    """Condition the state on a measurement whose covariance with it is ``cross``."""
    # With spread = L Lᵀ everything is taken in units of independent residuals.
    l00 = math.sqrt(spread[0])
    l10 = spread[1] / l00
    l11 = math.sqrt(spread[2] - l10 * l10)
    z0 = residual[0] / l00
    z1 = (residual[1] - l10 * z0) / l11
    x0, y0, a0 = cross[0] / l00, cross[2] / l00, cross[4] / l00
    v0, w0 = cross[6] / l00, cross[8] / l00
    x1, y1, a1 = (
        (cross[1] - l10 * x0) / l11,
        (cross[3] - l10 * y0) / l11,
        (cross[5] - l10 * a0) / l11,
    )
    v1, w1 = (cross[7] - l10 * v0) / l11, (cross[9] - l10 * w0) / l11
    s[0] += x0 * z0 + x1 * z1
    s[1] += y0 * z0 + y1 * z1
    s[2] += a0 * z0 + a1 * z1
    s[3] += v0 * z0 + v1 * z1
    s[4] += w0 * z0 + w1 * z1
    s[5] -= x0 * x0 + x1 * x1
    s[6] -= x0 * y0 + x1 * y1
    s[7] -= x0 * a0 + x1 * a1
    s[8] -= x0 * v0 + x1 * v1
    s[9] -= x0 * w0 + x1 * w1
    s[10] -= y0 * y0 + y1 * y1
    s[11] -= y0 * a0 + y1 * a1
    s[12] -= y0 * v0 + y1 * v1
    s[13] -= y0 * w0 + y1 * w1
    s[14] -= a0 * a0 + a1 * a1
    s[15] -= a0 * v0 + a1 * v1
    s[16] -= a0 * w0 + a1 * w1
    s[17] -= v0 * v0 + v1 * v1
    s[18] -= v0 * w0 + v1 * w1
    s[19] -= w0 * w0 + w1 * w1
    innovation[0], innovation[1] = z0, z1
    return -0.5 * (z0 * z0 + z1 * z1) - math.log(l00 * l11) - _LOG_2PI
