"""Bias and scatter of the likelihood fit beside the Cramér-Rao bound and the MSD fit.

    python -P tests/benchmarks/accuracy.py [--experiments 200] [--case kinesin] [--seed 1]

Every experiment is 40 clean tracks (of 200 frames where nothing else is said), seen in every frame;
in a field, 40 filaments are in it at a moment, and they enter and leave. Both fits take the same
tracks; the bound is that of these tracks, knows localization error and blur, and no position or
orientation. Where filaments pause, it is that of an observer who sees when they run: nobody can
reach it. The times of both fits are those of this run.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from glidefit.kernels import displacements, msd_fit, simulation
from glidefit.kernels.bound import (
    BOUND_PARAMETERS,
    least_relative_error_of_ratio,
    least_standard_errors,
    track_information,
)
from glidefit.kernels.bound_of_lengths import LENGTH_PARAMETERS, information_of_lengths
from glidefit.kernels.gliding_data import GlidingData
from glidefit.kernels.likelihood_fit import CIRCLING, PAUSING, STRAIGHT, fit_likelihood
from glidefit.kernels.pausing_guess import pausing_guess
from glidefit.steps.simulate import (
    Scenario,
    ScenarioCondition,
    Spread,
    clean_tracks,
    simulate_recording,
    tracks_seen,
)
from glidefit.tracks import Tracks

N_TRACKS = 40
_BEND = 0.15  # D_r t at the longest lag of the MSD fit


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One kind of tracks and how it is fitted."""

    speed: float = 0.8
    rotational_diffusion: float = 0.008
    longitudinal_diffusion: float = 0.003
    frame_s: float = 1 / 3
    localization_error: float = 0.03
    exposure_s: float = 0.0
    n_frames: int = 200
    turning_rate: float = 0.0
    turning_rate_sd: float = 0.0
    speed_spread: float = 0.0  # relative
    sideways_diffusion: float = 0.0
    stop_rate: float = 0.0
    go_rate: float = 0.0
    field_um: float = 0.0  # side of the field; 0 sees everything
    free: tuple[str, ...] = STRAIGHT


_ACTIN = {
    "speed": 4.0,
    "rotational_diffusion": 0.2,
    "longitudinal_diffusion": 0.05,
    "frame_s": 0.1,
    "localization_error": 0.04,
}
_PAUSING: dict[str, Any] = {
    "speed": 3.0,
    "rotational_diffusion": 0.3,
    "longitudinal_diffusion": 0.05,
    "frame_s": 1 / 15,
    "localization_error": 0.04,
    "stop_rate": 0.5,
    "go_rate": 2.0,
    "free": PAUSING,
}
_TURNING = (*STRAIGHT, "turning_rate")
_SIDEWAYS = (*STRAIGHT, "sideways_diffusion")
_FIELD_SHARE = 1 / 3  # of the field, the path at the longest lag of the MSD fit
CASES = {
    "kinesin": Case(),
    "actin": Case(**_ACTIN),
    "actin, 90 % exposed": Case(
        **_ACTIN | {"rotational_diffusion": 0.4, "frame_s": 0.05}, exposure_s=0.045
    ),
    "slow": Case(speed=0.05, rotational_diffusion=0.001, longitudinal_diffusion=1e-4, frame_s=2.0),
    "circling": Case(turning_rate=0.05, free=_TURNING),
    "circling either way": Case(turning_rate_sd=0.05, free=CIRCLING),
    "speeds spread by 10 %": Case(speed_spread=0.1),
    "kinesin, 20 frames": Case(n_frames=20),
    "kinesin, 50 frames": Case(n_frames=50),
    "actin, 20 frames": Case(**_ACTIN, n_frames=20),
    "actin, 50 frames": Case(**_ACTIN, n_frames=50),
    "kinesin, error of half a step": Case(localization_error=0.133),
    "actin, error of half a step": Case(**_ACTIN | {"localization_error": 0.2}),
    "kinesin, sideways diffusion": Case(sideways_diffusion=0.01, free=_SIDEWAYS),
    "actin, sideways diffusion": Case(**_ACTIN, sideways_diffusion=0.01, free=_SIDEWAYS),
    "pausing": Case(**_PAUSING),
    "pausing, all exposed": Case(**_PAUSING, exposure_s=1 / 15),
    "kinesin, pausing": Case(stop_rate=0.1, go_rate=0.4, free=PAUSING),
    "pausing, 80 µm field": Case(**_PAUSING, field_um=80.0),
    "kinesin, 80 µm field": Case(field_um=80.0),
    "actin, 80 µm field": Case(**_ACTIN, field_um=80.0),
}


def simulated(case: Case, rng: np.random.Generator) -> Tracks:
    condition = ScenarioCondition(
        name="c",
        speed_um_s=case.speed,
        rotational_diffusion_rad2_s=case.rotational_diffusion,
        longitudinal_diffusion_um2_s=case.longitudinal_diffusion,
        turning_rate_rad_s=case.turning_rate,
        turning_rate_sd_rad_s=case.turning_rate_sd,
        stop_rate_per_s=case.stop_rate,
        start_rate_per_s=case.go_rate,
    )
    if case.field_um > 0:
        return in_field(case, condition, rng)
    if case.sideways_diffusion > 0:
        return with_sideways_diffusion(case, rng)
    return clean_tracks(
        N_TRACKS,
        case.n_frames,
        condition=condition,
        frame_s=case.frame_s,
        exposure_s=case.exposure_s,
        localization_error_um=case.localization_error,
        speed_spread=case.speed_spread,
        rng=rng,
    )


