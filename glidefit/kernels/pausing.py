"""How likely tracks are if gliding filaments pause now and then."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from glidefit.kernels import heading_filter as hf
from glidefit.kernels import pausing_clock as pc
from glidefit.kernels import pausing_filter as pf
from glidefit.kernels.heading_filter import LANES, LOG_2PI, N_STATE
from glidefit.kernels.likelihood import Clock, FilteredTracks, _check_times

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# A heading of which nothing is known is as many Gaussians at even distances, each of a standard
# deviation of 1/1.3 of their distance: their sum is flat to 1 part in 10^4.
_N_HEADINGS = 16
_HEADING_WIDTH = 1 / 1.3
# They reach to so many standard deviations from the chord of the first positions, or all around.
_REACH = 3.5
# They are joined after so many positions or more: once the filament is so many mean steps away
# from where it was first seen. Before, it may not have run yet.
_N_FIRST, _CLEAR_STEPS = 5, 3.0
# Which mode a filament is first seen in says nothing of the rates: those that enter the field do
# it while they run.
_FIRST_RUNNING = 0.5


def filter_pausing_tracks(
    time_s: Floats,
    x: Floats,
    y: Floats,
    offsets: Ints,
    *,
    speed: float,
    rotational_diffusion: float,
    localization_error: float,
    stop_rate: float,
    go_rate: float,
    longitudinal_diffusion: float = 0.0,
    sideways_diffusion: float = 0.0,
    error_variance_along: float = 0.0,
    speed_spread: float = 0.0,
    turning_rate: float = 0.0,
    turning_rate_spread: float = 0.0,
    exposure_s: float = 0.0,
    clock: Clock = "per_path",
    relative_error: Floats | None = None,
    innovations: bool = True,
) -> FilteredTracks:
    """Likelihood of tracks whose filaments pause, and what they say of themselves.

    The model is that of `likelihood.filter_tracks`, all of it in running time alone: a filament
    that runs stops at ``stop_rate``, one that pauses goes on at ``go_rate``, and a pause freezes
    position and heading. A switch may fall anywhere between two positions or into an exposure.

    A switching Gaussian filter of the second order: from each mode to each mode, with the mean
    and variance of the running time between, then one Gaussian for each mode. The mode at the
    first position is anybody's guess.

    Parameters
    ----------
    time_s, x, y, offsets
        As in `likelihood.filter_tracks`, and the parameters not named here.
    stop_rate, go_rate : float
        Pauses that begin per second of running, and that end per second of pause, both > 0.
    clock : {"per_path", "per_time"}
        In either case pauses do not count; they differ where filaments differ in speed.
    innovations : bool
        False leaves the innovations out, which cost a third of the time.

    Returns
    -------
    FilteredTracks
        Innovations are normal scores: quantiles of the normal distribution at the predicted
        probability of what was seen.

    Raises
    ------
    ValueError
        For a parameter out of its range.

    References
    ----------
    Generalized pseudo-Bayes of the second order: Blom & Bar-Shalom, IEEE Trans. Autom. Control
    33, 780 (1988), who compare it with their own; normal scores: Rosenblatt, Ann. Math. Stat. 23,
    470 (1952). Both from memory; moments derived.
    """
    spreads = (
        speed_spread,
        rotational_diffusion,
        longitudinal_diffusion,
        sideways_diffusion,
        error_variance_along,
        turning_rate_spread,
    )
    if not speed > 0 or not localization_error > 0 or not min(spreads) >= 0:
        raise ValueError("speed and localization_error must be > 0, diffusion and spreads >= 0")
    if clock not in ("per_time", "per_path"):
        raise ValueError(f"clock must be per_time or per_path, is {clock}")
    if not stop_rate > 0 or not go_rate > 0:
        raise ValueError(f"rates must be > 0 1/s, are {stop_rate:g} and {go_rate:g}")
    _check_times(time_s, offsets, exposure_s)
    model = np.zeros(hf.N_MODEL)
    model[hf.SPEED], model[hf.SPEED_VARIANCE] = speed, speed_spread**2
    model[hf.TURN_NOISE] = 2 * rotational_diffusion
    model[hf.TURNING_RATE], model[hf.TURNING_RATE_VARIANCE] = turning_rate, turning_rate_spread**2
    model[hf.ALONG_NOISE] = 2 * longitudinal_diffusion
    model[hf.ACROSS_NOISE] = 2 * sideways_diffusion
    model[hf.ERROR_ALONG] = error_variance_along
    model[hf.PER_PATH], model[hf.EXPOSURE] = float(clock == "per_path"), exposure_s
    error = np.full(len(x), localization_error**2)
    if relative_error is not None:
        error *= relative_error**2
    m, n = len(offsets) - 1, len(x)
    log_density, total = np.zeros(n), np.ones(n)
    innovation = np.full((n if innovations else 0, 2), np.nan)
    states = np.empty((m, 2, N_STATE + 1))
    clear = first_clear(x, y, offsets)
    rates = (stop_rate, go_rate)
    _start(time_s, (x, y, error), offsets, clear, model, rates, log_density, states)
    order = np.argsort(clear - offsets[1:], kind="stable")
    known = (log_density, total, innovation, states)
    _filter(time_s, (x, y, error), offsets, clear, order, model, rates, *known)
    with np.errstate(invalid="ignore", divide="ignore"):
        log_density += np.log(total)
    # Where the filter has lost a track altogether, the position is impossible.
    log_density[~np.isfinite(log_density)] = -np.inf
    mean, sd = _of_both(states)
    return FilteredTracks(
        log_likelihood=np.add.reduceat(log_density, offsets[:-1]) if m else np.empty(0),
        log_density=log_density,
        innovation=innovation,
        heading_sd=sd[:, 2],
        speed_mean=mean[:, 3],
        speed_sd=sd[:, 3],
        turning_rate_mean=mean[:, 4],
        turning_rate_sd=sd[:, 4],
    )


def _of_both(states: Floats) -> tuple[Floats, Floats]:
    """Means and standard deviations over both modes, (m, 5) each."""
    weight = states[:, :, -1:]
    mean = (weight * states[:, :, :5]).sum(axis=1)
    variance = states[:, :, [5, 10, 14, 17, 19]] + (states[:, :, :5] - mean[:, None]) ** 2
    return mean, np.sqrt(np.maximum((weight * variance).sum(axis=1), 0.0))


def first_clear(x: Floats, y: Floats, offsets: Ints) -> Ints:
    """Row of each track behind those positions from which its heading is known, (m,)."""
    track = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))
    steps = np.hypot(np.diff(x), np.diff(y))[track[1:] == track[:-1]]
    if not len(steps):
        return offsets[1:].copy()
    first = offsets[:-1][track]
    far = np.hypot(x - x[first], y - y[first]) >= _CLEAR_STEPS * steps.mean()
    row = np.arange(len(x))
    there = np.where(far & (row >= first + _N_FIRST - 1), row + 1, len(x))
    return np.minimum(np.minimum.reduceat(there, offsets[:-1]), offsets[1:])


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _filter(
    time: Floats,
    position: tuple[Floats, Floats, Floats],
    offsets: Ints,
    clear: Ints,
    order: Ints,
    model: Floats,
    rates: tuple[float, float],
    log_density: Floats,
    total: Floats,
    innovation: Floats,
    states: Floats,
) -> None:
    """Filter all tracks from where their heading is clear; long ones first, some together.

    ``position`` is x, y and the variance of their errors. ``log_density`` still lacks the
    logarithm of ``total``; ``states`` are those at the ends of the tracks, with their weights.
    """
    x, y, error = position
    table, waits = np.zeros((pc.N_BRANCHES, pc.N_COLUMNS)), np.full(LANES, -1.0)
    w, last = np.zeros(pf.N_WORK), -1.0
    before = np.empty((LANES, 2))
    for g in range(0, len(order), LANES):
        together = order[g : g + LANES]
        for lane in range(LANES):  # lanes without a track repeat another
            _put(w, lane, states[together[lane % len(together)]])
        longest = offsets[together[0] + 1] - clear[together[0]]
        for j in range(longest):
            for lane in range(LANES):
                k = together[lane % len(together)]
                row = clear[k] + j
                if row >= offsets[k + 1]:  # has ended, and sees what it expects
                    pf.see(w, lane, w[pf.MODES + lane], w[pf.MODES + LANES + lane], 1.0)
                    continue
                pf.see(w, lane, x[row], y[row], error[row])
                wait = time[row] - time[row - 1]
                if abs(wait - waits[lane]) > 1e-9 * wait:
                    if abs(wait - last) > 1e-9 * wait:
                        pc.fill_branches(table, wait, model[hf.EXPOSURE], rates[0], rates[1])
                        last = wait
                    waits[lane] = wait
                    pf.wait(w, lane, table)
                before[lane, 0], before[lane, 1] = w[pf.RUNS + lane], w[pf.RESTS + lane]
            pf.step(w, model)
            for lane in range(len(together)):
                k = together[lane]
                row = clear[k] + j
                if row < offsets[k + 1]:
                    log_density[row] = w[pf.HEIGHT + lane] - LOG_2PI
                    total[row] = w[pf.TOTAL + lane]
                    if len(innovation) > 0:
                        pf.innovation(w, lane, before[lane, 0], before[lane, 1], innovation[row])
                    if row == offsets[k + 1] - 1:
                        _take(w, lane, states[k])


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _put(w: Floats, lane: int, states: Floats) -> None:
    """Both modes with their probabilities into a lane."""
    for mode in range(2):
        for i in range(N_STATE):
            w[pf.MODES + (mode * N_STATE + i) * LANES + lane] = states[mode, i]
        w[pf.RUNS + mode * LANES + lane] = states[mode, N_STATE]


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _take(w: Floats, lane: int, states: Floats) -> None:
    """Both modes with their probabilities from a lane."""
    for mode in range(2):
        for i in range(N_STATE):
            states[mode, i] = w[pf.MODES + (mode * N_STATE + i) * LANES + lane]
        states[mode, N_STATE] = w[pf.RUNS + mode * LANES + lane]


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _start(
    time: Floats,
    position: tuple[Floats, Floats, Floats],
    offsets: Ints,
    clear: Ints,
    model: Floats,
    rates: tuple[float, float],
    log_density: Floats,
    states: Floats,
) -> None:
    """Follow headings from all around until that of a track is clear; ``states`` of it then."""
    x, y, error = position
    table, last = np.zeros((pc.N_BRANCHES, pc.N_COLUMNS)), -1.0
    blocks = np.zeros((_N_HEADINGS // LANES, pf.N_WORK))
    waits, likely = np.full(_N_HEADINGS // LANES, -1.0), np.empty(_N_HEADINGS)
    for k in range(len(offsets) - 1):
        first = offsets[k]
        distance = _begin(time, position, first, clear[k], model, blocks)
        likely[:] = 0.0
        before = math.log(2 * math.pi / distance)
        for row in range(first + 1, clear[k]):
            wait, best = time[row] - time[row - 1], -np.inf
            if abs(wait - last) > 1e-9 * wait:
                pc.fill_branches(table, wait, model[hf.EXPOSURE], rates[0], rates[1])
                last = wait
            for b in range(_N_HEADINGS // LANES):
                w = blocks[b]
                for lane in range(LANES):
                    pf.see(w, lane, x[row], y[row], error[row])
                    if wait != waits[b]:
                        pf.wait(w, lane, table)
                waits[b] = wait
                pf.step(w, model)
                for lane in range(LANES):
                    i = b * LANES + lane
                    likely[i] += w[pf.HEIGHT + lane] + math.log(w[pf.TOTAL + lane]) - LOG_2PI
                    best = max(best, likely[i])
            after = best + math.log(np.exp(likely - best).sum())
            log_density[row] = after - before
            before = after
        _join(blocks, np.exp(likely - likely.max()), states[k])


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _begin(
    time: Floats,
    position: tuple[Floats, Floats, Floats],
    first: int,
    clear: int,
    model: Floats,
    blocks: Floats,
) -> float:
    """Headings that the first positions leave possible, each in both modes; their distance."""
    x, y, error = position
    end = clear - 1
    dx, dy, spent = x[end] - x[first], y[end] - y[first], time[end] - time[first]
    way = max(dx * dx + dy * dy, 1e-300)
    variance = (error[first] + error[end] + model[hf.ACROSS_NOISE] * spent) / way
    variance += 2 * model[hf.ERROR_ALONG] / way
    variance += model[hf.TURN_NOISE] * spent / 3
    variance += model[hf.TURNING_RATE_VARIANCE] * spent * spent / 4
    reach = min(math.pi, _REACH * math.sqrt(variance))
    middle = math.atan2(dy, dx) - 0.5 * model[hf.TURNING_RATE] * spent
    distance = 2 * reach / _N_HEADINGS
    state, s = np.zeros((2, N_STATE + 1)), np.zeros(hf.N_WORK)
    for b in range(_N_HEADINGS // LANES):
        s[:] = 0.0
        for lane in range(LANES):
            s[2 * LANES + lane] = middle + distance * (b * LANES + lane - 0.5 * (_N_HEADINGS - 1))
            s[3 * LANES + lane], s[4 * LANES + lane] = model[hf.SPEED], model[hf.TURNING_RATE]
            s[14 * LANES + lane] = (_HEADING_WIDTH * distance) ** 2
            s[17 * LANES + lane] = model[hf.SPEED_VARIANCE]
            s[19 * LANES + lane] = model[hf.TURNING_RATE_VARIANCE]
            s[hf.SEEN_X + lane], s[hf.SEEN_Y + lane] = x[first], y[first]
            s[hf.ERROR + lane] = error[first]
        resting = s.copy()
        hf.begin(s, model)
        for lane in range(LANES):
            for i in range(N_STATE):
                state[0, i], state[1, i] = s[i * LANES + lane], resting[i * LANES + lane]
            state[1, 0], state[1, 1] = x[first], y[first]
            state[1, 5] = state[1, 10] = error[first] + model[hf.ERROR_ALONG]
            state[0, N_STATE], state[1, N_STATE] = _FIRST_RUNNING, 1 - _FIRST_RUNNING
            _put(blocks[b], lane, state)
    return distance


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _join(blocks: Floats, weights: Floats, states: Floats) -> None:
    """One Gaussian for each mode from those of all headings, with their weights."""
    own = np.empty((2, N_STATE + 1))
    states[:] = 0.0
    weights /= weights.sum()
    for i in range(len(weights)):
        _take(blocks[i // LANES], i % LANES, own)
        for mode in range(2):
            share = weights[i] * own[mode, N_STATE]
            states[mode, N_STATE] += share
            if states[mode, N_STATE] > 0:
                _mix(states[mode], own[mode], share / states[mode, N_STATE])


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _mix(s: Floats, other: Floats, share: float) -> None:
    """Make s the Gaussian of the mean and covariance of a mixture with a share of another."""
    off = other[:5] - s[:5]
    place = 5
    for a in range(5):
        for b in range(a, 5):
            s[place] += share * (other[place] - s[place] + (1 - share) * off[a] * off[b])
            place += 1
    s[:5] += share * off
