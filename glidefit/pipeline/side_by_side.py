"""What only several conditions or days can say: comparisons, response curves, day charts."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from glidefit.assay import Assay, Recording
from glidefit.errors import InputError, InputErrors
from glidefit.results import Comparison, ConditionPair, ConditionResult, DayChart, ResponseCurve
from glidefit.settings import Settings, SourcedSettings

if TYPE_CHECKING:
    from glidefit.steps import compare, response

_WORDS = ("control", "all")


@dataclass(frozen=True, slots=True, kw_only=True)
class SideBySide:
    """Conditions, with what is said of them beside the others."""

    conditions: tuple[ConditionResult, ...]
    comparisons: tuple[Comparison, ...]
    pairs: tuple[ConditionPair, ...]
    responses: tuple[ResponseCurve, ...]
    day_charts: tuple[DayChart, ...]


def check_names(assay: Assay, settings: SourcedSettings) -> None:
    """Are the names of conditions and columns in the settings those of the sheet?

    Raises
    ------
    InputErrors
        All that are not.
    """
    values = settings.values
    errors = []
    if values.compare.reference not in _WORDS:
        errors += _unknown(
            settings, "compare.reference", values.compare.reference, list(assay.conditions)
        )
    numbers = sorted({name for r in assay.recordings for name in r.numbers})
    labels = sorted({name for r in assay.recordings for name in r.labels})
    for key, name, known in (
        ("response.column", values.response.column, numbers),
        ("response.inhibitor", values.response.inhibitor, numbers),
        ("response.series", values.response.series, labels),
    ):
        if name is not None:
            errors += _unknown(settings, key, name, known)
    if errors:
        raise InputErrors(errors)


def _unknown(
    settings: SourcedSettings, key: str, name: str, known: Sequence[str]
) -> list[InputError]:
    if name in known:
        return []
    near = difflib.get_close_matches(name, known, n=1)
    what = {
        "compare.reference": "a condition of the sheet",
        "response.series": "a column of labels of the sheet",
    }.get(key, "a column of numbers of the sheet")
    listed = ", ".join(map(repr, known[:12])) or "there is none"
    return [
        InputError(
            f"setting {key} ({settings.source(key)})",
            f"the sheet has no {name!r}",
            expected=f"{what}: {listed}",
            remedy=f"Did you mean {near[0]!r}?" if near else "Name one of them.",
        )
    ]


def side_by_side(
    conditions: Sequence[ConditionResult],
    sheet: Sequence[Recording],
    *,
    settings: Settings,
    seed: int,
) -> SideBySide:
    """Compare conditions, fit response curves, draw day charts.

    Parameters
    ----------
    conditions : sequence of ConditionResult
    sheet : sequence of Recording
        Rows of the sheet; without them no start times and no columns are known.
    settings : Settings
    seed : int
    """
    from glidefit.steps import compare, day_chart, response

    level = settings.interval.level
    comparisons, pairs = compare.compare(
        conditions, settings=settings.compare, level=level, seed=seed, filmed=filmed_at(sheet)
    )
    curves = response.responses(
        conditions, sheet_columns(sheet), settings=settings.response, level=level
    )
    charts = day_chart.day_charts(conditions)
    return SideBySide(
        conditions=day_chart.with_problems(conditions, charts),
        comparisons=comparisons,
        pairs=day_chart.with_pair_problems(pairs, conditions, charts),
        responses=curves,
        day_charts=charts,
    )


def sheet_columns(sheet: Sequence[Recording]) -> dict[str, response.SheetColumns]:
    """By condition, the distinct values of the sheet's own columns."""
    from glidefit.steps import response

    by_condition: dict[str, list[Recording]] = {}
    for r in sheet:
        by_condition.setdefault(r.condition, []).append(r)
    return {
        condition: response.SheetColumns(
            numbers={
                name: tuple(dict.fromkeys(r.numbers[name] for r in own if name in r.numbers))
                for name in dict.fromkeys(name for r in own for name in r.numbers)
            },
            labels={
                name: tuple(dict.fromkeys(r.labels[name] for r in own if name in r.labels))
                for name in dict.fromkeys(name for r in own for name in r.labels)
            },
        )
        for condition, own in by_condition.items()
    }


def filmed_at(sheet: Sequence[Recording]) -> list[compare.FilmedAt]:
    """When recordings were made: by the clock of their day, else of their chamber."""
    from glidefit.reading.chamber_times import parse_start_time
    from glidefit.steps import compare

    out = []
    for r in sheet:
        time = parse_start_time(r.start_time)
        if time is not None:
            clock, minutes = f"day {r.day}, {time[0]}", time[1]
        elif r.minutes is not None:
            clock, minutes = f"chamber {r.chamber} of day {r.day}", r.minutes
        else:
            continue
        out.append(compare.FilmedAt(condition=r.condition, clock=clock, minutes=minutes))
    return out
