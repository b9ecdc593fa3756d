"""The page of response curves: figure, parameters, which curves were tried."""

from __future__ import annotations

from dataclasses import dataclass

from glidefit.results import ResponseCurve, ResponseParameter, StudyResult
from glidefit.writing.comparison_words import curve_name, response_sentence
from glidefit.writing.drawing import Drawing
from glidefit.writing.pages import render
from glidefit.writing.response_figures import response_figure
from glidefit.writing.rounding import NONE, Rounded, percent, rounded, significant
from glidefit.writing.wording import named, visible


@dataclass(frozen=True, slots=True, kw_only=True)
class ParameterRow:
    """One parameter as a reader sees it."""

    label: str
    unit: str
    shown: Rounded
    error: str
    method: str
    problem: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelRow:
    """One curve that was tried."""

    name: str
    formula: str
    above: str  # criterion above the lowest
    scatter: str
    chosen: bool
    problem: str


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvePart:
    """Everything about one curve."""

    heading: str
    sentence: str
    figure: Drawing | None
    level: str
    parameters: tuple[ParameterRow, ...]
    models: tuple[ModelRow, ...]
    method: str
    problems: tuple[str, ...]


def response_page(study: StudyResult) -> str:
    """The page of response curves as HTML; the same results give the same bytes."""
    return render(
        "response.html.j2",
        study=study,
        parts_=[_part(curve, n) for n, curve in enumerate(study.responses, start=1)],
    )


def _part(curve: ResponseCurve, number: int) -> CurvePart:
    series = f", {named(curve.series)}" if curve.series else ""
    return CurvePart(
        heading=f"Against {visible(curve.label)}{series}",
        sentence=response_sentence(curve),
        figure=response_figure(curve, number=number),
        level=percent(curve.level),
        parameters=tuple(map(_parameter, curve.parameters)),
        models=_models(curve),
        method=curve.method,
        problems=curve.problems,
    )


def _parameter(p: ResponseParameter) -> ParameterRow:
    return ParameterRow(
        label=p.label,
        unit=p.unit,
        shown=rounded(p.value, p.low, p.high),
        error=significant(p.error, digits=2),
        method=p.method,
        problem=p.problem,
    )


def _models(curve: ResponseCurve) -> tuple[ModelRow, ...]:
    known = [m.criterion for m in curve.models if m.criterion == m.criterion]
    lowest = min(known, default=0.0)
    relative = bool(curve.method) and "logarithms" in curve.method
    return tuple(
        ModelRow(
            name=curve_name(m.name),
            formula=m.formula,
            above=NONE if m.criterion != m.criterion else f"{m.criterion - lowest:.1f}",
            scatter=percent(m.residual_sd) if relative else significant(m.residual_sd),
            chosen=m.chosen,
            problem=m.problem,
        )
        for m in curve.models
    )
