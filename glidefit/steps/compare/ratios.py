"""Ratios to the reference in every quantity, with their tests and the family they belong to."""

from __future__ import annotations

import dataclasses
import itertools
import math
import zlib
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from glidefit.kernels.multiple import holm
from glidefit.results import (
    NAN,
    ChamberResult,
    Comparison,
    ConditionPair,
    ConditionResult,
    Difference,
    Ratio,
    UnitChange,
)
from glidefit.settings import CompareSettings
from glidefit.steps.compare import wording
from glidefit.steps.compare.checks import FilmedAt, pair_problems, side_looks
from glidefit.steps.compare.pairing import Arrangement, Judged, Key, Measure, arrange, judge

COMPARED = (
    "speed_um_s",
    "rotational_diffusion_rad2_s",
    "persistence_length_um",
    "motile_fraction",
)
_FRACTION = "motile_fraction"


def pairs_to_compare(
    conditions: Sequence[ConditionResult], reference: str
) -> list[tuple[ConditionResult, ConditionResult]]:
    """Each condition with its reference: the control, one by name, or each with each ("all").

    A condition that is called like one of these words is meant by its name.

    Raises
    ------
    ValueError
        If no condition has that name.
    """
    by_name = {c.condition: c for c in conditions}
    if reference in by_name:
        chosen = by_name[reference]
    elif reference == "all":
        return [(b, a) for a, b in itertools.combinations(conditions, 2)]
    elif reference == "control":
        controls = [c for c in conditions if c.control]
        if not controls:
            return []
        chosen = controls[0]
    else:
        raise ValueError(f"there is no condition {reference!r}")
    return [(c, chosen) for c in conditions if c is not chosen]


def compare(
    conditions: Sequence[ConditionResult],
    *,
    settings: CompareSettings,
    level: float,
    seed: int,
    filmed: Sequence[FilmedAt] = (),
) -> tuple[tuple[Comparison, ...], tuple[ConditionPair, ...]]:
    """Compare conditions with their reference.

    Log-ratios of days (or of chambers after solution exchange) are taken as Student's t takes
    single values: so the interval holds how the conditions differ from day to day in their own
    way, and not the day that they share. Motile fractions are compared by their difference.

    Parameters
    ----------
    conditions : sequence of ConditionResult
    settings : CompareSettings
    level : float
        Confidence level.
    seed : int
        For permutations that are too many to enumerate.
    filmed : sequence of FilmedAt
        When each recording was made, where the sheet says so.
    """
    found: list[Comparison] = []
    pairs: list[ConditionPair] = []
    for condition, reference in pairs_to_compare(conditions, settings.reference):
        names = f"{condition.condition}\n{reference.condition}".encode()
        rng = np.random.default_rng([seed, zlib.crc32(names)])
        for quantity in COMPARED:
            found.append(
                compare_in(quantity, condition, reference, settings=settings, level=level, rng=rng)
            )
        pairs.append(_pair(condition, reference, level=level, filmed=filmed, rng=rng))
    return _adjusted(found), tuple(pairs)


def compare_in(
    quantity: str,
    condition: ConditionResult,
    reference: ConditionResult,
    *,
    settings: CompareSettings,
    level: float,
    rng: np.random.Generator,
) -> Comparison:
    """One condition against its reference in one quantity, its p value not yet adjusted."""
    one, two = with_value(condition, quantity), with_value(reference, quantity)
    fields: dict[str, Any] = {
        "condition": condition.condition,
        "reference": reference.condition,
        "quantity": quantity,
        "primary": quantity == settings.primary,
        "p_adjusted": NAN,
    }
    if not (one and two):
        who = reference if one else condition
        nothing = Ratio(value=NAN, low=NAN, high=NAN, level=level)
        return Comparison(
            ratio=nothing,
            p_value=NAN,
            p_permutation=NAN,
            problem=f"{who.condition} has no value to compare",
            **fields,
        )
    arrangement = arrange(one, two)
    judged = judge(arrangement, measure(quantity, one), measure(quantity, two), rng=rng)
    return Comparison(
        **fields,
        **_numbers(quantity, judged, level=level, margin=settings.margin),
        covers=arrangement.covers if judged.difference.known else "",
        method=wording.method(arrangement, judged.difference),
        problem=judged.problem or wording.no_interval(arrangement, judged.difference),
    )


