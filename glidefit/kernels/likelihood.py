"""How likely tracks of gliding filaments are under an active-Brownian model."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numba import njit
from numpy.typing import NDArray

from glidefit.kernels import heading_filter as hf

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Clock = Literal["per_time", "per_path"]

# A heading of which nothing is known is as many Gaussians at even distances, each of a standard
# deviation of 1/1.3 of their distance: their sum is flat to 1 part in 10^4.
_N_HEADINGS = 16
_HEADING_WIDTH = 1 / 1.3
# Half as many where they reach less far than this, in rad: still closer to each other.
_NARROW = 0.8
# They reach to so many standard deviations from the chord of the first positions, or all around.
_REACH = 5.0
# Positions after which they are joined into one Gaussian.
_N_FIRST = 8
# A heading this much less likely than the best (natural logarithm) is not followed further.
_HOPELESS = 30.0


@dataclass(frozen=True, slots=True, kw_only=True)
class FilteredTracks:
    """What a model makes of m tracks of n positions together.

    Parameters
    ----------
    log_likelihood : (m,) array
        Of the positions after the first, densities in 1/µm²; 0 for a single position.
    log_density : (n,) array
        Of each position given those before it in its track, in the same unit; 0 for the first.
    innovation : (n, 2) array
        Deviation of each position from what those before it predict, of mean 0 and variance 1
        and independent if the model holds; NaN for the first 8 positions of a track.
    speed_mean, speed_sd : (m,) arrays
        What each track and its population say of its speed, in µm/s.
    turning_rate_mean, turning_rate_sd : (m,) arrays
        The same of its turning rate, in rad/s.
    heading_sd : (m,) array
        How well the heading is known at the end of each track, in rad.
    """

    log_likelihood: Floats
    log_density: Floats
    innovation: Floats
    speed_mean: Floats
    speed_sd: Floats
    turning_rate_mean: Floats
    turning_rate_sd: Floats
    heading_sd: Floats


def filter_tracks(
    time_s: Floats,
    x: Floats,
    y: Floats,
    offsets: Ints,
    *,
    speed: float,
    rotational_diffusion: float,
    localization_error: float,
    longitudinal_diffusion: float = 0.0,
    sideways_diffusion: float = 0.0,
    error_variance_along: float = 0.0,
    speed_spread: float = 0.0,
    turning_rate: float = 0.0,
    turning_rate_spread: float = 0.0,
    exposure_s: float = 0.0,
    clock: Clock = "per_time",
    relative_error: Floats | None = None,
) -> FilteredTracks:
    """Likelihood of tracks under the active-Brownian model, and what they say of themselves.

    With a speed v and a turning rate ω for each track, Gaussian in the population, and any
    heading at the start equally likely::

        dr = (v dt + sqrt(2 D_par) dW) (cos θ, sin θ) + sqrt(2 D_perp) dW (-sin θ, cos θ)
        dθ = ω dt + sqrt(2 D_r) dW

    A position is the mean over the exposure plus the localization error. On the clock
    ``per_path`` D_r and ω of a track are those given times v / ``speed``. A gap is a longer
    time between two positions and loses nothing but the positions.

    A Gaussian filter over (x, y, θ, v, ω) whose predictions have the exact mean and covariance of
    v (cos θ, sin θ) under the uncertain heading; the first positions are looked at from all
    headings that they leave possible. The log likelihood of a track is off by about 0.1, either
    way, and its slopes hardly in the mean: simulated, D_r is within 1 % where the localization
    error is below a quarter of a step, but 4 % too large where it is half a step and the heading
    turns by 0.2 rad a frame.

    Parameters
    ----------
    time_s : (n,) array
        Start of the exposure, strictly increasing within a track.
    x, y : (n,) arrays
        Positions in µm.
    offsets : (m + 1,) array of int
        Track k owns the rows ``offsets[k]:offsets[k + 1]``, at least one.
    speed, speed_spread : float
        Mean > 0 and standard deviation >= 0 over the population, in µm/s.
    rotational_diffusion : float
        In rad²/s, >= 0.
    localization_error : float
        Standard deviation of one coordinate in µm, > 0.
    longitudinal_diffusion, sideways_diffusion : float
        Along and across the heading in µm²/s, >= 0.
    error_variance_along : float
        What the localization error has more along the heading than across, in µm², >= 0.
    turning_rate, turning_rate_spread : float
        Mean and standard deviation >= 0 over the population, in rad/s.
    exposure_s : float
        At most the shortest time between two positions.
    clock : {"per_time", "per_path"}
        What the heading turns with.
    relative_error : (n,) array, optional
        Localization error of each position in units of ``localization_error``.

    Raises
    ------
    ValueError
        For a parameter out of its range.

    References
    ----------
    Model: Bechinger et al., Rev. Mod. Phys. 88, 045006 (2016). Gaussian filter with matched
    moments: Ito & Xiong, IEEE Trans. Autom. Control 45, 910 (2000), from memory; moments derived.
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
    log_density, root, innovation = np.empty(n), np.empty(n), np.empty((n, 2))
    states = np.empty((m, hf.N_STATE))
    order = np.argsort(offsets[:-1] - offsets[1:], kind="stable")
    _filter(time_s, (x, y, error), offsets, order, model, log_density, root, innovation, states)
    with np.errstate(invalid="ignore", divide="ignore"):
        log_density -= np.log(root)
    # Where the filter has lost a track altogether, the position is impossible.
    log_density[~np.isfinite(log_density)] = -np.inf
    return FilteredTracks(
        log_likelihood=np.add.reduceat(log_density, offsets[:-1]) if m else np.empty(0),
        log_density=log_density,
        innovation=innovation,
        speed_mean=states[:, 3],
        speed_sd=np.sqrt(np.maximum(states[:, 17], 0.0)),
        turning_rate_mean=states[:, 4],
        turning_rate_sd=np.sqrt(np.maximum(states[:, 19], 0.0)),
        heading_sd=np.sqrt(np.maximum(states[:, 14], 0.0)),
    )


