"""Variance components of a finished run: days, chambers, filaments, and day × condition."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.designs import WITH_COMPONENTS, Components, Interaction
from glidefit.kernels.components import (
    interaction_mean_square,
    mean_square_draws,
    nested_components,
)
from glidefit.results import NAN, ChamberResult, ConditionResult, VariancePart

Floats = NDArray[np.float64]


def components(condition: ConditionResult, quantity: str) -> Components:
    """Components of one quantity from the chamber values of a condition, relative to its value.

    Unbiased nested analysis of variance; what the filaments of a chamber bring (the level
    "tracks" of the spread) is taken off the variance between chambers. Estimates below 0 are 0.

    Parameters
    ----------
    condition : ConditionResult
    quantity : str
        One of `WITH_COMPONENTS`.

    Raises
    ------
    ValueError
        If the condition has no positive value, or no chamber has one.
    """
    value = condition.estimates[quantity].value
    there = _with_value(condition.chambers, quantity)
    if not (value > 0 and there):
        raise ValueError(f"{condition.condition} has no {quantity}")
    days = list(dict.fromkeys(chamber.day for chamber in there))
    group = np.array([days.index(chamber.day) for chamber in there])
    relative = np.array([getattr(chamber, quantity) for chamber in there]) / value
    found = nested_components(relative, group)
    numbers = tuple(int(n) for n in np.bincount(group))
    filament, notes = _filaments(condition, quantity, numbers)
    chamber = max(found.within - filament, 0.0) if math.isfinite(found.within) else NAN
    day = found.between
    if math.isnan(found.within):
        day -= filament
        if len(days) > 1:
            notes.append(
                "No day has two chambers: what chambers differ by is counted as a difference "
                "between days, so that more chambers a day seem to bring less than they may."
            )
    return Components(
        quantity=quantity,
        value=value,
        level=condition.estimates[quantity].level,
        half_width=_half_width(condition, quantity),
        chambers_of_day=numbers,
        day=max(day, 0.0) if math.isfinite(day) else NAN,
        chamber=chamber,
        filament=filament,
        day_mean_square=found.between_mean_square,
        day_df=found.between_df,
        chamber_mean_square=found.within_mean_square,
        chamber_df=found.within_df,
        chambers_in_day_square=found.units,
        notes=tuple(notes),
    )


def _with_value(chambers: Sequence[ChamberResult], quantity: str) -> list[ChamberResult]:
    return [chamber for chamber in chambers if math.isfinite(getattr(chamber, quantity))]


def _half_width(condition: ConditionResult, quantity: str) -> float:
    """Of the interval of the run, relative; a side cut off at 0 counts like the other."""
    e = condition.estimates[quantity]
    return max(e.value - e.low, e.high - e.value) / e.value if e.value > 0 else NAN


def _filaments(
    condition: ConditionResult, quantity: str, numbers: Sequence[int]
) -> tuple[float, list[str]]:
    """Sampling variance of one chamber, undone from its share in the error of the mean."""
    error = next(
        (
            s.relative_error
            for s in condition.spread
            if s.quantity == quantity and s.level == "tracks"
        ),
        NAN,
    )
    if math.isnan(error):
        return 0.0, ["What the filaments bring is not known: it is counted to the chambers."]
    share = sum(1 / n for n in numbers) / len(numbers) ** 2
    return error**2 / share, []


def interaction(
    conditions: Sequence[ConditionResult], condition: ConditionResult, quantity: str
) -> Interaction:
    """Variance of day × condition, from conditions filmed on the same days.

    Parameters
    ----------
    conditions : sequence of ConditionResult
        All of the run.
    condition : ConditionResult
        The one that is planned with.
    quantity : str
    """
    chosen = _on_same_days(conditions, condition, quantity)
    if len(chosen) < 2:
        return Interaction(
            variance=NAN,
            mean_square=NAN,
            df=0,
            within=0.0,
            conditions=(),
            days=0,
            note="No other condition of the run was filmed on two or more of the same days, so "
            "whether conditions differ from day to day in their own way is not known.",
        )
    names = tuple(c.condition for c, _ in chosen)
    days = sorted(set.intersection(*(set(values) for _, values in chosen)))
    table = np.array([[np.mean(values[day]) for day in days] for _, values in chosen])
    table /= table.mean(axis=1, keepdims=True)
    mean_square = interaction_mean_square(table)
    within, kept_apart = _within_cells(chosen, days, quantity)
    return Interaction(
        variance=max(mean_square - within, 0.0),
        mean_square=mean_square,
        df=(len(names) - 1) * (len(days) - 1),
        within=within,
        conditions=names,
        days=len(days),
        note="" if kept_apart else "It holds what chambers differ by: no day has two chambers.",
    )


_ByDay = dict[str, list[float]]


def _on_same_days(
    conditions: Sequence[ConditionResult], condition: ConditionResult, quantity: str
) -> list[tuple[ConditionResult, _ByDay]]:
    """The condition and those that share its days: all of them, or else the most."""
    own = _by_day(condition, quantity)
    others = [
        (c, _by_day(c, quantity))
        for c in conditions
        if c.condition != condition.condition and c.estimates[quantity].value > 0
    ]
    shared = max((len(own.keys() & values.keys()) for _, values in others), default=0)
    if shared < 2:
        return []
    most = next(
        own.keys() & values.keys()
        for _, values in others
        if len(own.keys() & values.keys()) == shared
    )
    return [(condition, own), *((c, v) for c, v in others if most <= v.keys())]


def _by_day(condition: ConditionResult, quantity: str) -> _ByDay:
    values: _ByDay = {}
    for chamber in _with_value(condition.chambers, quantity):
        values.setdefault(chamber.day, []).append(float(getattr(chamber, quantity)))
    return values


def _within_cells(
    chosen: Sequence[tuple[ConditionResult, _ByDay]], days: Sequence[str], quantity: str
) -> tuple[float, bool]:
    """Mean variance of a day's mean of one condition; False if chambers could not be told."""
    parts, told = [], False
    for condition, _ in chosen:
        own = components(condition, quantity)
        number = _by_day(condition, quantity)
        told = told or own.chamber_df > 0
        each = own.filament if math.isnan(own.chamber) else own.chamber + own.filament
        parts += [each / len(number[day]) for day in days]
    return float(np.mean(parts)), told


