"""How likely tracks are if they rest, are confined to a place, float, glide, or glide and pause.

Each hypothesis is a Gaussian process in the plane, the same in all directions, so that a state
space filter gives its likelihood exactly: a position p and one more vector s per track, with::

    p' = p + b s + noise,   s' = f s + noise,   measured z = p + localization error

where s is the velocity of what glides (forgotten as exp(-γ t)) or the place within its bounds of
what is confined (forgotten as exp(-t/τ)), and nothing for what rests or floats. What pauses has two
such steps, of which each frame takes one. Variances here are those of both coordinates together,
E|z|². Lengths are in µm, times in frames, so that no speed or viscosity is built in.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

AT_REST, CONFINED, FLOATING, GLIDING = range(4)

COMPILED: dict[str, Any] = {
    "cache": True,
    "error_model": "numpy",
    "fastmath": {"contract", "arcp", "nsz"},
}

# Share of the positions that may lie anywhere, as a wrong detection does.
_OUTLIERS = 0.01
# Only residuals beyond this many variances are looked at for being such.
_LOOK = 10.0
# A hypothesis that must stay this far below the best (natural logarithm) is given up.
_HOPELESS = 40.0
# Share of the hypotheses that is tried first, and how often a long track is looked at.
_EVERY, _GLANCE = 8, 8
# Below this, the closed form of a bending path has lost more digits than its series lacks.
_SMALL_TURN = 1e-2


@dataclass(frozen=True, slots=True, kw_only=True)
class Hypotheses:
    """Motions that tracks may have, k of them, for g different waits between positions.

    Parameters
    ----------
    family : (k,) array of int
        AT_REST, CONFINED, FLOATING or GLIDING.
    speed : (k,) array
        Root mean square speed while gliding in µm per frame; 0 for the other families.
    turning : (k,) array
        Share of the velocity that is forgotten per frame; 0 for the other families.
    step : (k, g, 5) array
        b, f and the variances of p, of p with s and of s, that each wait brings.
    spread : (k,) array
        Variance of s at the first position.
    error : (k,) array
        Variance of the localization error.
    switch : (k, g, 2) array
        Chance to stop and to start again within each wait; 0 and 0 for what never pauses.
    running : (k,) array
        Chance to be running at the first position.
    """

    family: Ints
    speed: Floats
    turning: Floats
    step: Floats
    spread: Floats
    error: Floats
    switch: Floats
    running: Floats

    @staticmethod
    def join(parts: Sequence[Hypotheses]) -> Hypotheses:
        """All of them, one after the other."""
        return Hypotheses(
            **{
                one.name: np.concatenate([getattr(part, one.name) for part in parts])
                for one in fields(Hypotheses)
            }
        )

    def some(self, chosen: NDArray[Any]) -> Hypotheses:
        """Those chosen by a mask or by their numbers."""
        return Hypotheses(**{one.name: getattr(self, one.name)[chosen] for one in fields(self)})


def _hypotheses(
    family: int,
    wait: Floats,
    step: Sequence[Floats | float],
    *,
    noise: Floats,
    speed: Floats | float = 0.0,
    turning: Floats | float = 0.0,
    spread: Floats | float = 0.0,
) -> Hypotheses:
    k, g = len(noise), len(wait)
    none = np.zeros(k)
    return Hypotheses(
        family=np.full(k, family),
        speed=none + speed,
        turning=none + turning,
        step=np.stack([np.broadcast_to(column, (k, g)) for column in step], axis=2),
        spread=none + spread,
        error=2 * noise**2,
        switch=np.zeros((k, g, 2)),
        running=np.ones(k),
    )


def at_rest(wait: Floats, *, noise: Floats) -> Hypotheses:
    """Stays where it is.

    Parameters
    ----------
    wait : (g,) array
        Times between positions that occur, in frames, > 0.
    noise : (k,) array
        Localization error of a coordinate in µm, like the following of each hypothesis.
    """
    return _hypotheses(AT_REST, wait, (0.0, 1.0, 0.0, 0.0, 0.0), noise=noise)


def confined(wait: Floats, *, noise: Floats, radius: Floats, memory: Floats) -> Hypotheses:
    """Wanders about a fixed place and is drawn back to it (Ornstein-Uhlenbeck).

    With E|u|² = radius² and E[u(0) u(t)] ∝ exp(-t / memory); what turns freely about a pivot at
    that radius has the same correlation.

    Parameters
    ----------
    wait, noise
        As in `at_rest`.
    radius : (k,) array
        In µm.
    memory : (k,) array
        In frames.
    """
    elapsed = wait / memory[:, None]
    keep = np.exp(-elapsed)
    fresh = radius[:, None] ** 2 * -np.expm1(-2 * elapsed)
    step = (keep - 1, keep, fresh, fresh, fresh)
    return _hypotheses(CONFINED, wait, step, noise=noise, spread=radius**2)


def floating(wait: Floats, *, noise: Floats, diffusion: Floats) -> Hypotheses:
    """Diffuses freely; ``diffusion`` (k,) in µm² per frame, the others as in `at_rest`."""
    step = (0.0, 1.0, 4 * diffusion[:, None] * wait, 0.0, 0.0)
    return _hypotheses(FLOATING, wait, step, noise=noise)


def gliding(
    wait: Floats, *, noise: Floats, speed: Floats, turning: Floats, diffusion: Floats
) -> Hypotheses:
    """Keeps its velocity, E[v(0) v(t)] = speed² exp(-turning t), and diffuses besides.

    Parameters
    ----------
    wait, noise
        As in `at_rest`.
    speed : (k,) array
        In µm per frame.
    turning : (k,) array
        Share of the velocity that is forgotten per frame, > 0.
    diffusion : (k,) array
        In µm² per frame.
    """
    rate, square = turning[:, None], speed[:, None] ** 2
    u = rate * wait
    lost = -np.expm1(-u)
    b = lost / rate
    series = wait**2 * (0.5 - u / 6 + u**2 / 24 - u**3 / 120)
    bent = np.where(u < _SMALL_TURN, series, (u - lost) / rate**2)
    own = square * (2 * bent - b**2) + 4 * diffusion[:, None] * wait
    step = (b, np.exp(-u), own, square * b * lost, -square * np.expm1(-2 * u))
    return _hypotheses(
        GLIDING, wait, step, noise=noise, speed=speed, turning=turning, spread=speed**2
    )


def pausing(wait: Floats, running: Hypotheses, *, stop: float, start: float) -> Hypotheses:
    """Each runs as in ``running``, but stops and starts at rates per frame, with frozen heading."""
    switched = -np.expm1(-(stop + start) * wait) / (stop + start)
    rates = np.stack([stop * switched, start * switched], axis=1)
    return replace(
        running,
        switch=np.broadcast_to(rates, running.switch.shape),
        running=np.full_like(running.running, start / (stop + start)),
    )


def log_likelihoods(
    hypotheses: Hypotheses, *, wait_index: Ints, x: Floats, y: Floats, offsets: Ints, reach: float
) -> Floats:
    """Log likelihood of every track under every hypothesis.

    Of the positions after the first, in units of π µm²: the place of a track is not known before.
    One position in a hundred may lie anywhere within ``reach``. Exact for Gaussian motion; a
    pausing track is followed by one Gaussian state whose moments are those of both possibilities.

    Parameters
    ----------
    hypotheses : Hypotheses
    wait_index : (n,) array of int
        Which of the waits lies before each position; anything for the first of a track.
    x, y : (n,) arrays
        Positions in µm.
    offsets : (m + 1,) array of int
        Track k owns the rows ``offsets[k]:offsets[k + 1]``.
    reach : float
        In µm.

    Returns
    -------
    (m, k) array

    Raises
    ------
    ValueError
        For an index that is no wait of the hypotheses.

    References
    ----------
    Filter of switching Gaussian processes with moments joined at each step (generalized
    pseudo-Bayes of order 1): Bar-Shalom, Li & Kirubarajan, Estimation with Applications to
    Tracking and Navigation (2001), section 11.6, from memory.
    """
    n_waits = hypotheses.step.shape[1]
    if len(wait_index) and not 0 <= wait_index.min() <= wait_index.max() < n_waits:
        raise ValueError(f"wait_index must be 0 to {n_waits - 1}")
    floor = math.log(_OUTLIERS) - 2 * math.log(reach)
    result = np.full((len(offsets) - 1, len(hypotheses.family)), -np.inf)
    switching = hypotheses.running < 1
    longest = int(np.diff(offsets).max(initial=0))
    # First some of them from everywhere: what falls far short of their best is not followed.
    rows = np.flatnonzero(~switching)
    for chosen in (rows[_EVERY // 2 :: _EVERY], np.delete(rows, np.s_[_EVERY // 2 :: _EVERY])):
        h = hypotheses.some(chosen)
        best = result.max(axis=1, initial=-np.inf)
        gain = _largest_gain(h.step[:, 0], h.spread, h.error, longest)
        part = np.empty((len(best), len(chosen)))
        _steady(wait_index, x, y, offsets, h.step, h.spread, h.error, gain, best, floor, part)
        result[:, chosen] = part
    h = hypotheses.some(switching)
    part = np.empty((len(result), len(h.family)))
    best = result.max(axis=1, initial=-np.inf)
    _switching(
        wait_index, x, y, offsets, h.step, h.spread, h.error, h.switch, h.running, best, floor, part
    )
    result[:, switching] = part
    return result


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _largest_gain(step: Floats, spread: Floats, error: Floats, longest: int) -> Floats:
    """Most that one position can add to the log likelihood of each hypothesis.

    The predicted variance shrinks from position to position, fastest without gaps.
    """
    gain = np.empty(len(spread))
    for h in range(len(spread)):
        b, f, own, mixed, fresh = step[h]
        pp, ps, ss = error[h], 0.0, spread[h]
        inverse = 1 / error[h]
        for _ in range(longest):
            pp += b * (2 * ps + b * ss) + own
            ps = f * (ps + b * ss) + mixed
            ss = f * f * ss + fresh
            inverse = 1 / (pp + error[h])
            ss -= ps * ps * inverse
            ps -= pp * ps * inverse
            pp -= pp * pp * inverse
        gain[h] = math.log(inverse)
    return gain


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _steady(
    wait: Ints,
    x: Floats,
    y: Floats,
    offsets: Ints,
    step: Floats,
    spread: Floats,
    error: Floats,
    gain: Floats,
    best: Floats,
    floor: float,
    result: Floats,
) -> None:
    for k in range(len(offsets) - 1):
        first, stop = offsets[k], offsets[k + 1]
        least = best[k] - _HOPELESS
        for h in range(len(spread)):
            px, py, sx, sy = x[first], y[first], 0.0, 0.0
            pp, ps, ss = error[h], 0.0, spread[h]
            total, product = 0.0, 1.0
            for j in range(first + 1, stop):
                if (j - first) % _GLANCE == 0:
                    total += math.log(product)
                    product = 1.0
                    if total + max(gain[h], floor) * (stop - j) < least:
                        total = -np.inf
                        break
                b, f, own, mixed, fresh = step[h, wait[j]]
                px += b * sx
                py += b * sy
                sx *= f
                sy *= f
                pp += b * (2 * ps + b * ss) + own
                ps = f * (ps + b * ss) + mixed
                ss = f * f * ss + fresh
                inverse = 1 / (pp + error[h])
                rx, ry = x[j] - px, y[j] - py
                square = (rx * rx + ry * ry) * inverse
                if square > _LOOK and math.log(inverse) - square < floor:
                    total += floor
                    continue
                at, on = pp * inverse, ps * inverse
                px += at * rx
                py += at * ry
                sx += on * rx
                sy += on * ry
                ss -= on * ps
                ps -= at * ps
                pp -= at * pp
                total -= square
                product *= inverse
            result[k, h] = total + math.log(product)


@njit(**COMPILED)  # type: ignore[untyped-decorator]
def _switching(
    wait: Ints,
    x: Floats,
    y: Floats,
    offsets: Ints,
    step: Floats,
    spread: Floats,
    error: Floats,
    switch: Floats,
    running: Floats,
    best: Floats,
    floor: float,
    result: Floats,
) -> None:
    lowest = math.exp(floor)
    for k in range(len(offsets) - 1):
        first, last = offsets[k], offsets[k + 1]
        least = best[k] - _HOPELESS
        for h in range(len(spread)):
            px, py, sx, sy = x[first], y[first], 0.0, 0.0
            pp, ps, ss = error[h], 0.0, spread[h]
            runs = running[h]
            total, product = 0.0, 1.0
            gain = max(-math.log(error[h]), floor)
            for j in range(first + 1, last):
                if (j - first) % _GLANCE == 0:
                    total += math.log(product)
                    product = 1.0
                    if total + gain * (last - j) < least:
                        total = -np.inf
                        break
                b, f, own, mixed, fresh = step[h, wait[j]]
                stop, start = switch[h, wait[j]]
                runs = runs * (1 - stop) + (1 - runs) * start
                # What it would be after a run; if it rests, nothing changes.
                qx, qy, tx, ty = px + b * sx, py + b * sy, f * sx, f * sy
                qq = pp + b * (2 * ps + b * ss) + own
                qt = f * (ps + b * ss) + mixed
                tt = f * f * ss + fresh
                rest, run = 1 / (pp + error[h]), 1 / (qq + error[h])
                ax, ay, bx, by = x[j] - px, y[j] - py, x[j] - qx, y[j] - qy
                if_rest = (1 - runs) * rest * math.exp(-(ax * ax + ay * ay) * rest)
                if_run = runs * run * math.exp(-(bx * bx + by * by) * run)
                density = if_rest + if_run
                if density < lowest:
                    total += floor
                    if runs > 0.5:
                        px, py, sx, sy, pp, ps, ss = qx, qy, tx, ty, qq, qt, tt
                    continue
                runs = if_run / density
                at, on = pp * rest, ps * rest
                px, py, sx, sy = px + at * ax, py + at * ay, sx + on * ax, sy + on * ay
                pp, ps, ss = pp - at * pp, ps - at * ps, ss - on * ps
                at, on = qq * run, qt * run
                # Difference of the two possibilities, and their joint moments.
                dx, dy = qx + at * bx - px, qy + at * by - py
                ex, ey = tx + on * bx - sx, ty + on * by - sy
                both = runs * (1 - runs)
                pp += runs * (qq - at * qq - pp) + both * (dx * dx + dy * dy)
                ps += runs * (qt - at * qt - ps) + both * (dx * ex + dy * ey)
                ss += runs * (tt - on * qt - ss) + both * (ex * ex + ey * ey)
                px, py, sx, sy = px + runs * dx, py + runs * dy, sx + runs * ex, sy + runs * ey
                product *= density
            result[k, h] = total + math.log(product)