def heading_uncertainty(
    *, speed: float, rotational_diffusion: float, localization_error: float, frame_s: float
) -> float:
    """Standard deviation (rad) of the heading given the positions so far, many frames into a track.

    Of the filter in continuous time: with q = 2 D_r and r = localization_error² frame_s / speed²,
    its variance is sqrt(2) q^(3/4) r^(1/4); single frames make it up to a fifth less.

    References
    ----------
    Kalman & Bucy, J. Basic Eng. 83, 95 (1961), from memory; solved for a rate that diffuses.
    """
    noise = localization_error**2 * frame_s / speed**2
    return float(math.sqrt(math.sqrt(2) * (2 * rotational_diffusion) ** 0.75 * noise**0.25))


def _check_times(time_s: Floats, offsets: Ints, exposure_s: float) -> None:
    if len(time_s) < 2:
        return
    wait = np.diff(time_s).astype(np.float64)
    wait[offsets[1:-1] - 1] = np.inf
    shortest = float(wait.min())
    if not shortest > 0 or not 0 <= exposure_s <= shortest * (1 + 1e-9):
        raise ValueError(
            f"exposure_s must be 0 to {shortest:g} s, the shortest time between two positions, "
            f"which must be > 0; is {exposure_s:g}"
        )


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _filter(
    time: Floats,
    position: tuple[Floats, Floats, Floats],
    offsets: Ints,
    order: Ints,
    model: Floats,
    log_density: Floats,
    root: Floats,
    innovation: Floats,
    states: Floats,
) -> None:
    """Filter all tracks; those next to each other in ``order``, long ones first, together.

    ``position`` is x, y and the variance of their errors. ``log_density`` still lacks minus the
    logarithm of ``root``; ``states`` are those at the ends of the tracks.
    """
    x, y, error = position
    headings = np.zeros((_N_HEADINGS // hf.LANES, hf.N_WORK))
    weights = np.empty(_N_HEADINGS)
    for k in range(len(offsets) - 1):
        first = offsets[k]
        joined = min(first + _N_FIRST, offsets[k + 1])
        n = _first_positions(
            time[first:joined],
            x[first:joined],
            y[first:joined],
            error[first:joined],
            model,
            headings,
            weights,
            log_density[first:joined],
        )
        _join(headings, weights[:n], states[k])
        innovation[first:joined] = np.nan
        root[first:joined] = 1.0
    w = np.zeros(hf.N_WORK)
    for g in range(0, len(order), hf.LANES):
        together = order[g : g + hf.LANES]
        for lane in range(hf.LANES):  # lanes without a track repeat another
            for i in range(hf.N_STATE):
                w[i * hf.LANES + lane] = states[together[lane % len(together)], i]
        longest = offsets[together[0] + 1] - offsets[together[0]]
        for j in range(_N_FIRST, longest):
            _see(time, position, offsets, together, j, model, w)
            hf.advance(w, model)
            hf.observe(w, model)
            for lane in range(len(together)):
                k = together[lane]
                row = offsets[k] + j
                if row < offsets[k + 1]:
                    z0, z1 = w[hf.Z0 + lane], w[hf.Z1 + lane]
                    log_density[row] = -0.5 * (z0 * z0 + z1 * z1) - hf.LOG_2PI
                    innovation[row, 0], innovation[row, 1] = z0, z1
                    root[row] = w[hf.ROOT + lane]
                    if row == offsets[k + 1] - 1:
                        for i in range(hf.N_STATE):
                            states[k, i] = w[i * hf.LANES + lane]


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _see(
    time: Floats,
    position: tuple[Floats, Floats, Floats],
    offsets: Ints,
    together: Ints,
    j: int,
    model: Floats,
    w: Floats,
) -> None:
    """Position number j of each track; a track that has ended waits and sees what it expects."""
    for lane in range(hf.LANES):
        k = together[lane % len(together)]
        row = offsets[k] + j
        if row < offsets[k + 1]:
            w[hf.DARK + lane] = max(time[row] - time[row - 1] - model[hf.EXPOSURE], 0.0)
            w[hf.SEEN_X + lane], w[hf.SEEN_Y + lane] = position[0][row], position[1][row]
            w[hf.ERROR + lane] = position[2][row]
        else:
            w[hf.DARK + lane] = 0.0
            w[hf.SEEN_X + lane], w[hf.SEEN_Y + lane] = w[lane], w[hf.LANES + lane]


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _first_positions(
    time: Floats,
    x: Floats,
    y: Floats,
    error: Floats,
    model: Floats,
    headings: Floats,
    weights: Floats,
    log_density: Floats,
) -> int:
    """Follow headings from all around through the first positions of a track.

    Returns how many; their weights are left relative to the best.
    """
    middle, reach = _headings(time, x, y, error, model)
    n = hf.LANES if reach < _NARROW else _N_HEADINGS
    distance = 2 * reach / n
    for b in range(n // hf.LANES):
        w = headings[b]
        w[: hf.DARK] = 0.0
        for lane in range(hf.LANES):
            i = b * hf.LANES + lane
            w[2 * hf.LANES + lane] = middle + distance * (i - 0.5 * (n - 1))
        _fill(w, 3, model[hf.SPEED])
        _fill(w, 4, model[hf.TURNING_RATE])
        _fill(w, 14, (_HEADING_WIDTH * distance) ** 2)
        _fill(w, 17, model[hf.SPEED_VARIANCE])
        _fill(w, 19, model[hf.TURNING_RATE_VARIANCE])
    logs, roots = np.zeros(n), np.ones(n)
    before = math.log(2 * math.pi / distance)
    log_density[0] = 0.0
    weights[:n] = 1.0
    for j in range(len(x)):
        dark = max(time[j] - time[max(j - 1, 0)] - model[hf.EXPOSURE], 0.0)
        for b in range(n // hf.LANES):
            w = headings[b]
            for lane in range(hf.LANES):
                w[hf.DARK + lane] = dark
                w[hf.SEEN_X + lane], w[hf.SEEN_Y + lane] = x[j], y[j]
                w[hf.ERROR + lane] = error[j]
            if j == 0:
                hf.begin(w, model)
                continue
            hf.advance(w, model)
            hf.observe(w, model)
            for lane in range(hf.LANES):
                z0, z1 = w[hf.Z0 + lane], w[hf.Z1 + lane]
                logs[b * hf.LANES + lane] -= 0.5 * (z0 * z0 + z1 * z1)
                roots[b * hf.LANES + lane] *= w[hf.ROOT + lane]
        if j > 0:
            best = -np.inf
            for i in range(n):
                if logs[i] > best:
                    best = logs[i]
            total = 0.0
            for i in range(n):
                weight = 0.0
                if logs[i] > best - _HOPELESS:
                    weight = hf.exp(logs[i] - best) / roots[i]
                weights[i] = weight
                total += weight
            after = best + math.log(total) - j * hf.LOG_2PI
            log_density[j] = after - before
            before = after
    return n


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _fill(w: Floats, number: int, value: float) -> None:
    w[number * hf.LANES : (number + 1) * hf.LANES] = value


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _headings(
    time: Floats, x: Floats, y: Floats, error: Floats, model: Floats
) -> tuple[float, float]:
    """Middle and reach of the headings at the start that the first positions leave possible."""
    chord = math.atan2(y[-1] - y[0], x[-1] - x[0])
    spent = time[-1] - time[0]
    way = max(model[hf.SPEED] * spent, 1e-300)
    variance = (error[0] + error[-1] + model[hf.ACROSS_NOISE] * spent) / way / way
    variance += 2 * model[hf.ERROR_ALONG] / way / way
    variance += model[hf.TURN_NOISE] * spent / 3
    variance += model[hf.TURNING_RATE_VARIANCE] * spent * spent / 4
    reach = min(math.pi, _REACH * math.sqrt(variance))
    return chord - 0.5 * model[hf.TURNING_RATE] * spent, reach


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _join(headings: Floats, weights: Floats, s: Floats) -> None:
    """One Gaussian state with the mean and covariance of all."""
    n = hf.LANES
    total = weights.sum()
    s[:] = 0.0
    for i in range(len(weights)):
        if weights[i] > 0:
            w, lane, share = headings[i // n], i % n, weights[i] / total
            for k in range(hf.N_STATE):
                s[k] += share * w[k * n + lane]
    for i in range(len(weights)):
        if weights[i] > 0:
            w, lane, share = headings[i // n], i % n, weights[i] / total
            place = 5
            for a in range(5):
                for b in range(a, 5):
                    s[place] += share * (w[a * n + lane] - s[a]) * (w[b * n + lane] - s[b])
                    place += 1