# Draws of a generalized interval; its ends are then known to 2 % of their probability.
_DRAWS = 20_000


def variation(
    conditions: Sequence[ConditionResult], condition: ConditionResult, *, rng: np.random.Generator
) -> tuple[VariancePart, ...]:
    """How far days, chambers and filaments differ, each with a generalized interval.

    The intervals draw every mean square as ``square × df / χ²`` and take their differences, so
    that a level of which three days tell has the wide interval that it deserves. Levels that do
    not repeat are left out.

    Parameters
    ----------
    conditions : sequence of ConditionResult
        All of the run: those of the same days tell of day × condition.
    condition : ConditionResult
    rng : Generator
    """
    parts: list[VariancePart] = []
    for quantity in WITH_COMPONENTS:
        if condition.estimates[quantity].value > 0 and _with_value(condition.chambers, quantity):
            own = components(condition, quantity)
            shared = interaction(conditions, condition, quantity)
            tracks = sum(c.tracks_kept for c in condition.chambers)
            parts += _parts(own, shared, max(tracks - len(condition.chambers), 1), rng)
    return tuple(parts)


def _parts(
    c: Components, shared: Interaction, filament_df: int, rng: np.random.Generator
) -> list[VariancePart]:
    def draws(square: float, df: int) -> Floats:
        return mean_square_draws(square, df=df, n_draws=_DRAWS, rng=rng)

    known: list[tuple[str, float, Floats, int]] = []
    filaments = draws(c.filament, filament_df)
    within, change = filaments, np.ones(_DRAWS)
    if c.chamber_df > 0:
        within = draws(c.chamber_mean_square, c.chamber_df)
        change = within / c.chamber_mean_square if c.chamber_mean_square > 0 else change
    if c.day_df > 0:
        between = draws(c.day_mean_square, c.day_df) - within
        known.append(("days", c.day, between / c.chambers_in_day_square, c.day_df))
    if shared.df > 0:
        own = draws(shared.mean_square, shared.df) - shared.within * change
        known.append(("day × condition", shared.variance, own, shared.df))
    if c.chamber_df > 0:
        known.append(("chambers", c.chamber, within - filaments, c.chamber_df))
    if c.filament > 0:
        known.append(("filaments", c.filament, filaments, filament_df))
    total = float(np.nansum([c.day, c.chamber, c.filament]))
    if not total > 0:  # a fraction that is 1 in every chamber has no spread to split
        return []
    ends = [(1 - c.level) / 2, (1 + c.level) / 2]
    out = []
    for level, variance, drawn, df in known:
        low, high = np.sqrt(np.maximum(np.quantile(drawn, ends), 0.0))
        out.append(
            VariancePart(
                quantity=c.quantity,
                level=level,
                relative_sd=_short(math.sqrt(variance)),
                low=_short(low),
                high=_short(high),
                confidence=c.level,
                df=df,
                share=_short(variance / total),
            )
        )
    return out


def _short(value: float) -> float:
    return float(f"{value:.5g}")
