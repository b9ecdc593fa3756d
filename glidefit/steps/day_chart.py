"""Conditions day by day, with centre line and limits: is today where it always is?"""

from __future__ import annotations

import dataclasses
import math
import re
from collections.abc import Mapping, Sequence

import numpy as np

from glidefit.kernels.control_chart import FEWEST, LIMIT_SIGMAS, individuals_chart
from glidefit.results import ChartDay, ConditionPair, ConditionResult, DayChart

_QUANTITY = "speed_um_s"
RULES = (
    f"Individuals chart: centre line at the mean of the days, limits {LIMIT_SIGMAS:g} sigma away, "
    "sigma the mean difference of successive days over 1.128. A day is out of control when it lies "
    "outside the 99.73 % prediction interval of all other days (it is then left out of centre line "
    "and limits) or beyond the limits, when two of three days lie beyond 2 sigma on one side, or "
    "eight in a row on one side of the centre line."
)


def day_charts(conditions: Sequence[ConditionResult]) -> tuple[DayChart, ...]:
    """A chart of the speed of each condition that was filmed on five days or more.

    Days come in their natural order (dates, or "day 2" before "day 10").
    """
    charts = []
    for condition in conditions:
        days: dict[str, list[float]] = {}
        for chamber in condition.chambers:
            if math.isfinite(chamber.speed_um_s):
                days.setdefault(chamber.day, []).append(chamber.speed_um_s)
        if len(days) >= FEWEST:
            charts.append(_chart(condition, days))
    return tuple(charts)


def _chart(condition: ConditionResult, days: Mapping[str, Sequence[float]]) -> DayChart:
    names = sorted(days, key=natural_order)
    values = [float(np.mean(days[day])) for day in names]
    chart = individuals_chart(np.array(values))
    made = DayChart(
        condition=condition.condition,
        control=condition.control,
        quantity=_QUANTITY,
        centre=chart.centre,
        low=chart.low,
        high=chart.high,
        relative_sigma=chart.sigma / chart.centre,
        relative_sd=chart.long_term / chart.centre,
        days=tuple(
            ChartDay(day=day, value=value, chambers=len(days[day]), signals=signals)
            for day, value, signals in zip(names, values, chart.signals, strict=True)
        ),
        rules=RULES,
    )
    told = tuple(f"{d.day} is out of control: {_what(made, d)}." for d in made.days if d.signals)
    return dataclasses.replace(made, problems=told)


def natural_order(label: str) -> tuple[tuple[int, int, str], ...]:
    """Key that sorts the numbers in labels as numbers."""
    return tuple(
        (0, int(part), "") if part.isdecimal() else (1, 0, part)
        for part in re.split(r"(\d+)", label)
        if part
    )


def out_of_control(charts: Sequence[DayChart]) -> dict[str, str]:
    """Days on which the control was out of control, with what happened.

    Without a chart of the control there are none: a day is judged by the condition that is meant
    to be always the same.
    """
    return {
        day.day: _what(chart, day)
        for chart in charts
        if chart.control
        for day in chart.days
        if day.signals
    }


def _what(chart: DayChart, day: ChartDay) -> str:
    off = day.value / chart.centre - 1
    return (
        f"{chart.condition} ran at {day.value:.3g} µm/s, {abs(off):.0%} "
        f"{'above' if off > 0 else 'below'} its centre line {chart.centre:.3g} "
        f"(limits {chart.low:.3g} to {chart.high:.3g}): {', '.join(day.signals)}"
    )


def with_problems(
    conditions: Sequence[ConditionResult], charts: Sequence[DayChart]
) -> tuple[ConditionResult, ...]:
    """Conditions that say so if the control was out of control on one of their days."""
    out = out_of_control(charts)
    found = []
    for condition in conditions:
        days = sorted({c.day for c in condition.chambers} & out.keys(), key=natural_order)
        told = tuple(
            f"On {day} the control was out of control ({out[day]}): find out why before you use "
            "what was filmed on that day."
            for day in days
        )
        found.append(dataclasses.replace(condition, problems=(*condition.problems, *told)))
    return tuple(found)


def with_pair_problems(
    pairs: Sequence[ConditionPair],
    conditions: Sequence[ConditionResult],
    charts: Sequence[DayChart],
) -> tuple[ConditionPair, ...]:
    """Comparisons that rest on a day on which the control was out of control say so."""
    out = out_of_control(charts)
    days = {c.condition: {r.day for r in c.chambers} for c in conditions}
    found = []
    for pair in pairs:
        both = days[pair.condition] & days[pair.reference] if pair.paired else set()
        used = sorted(both & out.keys(), key=natural_order)
        told = tuple(f"It rests on {day} too, when the control was out of control." for day in used)
        found.append(dataclasses.replace(pair, problems=(*pair.problems, *told)))
    return tuple(found)