def in_field(case: Case, condition: ScenarioCondition, rng: np.random.Generator) -> Tracks:
    """Tracks of at least three positions of one recording."""
    scenario = Scenario(
        name="s",
        conditions=(condition,),
        field_um=(case.field_um, case.field_um),
        frame_s=case.frame_s,
        n_frames=case.n_frames,
        exposure_s=case.exposure_s,
        localization_error_um=case.localization_error,
        filaments_in_field=float(N_TRACKS),
        speed_spread=Spread(filament=case.speed_spread),
        rotational_diffusion_spread=Spread(),
    )
    seen = tracks_seen(
        simulate_recording(scenario, condition, chamber_truth=condition.truth, rng=rng)
    )
    return seen.select(seen.n_positions >= 3)


def with_sideways_diffusion(case: Case, rng: np.random.Generator) -> Tracks:
    motion = simulation.Motion.of(
        N_TRACKS,
        speed=case.speed,
        rotational_diffusion=case.rotational_diffusion,
        longitudinal_diffusion=case.longitudinal_diffusion,
        sideways_diffusion=case.sideways_diffusion,
    )
    state = simulation.PathState.stationary(*rng.uniform(0, 80, (2, N_TRACKS)), motion, rng=rng)
    timing = simulation.FrameTiming(
        frame_s=case.frame_s, n_frames=case.n_frames, exposure_s=case.exposure_s
    )
    view = simulation.View(timing=timing)
    return tracks_seen(
        simulation.tracks_of(
            simulation.seen_active(state, motion, view=view, rng=rng),
            kind=np.repeat("gliding", N_TRACKS),
            motion=motion,
            frame_s=case.frame_s,
            localization_error=case.localization_error,
            rng=rng,
        )
    )


def by_likelihood(tracks: Tracks, case: Case) -> dict[str, float]:
    data = GlidingData(
        time_s=tracks.time_s,
        x=tracks.x_um,
        y=tracks.y_um,
        offsets=tracks.offsets,
        exposure_s=case.exposure_s,
    )
    fit = fit_likelihood(data, free=case.free, start=pausing_guess(data) if pauses(case) else None)
    return dict(zip(fit.names, map(float, fit.values), strict=True))


def pauses(case: Case) -> bool:
    return case.stop_rate > 0


def by_msd(tracks: Tracks, case: Case) -> dict[str, float]:
    longest = int(0.6 * case.n_frames)
    of_grids: displacements.OfGrids = displacements.lag_sums
    if case.field_um > 0:
        field = (case.field_um, case.field_um)
        longest = min(longest, int(_FIELD_SHARE * case.field_um / case.speed / case.frame_s))
        of_grids = partial(displacements.lag_sums, field=field)
    lags = msd_fit.log_spaced_lags(longest)
    sums, counts = displacements.track_sums(
        tracks.frame,
        tracks.offsets,
        [tracks.x_um, tracks.y_um],
        lags=lags,
        of_grids=of_grids,
    )
    curve = msd_fit.LagCurve(
        lag_s=lags * case.frame_s, sums=sums, counts=counts, exposure_s=case.exposure_s
    )
    lag_s = curve.lag_s
    _, fit = msd_fit.longest_lag(
        [curve], bend=_BEND, at_least=float(lag_s[7]), at_most=float(lag_s[-1])
    )
    return dict(zip(msd_fit.PARAMETERS, map(float, fit.values), strict=True))


def information(case: Case, tracks: Tracks) -> np.ndarray:
    """Of all tracks of an experiment."""
    motion = {
        "speed": case.speed,
        "rotational_diffusion": case.rotational_diffusion,
        "localization_error": case.localization_error,
        "longitudinal_diffusion": case.longitudinal_diffusion,
        "speed_spread": case.speed_spread * case.speed,
        "exposure_s": case.exposure_s,
    }
    if pauses(case):
        return running_information(case, tracks, motion)
    if case.field_um > 0:
        whole = np.zeros((len(BOUND_PARAMETERS),) * 2)
        p = len(LENGTH_PARAMETERS)
        whole[:p, :p] = information_of_lengths(tracks.n_positions, frame_s=case.frame_s, **motion)
        return whole
    return N_TRACKS * track_information(
        np.arange(case.n_frames) * case.frame_s,
        turning_rate_spread=case.turning_rate_sd,
        sideways_diffusion=case.sideways_diffusion,
        **motion,
    )


