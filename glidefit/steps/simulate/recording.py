"""The filaments of one field of view, as tracks."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels import simulation
from glidefit.kernels.simulation import (
    FrameTiming,
    Motion,
    PathState,
    SeenPositions,
    SimulatedTracks,
    Turning,
    View,
    turning_scale,
)
from glidefit.steps.simulate.scenario import KINDS, LevelTruth, Scenario, ScenarioCondition
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]

LARGEST_EFFECT = 1.8
_PIVOT_RADII_UM = (0.5, 2.0)
_PIVOT_SWEEPS_RAD = (0.3, np.pi)  # of the half of them that do not swing all around
_PIVOT_DIFFUSION_RAD2_S = 0.2


def simulate_recording(
    scenario: Scenario,
    condition: ScenarioCondition,
    *,
    chamber_truth: LevelTruth,
    rng: np.random.Generator,
) -> SimulatedTracks:
    """The tracks of one field of view in a chamber of known mean speed and rotational diffusion."""
    view = simulation.View(
        timing=scenario.timing,
        field_um=scenario.field_um,
        drift_um=drift_of(scenario, rng=rng),
    )
    expected = scenario.expected_in_field(condition)
    kinds = ["gliding"]
    drawn = [
        _gliding(expected["gliding"], scenario, condition, truth=chamber_truth, view=view, rng=rng)
    ]
    for kind, draw in (("stuck", _stuck), ("pivoting", _pivoting), ("detached", _detached)):
        if expected[kind] > 0:
            kinds.append(kind)
            drawn.append(draw(expected[kind], scenario, view=view, rng=rng))
    counts = [len(motion.speed) for _, motion in drawn]
    return simulation.tracks_of(
        SeenPositions.join([seen for seen, _ in drawn], shifts=np.cumsum([0, *counts[:-1]])),
        kind=np.repeat(kinds, counts),
        motion=Motion.join([motion for _, motion in drawn]),
        frame_s=scenario.frame_s,
        localization_error=scenario.localization_error_um,
        lost_probability=scenario.lost_probability,
        break_probability=scenario.break_probability,
        rng=rng,
    )


def drift_of(scenario: Scenario, *, rng: np.random.Generator) -> Floats | None:
    if scenario.drift_um_s == 0 and scenario.drift_wander_um_s == 0:
        return None
    direction = rng.uniform(-np.pi, np.pi)
    return simulation.stage_drift(
        scenario.timing,
        velocity=scenario.drift_um_s * np.array([np.cos(direction), np.sin(direction)]),
        wander=scenario.drift_wander_um_s,
        wander_time=scenario.drift_wander_time_s,
        rng=rng,
    )


def _around(
    expected: float, scenario: Scenario, *, view: View, reach_um: float, rng: np.random.Generator
) -> tuple[Floats, Floats]:
    """Positions in the field and around it, from where it may be reached."""
    return simulation.positions_around(
        expected, field_um=scenario.field_um, reach_um=reach_um + view.margin_um, rng=rng
    )


def _gliding(
    expected: float,
    scenario: Scenario,
    condition: ScenarioCondition,
    *,
    truth: LevelTruth,
    view: View,
    rng: np.random.Generator,
) -> tuple[SeenPositions, Motion]:
    fastest = gliding_motion(np.array([LARGEST_EFFECT]), condition, truth=truth)
    reach = float(fastest.reach(scenario.n_frames * scenario.frame_s)[0])
    x, y = _around(expected, scenario, view=view, reach_um=reach, rng=rng)
    motion = gliding_motion(
        effects(scenario.speed_spread.filament, len(x), rng=rng),
        condition,
        truth=truth,
        turn_effects=effects(scenario.rotational_diffusion_spread.filament, len(x), rng=rng),
        curl=rng.standard_normal(len(x)),
        turning=scenario.turning,
    )
    state = PathState.stationary(x, y, motion, rng=rng)
    return simulation.seen_active(state, motion, view=view, rng=rng), motion


def gliding_motion(
    speed_effects: Floats,
    condition: ScenarioCondition,
    *,
    truth: LevelTruth,
    turn_effects: Floats | float = 1.0,
    curl: Floats | float = 0.0,
    turning: Turning = "per_time",
) -> Motion:
    """Motion of filaments whose speeds are ``speed_effects`` (n,) times that of the chamber."""
    speed = truth.speed_um_s * speed_effects
    of_diffusion = turning_scale(speed, mean_speed=truth.speed_um_s, turning=turning)
    of_rate = turning_scale(speed, mean_speed=condition.speed_um_s, turning=turning)
    rate = condition.turning_rate_rad_s + condition.turning_rate_sd_rad_s * curl
    return Motion.of(
        len(speed),
        speed=speed,
        rotational_diffusion=truth.rotational_diffusion_rad2_s * of_diffusion * turn_effects,
        turning_rate=rate * of_rate,
        longitudinal_diffusion=condition.longitudinal_diffusion_um2_s,
        stop_rate=condition.stop_rate_per_s,
        start_rate=condition.start_rate_per_s,
    )


def _stuck(
    expected: float, scenario: Scenario, *, view: View, rng: np.random.Generator
) -> tuple[SeenPositions, Motion]:
    x, y = _around(expected, scenario, view=view, reach_um=0.0, rng=rng)
    paths = simulation.standing_paths(x, y, timing=view.timing, rng=rng)
    return simulation.seen(paths, view=view), Motion.of(len(x))


def _pivoting(
    expected: float, scenario: Scenario, *, view: View, rng: np.random.Generator
) -> tuple[SeenPositions, Motion]:
    x, y = _around(expected, scenario, view=view, reach_um=_PIVOT_RADII_UM[1], rng=rng)
    free = rng.random(len(x)) < 0.5
    paths = simulation.pivoting_paths(
        x,
        y,
        radius=rng.uniform(*_PIVOT_RADII_UM, len(x)),
        sweep=np.where(free, np.inf, rng.uniform(*_PIVOT_SWEEPS_RAD, len(x))),
        angular_diffusion=_PIVOT_DIFFUSION_RAD2_S,
        timing=view.timing,
        rng=rng,
    )
    return simulation.seen(paths, view=view), Motion.of(len(x))


def _detached(
    expected: float, scenario: Scenario, *, view: View, rng: np.random.Generator
) -> tuple[SeenPositions, Motion]:
    duration = scenario.n_frames * scenario.frame_s
    rod = simulation.detached_motion(1, mean_diffusion=scenario.detached_diffusion_um2_s)
    x, y = _around(expected, scenario, view=view, reach_um=float(rod.reach(duration)[0]), rng=rng)
    motion = simulation.detached_motion(len(x), mean_diffusion=scenario.detached_diffusion_um2_s)
    state = PathState.stationary(x, y, motion, rng=rng)
    return simulation.seen_active(state, motion, view=view, rng=rng), motion


def factors(level: str, scenario: Scenario, *, rng: np.random.Generator) -> tuple[float, float]:
    """Factors of speed and rotational diffusion that a level adds."""
    speed = float(effects(getattr(scenario.speed_spread, level), 1, rng=rng)[0])
    turn = float(effects(getattr(scenario.rotational_diffusion_spread, level), 1, rng=rng)[0])
    return speed, turn * speed if scenario.turning == "per_path" else turn


def effects(sd: float, n: int, *, rng: np.random.Generator) -> Floats:
    """Factors of mean 1 and SD ``sd``, (n,); drawn again outside 0.2 to 1.8, so that 1 stays."""
    values = 1 + sd * rng.standard_normal(n)
    while np.any(beyond := np.abs(values - 1) > LARGEST_EFFECT - 1):
        values[beyond] = 1 + sd * rng.standard_normal(int(beyond.sum()))
    return values


def tracks_seen(simulated: SimulatedTracks) -> Tracks:
    """What a tracker would give of simulated tracks: no truth in it."""
    counts = np.bincount(simulated.track, minlength=len(simulated.kind))
    return Tracks(
        label=np.arange(len(counts)).astype(np.str_),
        offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        frame=simulated.frame,
        time_s=simulated.time_s,
        x_um=simulated.x_um,
        y_um=simulated.y_um,
    )


def clean_tracks(
    n_tracks: int,
    n_frames: int,
    *,
    condition: ScenarioCondition,
    frame_s: float,
    exposure_s: float = 0.0,
    localization_error_um: float = 0.0,
    speed_spread: float = 0.0,
    rotational_diffusion_spread: float = 0.0,
    turning: Turning = "per_time",
    rng: np.random.Generator,
) -> Tracks:
    """Tracks of gliding filaments seen in every frame, without a field.

    They start all over 80 µm × 80 µm; the spreads are relative SDs between filaments.
    """
    motion = gliding_motion(
        effects(speed_spread, n_tracks, rng=rng),
        condition,
        truth=condition.truth,
        turn_effects=effects(rotational_diffusion_spread, n_tracks, rng=rng),
        curl=rng.standard_normal(n_tracks),
        turning=turning,
    )
    x, y = rng.uniform(0, 80, (2, n_tracks))
    state = PathState.stationary(x, y, motion, rng=rng)
    timing = FrameTiming(frame_s=frame_s, n_frames=n_frames, exposure_s=exposure_s)
    simulated = simulation.tracks_of(
        simulation.seen_active(state, motion, view=View(timing=timing), rng=rng),
        kind=np.repeat(KINDS[:1], n_tracks),
        motion=motion,
        frame_s=frame_s,
        localization_error=localization_error_um,
        rng=rng,
    )
    return tracks_seen(simulated)
