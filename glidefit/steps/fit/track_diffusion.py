"""What one track alone says of its rotational diffusion."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import CleanRecording, TrackDiffusion
from glidefit.kernels.gliding_data import PARAMETERS, GlidingData
from glidefit.steps.fit.condition import ConditionFit

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Strings = NDArray[np.object_]

# Of the prior of log D_r, normal about the chamber's value: a factor of 10 either way.
PRIOR_SD = math.log(10.0)
# D_r is tried from here to here, in units of the chamber's value and evenly on the log scale; the
# log likelihood of a track is so smooth there that a cubic spline knows it in between.
_LOWEST, _HIGHEST, N_TRIED = 1e-3, 1e2, 21
_FINE = 501
# The speed of each track is its own: its prior is this wide, relative to the chamber's.
_WIDE = 0.5
# Shares of the posterior below the ends of one standard error and below the median.
_SHARES = (0.1587, 0.5, 0.8413)
# A posterior this wide, relative to the prior, is the prior's own.
_SAYS_NOTHING = 0.7
# The lowest D_r tried, which is a straight path, is excluded where its likelihood is less than
# that of one standard error from the optimum.
_EXCLUDED = 0.5
_IMPOSSIBLE = -1e4

NOT_BY_LIKELIHOOD = "not fitted by likelihood"
NO_CHAMBER = "the rotational diffusion of its chamber is not resolved"
NO_SPEED = "too short, or too unlike the other tracks"
NOTHING_SAID = "it says nothing: too short or too noisy"
STRAIGHT = "it cannot be told from a straight path"


def track_diffusions(
    recordings: Sequence[CleanRecording], fitted: ConditionFit
) -> dict[str, TrackDiffusion]:
    """Own rotational diffusion of every kept track, by recording.

    The likelihood of each track alone, the other parameters being those of its chamber and its
    speed its own (a normal law as wide as half the mean), under a weak prior: log D_r is normal
    about the chamber's value, with a standard deviation of a factor of 10.

    Parameters
    ----------
    recordings : sequence of CleanRecording
    fitted : ConditionFit
        The fit of the same recordings.
    """
    values = {(c.day, c.chamber): c.values for c in fitted.chambers}
    found = {}
    for recording in recordings:
        if not recording.clean.kept.any():
            continue
        named = {
            name: float(values[recording.day, recording.chamber][place])
            for name, place in fitted.columns.items()
            if name in PARAMETERS
        }
        if fitted.method != "likelihood":
            found[recording.recording] = _nothing(recording, NOT_BY_LIKELIHOOD)
        elif not (named["rotational_diffusion"] > 0 and named["localization_variance"] > 0):
            found[recording.recording] = _nothing(recording, NO_CHAMBER)
        else:
            speeds, _ = fitted.track_speeds[recording.recording]
            found[recording.recording] = _of_recording(recording, named, np.isfinite(speeds))
    return found


def _nothing(recording: CleanRecording, problem: str) -> TrackDiffusion:
    none = np.full(int(recording.clean.kept.sum()), np.nan)
    return TrackDiffusion(
        value=none, low=none, high=none, problem=np.full(len(none), problem, dtype=object)
    )


def _of_recording(
    recording: CleanRecording, named: Mapping[str, float], told: Bools
) -> TrackDiffusion:
    tracks = recording.clean.tracks.select(recording.clean.kept)
    named = {name: value for name, value in named.items() if np.isfinite(value)}
    named |= {"speed_variance": (_WIDE * named["speed"]) ** 2}
    wait = np.diff(tracks.time_s)[np.diff(tracks.index) == 0]
    data = GlidingData(
        time_s=tracks.time_s,
        x=tracks.x_um,
        y=tracks.y_um,
        offsets=tracks.offsets,
        exposure_s=min(recording.exposure_s, float(wait.min(initial=np.inf))),
    )
    tried = np.linspace(math.log(_LOWEST), math.log(_HIGHEST), N_TRIED)
    centre = named["rotational_diffusion"]
    likelihood = np.array(
        [data.log_likelihood(named | {"rotational_diffusion": centre * math.exp(x)}) for x in tried]
    )
    low, value, high, problem = _posterior(tried, likelihood)
    problem[~told] = NO_SPEED
    wrong = problem != ""
    return TrackDiffusion(
        value=np.where(wrong, np.nan, centre * value),
        low=np.where(wrong, np.nan, centre * low),
        high=np.where(wrong & (problem != STRAIGHT), np.nan, centre * high),
        problem=problem,
    )


def _posterior(tried: Floats, likelihood: Floats) -> tuple[Floats, Floats, Floats, Strings]:
    """Ends, median (relative to the chamber's value) and what is wrong, from (tried, tracks)."""
    from scipy.interpolate import CubicSpline

    highest = likelihood.max(axis=0)
    # Impossible is as good as very unlikely, and does not bend the spline beyond measure.
    likelihood = np.maximum(likelihood - highest, _IMPOSSIBLE)
    fine = np.linspace(tried[0], tried[-1], _FINE)
    log = CubicSpline(tried, likelihood)(fine)
    log -= log.max(axis=0)
    weight = np.exp(log - (fine[:, None] / PRIOR_SD) ** 2 / 2)
    weight /= weight.sum(axis=0)
    mean = fine @ weight
    sd = np.sqrt(fine**2 @ weight - mean**2)
    ends = [np.exp(_quantile(fine, weight, share)) for share in _SHARES]
    problem = np.where(
        sd > _SAYS_NOTHING * PRIOR_SD,
        NOTHING_SAID,
        np.where(log[0] > -_EXCLUDED, STRAIGHT, ""),
    ).astype(object)
    return ends[0], ends[1], ends[2], problem


def _quantile(fine: Floats, weight: Floats, share: float) -> Floats:
    """Where the share of the weights (fine, tracks) lies below, each spread over its step."""
    below = np.cumsum(weight, axis=0)
    place = np.argmax(below >= share, axis=0)[None, :]
    own = np.take_along_axis(weight, place, axis=0)[0]
    left = share - (np.take_along_axis(below, place, axis=0)[0] - own)
    return np.asarray(fine[place[0]] + (left / own - 0.5) * (fine[1] - fine[0]))