def running_information(case: Case, tracks: Tracks, motion: dict[str, Any]) -> np.ndarray:
    """Of an observer who knows how long each filament has run at each frame.

    Positions are those of a filament that never pauses, seen at those times; in a pause the same
    place is seen again. Exposures are left out of it, and clocks are drawn anew: the mean over
    200 of them stands for all tracks of the same length.
    """
    rng = np.random.default_rng(1)
    lengths = np.full(N_TRACKS, case.n_frames)
    if case.field_um > 0:
        lengths = tracks.n_positions
    whole = np.zeros((len(BOUND_PARAMETERS),) * 2)
    for n in rng.choice(lengths, 200):
        clock = running_time(np.arange(n) * case.frame_s, case, rng)
        if len(np.unique(clock)) > 3:  # who hardly runs says nothing
            whole += track_information(clock, **motion | {"exposure_s": 0.0})
    return whole * len(lengths) / 200


def running_time(time_s: np.ndarray, case: Case, rng: np.random.Generator) -> np.ndarray:
    """Time that a filament has run at each of some times."""
    run = [rng.random() < case.go_rate / (case.stop_rate + case.go_rate)]
    times, ran = [0.0], [0.0]
    while times[-1] < time_s[-1]:
        wait = rng.exponential(1 / (case.stop_rate if run[-1] else case.go_rate))
        ran.append(ran[-1] + wait * run[-1])
        times.append(times[-1] + wait)
        run.append(not run[-1])
    return np.interp(time_s, times, ran)


def rate_bounds(case: Case, tracks: Tracks) -> dict[str, float]:
    """Of an observer who sees every switch: 1/√(switches of a kind)."""
    if not pauses(case):
        return {}
    going = case.go_rate / (case.stop_rate + case.go_rate)
    seen_s = float((tracks.n_positions - 1).sum()) * case.frame_s
    return dict.fromkeys(("stop_rate", "go_rate"), (case.stop_rate * going * seen_s) ** -0.5)


def bounds(case: Case, known: np.ndarray) -> dict[str, float]:
    """Least standard errors from the information, relative except of the turning rate."""
    # What is 0 without spread is taken as known: the fit cannot go below 0 either.
    unknown = [
        name
        for name in BOUND_PARAMETERS
        if name in case.free
        and (name != "speed_variance" or case.speed_spread > 0)
        and (name != "turning_rate_variance" or case.turning_rate_sd > 0)
    ]
    errors = least_standard_errors(known, unknown=unknown)
    truth = {"speed": case.speed, "rotational_diffusion": case.rotational_diffusion}
    return {
        "speed": errors["speed"] / case.speed,
        "rotational_diffusion": errors["rotational_diffusion"] / case.rotational_diffusion,
        "v/D_r": least_relative_error_of_ratio(known, unknown=unknown, **truth),
    } | ({"turning_rate": errors["turning_rate"]} if "turning_rate" in errors else {})


def deviation(values: dict[str, float], name: str, case: Case) -> float:
    """Relative to the truth; of the turning rate itself, in rad/s."""
    if name == "turning_rate":
        return values.get(name, np.nan) - case.turning_rate
    if name == "v/D_r":
        truth = case.speed / case.rotational_diffusion
        return values["speed"] / values["rotational_diffusion"] / truth - 1
    return values.get(name, np.nan) / getattr(case, name) - 1


def run(case: Case, *, n_experiments: int, seed: int) -> None:
    squares: dict[str, list[float]] = {}
    alike = None  # all experiments have tracks alike but in a field
    found: dict[str, list[dict[str, float]]] = {"likelihood": [], "MSD": []}
    spent = dict.fromkeys(found, 0.0)
    for rng in np.random.default_rng(seed).spawn(n_experiments):
        tracks = simulated(case, rng)
        if alike is None or case.field_um > 0:
            alike = bounds(case, information(case, tracks)) | rate_bounds(case, tracks)
        for name, least in alike.items():
            squares.setdefault(name, []).append(least**2)
        for method, fit in (("likelihood", by_likelihood), ("MSD", by_msd)):
            begun = time.process_time()
            found[method].append(fit(tracks, case))
            spent[method] += time.process_time() - begun
    bound = {name: float(np.sqrt(np.mean(each))) for name, each in squares.items()}
    for method, values in found.items():
        print(f"  {method}, {spent[method] / n_experiments:.2f} s of one thread a fit")
        for name in bound:
            off = np.array([deviation(one, name, case) for one in values])
            good = np.isfinite(off)
            if not good.any():
                continue
            mean, error = off[good].mean(), off[good].std(ddof=1) / np.sqrt(good.sum())
            ratio = np.sqrt((off[good] ** 2).mean()) / bound[name]
            unit, scale = ("rad/s", 1) if name == "turning_rate" else ("%", 100)
            print(
                f"    {name:21s} bias {scale * mean:+.4g} ± {scale * error:.2g} {unit}, "
                f"RMSE / bound {ratio:.2f} ± {ratio / np.sqrt(2 * good.sum()):.2f}"
                + ("" if good.all() else f", {np.sum(~good)} fits failed")
            )


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--experiments", type=int, default=200)
    parser.add_argument("--case", choices=tuple(CASES))
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    for name in [options.case] if options.case else CASES:
        print(f"{name}: {options.experiments} experiments", flush=True)
        run(CASES[name], n_experiments=options.experiments, seed=options.seed)


if __name__ == "__main__":
    main()
