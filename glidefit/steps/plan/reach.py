"""What designs reach: half width or power, with what the data leave open."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.designs import Alone, Cell, Components, Goal, Interaction, PlanTable
from glidefit.kernels.components import mean_square_draws
from glidefit.kernels.power import expected_half_width, power_of_t_test

Floats = NDArray[np.float64]

DAYS = tuple(range(2, 11))
CHAMBERS = (1, 2, 3, 4)
BAND = 0.90
_BAND_ENDS = ((1 - BAND) / 2, (1 + BAND) / 2)
HALF_WIDTH, SAME_DAYS, DIFFERENT_DAYS = "half width", "same days", "different days"
_DRAWS = 2000


@dataclass(frozen=True, slots=True, kw_only=True)
class Variances:
    """Components, each its estimate first, then draws that are compatible with the data."""

    day: Floats
    chamber: Floats
    filament: float
    interaction: Floats


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """Days, and what chambers and filaments make of a day's mean."""

    days: int
    per_chamber: float  # variance of a day's mean brought by chambers of variance 1
    filaments: float = 1.0  # times those of now


def variances_of(
    components: Components, interaction: Interaction, *, rng: np.random.Generator
) -> Variances:
    c, n = components, _DRAWS
    within = np.zeros(n)
    chamber_draws = np.zeros(n)
    if c.chamber_df > 0:
        within = mean_square_draws(c.chamber_mean_square, df=c.chamber_df, n_draws=n, rng=rng)
        chamber_draws = np.maximum(within - c.filament, 0.0)
    else:
        within += c.filament
    between = mean_square_draws(c.day_mean_square, df=c.day_df, n_draws=n, rng=rng)
    day_draws = np.maximum((between - within) / c.chambers_in_day_square, 0.0)
    own = np.zeros(n)
    if interaction.df > 0:
        square = mean_square_draws(interaction.mean_square, df=interaction.df, n_draws=n, rng=rng)
        own = np.maximum(square - interaction.within, 0.0)
    return Variances(
        day=_first(c.day, day_draws),
        chamber=_first(c.chamber, chamber_draws),
        filament=c.filament,
        interaction=_first(interaction.variance, own),
    )


def _first(value: float, draws: Floats) -> Floats:
    return np.concatenate([[value if math.isfinite(value) else 0.0], draws])


# Of the estimates, and the lower and upper end of its band.
_Three = tuple[float, float, float]
Reached = Callable[[Design], _Three]


def reached_by(name: str, v: Variances, goal: Goal, level: float) -> Reached:
    """Half width or power of a design, with its band."""

    def of_day(design: Design, shared: Floats) -> Floats:
        """Variance of a day's value: estimate, low, high; all that follows rises or falls in it."""
        inside = (v.chamber + v.filament / design.filaments) * design.per_chamber
        variance = shared + inside
        ends = np.quantile(variance[1:] if len(variance) > 1 else variance, _BAND_ENDS)
        return np.array([variance[0], *ends])

    def half_width(design: Design) -> _Three:
        return _three(
            expected_half_width(of_day(design, v.day), n=design.days, level=level),
        )

    def power(design: Design, shared: Floats, df: int) -> _Three:
        error = np.sqrt(2 * of_day(design, shared) / design.days)
        # Ratios are judged on the logarithmic scale.
        with np.errstate(divide="ignore"):
            effect = math.log1p(goal.difference) / error
        return _three(power_of_t_test(effect, df=df, level=level))

    def same_days(design: Design) -> _Three:
        return power(design, v.interaction, design.days - 1)

    def different_days(design: Design) -> _Three:
        return power(design, v.day, 2 * (design.days - 1))

    found = {HALF_WIDTH: half_width, SAME_DAYS: same_days, DIFFERENT_DAYS: different_days}
    return found[name]


def _three(values: Floats) -> _Three:
    value, low, high = (float(f"{x:.5g}") for x in values)
    return value, min(low, high), max(low, high)


def table_of(name: str, reached: Reached, components: Components, goal: Goal) -> PlanTable:
    usual = usual_chambers(components)
    cells = [
        _cell(reached, days, chambers, Design(days=days, per_chamber=1 / chambers))
        for days in DAYS
        for chambers in sorted({*CHAMBERS, usual})
    ]
    endless = [
        _cell(reached, days, usual, Design(days=days, per_chamber=1 / usual, filaments=math.inf))
        for days in DAYS
    ]
    enough = [cell for cell in cells if goal.is_reached(cell.value)]
    return PlanTable(
        name=name,
        cells=(*cells, *endless),
        present=_cell(reached, components.days, 0, present_design(components)),
        usual_chambers=next((c for c in enough if c.chambers == usual), None),
        fewest_days=min(enough, key=lambda c: (c.days, c.chambers), default=None),
        fewest_chambers=min(enough, key=lambda c: (c.days * c.chambers, c.days), default=None),
    )


def usual_chambers(components: Components) -> int:
    """Chambers a day as filmed, rounded."""
    return max(round(sum(components.chambers_of_day) / components.days), 1)


def present_design(components: Components, *, filaments: float = 1.0) -> Design:
    """The design as filmed, unequal days included."""
    return Design(
        days=components.days,
        per_chamber=components.share_of_chamber * components.days,
        filaments=filaments,
    )


def _cell(reached: Reached, days: int, chambers: int, design: Design) -> Cell:
    value, low, high = reached(design)
    return Cell(
        days=days,
        chambers=chambers,
        endless=math.isinf(design.filaments),
        value=value,
        low=low,
        high=high,
    )


def single_changes(reached: Reached, components: Components) -> tuple[Alone, ...]:
    """Single changes of the present design, from nothing to twice the days."""
    now, usual = present_design(components), usual_chambers(components)
    days = components.days
    changes = [
        ("as filmed", now),
        ("twice the filaments a chamber, or recordings twice as long", with_filaments(now, 2.0)),
        ("four times the filaments, or recordings four times as long", with_filaments(now, 4.0)),
        ("endless filaments", with_filaments(now, math.inf)),
        (
            f"{2 * usual} chambers a day instead of {usual}",
            Design(days=days, per_chamber=now.per_chamber / 2),
        ),
        (f"{days + 1} days instead of {days}", _days(now, days + 1)),
        (f"{2 * days} days instead of {days}", _days(now, 2 * days)),
    ]
    rows = [(change, reached(design)) for change, design in changes]
    return tuple(
        Alone(change=change, value=value, low=low, high=high) for change, (value, low, high) in rows
    )


def with_filaments(design: Design, filaments: float) -> Design:
    """The design with so many times the filaments of now in each chamber."""
    return Design(days=design.days, per_chamber=design.per_chamber, filaments=filaments)


def _days(design: Design, days: int) -> Design:
    return Design(days=days, per_chamber=design.per_chamber)
