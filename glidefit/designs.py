"""Records of what is said before the next experiment: variance components, plan, rehearsal."""

from __future__ import annotations

import math
from dataclasses import dataclass

PLAN_FORMAT = "glidefit-plan/1"
REHEARSAL_FORMAT = "glidefit-rehearsal/1"
# Quantities whose chamber values are kept, and so have components.
WITH_COMPONENTS = ("speed_um_s", "rotational_diffusion_rad2_s", "motile_fraction")


@dataclass(frozen=True, slots=True, kw_only=True)
class Components:
    """Variances of one quantity of one condition by level, relative to its value squared.

    The mean over a days of b chambers with k times the filaments has the variance
    ``day / a + chamber / (a b) + filament / (a b k)``.
    """

    quantity: str
    value: float
    level: float  # of confidence of the intervals
    half_width: float  # of the interval of the run, relative; NaN if there is none
    chambers_of_day: tuple[int, ...]  # chambers with a value
    day: float  # NaN with one day
    chamber: float  # beyond its filaments; NaN where no day has two chambers
    filament: float  # sampling variance of one chamber with the filaments it has
    day_mean_square: float
    day_df: int
    chamber_mean_square: float
    chamber_df: int
    chambers_in_day_square: float  # n0: chambers that a day's mean square counts as
    notes: tuple[str, ...]

    @property
    def days(self) -> int:
        """Days with a value."""
        return len(self.chambers_of_day)

    @property
    def share_of_chamber(self) -> float:
        """Variance of the condition's mean brought by chambers of variance 1."""
        return sum(1 / n for n in self.chambers_of_day) / self.days**2

    @property
    def errors(self) -> dict[str, float]:
        """Standard error of the mean brought by each level, relative; NaN where unknown."""
        share = self.share_of_chamber
        return {
            "days": (self.day / self.days) ** 0.5,
            "chambers": (self.chamber * share) ** 0.5,
            "filaments": (self.filament * share) ** 0.5,
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class Interaction:
    """How much conditions differ from day to day in their own way (day × condition)."""

    variance: float  # of one condition on one day, relative; NaN if the run cannot tell
    mean_square: float
    df: int
    within: float  # what chambers and filaments bring to the mean square
    conditions: tuple[str, ...]
    days: int
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Goal:
    """What the next experiment shall reach; relative numbers."""

    half_width: float  # NaN if a difference is to be seen
    difference: float  # NaN if an interval is wanted
    power: float

    @property
    def is_difference(self) -> bool:
        """True if a difference between two conditions is to be seen."""
        return math.isfinite(self.difference)

    def is_reached(self, value: float) -> bool:
        """True for a power, or a half width, that is enough."""
        return value >= self.power if self.is_difference else value <= self.half_width


@dataclass(frozen=True, slots=True, kw_only=True)
class Cell:
    """What one design reaches: half width or power, with its 90 % band."""

    days: int
    chambers: int  # a day; 0 for the chambers as filmed
    endless: bool  # with endless filaments in each chamber
    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanTable:
    """Designs of 2 to 10 days and 1 to 4 chambers."""

    name: str  # "half width", "same days" or "different days"
    cells: tuple[Cell, ...]
    present: Cell
    usual_chambers: Cell | None  # fewest days with the chambers as filmed that reach the goal
    fewest_days: Cell | None  # None if no design of the table reaches the goal
    fewest_chambers: Cell | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Alone:
    """What one change alone brings to the present design."""

    change: str
    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """How many days, chambers and filaments the next experiment needs."""

    format: str = PLAN_FORMAT
    study: str
    version: str
    seed: int
    condition: str
    quantity: str
    goal: Goal
    components: Components
    filaments_per_chamber: float
    recording_s: float
    frame_s: float
    interaction: Interaction
    tables: tuple[PlanTable, ...]
    alone: tuple[Alone, ...]
    advice: tuple[str, ...]
    assumptions: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class FilmedDesign:
    """How a condition was filmed and what it showed: what a rehearsal repeats."""

    condition: str
    slug: str
    frame_s: float
    exposure_s: float
    n_frames: int
    field_um: tuple[float, float]
    recordings_per_chamber: int
    filaments: tuple[tuple[float, ...], ...]  # in a field at a moment, by day and chamber
    motile_fraction: float
    stuck: float  # shares of the filament-frames set aside, like the next two
    pivoting: float
    detached: float
    localization_error_um: float
    speed_um_s: float
    rotational_diffusion_rad2_s: float
    longitudinal_diffusion_um2_s: float
    stop_rate_per_s: float  # 0 where filaments do not pause, like the next one
    go_rate_per_s: float
    filament_spread: float  # of speed, relative SD from filament to filament
    components: tuple[Components, ...]
    notes: tuple[str, ...]

    @property
    def truth(self) -> dict[str, float]:
        """True values of the simulated experiments; NaN where there is none."""
        turning = self.rotational_diffusion_rad2_s
        return {
            "speed_um_s": self.speed_um_s,
            "rotational_diffusion_rad2_s": turning,
            "persistence_length_um": self.speed_um_s / turning if turning > 0 else float("nan"),
            "motile_fraction": self.motile_fraction,
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """One interval of one simulated experiment; NaN where there is none."""

    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ChamberOutcome:
    """One simulated chamber by quantity; relative numbers, NaN where there is none."""

    day: str
    tracks: int  # gliding and kept
    truth: dict[str, float]  # the chamber's true value over that of the condition, less 1
    off: dict[str, float]  # the estimate over the chamber's true value, less 1
    bound: dict[str, float]  # least standard error that these very tracks allow
    present: float  # that of a mean speed over the filaments present at a moment


@dataclass(frozen=True, slots=True, kw_only=True)
class AgainstBound:
    """Scatter of one quantity beside the least that its tracks allow; relative numbers.

    Within chambers an estimate is compared with the true value of its chamber. For the whole
    design the least is the scatter of the mean of day means of true chamber values, the same in
    the same experiments, with the bound of each chamber added.
    """

    chambers: int  # simulated ones with a value, of all experiments
    tracks: float  # gliding and kept, mean of a chamber
    bias: float  # of chambers, about the truth of each
    bias_error: float
    rmse: float
    bound: float  # root mean square
    ratio: float  # rmse / bound
    ratio_error: float  # of Monte Carlo, like the other errors
    of_present: float  # rmse / least error of a mean over filaments present; NaN but for the speed
    of_present_error: float
    chambers_alone: float  # what true chamber values bring to the RMSE of the whole design
    tracks_alone: float  # what the bound adds to it
    best: float  # both together
    of_best: float  # RMSE of the whole design / best
    of_best_error: float


@dataclass(frozen=True, slots=True, kw_only=True)
class RehearsedQuantity:
    """How one quantity fared; relative numbers are those of the truth."""

    quantity: str
    truth: float
    with_value: int
    bias: float
    bias_error: float
    rmse: float
    with_interval: int
    held: int
    coverage: float
    coverage_error: float  # binomial Monte-Carlo error
    p_value: float  # of the nominal level, exact binomial test
    verdict: str
    half_width: float  # median
    shown: tuple[Outcome, ...]  # of the first experiments
    against_bound: AgainstBound | None = None  # None where there is no bound


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionRehearsal:
    """All simulated experiments of one condition."""

    design: FilmedDesign
    quantities: tuple[RehearsedQuantity, ...]
    said: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Rehearsal:
    """The rehearsal of a run."""

    format: str = REHEARSAL_FORMAT
    study: str
    version: str
    seed: int
    experiments: int
    level: float
    conditions: tuple[ConditionRehearsal, ...]