def _numbers(quantity: str, judged: Judged, *, level: float, margin: float) -> dict[str, Any]:
    """Ratio or difference, tests and equivalence."""
    d = judged.difference
    fraction = quantity == _FRACTION
    back = float if fraction else math.exp
    low, high = map(back, d.interval(level))
    # Two one-sided tests at 1 - level are one interval at this level.
    near_level = round(2 * level - 1, 12)
    near = tuple(map(back, d.interval(near_level)))
    middle = 0.0 if fraction else 1.0
    shuffled = judged.permutation
    could_reject = shuffled is not None and shuffled.smallest < 1 - level - 1e-12
    nothing = Ratio(value=NAN, low=NAN, high=NAN, level=level)
    return {
        "ratio": nothing
        if fraction
        else Ratio(value=back(d.value), low=low, high=high, level=level),
        "p_value": NAN if fraction else d.p_value,
        "difference": Difference(value=d.value, low=low, high=high, level=level, p_value=d.p_value)
        if fraction
        else Difference(level=level),
        "p_permutation": shuffled.p_value if shuffled is not None and could_reject else NAN,
        "smallest_p_permutation": shuffled.smallest if shuffled is not None else NAN,
        "equivalence_low": near[0],
        "equivalence_high": near[1],
        "equivalence_level": near_level,
        "margin": margin,
        "equivalent": middle - margin <= near[0] and near[1] <= middle + margin,
        "degrees_of_freedom": d.df if d.known else NAN,
        "units": tuple(
            UnitChange(day=day, chamber=chamber, change=back(change))
            for (day, chamber), change in judged.units
        ),
    }


def with_value(condition: ConditionResult, quantity: str) -> dict[Key, ChamberResult]:
    """Chambers of a condition that have a value of the quantity."""
    needed = (
        ("speed_um_s", "rotational_diffusion_rad2_s")
        if quantity == "persistence_length_um"
        else (quantity,)
    )
    return {
        (c.day, c.chamber): c
        for c in condition.chambers
        if all(math.isfinite(getattr(c, name)) for name in needed)
    }


def measure(quantity: str, chambers: Mapping[Key, ChamberResult]) -> Measure:
    """The quantity of a group of chambers: the mean of a fraction, else the log of the mean."""

    def mean(group: Sequence[Key], name: str) -> float:
        return float(np.mean([getattr(chambers[key], name) for key in group]))

    def log_mean(group: Sequence[Key], name: str) -> float:
        value = mean(group, name)
        return math.log(value) if value > 0 else NAN

    if quantity == _FRACTION:
        return lambda group: mean(group, quantity)
    if quantity == "persistence_length_um":
        return lambda group: (
            log_mean(group, "speed_um_s") - log_mean(group, "rotational_diffusion_rad2_s")
        )
    return lambda group: log_mean(group, quantity)


def _adjusted(comparisons: Sequence[Comparison]) -> tuple[Comparison, ...]:
    """P values of the primary quantity adjusted over all comparisons."""
    family = [n for n, c in enumerate(comparisons) if c.primary]
    p = np.array([p_value(comparisons[n]) for n in family])
    adjusted = dict(zip(family, holm(p).tolist(), strict=True)) if family else {}
    return tuple(
        dataclasses.replace(c, p_adjusted=adjusted.get(n, NAN)) for n, c in enumerate(comparisons)
    )


def p_value(comparison: Comparison) -> float:
    """Of the ratio, or of the difference where that is compared."""
    if comparison.quantity == _FRACTION:
        return comparison.difference.p_value
    return comparison.p_value


def _pair(
    condition: ConditionResult,
    reference: ConditionResult,
    *,
    level: float,
    filmed: Sequence[FilmedAt],
    rng: np.random.Generator,
) -> ConditionPair:
    one, two = with_value(condition, "speed_um_s"), with_value(reference, "speed_um_s")
    arrangement = arrange(one, two)
    days, reference_days = {day for day, _ in one}, {day for day, _ in two}
    looks, look_problems = side_looks(condition, reference, arrangement, level=level, rng=rng)
    problems = pair_problems(condition, reference, filmed)
    return ConditionPair(
        condition=condition.condition,
        reference=reference.condition,
        paired=arrangement.paired,
        covers=arrangement.covers,
        shared_days=len(days & reference_days),
        days=len(days),
        reference_days=len(reference_days),
        note=wording.note(
            condition.condition,
            reference.condition,
            arrangement,
            days=(len(days), len(reference_days), len(days & reference_days)),
            spread=_day_spread(arrangement, one, two),
        ),
        problems=(*problems, *look_problems),
        side_looks=looks,
    )


def _day_spread(
    arrangement: Arrangement, one: Mapping[Key, ChamberResult], two: Mapping[Key, ChamberResult]
) -> float:
    """Relative SD of speed between the days of one condition, of unpaired designs."""
    squares, df = 0.0, 0
    for chambers, groups in zip((one, two), arrangement.samples, strict=True):
        value = measure("speed_um_s", chambers)
        logs = np.array([value(group) for group in groups])
        logs = logs[np.isfinite(logs)]
        if len(logs) > 1:
            squares += float(np.sum((logs - logs.mean()) ** 2))
            df += len(logs) - 1
    return math.sqrt(squares / df) if df else NAN
