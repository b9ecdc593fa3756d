"""Points of response curves: which conditions, on which days, at which numbers of the sheet."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from glidefit.results import NAN, ConditionResult, ResponsePoint

FEWEST_VALUES = 3

_CONCENTRATION = re.compile("[pnuµμm]?M|ppm")
_DENSITY = re.compile("[pnuµμm]?g_[muµμ]?[lL]|(per_)?[nuµμ]m2")
_SPELLED = {"atp": "ATP", "adp": "ADP", "gtp": "GTP", "kcl": "KCl", "nacl": "NaCl"}
_TEMPERATURES = frozenset({"C", "degC"})


@dataclass(frozen=True, slots=True, kw_only=True)
class SheetColumns:
    """What the sheet says of one condition in its own columns: the distinct values of each."""

    numbers: Mapping[str, tuple[float, ...]]
    labels: Mapping[str, tuple[str, ...]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """A column of numbers: what it is called, its unit, and of which kind it is."""

    name: str
    label: str
    suffix: str  # of the name: "_uM"
    unit: str
    kind: str  # "concentration", "temperature", "density" or "other"


def column(name: str) -> Column:
    """A column from its name: "atp_uM" is a concentration in µM, "temperature_C" in °C."""
    parts = name.split("_")
    sizes = [n for n in (3, 2, 1) if n < len(parts)]
    n = next((n for n in sizes if _kind("_".join(parts[-n:]))), min(1, len(sizes)))
    unit = "_".join(parts[len(parts) - n :])
    return Column(
        name=name,
        label=" ".join(_SPELLED.get(part.lower(), part) for part in parts[: len(parts) - n]),
        suffix=f"_{unit}" if unit else "",
        unit=_pretty(unit),
        kind=_kind(unit) or "other",
    )


def _kind(unit: str) -> str:
    if _CONCENTRATION.fullmatch(unit):
        return "concentration"
    if _DENSITY.fullmatch(unit):
        return "density"
    return "temperature" if unit in _TEMPERATURES else ""


def _pretty(unit: str) -> str:
    if unit in _TEMPERATURES:
        return "°C"
    parts = unit.removeprefix("per_").split("_")
    return ("1/" if unit.startswith("per_") else "") + "/".join(
        re.sub("^[uμ](?=.)", "µ", part) for part in parts
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """Conditions along one curve, by name their number; or why there is none."""

    name: str
    x: Mapping[str, float]
    inhibitor: Mapping[str, float]
    problem: str = ""


def find_columns(
    sheet: Mapping[str, SheetColumns], *, chosen: str | None, without: str | None
) -> list[str]:
    """Columns in which the conditions have three values or more, or the chosen one."""
    if chosen is not None:
        return [chosen]
    values: dict[str, set[float]] = {}
    for own in sheet.values():
        for name, numbers in own.numbers.items():
            values.setdefault(name, set()).update(numbers)
    return [
        name
        for name, numbers in values.items()
        if len(numbers) >= FEWEST_VALUES and name != without
    ]


def find_series(
    sheet: Mapping[str, SheetColumns], name: str, *, inhibitor: str | None, by: str | None
) -> list[Series]:
    """Conditions that have a value in a column, parted by a column of labels if one is named.

    Two conditions at one value (and one inhibitor) of a series cannot be on one curve unless
    somebody says so, and a condition that has several values has no place on it.
    """
    parts: dict[str, dict[str, SheetColumns]] = {}
    for condition, own in sheet.items():
        if name in own.numbers:
            labels = own.labels.get(by, ("",)) if by else ("",)
            parts.setdefault(" / ".join(labels), {})[condition] = own
    return [_series(part, name, inhibitor, label) for label, part in parts.items()]


def _series(
    conditions: Mapping[str, SheetColumns], name: str, inhibitor: str | None, label: str
) -> Series:
    x: dict[str, float] = {}
    second: dict[str, float] = {}
    taken: dict[tuple[float, float], str] = {}
    problem = ""
    for condition, own in conditions.items():
        numbers = own.numbers[name]
        others = own.numbers.get(inhibitor, (0.0,)) if inhibitor else (0.0,)
        if len(numbers) > 1 or len(others) > 1:
            problem = problem or (
                f"{condition} was filmed at several values of {name}: give each a condition of "
                "its own."
            )
            continue
        x[condition], second[condition] = numbers[0], others[0]
        first = taken.setdefault((numbers[0], others[0]), condition)
        if first != condition:
            problem = problem or (
                f"{first} and {condition} have the same {name} ({numbers[0]:g}): say which "
                "conditions belong on one curve, with a column of labels and the setting "
                "response.series."
            )
    return Series(name=label, x=x, inhibitor=second, problem=problem)


def find_points(
    conditions: Sequence[ConditionResult], series: Series, *, with_inhibitor: bool
) -> tuple[ResponsePoint, ...]:
    """Mean of the chambers of each condition on each day; with one day in all, the chambers."""
    there = [c for c in conditions if c.condition in series.x]
    chambers = [(c, r) for c in there for r in c.chambers if math.isfinite(r.speed_um_s)]
    lone = len({r.day for _, r in chambers}) == 1
    groups: dict[tuple[str, str, str], list[float]] = {}
    for c, r in chambers:
        key = (c.condition, r.day, r.chamber if lone else "")
        groups.setdefault(key, []).append(r.speed_um_s)
    return tuple(
        ResponsePoint(
            condition=condition,
            day=day,
            chamber=chamber,
            x=series.x[condition],
            inhibitor=series.inhibitor[condition] if with_inhibitor else NAN,
            value=float(np.mean(values)),
        )
        for (condition, day, chamber), values in groups.items()
    )
