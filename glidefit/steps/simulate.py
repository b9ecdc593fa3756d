"""An assay that was never filmed: days, chambers and recordings whose truth is known."""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace
from datetime import date, timedelta

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
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]

KINDS = ("gliding", "stuck", "pivoting", "detached")
_FIRST_DAY = date(2026, 3, 2)
_FIRST_MINUTES, _MINUTES_A_RECORDING = 2.0, 5.0
_LARGEST_EFFECT = 1.8
_PIVOT_RADII_UM = (0.5, 2.0)
_PIVOT_SWEEPS_RAD = (0.3, np.pi)  # of the half of them that do not swing all around
_PIVOT_DIFFUSION_RAD2_S = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Spread:
    """Relative SD that each level adds to a quantity."""

    day: float = 0.0  # shared by all conditions of a day
    day_condition: float = 0.0  # of one condition on one day
    chamber: float = 0.0
    filament: float = 0.0

    def __post_init__(self) -> None:
        for level in fields(self):
            if not 0 <= getattr(self, level.name) <= 1:
                raise ValueError(f"spread of {level.name} must be 0 to 1")


@dataclass(frozen=True, slots=True, kw_only=True)
class ScenarioCondition:
    """The truth of one condition: means over its days, chambers and filaments."""

    name: str
    speed_um_s: float  # while running
    rotational_diffusion_rad2_s: float
    longitudinal_diffusion_um2_s: float = 0.0
    turning_rate_rad_s: float = 0.0
    turning_rate_sd_rad_s: float = 0.0  # between filaments
    stop_rate_per_s: float = 0.0
    start_rate_per_s: float = 0.0
    motile_fraction: float | None = None  # gliding / seen at a moment; None: what others leave
    control: bool = False
    columns: tuple[tuple[str, str], ...] = ()  # more columns of the sheet: name, text

    def __post_init__(self) -> None:
        if not self.speed_um_s > 0:
            raise ValueError(f"{self.name}: speed_um_s must be > 0; use motile_fraction=0 for none")
        if self.motile_fraction is not None and not 0 <= self.motile_fraction <= 1:
            raise ValueError(f"{self.name}: motile_fraction must be 0 to 1")
        for name in (
            "rotational_diffusion_rad2_s",
            "longitudinal_diffusion_um2_s",
            "turning_rate_sd_rad_s",
            "stop_rate_per_s",
        ):
            if not getattr(self, name) >= 0:
                raise ValueError(f"{self.name}: {name} must be >= 0")
        if self.stop_rate_per_s > 0 and not self.start_rate_per_s > 0:
            raise ValueError(f"{self.name}: start_rate_per_s must be > 0 where filaments stop")

    @property
    def truth(self) -> LevelTruth:
        """The means over all days."""
        return LevelTruth(
            speed_um_s=self.speed_um_s,
            rotational_diffusion_rad2_s=self.rotational_diffusion_rad2_s,
        )

    @property
    def running_fraction(self) -> float:
        """Share of the time in which a gliding filament is not pausing."""
        if self.stop_rate_per_s == 0:
            return 1.0
        return self.start_rate_per_s / (self.start_rate_per_s + self.stop_rate_per_s)


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    """What to simulate. The filaments of a recording are those in its field at a moment."""

    name: str
    conditions: tuple[ScenarioCondition, ...]
    seed: int = 1
    field_um: tuple[float, float] = (80.0, 80.0)
    frame_s: float = 0.5
    n_frames: int = 200
    exposure_s: float = 0.1
    exposed_steps: int = 1  # positions kept of each exposure, for drawing smeared spots
    pixel_um: float = 0.16
    localization_error_um: float = 0.03
    first_day: str = _FIRST_DAY.isoformat()
    days: int = 3
    day_speed_factors: tuple[float, ...] = ()  # what goes wrong on a day: a factor for each
    chambers_per_day: int | tuple[int, ...] = 2  # of each condition; or a number for each day
    recordings_per_chamber: int = 1  # each of its own field of view
    # Of all kinds, expected in a recording at a moment; or a number for each chamber of each day.
    filaments_in_field: float | tuple[tuple[float, ...], ...] = 33.0
    speed_spread: Spread = field(default=Spread(day=0.07, chamber=0.04, filament=0.10))
    rotational_diffusion_spread: Spread = field(
        default=Spread(day=0.15, chamber=0.1, filament=0.15)
    )
    motile_fraction_spread: Spread = field(default=Spread())  # of the fraction itself, not relative
    turning: Turning = "per_time"
    stuck_fraction: float = 0.0  # of the filament-frames, like the next two
    pivoting_fraction: float = 0.0
    detached_fraction: float = 0.0
    detached_diffusion_um2_s: float = 0.5
    drift_um_s: float = 0.0  # constant, in a direction of each recording's own
    drift_wander_um_s: float = 0.0  # SD of the changing part of a coordinate's velocity
    drift_wander_time_s: float = 30.0
    lost_probability: float = 0.0  # of each position
    break_probability: float = 0.0  # of each track in each frame

    def __post_init__(self) -> None:
        names = [condition.name for condition in self.conditions]
        if not names or len(set(names)) < len(names):
            raise ValueError("conditions must be there, each under its own name")
        if min(self.days, *self.chambers_of_day, self.recordings_per_chamber) < 1:
            raise ValueError("days, chambers_per_day and recordings_per_chamber must be >= 1")
        if [len(numbers) for numbers in self.filaments_of_day] != list(self.chambers_of_day):
            raise ValueError("filaments_in_field must have a number for each chamber of each day")
        if len(self.chambers_of_day) != self.days:
            raise ValueError("chambers_per_day must be one number, or one for each of the days")
        if not (min(self.field_um) > 0 and min(map(min, self.filaments_of_day)) >= 0):
            raise ValueError("field_um must be > 0 and filaments_in_field >= 0")
        others = (self.stuck_fraction, self.pivoting_fraction, self.detached_fraction)
        if min(others) < 0 or sum(others) > 1:
            raise ValueError("the fractions not gliding must be >= 0 and together at most 1")
        for name in ("lost_probability", "break_probability"):
            if not 0 <= getattr(self, name) <= 1:
                raise ValueError(f"{name} must be 0 to 1")
        if not (self.pixel_um > 0 and self.drift_wander_time_s > 0):
            raise ValueError("pixel_um and drift_wander_time_s must be > 0")
        if min(self.localization_error_um, self.detached_diffusion_um2_s) < 0:
            raise ValueError("localization_error_um and detached_diffusion_um2_s must be >= 0")
        if len(self.day_speed_factors) not in (0, self.days):
            raise ValueError("day_speed_factors must have a number for each of the days")
        if self.day_speed_factors and not min(self.day_speed_factors) > 0:
            raise ValueError("day_speed_factors must be > 0")
        _ = self.timing, date.fromisoformat(self.first_day)  # their own checks

    @property
    def chambers_of_day(self) -> tuple[int, ...]:
        """Chambers of each condition, by day."""
        number = self.chambers_per_day
        return number if isinstance(number, tuple) else (number,) * self.days

    @property
    def filaments_of_day(self) -> tuple[tuple[float, ...], ...]:
        """Filaments in the field, by day and chamber of each condition."""
        number = self.filaments_in_field
        if isinstance(number, tuple):
            return number
        return tuple((number,) * n for n in self.chambers_of_day)

    @property
    def timing(self) -> FrameTiming:
        """Times of the frames of every recording."""
        return FrameTiming(
            frame_s=self.frame_s,
            n_frames=self.n_frames,
            exposure_s=self.exposure_s,
            exposed_steps=self.exposed_steps,
        )

    def expected_in_field(self, condition: ScenarioCondition) -> dict[str, float]:
        """Filaments of each kind expected in the field at a moment, the mean over chambers.

        A condition's own motile fraction leaves the rest to the other kinds in the proportion
        of the scenario's fractions, or all of it to stuck ones where these are 0.
        """
        others = np.array([self.stuck_fraction, self.pivoting_fraction, self.detached_fraction])
        if condition.motile_fraction is not None:
            share = others / others.sum() if others.sum() > 0 else np.array([1.0, 0.0, 0.0])
            others = (1 - condition.motile_fraction) * share
        shares = [max(0.0, 1 - float(others.sum())), *map(float, others)]
        filaments = self.filaments_in_field
        if isinstance(filaments, tuple):
            filaments = float(np.mean([n for numbers in filaments for n in numbers]))
        return {kind: share * filaments for kind, share in zip(KINDS, shares, strict=True)}

    def motile_fraction_of(self, condition: ScenarioCondition) -> float:
        """Share of the filament-frames that glide: the condition's own, or what others leave."""
        if condition.motile_fraction is not None:
            return condition.motile_fraction
        return max(0.0, 1 - self.stuck_fraction - self.pivoting_fraction - self.detached_fraction)


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelTruth:
    """Mean speed while running and mean rotational diffusion of the filaments of one level."""

    speed_um_s: float
    rotational_diffusion_rad2_s: float

    def times(self, factors: tuple[float, float]) -> LevelTruth:
        """The level within this one that differs by factors of speed and rotational diffusion."""
        return LevelTruth(
            speed_um_s=self.speed_um_s * factors[0],
            rotational_diffusion_rad2_s=self.rotational_diffusion_rad2_s * factors[1],
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedRecording:
    """One recording: what a tracker would give, and the truth."""

    name: str
    condition: str
    control: bool
    columns: tuple[tuple[str, str], ...]
    day: str
    chamber: str  # unique within its day
    field: str
    minutes: float  # after the start in the chamber
    tracks: Tracks
    truth: SimulatedTracks  # the same tracks in the same order
    motile_fraction: float  # expected
    chamber_truth: LevelTruth
    day_truth: LevelTruth  # of the condition on that day


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedAssay:
    """All recordings of a scenario, in the order of filming."""

    scenario: Scenario
    recordings: tuple[SimulatedRecording, ...]

    def truth_table(self) -> list[dict[str, str | float]]:
        """The truth of each recording, a row each."""
        nominal = {condition.name: condition for condition in self.scenario.conditions}
        return [
            {
                "recording": r.name,
                "condition": r.condition,
                "day": r.day,
                "chamber": r.chamber,
                "motile_fraction": r.motile_fraction,
                "speed_um_s": nominal[r.condition].speed_um_s,
                "day_speed_um_s": r.day_truth.speed_um_s,
                "chamber_speed_um_s": r.chamber_truth.speed_um_s,
                "rotational_diffusion_rad2_s": nominal[r.condition].rotational_diffusion_rad2_s,
                "day_rotational_diffusion_rad2_s": r.day_truth.rotational_diffusion_rad2_s,
                "chamber_rotational_diffusion_rad2_s": r.chamber_truth.rotational_diffusion_rad2_s,
            }
            for r in self.recordings
        ]


def simulate_assay(scenario: Scenario, rng: np.random.Generator) -> SimulatedAssay:
    """All recordings of a scenario, with their truth.

    Every day, condition, chamber and recording has a random stream of its own, so that more
    days, chambers or recordings do not change those already there.

    Parameters
    ----------
    scenario : Scenario
        What to simulate; its seed is not used here.
    rng : Generator
        Used to spawn; a second assay from the same one is another assay.
    """
    recordings = []
    for number, day_rng in enumerate(rng.spawn(scenario.days)):
        recordings += _simulate_day(scenario, number, rng=day_rng)
    return SimulatedAssay(scenario=scenario, recordings=tuple(recordings))


def _simulate_day(
    scenario: Scenario, number: int, *, rng: np.random.Generator
) -> list[SimulatedRecording]:
    """The recordings of one day; the chambers of the conditions follow each other in turn."""
    filaments = scenario.filaments_of_day[number]
    shared = _factors("day", scenario, rng=rng)
    if scenario.day_speed_factors:
        shared = (shared[0] * scenario.day_speed_factors[number], shared[1])
    today = [_moved(condition, scenario, "day", rng=rng) for condition in scenario.conditions]
    streams = rng.spawn(len(scenario.conditions))
    own = [
        condition.truth.times(shared).times(_factors("day_condition", scenario, rng=stream))
        for condition, stream in zip(scenario.conditions, streams, strict=True)
    ]
    today = [
        _moved(condition, scenario, "day_condition", rng=stream)
        for condition, stream in zip(today, streams, strict=True)
    ]
    chambers = [stream.spawn(len(filaments)) for stream in streams]
    recordings = []
    for turn, in_field in enumerate(filaments):
        for k, condition in enumerate(today):
            recordings += _simulate_chamber(
                replace(scenario, filaments_in_field=in_field),
                condition,
                day=(date.fromisoformat(scenario.first_day) + timedelta(days=number)).isoformat(),
                chamber=f"c{turn * len(today) + k + 1}",
                day_truth=own[k],
                rng=chambers[k][turn],
            )
    return recordings


def _moved(
    condition: ScenarioCondition, scenario: Scenario, level: str, *, rng: np.random.Generator
) -> ScenarioCondition:
    """The condition with the motile fraction of one unit of a level.

    Drawn again where it would leave 0 to 1, or the other side as far: so the mean stays.
    """
    sd = float(getattr(scenario.motile_fraction_spread, level))
    fraction = scenario.motile_fraction_of(condition)
    room = min(fraction, 1 - fraction)
    if sd == 0 or room == 0:
        return condition
    step = sd * rng.standard_normal()
    while abs(step) > room:
        step = sd * rng.standard_normal()
    return replace(condition, motile_fraction=fraction + step)


def _simulate_chamber(
    scenario: Scenario,
    condition: ScenarioCondition,
    *,
    day: str,
    chamber: str,
    day_truth: LevelTruth,
    rng: np.random.Generator,
) -> list[SimulatedRecording]:
    chamber_truth = day_truth.times(_factors("chamber", scenario, rng=rng))
    condition = _moved(condition, scenario, "chamber", rng=rng)
    expected = scenario.expected_in_field(condition)
    total = sum(expected.values())
    recordings = []
    for number, recording_rng in enumerate(rng.spawn(scenario.recordings_per_chamber)):
        truth = simulate_recording(
            scenario,
            condition,
            chamber_truth=chamber_truth,
            rng=recording_rng,
        )
        recordings.append(
            SimulatedRecording(
                name=f"{day}_{chamber}_f{number + 1}",
                condition=condition.name,
                control=condition.control,
                columns=condition.columns,
                day=day,
                chamber=chamber,
                field=f"f{number + 1}",
                minutes=_FIRST_MINUTES + _MINUTES_A_RECORDING * number,
                tracks=tracks_seen(truth),
                truth=truth,
                motile_fraction=expected["gliding"] / total if total > 0 else float("nan"),
                chamber_truth=chamber_truth,
                day_truth=day_truth,
            )
        )
    return recordings


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
        drift_um=_drift(scenario, rng=rng),
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


def _drift(scenario: Scenario, *, rng: np.random.Generator) -> Floats | None:
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
    fastest = _gliding_motion(np.array([_LARGEST_EFFECT]), condition, truth=truth)
    reach = float(fastest.reach(scenario.n_frames * scenario.frame_s)[0])
    x, y = _around(expected, scenario, view=view, reach_um=reach, rng=rng)
    motion = _gliding_motion(
        _effects(scenario.speed_spread.filament, len(x), rng=rng),
        condition,
        truth=truth,
        turn_effects=_effects(scenario.rotational_diffusion_spread.filament, len(x), rng=rng),
        curl=rng.standard_normal(len(x)),
        turning=scenario.turning,
    )
    state = PathState.stationary(x, y, motion, rng=rng)
    return simulation.seen_active(state, motion, view=view, rng=rng), motion


def _gliding_motion(
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


def _factors(level: str, scenario: Scenario, *, rng: np.random.Generator) -> tuple[float, float]:
    """Factors of speed and rotational diffusion that a level adds."""
    speed = float(_effects(getattr(scenario.speed_spread, level), 1, rng=rng)[0])
    turn = float(_effects(getattr(scenario.rotational_diffusion_spread, level), 1, rng=rng)[0])
    return speed, turn * speed if scenario.turning == "per_path" else turn


def _effects(sd: float, n: int, *, rng: np.random.Generator) -> Floats:
    """Factors of mean 1 and SD ``sd``, (n,); drawn again outside 0.2 to 1.8, so that 1 stays."""
    values = 1 + sd * rng.standard_normal(n)
    while np.any(beyond := np.abs(values - 1) > _LARGEST_EFFECT - 1):
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
    motion = _gliding_motion(
        _effects(speed_spread, n_tracks, rng=rng),
        condition,
        truth=condition.truth,
        turn_effects=_effects(rotational_diffusion_spread, n_tracks, rng=rng),
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
