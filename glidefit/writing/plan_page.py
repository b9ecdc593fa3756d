"""The page of a plan: what to film next, and what it is worth."""

from __future__ import annotations

import math
from dataclasses import dataclass

from glidefit.designs import Components, Goal, Plan, PlanTable
from glidefit.quantities import QUANTITIES
from glidefit.results import StudyResult
from glidefit.writing.drawing import Drawing
from glidefit.writing.pages import render
from glidefit.writing.plan_figures import against_days
from glidefit.writing.rounding import NONE, percent, significant
from glidefit.writing.wording import counted

_HEADINGS = {
    "half width": "Expected half width",
    "same days": "Both conditions on the same days",
    "different days": "Each condition on days of its own",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class CellText:
    """One design of the table."""

    value: str
    band: str
    reaches: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class DaysRow:
    """All designs with so many days."""

    days: int
    cells: tuple[CellText, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class TablePart:
    """One table with its figure."""

    heading: str
    caption: str
    figure: Drawing
    heads: tuple[str, ...]
    rows: tuple[DaysRow, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class ChangeRow:
    """What one change brings."""

    change: str
    value: str
    band: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ComponentRow:
    """The spread at one level."""

    level: str
    sd: str
    error: str
    meaning: str


def plan_page(plan: Plan, study: StudyResult) -> str:
    """The page of a plan as HTML; the same plan gives the same bytes.

    Parameters
    ----------
    plan : Plan
    study : StudyResult
        The run that it rests on.
    """
    declared, c = QUANTITIES[plan.quantity], plan.components
    first = _HEADINGS[plan.tables[0].name]
    where = f" ({first[0].lower()}{first[1:]})" if plan.goal.is_difference else ""
    return render(
        "plan.html.j2",
        study=study,
        plan=plan,
        label=declared.label,
        goal=_goal(plan.goal, c.level),
        filmed=_filmed(c),
        tables=[_table(t, plan, number=n) for n, t in enumerate(plan.tables, start=1)],
        what=_what(plan.goal),
        alone=[
            ChangeRow(
                change=row.change[0].upper() + row.change[1:],
                value=_amount(row.value, plan.goal),
                band=_band(row.low, row.high),
            )
            for row in plan.alone
        ],
        alone_caption=f"The design as filmed, with one thing changed{where}.",
        value=f"{significant(c.value)} {declared.unit}".rstrip(),
        components=_components(plan),
    )


def _filmed(c: Components) -> str:
    made_of = f"{counted(c.days, 'day')}, {counted(sum(c.chambers_of_day), 'chamber')}"
    if math.isnan(c.half_width):
        return made_of
    return f"{made_of}; {percent(c.level)} interval ± {percent(c.half_width)}"


def _goal(goal: Goal, level: float) -> str:
    if goal.is_difference:
        return (
            f"a difference of {percent(goal.difference)} to be seen with a power of "
            f"{percent(goal.power)} at the {percent(1 - level)} level"
        )
    return f"{percent(level)} interval of ± {percent(goal.half_width)} wanted"


def _what(goal: Goal) -> str:
    return "power" if goal.is_difference else "half width"


def _amount(value: float, goal: Goal) -> str:
    if goal.is_difference:
        return "> 99 %" if value > 0.99 else percent(value)
    return f"± {percent(value)}"


def _band(low: float, high: float) -> str:
    return f"{percent(low)} to {percent(high)}"


def _table(table: PlanTable, plan: Plan, *, number: int) -> TablePart:
    usual = next(c.chambers for c in table.cells if c.endless)
    heads = [counted(n, "chamber") for n in sorted({c.chambers for c in table.cells})]
    rows = []
    for days in sorted({c.days for c in table.cells}):
        own = sorted(
            (c for c in table.cells if c.days == days), key=lambda c: (c.endless, c.chambers)
        )
        rows.append(
            DaysRow(
                days=days,
                cells=tuple(
                    CellText(
                        value=_amount(c.value, plan.goal),
                        band=_band(c.low, c.high),
                        reaches=plan.goal.is_reached(c.value),
                    )
                    for c in own
                ),
            )
        )
    heading = _HEADINGS[table.name]
    filaments = f"{plan.filaments_per_chamber:.0f} filaments in each chamber as now"
    what = "Power" if plan.goal.is_difference else "Expected half width"
    return TablePart(
        heading=heading,
        caption=f"{what} by days and chambers a day, {filaments}; in the last column endless "
        "filaments, which is the most that more of them can bring. Below each number what the "
        "data leave open (90 %). ✓ reaches what is wanted.",
        figure=against_days(
            table,
            plan.goal,
            usual=usual,
            heading="Against the number of days",
            key=f"plan-{number}",
        ),
        heads=(*heads, f"{counted(usual, 'chamber')}, endless filaments"),
        rows=tuple(rows),
    )


def _components(plan: Plan) -> list[ComponentRow]:
    c: Components = plan.components
    meanings = {
        "days": (c.day, "Falls only with more days."),
        "chambers": (c.chamber, "Falls with all chambers, whatever their days."),
        "filaments": (
            c.filament,
            f"Of a chamber, from its {plan.filaments_per_chamber:.0f} filaments in recordings of "
            f"{plan.recording_s:.3g} s; falls with chambers and filaments.",
        ),
    }
    rows = [
        ComponentRow(
            level=level,
            sd=_sd(variance),
            error=_sd(c.errors[level] ** 2),
            meaning=meaning,
        )
        for level, (variance, meaning) in meanings.items()
    ]
    if plan.goal.is_difference:
        rows.append(
            ComponentRow(
                level="day × condition",
                sd=_sd(plan.interaction.variance),
                error=NONE,
                meaning="How a condition differs from day to day in its own way: it stays in a "
                "difference on the same days, and falls only with more days.",
            )
        )
    return rows


def _sd(variance: float) -> str:
    return percent(math.sqrt(variance)) if math.isfinite(variance) else "not known"
