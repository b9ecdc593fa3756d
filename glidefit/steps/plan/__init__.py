"""Plan the next experiment: how many days, chambers and filaments reach a goal."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from glidefit.designs import Alone, Components, Goal, Interaction, PlanTable
from glidefit.steps.plan.advice import (
    assumptions,
    on_days,
    on_filaments,
    unknown_interaction,
)
from glidefit.steps.plan.reach import (
    DIFFERENT_DAYS,
    HALF_WIDTH,
    SAME_DAYS,
    reached_by,
    single_changes,
    table_of,
    variances_of,
)

__all__ = ["Planned", "plan"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Planned:
    """Tables, single changes and advice."""

    tables: tuple[PlanTable, ...]
    alone: tuple[Alone, ...]
    advice: tuple[str, ...]
    assumptions: tuple[str, ...]


def plan(
    components: Components,
    interaction: Interaction,
    *,
    goal: Goal,
    filaments_per_chamber: float,
    recording_s: float,
    rng: np.random.Generator,
) -> Planned:
    """What designs reach, and which one the goal needs.

    Parameters
    ----------
    components : Components
        Of at least two days.
    interaction : Interaction
        Of day × condition; used where a difference is to be seen.
    goal : Goal
    filaments_per_chamber, recording_s : float
        As filmed.
    rng : Generator
        For the bands.

    Raises
    ------
    ValueError
        If the components know nothing of days.
    """
    if components.days < 2:
        raise ValueError("there is one day")
    variances = variances_of(components, interaction, rng=rng)
    names = (SAME_DAYS, DIFFERENT_DAYS) if goal.is_difference else (HALF_WIDTH,)
    reached = {name: reached_by(name, variances, goal, components.level) for name in names}
    tables = tuple(table_of(name, reached[name], components, goal) for name in names)
    first = reached[names[0]]
    return Planned(
        tables=tables,
        alone=single_changes(first, components),
        advice=(
            *(on_days(table, goal, components) for table in tables),
            *on_filaments(
                tables[0], first, components, goal, n=filaments_per_chamber, seconds=recording_s
            ),
            *unknown_interaction(components, interaction, goal),
        ),
        assumptions=assumptions(goal, components, interaction),
    )
