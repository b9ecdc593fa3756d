"""The active-Brownian model fitted to a chamber by its likelihood, and where it does not hold."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.fit_parameters import FitParameters
from glidefit.kernels.gliding_data import GlidingData, first_guess
from glidefit.kernels.likelihood import Clock
from glidefit.kernels.likelihood_fit import LikelihoodFit, fit_parameters
from glidefit.kernels.pausing_guess import pausing_guess
from glidefit.steps.fit.intervals import Kept

if TYPE_CHECKING:
    import lmfit

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# A track is not what it seems (floating, several filaments joined) when its log likelihood falls
# short of the usual by more than chance: the shortfall of n positions from their median has mean
# 0.31 n and variance n, as half a χ² with 2 degrees of freedom. One such track could rule the sum.
_MEAN_SHORTFALL, _SHORTFALL_SDS, _SHORTFALL_FLOOR = 0.31, 6.0, 10.0
_FEWEST_TRACKS = 5
# Positions at the start of a track whose density is compared with that of the same position in
# other tracks: the heading is not known there yet.
_N_FIRST = 8
# A track's own speed is asked of it under a population this wide, relative to the mean, so that
# what comes out is hardly drawn towards the others.
_WIDE = 0.5
_ROUNDS = 5
# Pauses much shorter than a frame cannot be told from longitudinal diffusion.
_SHORTEST_PAUSE_FRAMES = 0.5
# What pauses promise is tried with this share of the time paused, in pauses of so many frames, on
# so many positions.
_TRIED_SHARE, _TRIED_FRAMES, _TRIED_POSITIONS = 0.03, (3.0, 15.0), 8000


@dataclass(frozen=True, slots=True, kw_only=True)
class ChamberLikelihood:
    """Optimum of one chamber.

    Parameters
    ----------
    values : (p,) array
        In the order of the names asked for; the speed, first, is the mean over filament-frames.
    influence : (m, p) array
        What each track adds to them when drawn once more; 0 for tracks left out.
    speed, speed_error : (m,) arrays
        Of each track by itself, in µm/s; NaN where it cannot tell.
    used : (m,) array of bool
        False for tracks that are not what they seem.
    innovation : (k, 2) array
        Normalised innovations of the tracks used, NaN at the start of each track.
    log_likelihood : (m,) array
        Of each track at the optimum, used or not; NaN of single positions.
    promise : float
        Log likelihood that a few pauses add or cost, by position; NaN where pauses are fitted.
    problem : str
    """

    values: Floats
    influence: Floats
    speed: Floats
    speed_error: Floats
    used: Bools
    innovation: Floats
    log_likelihood: Floats
    promise: float
    problem: str


def fit_chamber_likelihood(
    members: Sequence[Kept],
    *,
    names: Sequence[str],
    start: Mapping[str, float] | None,
    known: FitParameters,
    clock: Clock,
) -> ChamberLikelihood:
    """Maximise the likelihood of a chamber's kept tracks, strange ones left out.

    Recordings of several frame intervals are fitted each by itself and averaged by positions.

    Parameters
    ----------
    members : sequence of Kept
    names : sequence of str
        Parameters to fit, the speed first.
    start : mapping or None
        First guess; what is not in it, or all if None, is taken from the tracks.
    known : FitParameters
        Parameters that are held or bounded.
    clock : {"per_path", "per_time"}
        What the heading diffuses with.
    """
    return by_interval(members, lambda group: _fit_group(group, names, start, known, clock))


def by_interval(
    members: Sequence[Kept], fit: Callable[[Sequence[Kept]], ChamberLikelihood]
) -> ChamberLikelihood:
    """Fit recordings of each frame interval by themselves, and average by positions."""
    groups: dict[tuple[float, float], list[int]] = {}
    for i, one in enumerate(members):
        key = (round(one.source.frame_s, 6), round(one.source.exposure_s, 6))
        groups.setdefault(key, []).append(i)
    parts = {tuple(places): fit([members[i] for i in places]) for places in groups.values()}
    if len(parts) == 1:
        return next(iter(parts.values()))
    return _averaged(members, parts)


def _averaged(
    members: Sequence[Kept], parts: Mapping[tuple[int, ...], ChamberLikelihood]
) -> ChamberLikelihood:
    first = np.concatenate([[0], np.cumsum([one.tracks.n_tracks for one in members])])
    n = int(first[-1])
    width = len(next(iter(parts.values())).values)
    values, influence = np.zeros(width), np.zeros((n, width))
    speed, error = np.full(n, np.nan), np.full(n, np.nan)
    used, likely, promise = np.zeros(n, dtype=bool), np.full(n, np.nan), 0.0
    total = sum(len(one.tracks.frame) for one in members)
    for places, part in parts.items():
        rows = np.concatenate([np.arange(first[i], first[i + 1]) for i in places])
        share = sum(len(members[i].tracks.frame) for i in places) / total
        values += share * part.values
        influence[rows] = share * part.influence
        speed[rows], error[rows], used[rows] = part.speed, part.speed_error, part.used
        likely[rows] = part.log_likelihood
        promise += share * part.promise
    return ChamberLikelihood(
        values=values,
        influence=influence,
        speed=speed,
        speed_error=error,
        used=used,
        innovation=np.concatenate([part.innovation for part in parts.values()]),
        log_likelihood=likely,
        promise=promise,
        problem="; ".join(part.problem for part in parts.values() if part.problem),
    )


def _fit_group(
    members: Sequence[Kept],
    names: Sequence[str],
    start: Mapping[str, float] | None,
    known: FitParameters,
    clock: Clock,
) -> ChamberLikelihood:
    counts = np.concatenate([one.tracks.n_positions for one in members])
    judged = counts >= 2
    every = data_of(members, judged, clock)
    if "stop_rate" in names:
        most = 1 / (_SHORTEST_PAUSE_FRAMES * members[0].source.frame_s)
        limits = dict.fromkeys(("stop_rate", "go_rate"), (0.0, most))
        known = replace(known, limits=limits | known.limits)
        guess = pausing_guess(every)
    else:
        guess = first_guess(every)
    guess = guess | dict(start or {}) | known.fixed
    start = {name: guess[name] for name in names}
    used = np.zeros(len(counts), dtype=bool)
    for _ in range(_ROUNDS):
        before = used.copy()
        # All are judged anew: what is strange to a poor first guess need not stay so.
        used[judged] = ~strange(every, start)
        if not used.any():
            return failed(len(counts), len(names), "its tracks are too unlike each other to fit")
        if np.array_equal(used, before):
            break
        data = data_of(members, used, clock)
        fit = _with_known(fit_parameters(data, _parameters(start, known)), names, known)
        if fit.problem:
            return failed(len(counts), len(names), fit.problem)
        start = _named(fit)
    mean = _with_mean_over_frames(data, fit, counts, used, held="speed" in known.fixed)
    likely = np.full(len(counts), np.nan)
    likely[judged] = every.log_likelihood(start)
    return replace(mean, log_likelihood=likely)


def _parameters(start: Mapping[str, float], known: FitParameters) -> lmfit.Parameters:
    """The first guess with what is held and bounded."""
    import lmfit

    parameters = lmfit.Parameters()
    for name, value in start.items():
        low, high = known.limits.get(name, (-np.inf, np.inf))
        parameters.add(name, value=value, min=low, max=high, vary=name not in known.fixed)
    return parameters


def _with_known(fit: LikelihoodFit, names: Sequence[str], known: FitParameters) -> LikelihoodFit:
    """The fit with what was held among its values; no track moves that."""
    if fit.names == tuple(names):
        return fit
    place = [names.index(name) for name in fit.names]
    values = np.array([known.fixed.get(name, np.nan) for name in names])
    scores = np.zeros((len(fit.scores), len(names)))
    information = np.zeros((len(names), len(names)))
    at_limit = np.ones(len(names), dtype=bool)
    values[place], scores[:, place], at_limit[place] = fit.values, fit.scores, fit.at_limit
    information[np.ix_(place, place)] = fit.information
    return replace(
        fit,
        names=tuple(names),
        values=values,
        scores=scores,
        information=information,
        at_limit=at_limit,
    )


def data_of(members: Sequence[Kept], used: Bools, clock: Clock) -> GlidingData:
    """The tracks used, one recording after the other."""
    rows = np.repeat(used, np.concatenate([one.tracks.n_positions for one in members]))
    counts = np.concatenate([one.tracks.n_positions for one in members])[used]
    time = np.concatenate([one.tracks.time_s for one in members])[rows]
    offsets = np.concatenate([[0], np.cumsum(counts)])
    wait = np.diff(time)
    wait[offsets[1:-1] - 1] = np.inf
    exposure = float(np.median([one.source.exposure_s for one in members]))
    return GlidingData(
        time_s=time,
        x=np.concatenate([one.tracks.x_um for one in members])[rows],
        y=np.concatenate([one.tracks.y_um for one in members])[rows],
        offsets=offsets,
        exposure_s=min(exposure, float(wait.min(initial=np.inf))),
        clock=clock,
    )


def _named(fit: LikelihoodFit) -> dict[str, float]:
    return dict(zip(fit.names, map(float, fit.values), strict=True))


def strange(data: GlidingData, values: Mapping[str, float]) -> Bools:
    """Tracks that these parameters make far less likely than the others, (m,).

    Among very few there is no usual track, so none of them is strange.
    """
    if len(data.offsets) - 1 < _FEWEST_TRACKS:
        return np.zeros(len(data.offsets) - 1, dtype=bool)
    density = data.filtered(values).log_density
    place = np.arange(len(density)) - np.repeat(data.offsets[:-1], np.diff(data.offsets))
    usual = np.zeros(len(density))
    for j in range(1, _N_FIRST + 1):
        these = place == j if j < _N_FIRST else place >= j
        usual[these] = np.median(density[these]) if these.any() else 0.0
    shortfall = np.add.reduceat(usual - density, data.offsets[:-1])
    n = np.diff(data.offsets)
    limit = _MEAN_SHORTFALL * n + _SHORTFALL_SDS * np.sqrt(n) + _SHORTFALL_FLOOR
    return np.asarray(shortfall > limit)


def _with_mean_over_frames(
    data: GlidingData, fit: LikelihoodFit, counts: NDArray[np.int64], used: Bools, *, held: bool
) -> ChamberLikelihood:
    """The optimum with the mean speed taken over filament-frames.

    The likelihood weights tracks nearly alike; fast filaments enter the field more often and
    leave it sooner, so that a mean over tracks is too fast. The mean over the filaments present
    at a moment weights each track's own speed by its positions.
    """
    named = _named(fit)
    wide = named | {"speed_variance": (_WIDE * named["speed"]) ** 2}
    filtered = data.filtered(wide)
    own, error = _own_speed(filtered.speed_mean, filtered.speed_sd, named["speed"])
    tells = np.isfinite(own) & (error < _WIDE * named["speed"])
    weight = np.where(tells, counts[used], 0).astype(np.float64)
    influence = np.zeros((len(counts), len(fit.values)))
    influence[used] = fit.influence
    values = fit.values.copy()
    if weight.sum() > 0 and not held:
        values[0] = float(weight @ np.where(tells, own, 0.0) / weight.sum())
        influence[used, 0] = weight * (np.where(tells, own, 0.0) - values[0]) / weight.sum()
    speed, speed_error = np.full(len(counts), np.nan), np.full(len(counts), np.nan)
    speed[used], speed_error[used] = np.where(tells, own, np.nan), np.where(tells, error, np.nan)
    return ChamberLikelihood(
        values=values,
        influence=influence,
        speed=speed,
        speed_error=speed_error,
        used=used,
        innovation=data.filtered(named).innovation,
        log_likelihood=np.full(len(counts), np.nan),
        promise=_promise(data, named),
        problem="",
    )


def _promise(data: GlidingData, named: Mapping[str, float]) -> float:
    """Log likelihood by position that a few pauses would add, the other parameters as they are."""
    if "stop_rate" in named:
        return float("nan")
    some = data.some(_TRIED_POSITIONS)
    track_waits = np.delete(np.diff(some.time_s), some.offsets[1:-1] - 1)
    frame_s = float(np.median(track_waits))
    gains = []
    for frames in _TRIED_FRAMES:
        go = 1 / (frames * frame_s)
        rates = {"stop_rate": go * _TRIED_SHARE / (1 - _TRIED_SHARE), "go_rate": go}
        gains.append(float(some.log_density({**named, **rates}).mean()))
    return max(gains) - float(some.log_density(named).mean())


def _own_speed(mean: Floats, sd: Floats, population: float) -> tuple[Floats, Floats]:
    """A track's own speed and error: its posterior with the wide prior divided out."""
    prior = 1 / (_WIDE * population) ** 2
    with np.errstate(divide="ignore", invalid="ignore"):
        precision = 1 / sd**2 - prior
        own = (mean / sd**2 - population * prior) / precision
        return np.where(precision > 0, own, np.nan), np.where(
            precision > 0, precision**-0.5, np.nan
        )


def failed(n_tracks: int, n_names: int, problem: str) -> ChamberLikelihood:
    none = np.full(n_tracks, np.nan)
    return ChamberLikelihood(
        values=np.full(n_names, np.nan),
        influence=np.zeros((n_tracks, n_names)),
        speed=none,
        speed_error=none,
        used=np.zeros(n_tracks, dtype=bool),
        innovation=np.empty((0, 2)),
        log_likelihood=none,
        promise=float("nan"),
        problem=problem,
    )
