"""One step of a filter over position, heading, speed and mode of filaments that pause.

There are two states as in `heading_filter`, of a running and of a paused filament, each with its
probability. A step follows the four branches of `pausing_clock`, conditions each on the position,
and joins those that end in one mode into one Gaussian with their mean and covariance. The heading
turns, and diffusion goes on, in running time alone.

As in `heading_filter`, lanes are treated together in one working array without branches.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from glidefit.kernels import heading_filter as hf
from glidefit.kernels import pausing_clock as pc
from glidefit.kernels.heading_filter import COMPILED, INSIDE, LANES, N_STATE, State

Floats = NDArray[np.float64]
Turn = tuple[float, float, float, float]

# The part of the working array that belongs to a branch, in units of lanes: the state, the row of
# `pausing_clock`; the position and the variance of its error; what following it leaves: half the
# square of the deviation in standard deviations, root of the determinant of the predicted spread,
# residual x and y, the spread xx, xy, yy.
_ROW = N_STATE
_SEEN_X, _SEEN_Y, _ERROR = 32, 33, 34
_HALF, _ROOT, _RX, _RY, _XX, _XY, _YY, _SIZE = 35, 36, 37, 38, 39, 40, 41, 42
BRANCH = _SIZE * LANES
# Behind the four branches: states of the modes, their probabilities, logarithm of the density of
# the position but for that of a sum.
MODES = pc.N_BRANCHES * BRANCH
RUNS, RESTS = MODES + 2 * N_STATE * LANES, MODES + (2 * N_STATE + 1) * LANES
HEIGHT, TOTAL = RESTS + LANES, RESTS + 2 * LANES
N_WORK = TOTAL + LANES


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _constants(w: Floats, lane: int) -> State:
    return (
        w[160 + lane],
        w[168 + lane],
        w[176 + lane],
        w[184 + lane],
        w[192 + lane],
        w[200 + lane],
        w[208 + lane],
        w[216 + lane],
        w[224 + lane],
        w[232 + lane],
        w[240 + lane],
        w[248 + lane],
    )


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _square_of_velocity(s: State, end: State) -> tuple[float, float, float]:
    """Mean square xx, xy, yy of the velocity: what the variance of a running time is worth."""
    even = 0.5 * (s[3] * s[3] + s[17])
    odd = even * hf.exp(-2 * end[19])
    cos, sin = end[15], end[16]
    along = odd * (cos * cos - sin * sin)
    return even + along, 2 * odd * cos * sin, even - along


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _widened(t: State, square: tuple[float, float, float], variance: float) -> State:
    """The state with an uncertain running time."""
    return (
        *t[:5],
        t[5] + square[0] * variance,
        t[6] + square[1] * variance,
        *t[7:10],
        t[10] + square[2] * variance,
        *t[11:],
    )


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _middle(s: State, model: State, b: State, turn: Turn) -> State:
    """Moments of the displacement from the start to the mean position, at the mean times."""
    bend, _, _, q = turn
    place, own = b[pc.PLACE], b[pc.OWN]
    shortened = 1 - 0.5 * bend * bend * b[pc.RIPPLE] - 0.5 * q * (place - own)
    span = b[pc.RUN] * b[pc.SQUARE]
    shape = (b[pc.WEIGHTED] * shortened, place, q * own, q * place, 0.0)
    noise = (model[hf.ALONG_NOISE] * span, model[hf.ACROSS_NOISE] * span)
    moments: State = hf._displacement(s, shape, turn, noise)
    return moments


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _overlap(s: State, model: State, b: State, turn: Turn, end: State, middle: State) -> State:
    """Covariance of end (x, y) with middle (x, y): xx, xy, yx, yy; to second order in the noise."""
    _, by_v, by_w, q = turn
    c1, c2, k = end[17], middle[17], end[18] * middle[18]
    lift = by_v * s[15] + by_w * s[16]
    both = by_v * by_v * s[17] + 2 * by_v * by_w * s[18] + by_w * by_w * s[19]
    phi = s[14] + (0.5 + b[pc.PLACE]) * lift + 0.5 * b[pc.PLACE] * both + q * b[pc.SHARED]
    apart = hf.exp(-0.5 * (end[19] + middle[19]) + phi)
    ahead = 0.5 * (apart + hf.exp(-0.5 * (end[19] + middle[19]) - phi))
    aside = apart - ahead
    span = b[pc.RUN] * b[pc.AREA]
    along, across = span * model[hf.ALONG_NOISE], span * model[hf.ACROSS_NOISE]
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
def _seen_exposed(
    s: State, model: State, b: State, seen: tuple[float, float, float]
) -> tuple[State, float, float, float, tuple[float, ...]]:
    """The state after a branch, given the mean position over the exposure."""
    turn = hf._turn(s, model, b[pc.RUN])
    end = hf._end(s, model, b[pc.RUN], turn)
    middle = _middle(s, model, b, turn)
    o = _overlap(s, model, b, turn, end, middle)
    noise = hf._error(model, middle[15], middle[16], middle[19], seen[2])
    square = _square_of_velocity(s, end)
    more, both = b[pc.VAR_WEIGHTED], b[pc.COV_RUN]
    residual = (seen[0] - s[0] - middle[0], seen[1] - s[1] - middle[1])
    spread = (
        s[5] + 2 * middle[2] + middle[12] + noise[0] + more * square[0],
        s[6] + middle[3] + middle[4] + middle[13] + noise[1] + more * square[1],
        s[10] + 2 * middle[5] + middle[14] + noise[2] + more * square[2],
    )
    # Covariance of what the state becomes with the mean position.
    cross = (
        s[5] + middle[2] + end[2] + o[0] + both * square[0],
        s[6] + middle[3] + end[4] + o[1] + both * square[1],
        s[6] + middle[4] + end[3] + o[2] + both * square[1],
        s[10] + middle[5] + end[5] + o[3] + both * square[2],
        s[7] + turn[1] * s[8] + turn[2] * s[9] + middle[6],
        s[11] + turn[1] * s[12] + turn[2] * s[13] + middle[7],
        s[8] + middle[8],
        s[12] + middle[9],
        s[9] + middle[10],
        s[13] + middle[11],
    )
    moved = _widened(hf._moved(s, turn, end), square, b[pc.VAR_RUN])
    after, z0, z1, root = hf._conditioned(moved, residual, spread, cross)
    return after, z0, z1, root, (*residual, *spread)


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _seen_at_once(
    s: State, model: State, b: State, seen: tuple[float, float, float]
) -> tuple[State, float, float, float, tuple[float, ...]]:
    """The state after a branch, given the position at its end."""
    turn = hf._turn(s, model, b[pc.RUN])
    end = hf._end(s, model, b[pc.RUN], turn)
    square = _square_of_velocity(s, end)
    t = _widened(hf._moved(s, turn, end), square, b[pc.VAR_RUN])
    noise = hf._error(model, end[15], end[16], end[19], seen[2])
    residual = (seen[0] - t[0], seen[1] - t[1])
    spread = (t[5] + noise[0], t[6] + noise[1], t[10] + noise[2])
    cross = (t[5], t[6], t[6], t[10], t[7], t[11], t[8], t[12], t[9], t[13])
    after, z0, z1, root = hf._conditioned(t, residual, spread, cross)
    return after, z0, z1, root, (*residual, *spread)


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _leave(
    w: Floats, lane: int, t: State, z: tuple[float, float, float], seen: tuple[float, ...]
) -> None:
    hf._store(w, lane, t)
    w[8 * _HALF + lane] = 0.5 * (z[0] * z[0] + z[1] * z[1])
    w[8 * _ROOT + lane] = z[2]
    w[8 * _RX + lane], w[8 * _RY + lane] = seen[0], seen[1]
    w[8 * _XX + lane], w[8 * _XY + lane], w[8 * _YY + lane] = seen[2], seen[3], seen[4]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _follow_exposed(w: Floats, model: Floats) -> None:
    m = hf._constants(model)
    for lane in range(LANES):
        seen = (w[8 * _SEEN_X + lane], w[8 * _SEEN_Y + lane], w[8 * _ERROR + lane])
        t, z0, z1, root, seen_as = _seen_exposed(hf._load(w, lane), m, _constants(w, lane), seen)
        _leave(w, lane, t, (z0, z1, root), seen_as)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _follow_at_once(w: Floats, model: Floats) -> None:
    m = hf._constants(model)
    for lane in range(LANES):
        seen = (w[8 * _SEEN_X + lane], w[8 * _SEEN_Y + lane], w[8 * _ERROR + lane])
        t, z0, z1, root, seen_as = _seen_at_once(hf._load(w, lane), m, _constants(w, lane), seen)
        _leave(w, lane, t, (z0, z1, root), seen_as)


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _mixed(a: State, b: State, share: float) -> State:
    """The Gaussian with mean and covariance of a mixture of a and a share of b."""
    left, both = 1 - share, share * (1 - share)
    d0, d1, d2, d3, d4 = b[0] - a[0], b[1] - a[1], b[2] - a[2], b[3] - a[3], b[4] - a[4]
    return (
        a[0] + share * d0,
        a[1] + share * d1,
        a[2] + share * d2,
        a[3] + share * d3,
        a[4] + share * d4,
        left * a[5] + share * b[5] + both * d0 * d0,
        left * a[6] + share * b[6] + both * d0 * d1,
        left * a[7] + share * b[7] + both * d0 * d2,
        left * a[8] + share * b[8] + both * d0 * d3,
        left * a[9] + share * b[9] + both * d0 * d4,
        left * a[10] + share * b[10] + both * d1 * d1,
        left * a[11] + share * b[11] + both * d1 * d2,
        left * a[12] + share * b[12] + both * d1 * d3,
        left * a[13] + share * b[13] + both * d1 * d4,
        left * a[14] + share * b[14] + both * d2 * d2,
        left * a[15] + share * b[15] + both * d2 * d3,
        left * a[16] + share * b[16] + both * d2 * d4,
        left * a[17] + share * b[17] + both * d3 * d3,
        left * a[18] + share * b[18] + both * d3 * d4,
        left * a[19] + share * b[19] + both * d4 * d4,
    )


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _join(w: Floats) -> None:
    """Weigh the branches, and join those that end in one mode."""
    for lane in range(LANES):
        half = _of_branches(w, 8 * _HALF + lane)
        root = _of_branches(w, 8 * _ROOT + lane)
        share = _of_branches(w, 8 * (_ROW + pc.SHARE) + lane)
        least = min(min(half[0], half[1]), min(half[2], half[3]))
        runs, rests = w[RUNS + lane], w[RESTS + lane]
        goes = runs * share[0] * hf.exp(least - half[0]) / root[0]
        stays = rests * share[1] * hf.exp(least - half[1]) / root[1]
        stops = runs * share[2] * hf.exp(least - half[2]) / root[2]
        starts = rests * share[3] * hf.exp(least - half[3]) / root[3]
        total = goes + stays + stops + starts
        w[HEIGHT + lane], w[TOTAL + lane] = -least, total
        w[RUNS + lane], w[RESTS + lane] = (goes + starts) / total, (stays + stops) / total
        w[8 * _HALF + lane] = starts / (goes + starts)
        w[8 * _ROOT + lane] = stops / (stays + stops)


@njit(**INSIDE)  # type: ignore[untyped-decorator]
def _of_branches(w: Floats, place: int) -> tuple[float, float, float, float]:
    return w[place], w[BRANCH + place], w[2 * BRANCH + place], w[3 * BRANCH + place]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _join_running(w: Floats) -> None:
    for lane in range(LANES):
        a, b = hf._load(w, lane), hf._load(w, pc.STARTING * BRANCH + lane)
        hf._store(w, MODES + lane, _mixed(a, b, w[8 * _HALF + lane]))


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _join_resting(w: Floats) -> None:
    for lane in range(LANES):
        a = hf._load(w, pc.RESTING * BRANCH + lane)
        b = hf._load(w, pc.STOPPING * BRANCH + lane)
        hf._store(w, MODES + N_STATE * LANES + lane, _mixed(a, b, w[8 * _ROOT + lane]))


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def see(w: Floats, lane: int, x: float, y: float, variance: float) -> None:
    """The next position of a lane."""
    for b in range(pc.N_BRANCHES):
        w[b * BRANCH + 8 * _SEEN_X + lane] = x
        w[b * BRANCH + 8 * _SEEN_Y + lane] = y
        w[b * BRANCH + 8 * _ERROR + lane] = variance


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def wait(w: Floats, lane: int, table: Floats) -> None:
    """The branches of the time before the next position of a lane."""
    for b in range(pc.N_BRANCHES):
        for c in range(pc.N_COLUMNS):
            w[b * BRANCH + 8 * (_ROW + c) + lane] = table[b, c]


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def step(w: Floats, model: Floats) -> None:
    """Take both modes of all lanes to their next positions.

    The density of a position is ``exp(HEIGHT) TOTAL / 2π``.
    """
    size = N_STATE * LANES
    for b in range(pc.N_BRANCHES):
        first = MODES if b in (pc.RUNNING, pc.STOPPING) else MODES + size
        own = w[b * BRANCH : (b + 1) * BRANCH]
        for i in range(size):
            own[i] = w[first + i]
        if model[hf.EXPOSURE] > 0:
            _follow_exposed(own, model)
        else:
            _follow_at_once(own, model)
    _join(w)
    _join_running(w)
    _join_resting(w)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def innovation(w: Floats, lane: int, runs: float, rests: float, z: Floats) -> None:
    """Normal scores of a position under the mixture that the last step predicted, (2,).

    The probability of a smaller x, and of a smaller y given x, as quantiles of the normal
    distribution: independent and of variance 1 if the model holds. ``runs`` and ``rests`` are
    the probabilities of the modes before the step.
    """
    x, y, given = np.zeros(2), np.zeros(2), np.empty(pc.N_BRANCHES)
    least = np.inf
    for b in range(pc.N_BRANCHES):
        own = w[b * BRANCH : (b + 1) * BRANCH]
        rx, xx = own[8 * _RX + lane], own[8 * _XX + lane]
        given[b] = 0.5 * rx * rx / xx + 0.5 * math.log(xx)
        least = min(least, given[b])
    for b in range(pc.N_BRANCHES):
        own = w[b * BRANCH : (b + 1) * BRANCH]
        share = own[8 * (_ROW + pc.SHARE) + lane]
        share *= runs if b in (pc.RUNNING, pc.STOPPING) else rests
        xx, slope = own[8 * _XX + lane], own[8 * _XY + lane] / own[8 * _XX + lane]
        _add_tails(x, share, own[8 * _RX + lane] / math.sqrt(xx))
        rest = own[8 * _YY + lane] - slope * own[8 * _XY + lane]
        ry = own[8 * _RY + lane] - slope * own[8 * _RX + lane]
        _add_tails(y, share * math.exp(least - given[b]), ry / math.sqrt(rest))
    z[0], z[1] = _score(x), _score(y)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _add_tails(tails: Floats, share: float, z: float) -> None:
    """Probability below and above, both without loss."""
    tails[0] += share * 0.5 * math.erfc(-z * math.sqrt(0.5))
    tails[1] += share * 0.5 * math.erfc(z * math.sqrt(0.5))


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _score(tails: Floats) -> float:
    """Normal quantile of the probability below, right to 1e-9 of itself.

    References
    ----------
    Rational first value: Abramowitz & Stegun 26.2.23, from memory (error below 4.5e-4); then
    steps of Halley's method.
    """
    small = min(tails[0], tails[1]) / (tails[0] + tails[1])
    if not small > 1e-300:
        return math.copysign(37.0, tails[0] - tails[1])
    t = math.sqrt(-2 * math.log(small))
    z = t - (2.515517 + t * (0.802853 + t * 0.010328)) / (
        1 + t * (1.432788 + t * (0.189269 + t * 0.001308))
    )
    for _ in range(2):
        density = math.exp(-0.5 * z * z) / math.sqrt(2 * math.pi)
        error = (0.5 * math.erfc(z * math.sqrt(0.5)) - small) / density
        z += error / (1 - 0.5 * z * error)
    return z if tails[0] > tails[1] else -z
