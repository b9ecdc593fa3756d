"""The page of a rehearsal: how often the intervals of this very design hold the truth."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from glidefit.designs import (
    AgainstBound,
    Components,
    ConditionRehearsal,
    FilmedDesign,
    Rehearsal,
    RehearsedQuantity,
)
from glidefit.quantities import QUANTITIES
from glidefit.results import StudyResult
from glidefit.writing.drawing import Drawing
from glidefit.writing.pages import render
from glidefit.writing.rehearsal_figures import intervals_against_truth
from glidefit.writing.rounding import NONE, percent, significant
from glidefit.writing.wording import counted, named


@dataclass(frozen=True, slots=True, kw_only=True)
class QuantityRow:
    """One quantity as a reader sees it."""

    label: str
    few: str  # how many experiments had a value, if not all
    truth: str
    bias: str
    rmse: str
    coverage: str
    verdict: str
    alert: bool
    half_width: str


@dataclass(frozen=True, slots=True, kw_only=True)
class BoundRow:
    """One quantity beside the Cramér-Rao bound: in one chamber, and of the whole design."""

    label: str
    bias: str
    rmse: str
    bound: str
    ratio: str
    whole: str
    best: str
    of_best: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelRow:
    """What one level brings to the uncertainty."""

    level: str
    number: str
    error: str
    share: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionPart:
    """The part of the page on one condition."""

    name: str
    said: tuple[str, ...]
    design: str
    rows: tuple[QuantityRow, ...]
    bounds: tuple[BoundRow, ...]
    compared: str  # how many chambers and tracks stand behind them
    present: str  # speed against the mean over the filaments present
    notes: tuple[str, ...]
    shown: int
    figures: tuple[Drawing, ...]
    levels: tuple[tuple[str, tuple[LevelRow, ...]], ...]


def rehearsal_page(rehearsal: Rehearsal, study: StudyResult) -> str:
    """The page of a rehearsal as HTML; the same rehearsal gives the same bytes.

    Parameters
    ----------
    rehearsal : Rehearsal
    study : StudyResult
        The run that was rehearsed.
    """
    return render(
        "rehearsal.html.j2",
        study=study,
        rehearsal=rehearsal,
        conditions=[
            _part(one, rehearsal, number=n) for n, one in enumerate(rehearsal.conditions, start=1)
        ],
    )


def _part(one: ConditionRehearsal, rehearsal: Rehearsal, *, number: int) -> ConditionPart:
    figures = [
        intervals_against_truth(q, key=f"rehearsed-{number}-{q.quantity.replace('_', '-')}")
        for q in one.quantities
    ]
    bounds = [q.against_bound for q in one.quantities if q.against_bound is not None]
    notes = [*one.design.notes, *(note for c in one.design.components for note in c.notes)]
    return ConditionPart(
        name=named(one.design.condition),
        said=one.said,
        design=_design(one.design),
        rows=tuple(_row(q, rehearsal) for q in one.quantities),
        bounds=tuple(
            _bound_row(q, q.against_bound) for q in one.quantities if q.against_bound is not None
        ),
        compared=_compared(bounds),
        present=next(
            (
                _times(b.of_present, b.of_present_error)
                for b in bounds
                if math.isfinite(b.of_present)
            ),
            "",
        ),
        notes=tuple(dict.fromkeys(notes)),
        shown=max((len(q.shown) for q in one.quantities), default=0),
        figures=tuple(figure for figure in figures if figure is not None),
        levels=tuple(
            (QUANTITIES[c.quantity].label, _levels(c, one.design)) for c in one.design.components
        ),
    )


def _design(d: FilmedDesign) -> str:
    chambers = [len(day) for day in d.filaments]
    a_day = sorted(set(chambers))
    number = (
        f"{a_day[0]} to {a_day[-1]} chambers" if len(a_day) > 1 else counted(a_day[0], "chamber")
    )
    filaments = [n for day in d.filaments for n in day]
    low, high = (significant(f(filaments), digits=2) for f in (min, max))
    field = " × ".join(significant(side) for side in d.field_um)
    return (
        f"As filmed: {counted(len(chambers), 'day')} of {number} of "
        f"{counted(d.recordings_per_chamber, 'recording')}; {counted(d.n_frames, 'frame')} every "
        f"{d.frame_s:g} s, exposed {d.exposure_s:g} s; field {field} µm with "
        f"{low if low == high else f'{low} to {high}'} filaments in it at a moment, "
        f"{percent(d.motile_fraction)} of them gliding; localization error "
        f"{significant(d.localization_error_um)} µm"
    )


def _row(q: RehearsedQuantity, rehearsal: Rehearsal) -> QuantityRow:
    declared = QUANTITIES[q.quantity]
    all_there = q.with_value == rehearsal.experiments
    verdicts = {"consistent": f"consistent with {percent(rehearsal.level)}"}
    coverage = NONE
    if q.with_interval:
        coverage = f"{100 * q.coverage:.1f} ± {100 * q.coverage_error:.1f} %"
    return QuantityRow(
        label=declared.label,
        few="" if all_there else f"{q.with_value} of {rehearsal.experiments} had a value",
        truth=f"{significant(q.truth)} {declared.unit}".rstrip(),
        bias=_signed(q.bias, q.bias_error),
        rmse=_share(q.rmse),
        coverage=coverage,
        verdict=verdicts.get(q.verdict, q.verdict),
        alert=q.verdict == "too low",
        half_width="open" if q.with_interval and math.isnan(q.half_width) else _share(q.half_width),
    )


def _bound_row(q: RehearsedQuantity, b: AgainstBound) -> BoundRow:
    return BoundRow(
        label=QUANTITIES[q.quantity].label,
        bias=_signed(b.bias, b.bias_error),
        rmse=_fine(b.rmse),
        bound=_fine(b.bound),
        ratio=_times(b.ratio, b.ratio_error),
        whole=_fine(q.rmse),
        best=_fine(b.best),
        of_best=_times(b.of_best, b.of_best_error),
    )


def _compared(bounds: Sequence[AgainstBound]) -> str:
    if not bounds:
        return ""
    most = max(bounds, key=lambda b: b.chambers)
    return (
        f"{counted(most.chambers, 'simulated chamber')} of "
        f"{significant(most.tracks, digits=2)} gliding tracks on average"
    )


def _fine(share: float) -> str:
    return NONE if math.isnan(share) else f"{significant(100 * share, digits=2)} %"


def _times(value: float, error: float) -> str:
    return NONE if math.isnan(value) else f"{value:.2f} ± {error:.2f}"


def _signed(value: float, error: float) -> str:
    if math.isnan(value):
        return NONE
    text = f"{100 * value:+.1f}".replace("-", "−")
    return f"{text} %" if math.isnan(error) else f"{text} ± {100 * error:.1f} %"


def _share(value: float) -> str:
    return NONE if math.isnan(value) else f"{percent(value)}"


def _levels(c: Components, design: FilmedDesign) -> tuple[LevelRow, ...]:
    filaments = sum(n for day in design.filaments for n in day)
    numbers = {
        "days": f"{c.days}",
        "chambers": f"{sum(c.chambers_of_day)}",
        "filaments": f"{filaments:.0f} in view",
    }
    errors = {level: e for level, e in c.errors.items() if math.isfinite(e)}
    total = sum(e**2 for e in errors.values())
    return tuple(
        LevelRow(
            level=level,
            number=numbers[level],
            error=percent(error),
            share=percent(error**2, total),
        )
        for level, error in errors.items()
    )
