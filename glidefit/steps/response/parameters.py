"""Parameters of a fitted curve with unit and interval, or why the points do not determine them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from glidefit.kernels.response_curves import ResponseFit, q10
from glidefit.kernels.response_intervals import Bounds, scale_bounds, shape_bounds
from glidefit.results import NAN, ResponseParameter
from glidefit.steps.response.points import Column

_SPEED_UNIT = "µm/s"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Meaning:
    key: str
    label: str
    unit: str


def parameters(
    fit: ResponseFit, what: Column, inhibitor: Column | None, *, level: float, covers: str
) -> tuple[ResponseParameter, ...]:
    """The scale and the parameters of the shape; Q10 beside an activation energy.

    Parameters
    ----------
    fit : ResponseFit
    what, inhibitor : Column
    level : float
        Confidence level.
    covers : str
        "days" or "chambers".
    """
    beyond = _beyond(fit, what)
    scale = scale_bounds(fit, level=level)
    out = [
        _parameter(
            _scale_meaning(fit.shape.scale),
            scale,
            back=math.exp,
            level=level,
            method=_scale_method(fit, covers),
            problem=f"v_max is not determined: {beyond}" if beyond else "",
        )
    ]
    for name in fit.shape.parameters:
        bounds = shape_bounds(fit, name, level=level)
        positive = name in fit.shape.positive
        meaning = _meaning(fit.shape.name, name, what, inhibitor)
        problem = ""
        if name in ("half", "density"):
            problem = f"{meaning.label} is not determined: {beyond}" if beyond else ""
            problem = problem or _too_small(fit, bounds, meaning, what)
        if not problem and positive and math.isinf(bounds.high):
            problem = f"{meaning.label} is not determined: the points set no upper bound"
        out.append(
            _parameter(
                meaning,
                bounds,
                back=math.exp if positive else float,
                level=level,
                method=f"{'profile' if positive else 'Student’s t'}, {fit.df} degrees of freedom",
                problem=problem,
            )
        )
        if name == "activation":
            out.append(_q10(bounds, fit, level=level))
    return tuple(out)


def _beyond(fit: ResponseFit, what: Column) -> str:
    """Why the points do not reach far enough along the curve; empty if they do."""
    values = fit.shape_values()
    name = next((n for n in ("half", "density") if n in values), "")
    if not name or values[name] <= float(fit.x.max()):
        return ""
    unit = f" {what.unit}" if what.unit else ""
    where = "half of the largest speed lies" if name == "half" else "it lies"
    return (
        f"{where} beyond the largest {_noun(what)} ({fit.x.max():.4g}{unit}), where the curve has "
        "not yet levelled off"
    )


def _noun(what: Column) -> str:
    return {"concentration": "concentration", "density": "density"}.get(what.kind, "value")


def _too_small(fit: ResponseFit, bounds: Bounds, meaning: _Meaning, what: Column) -> str:
    smallest = float(fit.x[fit.x > 0].min())
    if math.exp(bounds.value) >= smallest or math.isfinite(bounds.low):
        return ""
    unit = f" {what.unit}" if what.unit else ""
    return (
        f"{meaning.label} is not determined: it lies below the smallest {_noun(what)} "
        f"({smallest:.4g}{unit})"
    )


def _parameter(
    meaning: _Meaning,
    bounds: Bounds,
    *,
    back: Callable[[float], float],
    level: float,
    method: str,
    problem: str,
) -> ResponseParameter:
    """On its own scale; a value that is not determined is none, but a bound may be."""
    if not problem and not math.isfinite(bounds.error):
        problem = f"{meaning.label} is not determined: the points leave the shape open"
    error = bounds.error * (back(bounds.value) if back is math.exp else 1.0)
    low = back(bounds.low) if math.isfinite(bounds.low) else NAN
    high = back(bounds.high) if math.isfinite(bounds.high) else NAN
    if "beyond" in problem:
        high = NAN
    return ResponseParameter(
        key=meaning.key,
        label=meaning.label,
        unit=meaning.unit,
        value=NAN if problem else back(bounds.value),
        low=low,
        high=high,
        level=level,
        error=NAN if problem or not math.isfinite(error) else error,
        method=method,
        problem=problem,
    )


def _q10(bounds: Bounds, fit: ResponseFit, *, level: float) -> ResponseParameter:
    value = q10(bounds.value)
    # d ln Q10 / dE_a is the same for every E_a.
    return ResponseParameter(
        key="q10",
        label="Q10 (20 to 30 °C)",
        unit="",
        value=value,
        low=q10(bounds.low),
        high=q10(bounds.high),
        level=level,
        error=value * math.log(q10(1.0)) * bounds.error,
        method=f"from E_a, {fit.df} degrees of freedom",
    )


def _scale_method(fit: ResponseFit, covers: str) -> str:
    if fit.n_days > 1:
        df = fit.n_days - 1
        return f"Student’s t over {df + 1} days, {df} degree{'' if df == 1 else 's'} of freedom"
    reach = "over chambers of one day" if covers == "chambers" else "over days"
    return (
        f"{'profile' if fit.shape.positive else 'Student’s t'} {reach}, {fit.df} degrees of freedom"
    )


def _scale_meaning(scale: str) -> _Meaning:
    keys = {"v_max": "v_max_um_s", "v(25 °C)": "speed_25C_um_s", "v₀": "speed_middle_um_s"}
    return _Meaning(key=keys[scale], label=scale, unit=_SPEED_UNIT)


def _meaning(shape: str, name: str, what: Column, inhibitor: Column | None) -> _Meaning:
    if name == "half":
        label = "K" if shape == "hill" else "K_m"
        return _Meaning(key=f"{label.lower()}{what.suffix}", label=label, unit=what.unit)
    if name == "inhibition":
        unit = inhibitor.unit if inhibitor else ""
        own = inhibitor.suffix if inhibitor else ""
        return _Meaning(key=f"k_i{own}", label="K_i", unit=unit)
    if name == "density":
        return _Meaning(key=f"c_s{what.suffix}", label="c_s", unit=what.unit)
    if name == "activation":
        return _Meaning(key="activation_energy_kJ_mol", label="E_a", unit="kJ/mol")
    if name == "slope":
        return _Meaning(
            key=f"relative_slope_per{what.suffix or '_unit'}",
            label="b",
            unit=f"per {what.unit}" if what.unit else "",
        )
    return _Meaning(key="hill_exponent", label="n", unit="")
