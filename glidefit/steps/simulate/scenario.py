"""What to simulate: conditions, levels and their spread, the design, how it is filmed."""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from datetime import date

import numpy as np

from glidefit.kernels.simulation import FrameTiming, Turning

KINDS = ("gliding", "stuck", "pivoting", "detached")


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
    first_day: str = "2026-03-02"
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
