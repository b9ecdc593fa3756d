"""The advice of a plan in plain sentences, and what it assumes."""

from __future__ import annotations

import math

import numpy as np

from glidefit.designs import Cell, Components, Goal, Interaction, PlanTable
from glidefit.steps.plan.reach import (
    BAND,
    DIFFERENT_DAYS,
    HALF_WIDTH,
    SAME_DAYS,
    Design,
    Reached,
    Variances,
    present_design,
    reached_by,
    usual_chambers,
    with_filaments,
)

_MOST_FILAMENTS = 20.0  # times those of now
# Day × condition spreads tried where the run cannot tell: of the size that is seen.
ASSUMED_INTERACTIONS = (0.03, 0.05)


def on_days(table: PlanTable, goal: Goal, components: Components) -> str:
    """What to film: the chambers as now on more days, then the fewest chambers and days."""
    how = {
        HALF_WIDTH: "",
        SAME_DAYS: ", both conditions on the same days",
        DIFFERENT_DAYS: ", each condition on days of its own",
    }[table.name]
    present = f"a design like the present one ({components.days} days) is expected to reach "
    present += _amount(table.present.value, goal)
    wanted = _wanted(goal)
    cell = table.usual_chambers or table.fewest_chambers
    if cell is None:
        best = max((c for c in table.cells if not c.endless), key=lambda c: (c.days, c.chambers))
        return (
            f"{wanted[0].upper()}{wanted[1:]} is out of reach{how}: even {_shape(best)} are "
            f"expected to reach {_amount(best.value, goal)} only, and {present}."
        )
    text = (
        f"For {wanted}, film {_shape(cell)}{how}: expected {_amount(cell.value, goal)} "
        f"(the data leave open {_percent(cell.low)} to {_percent(cell.high)})."
    )
    also: dict[Cell, list[str]] = {}
    for what, other in (("chambers", table.fewest_chambers), ("days", table.fewest_days)):
        if other is not None and other != cell:
            also.setdefault(other, []).append(what)
    if also:
        parts = [
            f"the fewest {' and '.join(what)}: {_shape(c)}, {_amount(c.value, goal)}"
            for c, what in also.items()
        ]
        text += f" With {'; with '.join(parts)}."
    return f"{text} For comparison, {present}."


def _shape(cell: Cell) -> str:
    chambers = "chamber" if cell.chambers == 1 else "chambers"
    return f"{cell.days} days × {cell.chambers} {chambers}"


def _wanted(goal: Goal) -> str:
    if goal.is_difference:
        return (
            f"a difference of {_percent(goal.difference)} seen with a power of "
            f"{_percent(goal.power)}"
        )
    return f"a half width of {_percent(goal.half_width)}"


def _amount(value: float, goal: Goal) -> str:
    if not goal.is_difference:
        return f"± {_percent(value)}"
    return "a power of " + ("over 99 %" if value > 0.99 else _percent(value))


def _percent(value: float) -> str:
    digits = 0 if value >= 0.0995 else 1
    return f"{100 * value:.{digits}f} %"


def on_filaments(
    table: PlanTable,
    reached: Reached,
    components: Components,
    goal: Goal,
    *,
    n: float,
    seconds: float,
) -> list[str]:
    """Whether more filaments alone would do, and how many."""
    now = present_design(components)
    if goal.is_reached(table.present.value):
        return []
    present, most = table.present.value, reached(with_filaments(now, math.inf))[0]
    if not goal.is_reached(most):
        little = abs(most - present) < 0.15 * abs(present)
        verdict = "will not help" if little else "alone will not do"
        return [
            f"More filaments {verdict}: at the present days and chambers even endless ones are "
            f"expected to reach {_amount(most, goal)} only."
        ]
    times = _times_filaments(reached, now, goal)
    if times > _MOST_FILAMENTS:
        return [
            f"At the present days and chambers it would take more than {_MOST_FILAMENTS:g} times "
            "the filaments."
        ]
    return [
        f"At the present days and chambers {math.ceil(n * times)} filaments a chamber instead of "
        f"{round(n)} are expected to reach it as well, or recordings of {seconds * times:.3g} s "
        f"instead of {seconds:.3g} s."
    ]


def _times_filaments(reached: Reached, now: Design, goal: Goal) -> float:
    """How many times the filaments of now reach the goal, by bisection."""
    low, high = 1.0, 2.0
    while high <= _MOST_FILAMENTS and not goal.is_reached(reached(with_filaments(now, high))[0]):
        low, high = high, 2 * high
    for _ in range(30):
        middle = (low + high) / 2
        if goal.is_reached(reached(with_filaments(now, middle))[0]):
            high = middle
        else:
            low = middle
    return high


def unknown_interaction(components: Components, interaction: Interaction, goal: Goal) -> list[str]:
    """How much hangs on a day × condition spread that the run cannot tell."""
    if not goal.is_difference or interaction.df > 0:
        return []
    parts = []
    for spread in ASSUMED_INTERACTIONS:
        one = np.array([spread**2])
        v = Variances(
            day=one * 0,
            chamber=one * 0 + (components.chamber if math.isfinite(components.chamber) else 0.0),
            filament=components.filament,
            interaction=one,
        )
        reached = reached_by(SAME_DAYS, v, goal, components.level)
        per_chamber = 1 / usual_chambers(components)
        enough = [
            days
            for days in range(2, 101)
            if goal.is_reached(reached(Design(days=days, per_chamber=per_chamber))[0])
        ]
        days = f"{enough[0]} days" if enough else "more than 100 days"
        parts.append(f"with one of {_percent(spread)} it takes {days}")
    return [
        "On the same days this assumes that conditions do not differ from day to day in their own "
        f"way; {' and '.join(parts)} of {usual_chambers(components)} chambers."
    ]


def assumptions(goal: Goal, components: Components, interaction: Interaction) -> tuple[str, ...]:
    """What the numbers rest on."""
    out = [
        "The next experiment is like this one: same condition, same spread, same analysis. The "
        f"spread between days is known from {components.days} days only; the "
        f"{_percent(BAND)} bands say what that leaves open.",
        "The error that filaments bring falls with the square root of the filament-frames: a "
        "recording twice as long counts like twice the filaments. That holds as far as other "
        "filaments come into the field meanwhile; a shorter frame interval gives more frames of "
        "the same filaments, brings less, and is not counted.",
    ]
    if not goal.is_difference:
        out.append(
            "An expected half width is the mean over experiments of that design; with few days "
            "single ones come out at half of it or twice."
        )
        return (*out, *components.notes)
    out.append(
        "The other condition spreads like this one, and is filmed with as many chambers. On the "
        "same days what days share cancels, and what is left is tested by Student's t over daily "
        "differences; on days of their own by Student's t of two groups."
    )
    if interaction.df > 0:
        names = ", ".join(interaction.conditions)
        sd = _percent(math.sqrt(interaction.variance))
        out.append(
            f"How conditions differ from day to day in their own way (SD {sd}) was estimated from "
            f"{interaction.days} days of {names}, with {interaction.df} degrees of freedom."
        )
    return (*out, *((interaction.note,) if interaction.note else ()), *components.notes)
