"""One step of a filter over position, heading, speed and turning rate of a gliding filament.

The state of a track is 20 numbers: the means of x, y, heading a, speed v and turning rate w, then
the upper triangle of their covariance, row by row::

    s = [x, y, a, v, w,  xx, xy, xa, xv, xw,  yy, ya, yv, yw,  aa, av, aw,  vv, vw,  ww]

Within a time h the heading ends ``turn = ω h + A`` further on, and the displacement is that of
the speed along the heading φ at its mean over the time, shortened by its variation about that
mean. A, the mean B of the heading's noise and its early-weighted mean C (for the mean position)
are the integrals of 1, u and u² over dW, u from 1 to 0: variances 1, 1/3 and 1/5, covariances
(A, B) 1/2, (A, C) 1/3, (B, C) 1/4 times 2 D_r h. Means and covariances of v (cos φ, sin φ) for a
Gaussian (v, φ) are exact: E[v exp(iδ)] = exp(-S/2) (v + i c) with S = Var φ and c = Cov(v, φ), and
with any Gaussian z by the lemma of Stein, Cov(z, g) = Σ Cov(z, u_j) E[∂g/∂u_j].

As many states as `LANES` are treated together, number k of the state of lane l at ``k * LANES +
l`` of one working array. All is plain arithmetic without branches, with inputs and outputs in that
one array, so that the compiler takes several lanes in one instruction (seven times as fast).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]
State = tuple[float, ...]

# What the steps are given of the model.
SPEED, SPEED_VARIANCE, TURN_NOISE, TURNING_RATE, TURNING_RATE_VARIANCE = 0, 1, 2, 3, 4
ALONG_NOISE, ACROSS_NOISE, ERROR_ALONG, PER_PATH, EXPOSURE = 5, 6, 7, 8, 9
N_MODEL, N_STATE, LANES = 10, 20, 8
# Where the numbers of lane 0 stand in a working array after the states: time without exposure
# before the next position, the position and the variance of its error; what observing leaves.
DARK, SEEN_X, SEEN_Y, ERROR, Z0, Z1, ROOT, N_WORK = 160, 168, 176, 184, 192, 200, 208, 216

# No branch for each division, and a few operations in one; not the rest of fast arithmetic.
COMPILED: dict[str, Any] = {
    "cache": True,
    "error_model": "numpy",
    "fastmath": {"contract", "arcp", "nsz"},
}
INSIDE: dict[str, Any] = COMPILED | {"forceinline": True}

LOG_2PI = math.log(2 * math.pi)
# A track whose speed is thought lower than this share of the mean turns as if it had that.
_SLOWEST = 0.05
# Beyond ± this, exponentials stand still.
_LARGEST = 32.0


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def exp(x: float) -> float:
    """exp(x), without branches; relative error below 2e-14 for abs(x) < 2 and 2e-8 to 32.

    The Taylor series of exp(x/64), taken to the power 64.
    """
    y = min(max(x, -_LARGEST), _LARGEST) * (1 / 64)
    e = 1 + y / 8 * (1 + y / 9)
    e = 1 + y / 5 * (1 + y / 6 * (1 + y / 7 * e))
    e = 1 + y * (1 + y / 2 * (1 + y / 3 * (1 + y / 4 * e)))
    e *= e
    e *= e
    e *= e
    e *= e
    e *= e
    return e * e


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def direction(angle: float) -> tuple[float, float]:
    """cos and sin of an angle, without branches; absolute error below 2e-15.

    The Taylor series of a quarter of the angle, doubled twice.
    """
    y = 0.25 * (angle - 2 * math.pi * math.floor(angle * (0.5 / math.pi) + 0.5))
    z = y * y
    c = 1 - z / 132 * (1 - z / 182 * (1 - z / 240))
    c = 1 - z / 2 * (1 - z / 12 * (1 - z / 30 * (1 - z / 56 * (1 - z / 90 * c))))
    d = 1 - z / 156 * (1 - z / 210 * (1 - z / 272))
    d = y * (1 - z / 6 * (1 - z / 20 * (1 - z / 42 * (1 - z / 72 * (1 - z / 110 * d)))))
    c, d = 1 - 2 * d * d, 2 * c * d
    return 1 - 2 * d * d, 2 * c * d


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _turn(s: State, model: State, h: float) -> tuple[float, float, float, float]:
    """Mean turn, its slopes by v and w, and the variance 2 D_r h of its noise."""
    by_path = model[PER_PATH] * h / model[SPEED]
    by_time = h - model[PER_PATH] * h + by_path * max(s[3], _SLOWEST * model[SPEED])
    return s[4] * by_time, s[4] * by_path, by_time, model[TURN_NOISE] * by_time


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _displacement(
    s: State,
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

    cos, sin = direction(s[2] + f * bend)
    shrink = exp(-0.5 * spread)
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


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _end(
    s: State, model: State, h: float, turn: tuple[float, float, float, float]
) -> tuple[float, ...]:
    """Moments of the displacement in the time h."""
    bend, _, _, q = turn
    length = h * (1 - bend * bend / 24 - q / 12)
    noise = (model[ALONG_NOISE] * h, model[ACROSS_NOISE] * h)
    shape = (length, 0.5, q / 3, q / 2, q * q / 180)
    moments: tuple[float, ...] = _displacement(s, shape, turn, noise)
    return moments


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _middle(
    s: State, model: State, h: float, turn: tuple[float, float, float, float]
) -> tuple[float, ...]:
    """Moments of the displacement from the start to the mean position over the time h."""
    bend, _, _, q = turn
    length = 0.5 * h * (1 - bend * bend / 36 - q / 15)
    noise = (model[ALONG_NOISE] * h / 3, model[ACROSS_NOISE] * h / 3)
    shape = (length, 1 / 3, q / 5, q / 3, 0.0)
    moments: tuple[float, ...] = _displacement(s, shape, turn, noise)
    return moments


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _overlap(
    s: State,
    model: State,
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
    apart = exp(-0.5 * (end[19] + middle[19]) + phi)
    ahead = 0.5 * (apart + exp(-0.5 * (end[19] + middle[19]) - phi))
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


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _moved(s: State, turn: tuple[float, float, float, float], d: State) -> State:
    """The state after the displacement d and the turn."""
    bend, by_v, by_w, q = turn
    xa = s[7] + by_v * s[8] + by_w * s[9]
    ya = s[11] + by_v * s[12] + by_w * s[13]
    av = s[15] + by_v * s[17] + by_w * s[18]
    aw = s[16] + by_v * s[18] + by_w * s[19]
    aa = s[14] + by_v * (s[15] + av) + by_w * (s[16] + aw) + q
    xx, xy, yy = s[5] + 2 * d[2] + d[12], s[6] + d[3] + d[4] + d[13], s[10] + 2 * d[5] + d[14]
    return (
        s[0] + d[0],
        s[1] + d[1],
        s[2] + bend,
        s[3],
        s[4],
        xx,
        xy,
        xa + d[6],
        s[8] + d[8],
        s[9] + d[10],
        yy,
        ya + d[7],
        s[12] + d[9],
        s[13] + d[11],
        aa,
        av,
        aw,
        s[17],
        s[18],
        s[19],
    )


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _advanced(s: State, model: State, h: float) -> State:
    """The state after the time h."""
    turn = _turn(s, model, h)
    after: State = _moved(s, turn, _end(s, model, h, turn))
    return after


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _begun(s: State, model: State, x: float, y: float, variance: float) -> State:
    """The state after the first position, nothing known before of the place."""
    h = model[EXPOSURE]
    turn = _turn(s, model, h)
    end = _end(s, model, h, turn)
    middle = _middle(s, model, h, turn)
    xx, xy, yx, yy = _overlap(s, model, h, turn, end, middle)
    noise = _error(model, middle[15], middle[16], middle[19], variance)
    t = _moved(s, turn, end)
    return (
        x + t[0] - middle[0],
        y + t[1] - middle[1],
        t[2],
        t[3],
        t[4],
        t[5] + middle[12] - 2 * xx + noise[0],
        t[6] + middle[13] - xy - yx + noise[1],
        t[7] - middle[6],
        t[8] - middle[8],
        t[9] - middle[10],
        t[10] + middle[14] - 2 * yy + noise[2],
        t[11] - middle[7],
        t[12] - middle[9],
        t[13] - middle[11],
        t[14],
        t[15],
        t[16],
        t[17],
        t[18],
        t[19],
    )


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _error(
    model: State, cos: float, sin: float, spread: float, variance: float
) -> tuple[float, float, float]:
    """Variance xx, xy, yy of the localization error: ``variance``, and more along the heading."""
    half = 0.5 * model[ERROR_ALONG]
    rest = half * exp(-2 * spread)
    ahead, aside = rest * (cos * cos - sin * sin), rest * 2 * cos * sin
    return variance + half + ahead, aside, variance + half - ahead


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _observed_exposed(
    s: State, model: State, x: float, y: float, variance: float
) -> tuple[State, float, float, float]:
    h = model[EXPOSURE]
    turn = _turn(s, model, h)
    end = _end(s, model, h, turn)
    middle = _middle(s, model, h, turn)
    o = _overlap(s, model, h, turn, end, middle)
    noise = _error(model, middle[15], middle[16], middle[19], variance)
    residual = (x - s[0] - middle[0], y - s[1] - middle[1])
    spread = (
        s[5] + 2 * middle[2] + middle[12] + noise[0],
        s[6] + middle[3] + middle[4] + middle[13] + noise[1],
        s[10] + 2 * middle[5] + middle[14] + noise[2],
    )
    # Covariance of what the state becomes with the mean position.
    cross = (
        s[5] + middle[2] + end[2] + o[0],
        s[6] + middle[3] + end[4] + o[1],
        s[6] + middle[4] + end[3] + o[2],
        s[10] + middle[5] + end[5] + o[3],
        s[7] + turn[1] * s[8] + turn[2] * s[9] + middle[6],
        s[11] + turn[1] * s[12] + turn[2] * s[13] + middle[7],
        s[8] + middle[8],
        s[12] + middle[9],
        s[9] + middle[10],
        s[13] + middle[11],
    )
    seen: tuple[State, float, float, float]
    seen = _conditioned(_moved(s, turn, end), residual, spread, cross)
    return seen


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _observed_at_once(
    s: State, model: State, x: float, y: float, variance: float
) -> tuple[State, float, float, float]:
    cos, sin = direction(s[2])
    noise = _error(model, cos, sin, s[14], variance)
    spread = (s[5] + noise[0], s[6] + noise[1], s[10] + noise[2])
    cross = (s[5], s[6], s[6], s[10], s[7], s[11], s[8], s[12], s[9], s[13])
    seen: tuple[State, float, float, float]
    seen = _conditioned(s, (x - s[0], y - s[1]), spread, cross)
    return seen


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _conditioned(
    s: State,
    residual: tuple[float, float],
    spread: tuple[float, float, float],
    cross: State,
) -> tuple[State, float, float, float]:
    """The state given a measurement whose covariance with it is ``cross``.

    And its deviations in units of independent ones of variance 1, and the root of the
    determinant of their spread.
    """
    # With spread = L Lᵀ everything is taken in units of independent residuals.
    l00 = math.sqrt(spread[0])
    r0 = 1 / l00
    l10 = spread[1] * r0
    l11 = math.sqrt(spread[2] - l10 * l10)
    r1 = 1 / l11
    x0, y0, a0, v0, w0 = cross[0] * r0, cross[2] * r0, cross[4] * r0, cross[6] * r0, cross[8] * r0
    z0 = residual[0] * r0
    z1 = (residual[1] - l10 * z0) * r1
    x1, y1 = (cross[1] - l10 * x0) * r1, (cross[3] - l10 * y0) * r1
    a1, v1 = (cross[5] - l10 * a0) * r1, (cross[7] - l10 * v0) * r1
    w1 = (cross[9] - l10 * w0) * r1
    after = (
        s[0] + x0 * z0 + x1 * z1,
        s[1] + y0 * z0 + y1 * z1,
        s[2] + a0 * z0 + a1 * z1,
        s[3] + v0 * z0 + v1 * z1,
        s[4] + w0 * z0 + w1 * z1,
        s[5] - x0 * x0 - x1 * x1,
        s[6] - x0 * y0 - x1 * y1,
        s[7] - x0 * a0 - x1 * a1,
        s[8] - x0 * v0 - x1 * v1,
        s[9] - x0 * w0 - x1 * w1,
        s[10] - y0 * y0 - y1 * y1,
        s[11] - y0 * a0 - y1 * a1,
        s[12] - y0 * v0 - y1 * v1,
        s[13] - y0 * w0 - y1 * w1,
        s[14] - a0 * a0 - a1 * a1,
        s[15] - a0 * v0 - a1 * v1,
        s[16] - a0 * w0 - a1 * w1,
        s[17] - v0 * v0 - v1 * v1,
        s[18] - v0 * w0 - v1 * w1,
        s[19] - w0 * w0 - w1 * w1,
    )
    return after, z0, z1, l00 * l11


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _constants(model: Floats) -> State:
    return (
        model[0],
        model[1],
        model[2],
        model[3],
        model[4],
        model[5],
        model[6],
        model[7],
        model[8],
        model[9],
    )


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _load(w: Floats, lane: int) -> State:
    return (
        w[lane],
        w[8 + lane],
        w[16 + lane],
        w[24 + lane],
        w[32 + lane],
        w[40 + lane],
        w[48 + lane],
        w[56 + lane],
        w[64 + lane],
        w[72 + lane],
        w[80 + lane],
        w[88 + lane],
        w[96 + lane],
        w[104 + lane],
        w[112 + lane],
        w[120 + lane],
        w[128 + lane],
        w[136 + lane],
        w[144 + lane],
        w[152 + lane],
    )


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _store(w: Floats, lane: int, t: State) -> None:
    w[lane] = t[0]
    w[8 + lane] = t[1]
    w[16 + lane] = t[2]
    w[24 + lane] = t[3]
    w[32 + lane] = t[4]
    w[40 + lane] = t[5]
    w[48 + lane] = t[6]
    w[56 + lane] = t[7]
    w[64 + lane] = t[8]
    w[72 + lane] = t[9]
    w[80 + lane] = t[10]
    w[88 + lane] = t[11]
    w[96 + lane] = t[12]
    w[104 + lane] = t[13]
    w[112 + lane] = t[14]
    w[120 + lane] = t[15]
    w[128 + lane] = t[16]
    w[136 + lane] = t[17]
    w[144 + lane] = t[18]
    w[152 + lane] = t[19]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def begin(w: Floats, model: Floats) -> None:
    """The states after the first positions, nothing known before of the place.

    The states hold heading, speed and turning rate with their covariance, zero elsewhere.
    """
    m = _constants(model)
    for lane in range(LANES):
        _store(
            w,
            lane,
            _begun(_load(w, lane), m, w[SEEN_X + lane], w[SEEN_Y + lane], w[ERROR + lane]),
        )


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def advance(w: Floats, model: Floats) -> None:
    """The states after the times ``DARK``."""
    m = _constants(model)
    for lane in range(LANES):
        _store(w, lane, _advanced(_load(w, lane), m, w[DARK + lane]))


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def observe(w: Floats, model: Floats) -> None:
    """Expose and condition on the positions; the states are left at the end of the exposure.

    The deviations ``Z0`` and ``Z1`` from the prediction are independent and of variance 1 if the
    model holds; ``ROOT`` is the root of the determinant of their spread.
    """
    m = _constants(model)
    if model[EXPOSURE] > 0:
        for lane in range(LANES):
            t, z0, z1, root = _observed_exposed(
                _load(w, lane), m, w[SEEN_X + lane], w[SEEN_Y + lane], w[ERROR + lane]
            )
            _store(w, lane, t)
            w[Z0 + lane], w[Z1 + lane], w[ROOT + lane] = z0, z1, root
    else:
        for lane in range(LANES):
            t, z0, z1, root = _observed_at_once(
                _load(w, lane), m, w[SEEN_X + lane], w[SEEN_Y + lane], w[ERROR + lane]
            )
            _store(w, lane, t)
            w[Z0 + lane], w[Z1 + lane], w[ROOT + lane] = z0, z1, root
