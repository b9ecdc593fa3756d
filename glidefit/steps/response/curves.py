"""Which curve the points follow, and what its parameters are."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.response_curves import SHAPES, ResponseFit, Shape, fit_response, linear_shape
from glidefit.kernels.response_intervals import curve_bounds
from glidefit.results import NAN, ConditionResult, ResponseCurve, ResponseModel, ResponsePoint
from glidefit.settings import ResponseSettings
from glidefit.steps.response.parameters import parameters
from glidefit.steps.response.points import (
    FEWEST_VALUES,
    Column,
    Series,
    SheetColumns,
    column,
    find_columns,
    find_points,
    find_series,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_QUANTITY = "speed_um_s"
_CANDIDATES = {
    "concentration": ("michaelis-menten", "hill", "linear"),
    "temperature": ("arrhenius", "linear"),
    "density": ("saturation", "michaelis-menten", "linear"),
    "other": ("linear",),
}
# A curve with more parameters must do better by so much, or it is not taken.
_CLEARLY = 2.0
_GRID = 61
_BREAK_CELSIUS = 27.0
_FROM_ZERO = frozenset({"michaelis-menten", "hill", "competitive", "saturation"})


def responses(
    conditions: Sequence[ConditionResult],
    sheet: Mapping[str, SheetColumns],
    *,
    settings: ResponseSettings,
    level: float,
) -> tuple[ResponseCurve, ...]:
    """Fit a curve for every column of numbers in which the conditions differ enough.

    Parameters
    ----------
    conditions : sequence of ConditionResult
    sheet : mapping
        By condition, what the sheet says of it in columns of its own.
    settings : ResponseSettings
    level : float
        Confidence level.
    """
    known = {c.condition: sheet[c.condition] for c in conditions if c.condition in sheet}
    names = find_columns(known, chosen=settings.column, without=settings.inhibitor)
    return tuple(
        _response(conditions, column(name), series, settings=settings, level=level)
        for name in names
        for series in find_series(
            known, name, inhibitor=_inhibitor_for(name, settings), by=settings.series
        )
        if settings.column is not None or len(set(series.x.values())) >= FEWEST_VALUES
    )


def _inhibitor_for(name: str, settings: ResponseSettings) -> str | None:
    return settings.inhibitor if settings.inhibitor != name else None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Data:
    """Points as arrays. ``parted``: each day has a scale of its own."""

    x: Floats
    inhibitor: Floats
    y: Floats
    day: Ints
    days: int
    notes: tuple[str, ...]

    @property
    def covers(self) -> str:
        return "days" if self.days > 1 else "chambers"

    @property
    def parted(self) -> bool:
        return bool(self.day.max(initial=0) > 0)


def _response(
    conditions: Sequence[ConditionResult],
    what: Column,
    series: Series,
    *,
    settings: ResponseSettings,
    level: float,
) -> ResponseCurve:
    inhibited = settings.inhibitor is not None and any(series.inhibitor.values())
    points = find_points(conditions, series, with_inhibitor=inhibited)
    problem = series.problem
    if not problem and len({p.x for p in points}) < FEWEST_VALUES:
        problem = f"There are fewer than {FEWEST_VALUES} values of {what.label} with a speed."
    if problem:
        return _nothing(what, series, points, level=level, problem=problem)
    tried = [
        _try(_shape(name, points), points, settings.scatter)
        for name in _candidates(what, settings.model, inhibited=inhibited)
    ]
    chosen = _choose([t.fit for t in tried])
    models = tuple(
        ResponseModel(
            name=t.shape.name,
            formula=t.shape.formula,
            criterion=t.fit.criterion if t.fit and math.isfinite(t.fit.criterion) else NAN,
            residual_sd=math.sqrt(t.fit.residual_variance) if t.fit else NAN,
            chosen=t.fit is not None and t.fit is chosen,
            problem=t.problem,
        )
        for t in tried
    )
    if chosen is None:
        return _nothing(what, series, points, level=level, problem=tried[0].problem, models=models)
    data = next(t.data for t in tried if t.fit is chosen)
    return _curve(what, series, points, chosen, data, models, settings=settings, level=level)


def _nothing(
    what: Column,
    series: Series,
    points: tuple[ResponsePoint, ...],
    *,
    level: float,
    problem: str,
    models: tuple[ResponseModel, ...] = (),
) -> ResponseCurve:
    return ResponseCurve(
        column=what.name,
        label=what.label,
        unit=what.unit,
        series=series.name,
        quantity=_QUANTITY,
        model="",
        formula="",
        points=points,
        x=(),
        at_inhibitor=(),
        curve=(),
        low=(),
        high=(),
        level=level,
        covers="",
        parameters=(),
        models=models,
        method="",
        problems=(f"No curve against {what.label}: {problem[:1].lower()}{problem[1:]}",),
    )


def _candidates(what: Column, model: str, *, inhibited: bool) -> tuple[str, ...]:
    if model != "auto":
        return (model,)
    if what.kind == "concentration" and inhibited:
        return ("competitive", "michaelis-menten")
    return _CANDIDATES[what.kind]


def _shape(name: str, points: Sequence[ResponsePoint]) -> Shape:
    if name == "linear":
        return linear_shape(np.array([p.x for p in points]))
    return SHAPES[name]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Tried:
    shape: Shape
    data: _Data
    fit: ResponseFit | None
    problem: str


def _try(shape: Shape, points: Sequence[ResponsePoint], scatter: str) -> _Tried:
    """Fit one curve; each day with a scale of its own if there are points enough for that."""
    data = _data(points, shape, scatter, parted=True)
    if data.parted and len(data.y) - data.day.max() - 1 - len(shape.parameters) < 1:
        data = _data(points, shape, scatter, parted=False)
    try:
        fit = fit_response(
            data.x, data.y, data.day, shape=shape, scatter=scatter, inhibitor=data.inhibitor
        )
    except ValueError as error:
        return _Tried(shape=shape, data=data, fit=None, problem=f"Not fitted: {error}.")
    return _Tried(shape=shape, data=data, fit=fit, problem="")


def _data(points: Sequence[ResponsePoint], shape: Shape, scatter: str, *, parted: bool) -> _Data:
    notes = []
    used = list(points)
    if scatter == "relative":
        if shape.name in _FROM_ZERO and any(p.x <= 0 for p in used):
            used = [p for p in used if p.x > 0]
            notes.append("points at zero are left out, where every such curve is zero")
        if any(p.value <= 0 for p in used):
            used = [p for p in used if p.value > 0]
            notes.append("points that are not above zero are left out")
    days = list(dict.fromkeys(p.day for p in used))
    day = np.array([days.index(p.day) if parted else 0 for p in used], dtype=np.int64)
    second = np.array([0.0 if math.isnan(p.inhibitor) else p.inhibitor for p in used])
    return _Data(
        x=np.array([p.x for p in used]),
        inhibitor=second,
        y=np.array([p.value for p in used]),
        day=day,
        days=len(days),
        notes=tuple(notes),
    )


def _choose(fits: Sequence[ResponseFit | None]) -> ResponseFit | None:
    """The lowest criterion; a curve with fewer parameters if it is as good within 2."""
    there = [fit for fit in fits if fit is not None]
    if not there:
        return None
    known = [fit for fit in there if math.isfinite(fit.criterion)]
    if not known:
        return there[0]
    lowest = min(fit.criterion for fit in known)
    good = [fit for fit in known if fit.criterion <= lowest + _CLEARLY]
    # min keeps the first of equals: the order of the candidates.
    return min(good, key=lambda fit: len(fit.shape.parameters))


def _curve(
    what: Column,
    series: Series,
    points: tuple[ResponsePoint, ...],
    fit: ResponseFit,
    data: _Data,
    models: tuple[ResponseModel, ...],
    *,
    settings: ResponseSettings,
    level: float,
) -> ResponseCurve:
    second = column(settings.inhibitor) if settings.inhibitor else None
    found = parameters(fit, what, second, level=level, covers=data.covers)
    levels = sorted(set(data.inhibitor.tolist()))
    grid = np.tile(_grid(data.x), len(levels))
    at = np.repeat(levels, _GRID)
    middle, low, high = curve_bounds(fit, grid, at, level=level)
    inhibited = any(not math.isnan(p.inhibitor) for p in points)

    def texts(values: Floats) -> tuple[float, ...]:
        return tuple(float(f"{v:.5g}") for v in values)

    return ResponseCurve(
        column=what.name,
        label=what.label,
        unit=what.unit,
        series=series.name,
        quantity=_QUANTITY,
        model=fit.shape.name,
        formula=fit.shape.formula,
        points=points,
        x=texts(grid),
        at_inhibitor=texts(at) if inhibited else (NAN,) * len(grid),
        curve=texts(middle),
        low=texts(low),
        high=texts(high),
        level=level,
        covers=data.covers,
        parameters=found,
        models=models,
        method=_method(fit, data),
        problems=_problems(what, fit, data, [p.problem for p in found]),
    )


def _grid(x: Floats) -> Floats:
    """Numbers from the first point to the last, evenly by ratio where they span decades."""
    low, high = float(x.min()), float(x.max())
    if low > 0 and high / low > 20:
        return np.geomspace(low, high, _GRID)
    return np.linspace(low, high, _GRID)


def _method(fit: ResponseFit, data: _Data) -> str:
    if data.parted:
        points = (
            f"{len(data.y)} means of conditions on {data.days} days, each day with a factor of its "
            "own on all its points"
        )
    elif data.days > 1:
        points = (
            f"{len(data.y)} means of conditions on {data.days} days, too few days with several "
            "points to tell days apart"
        )
    else:
        points = f"{len(data.y)} chambers of one day"
    scatter = "logarithms" if fit.scatter == "relative" else "values"
    notes = f"; {'; '.join(data.notes)}" if data.notes else ""
    return (
        f"Least squares of {scatter} over {points}; {fit.df} degree"
        f"{'' if fit.df == 1 else 's'} of freedom{notes}."
    )


def _problems(
    what: Column, fit: ResponseFit, data: _Data, of_parameters: Sequence[str]
) -> tuple[str, ...]:
    out = [f"{what.label}: {text}" for text in dict.fromkeys(of_parameters) if text]
    if fit.fit.problem and not out:
        out.append(f"{what.label}: {fit.fit.problem}.")
    if fit.shape.name == "arrhenius" and data.x.min() < _BREAK_CELSIUS < data.x.max():
        out.append(
            "The temperatures lie on both sides of 27 °C, where the Arrhenius plot of gliding "
            "microtubules on kinesin has been seen to break: one activation energy may not hold "
            "for all of them."
        )
    return tuple(out)
