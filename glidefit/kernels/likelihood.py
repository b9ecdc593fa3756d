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
    """

    log_likelihood: Floats
    log_density: Floats
    innovation: Floats
    speed_mean: Floats
    speed_sd: Floats
    turning_rate_mean: Floats
    turning_rate_sd: Floats


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
    model[hf.ERROR_VARIANCE] = localization_error**2
    model[hf.PER_PATH], model[hf.EXPOSURE] = float(clock == "per_path"), exposure_s
    if relative_error is None:
        relative_error = np.ones(len(x))
    m = len(offsets) - 1
    log_density, innovation, last = np.empty(len(x)), np.empty((len(x), 2)), np.empty((m, 4))
    _filter(time_s, x, y, offsets, relative_error, model, log_density, innovation, last)
    # Where the filter has lost a track altogether, the position is impossible.
    log_density[~np.isfinite(log_density)] = -np.inf
    return FilteredTracks(
        log_likelihood=np.add.reduceat(log_density, offsets[:-1]) if m else np.empty(0),
        log_density=log_density,
        innovation=innovation,
        speed_mean=last[:, 0],
        speed_sd=last[:, 1],
        turning_rate_mean=last[:, 2],
        turning_rate_sd=last[:, 3],
    )


def _check_times(time_s: Floats, offsets: Ints, exposure_s: float) -> None:
    if len(time_s) < 2:
        return
    wait = np.diff(time_s)
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
    x: Floats,
    y: Floats,
    offsets: Ints,
    relative_error: Floats,
    model: Floats,
    log_density: Floats,
    innovation: Floats,
    last: Floats,
) -> None:
    s = np.empty(hf.N_STATE)
    states = np.empty((_N_HEADINGS, hf.N_STATE))
    weights = np.empty(_N_HEADINGS)
    error = relative_error * relative_error * model[hf.ERROR_VARIANCE]
    for k in range(len(offsets) - 1):
        first, stop = offsets[k], offsets[k + 1]
        joined = min(first + _N_FIRST, stop)
        _first_positions(
            time[first:joined],
            x[first:joined],
            y[first:joined],
            error[first:joined],
            model,
            states,
            weights,
            log_density[first:joined],
        )
        _join(states, weights, s)
        innovation[first:joined] = np.nan
        for j in range(joined, stop):
            dark = time[j] - time[j - 1] - model[hf.EXPOSURE]
            if dark > 0:
                hf.advance(s, model, dark)
            log_density[j] = hf.observe(s, model, x[j], y[j], error[j], innovation[j])
        last[k, 0], last[k, 1] = s[3], math.sqrt(max(s[17], 0.0))
        last[k, 2], last[k, 3] = s[4], math.sqrt(max(s[19], 0.0))


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _first_positions(
    time: Floats,
    x: Floats,
    y: Floats,
    error: Floats,
    model: Floats,
    states: Floats,
    weights: Floats,
    log_density: Floats,
) -> None:
    """Follow headings from all around through the first positions of a track.

    The logarithms of their weights are left relative to the best.
    """
    best = 0.0
    middle, distance = _headings(time, x, y, error, model)
    for i in range(_N_HEADINGS):
        s = states[i]
        s[:] = 0.0
        s[2] = middle + distance * (i - 0.5 * (_N_HEADINGS - 1))
        s[3], s[4] = model[hf.SPEED], model[hf.TURNING_RATE]
        s[14] = (_HEADING_WIDTH * distance) ** 2
        s[17], s[19] = model[hf.SPEED_VARIANCE], model[hf.TURNING_RATE_VARIANCE]
        hf.begin(s, model, x[0], y[0], error[0])
        weights[i] = 0.0
    scratch = np.empty(2)
    log_density[0] = 0.0
    before = math.log(2 * math.pi / distance)
    for j in range(1, len(x)):
        dark = time[j] - time[j - 1] - model[hf.EXPOSURE]
        highest = -np.inf
        for i in range(_N_HEADINGS):
            if weights[i] < best - _HOPELESS:
                continue
            if dark > 0:
                hf.advance(states[i], model, dark)
            weights[i] += hf.observe(states[i], model, x[j], y[j], error[j], scratch)
            highest = max(highest, weights[i])
        best = highest
        total = best + math.log(_sum_of_exp(weights, best))
        log_density[j] = total - before
        before = total
    for i in range(_N_HEADINGS):
        weights[i] -= best


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _headings(
    time: Floats, x: Floats, y: Floats, error: Floats, model: Floats
) -> tuple[float, float]:
    """Middle and distance of the headings at the start that the first positions leave possible."""
    chord = math.atan2(y[-1] - y[0], x[-1] - x[0])
    spent = time[-1] - time[0]
    way = max(model[hf.SPEED] * spent, 1e-300)
    variance = (error[0] + error[-1] + model[hf.ACROSS_NOISE] * spent) / way / way
    variance += model[hf.TURN_NOISE] * spent / 3
    variance += model[hf.TURNING_RATE_VARIANCE] * spent * spent / 4
    reach = min(math.pi, _REACH * math.sqrt(variance))
    return chord - 0.5 * model[hf.TURNING_RATE] * spent, 2 * reach / _N_HEADINGS


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _sum_of_exp(weights: Floats, best: float) -> float:
    total = 0.0
    for weight in weights:
        if weight >= best - _HOPELESS:
            total += math.exp(weight - best)
    return total


@njit(**hf.COMPILED)  # type: ignore[untyped-decorator]
def _join(states: Floats, weights: Floats, s: Floats) -> None:
    """One Gaussian state with the mean and covariance of all."""
    s[:] = 0.0
    total = _sum_of_exp(weights, 0.0)
    for i in range(_N_HEADINGS):
        if weights[i] >= -_HOPELESS:
            s += math.exp(weights[i]) / total * states[i]
    for i in range(_N_HEADINGS):
        if weights[i] >= -_HOPELESS:
            weight = math.exp(weights[i]) / total
            place = 5
            for a in range(5):
                for b in range(a, 5):
                    s[place] += weight * (states[i, a] - s[a]) * (states[i, b] - s[b])
                    place += 1
