"""What could mislead a comparison: order of filming, cleaning, length of the filaments."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from glidefit.results import NAN, ConditionResult, Ratio, SideLook, TrackResult
from glidefit.steps.compare.pairing import Arrangement, Judged, Key, Measure, judge

Floats = NDArray[np.float64]
_LEAST_SHARE, _LEAST_LENGTH = 0.05, 0.10
_FEWEST_TRACKS = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class FilmedAt:
    """When a recording was made. Times by one clock can be compared."""

    condition: str
    clock: str  # a day for times of day, a chamber for times after its own start
    minutes: float


def pair_problems(
    condition: ConditionResult, reference: ConditionResult, filmed: Sequence[FilmedAt]
) -> tuple[str, ...]:
    """Confounds of a comparison, in plain words."""
    order = _always_first(condition.condition, reference.condition, filmed)
    return (order,) if order else ()


def _always_first(condition: str, reference: str, filmed: Sequence[FilmedAt]) -> str:
    """Was one of the two always filmed before the other, wherever that is known?"""
    clocks: dict[str, tuple[list[float], list[float]]] = {}
    for at in filmed:
        if at.condition in (condition, reference):
            own = clocks.setdefault(at.clock, ([], []))
            own[at.condition == reference].append(at.minutes)
    known = [
        (max(own), min(own), max(ref), min(ref)) for own, ref in clocks.values() if own and ref
    ]
    if len(known) < 2:
        return ""
    if all(last_ref < first_own for _, first_own, last_ref, _ in known):
        first, second = reference, condition
    elif all(last_own < first_ref for last_own, _, _, first_ref in known):
        first, second = condition, reference
    else:
        return ""
    return (
        f"{first} was always filmed before {second} ({len(known)} of {len(known)} times): warming, "
        "ageing of the proteins or ATP running out would read as a difference between them. "
        "Change the order from day to day."
    )


def side_looks(
    condition: ConditionResult,
    reference: ConditionResult,
    arrangement: Arrangement,
    *,
    level: float,
    rng: np.random.Generator,
) -> tuple[tuple[SideLook, ...], tuple[str, ...]]:
    """The ratio of speeds without cleaning and at a common length, where these could matter."""
    looks: list[SideLook] = []
    problems: list[str] = []
    for look, problem in (
        _without_cleaning(condition, reference, arrangement, level, rng),
        _at_common_length(condition, reference, arrangement, level, rng),
    ):
        looks += [look] if look is not None else []
        problems += [problem] if problem else []
    return tuple(looks), tuple(problems)


_Look = tuple[SideLook | None, str]


def _without_cleaning(
    condition: ConditionResult,
    reference: ConditionResult,
    arrangement: Arrangement,
    level: float,
    rng: np.random.Generator,
) -> _Look:
    """Were different shares of filament-frames set aside?"""
    one, two = _by_chamber(condition.tracks), _by_chamber(reference.tracks)
    difference = judge(arrangement, _share_aside(one), _share_aside(two), rng=rng)
    if not _differs(difference, least=_LEAST_SHARE, level=level):
        return None, ""
    ratio = _ratio(judge(arrangement, _net_speed(one), _net_speed(two), rng=rng), level)
    shares = [_share_aside(by)(list(by)) for by in (one, two)]
    look = SideLook(
        name="nothing set aside",
        ratio=ratio,
        meaning="Mean of net advance over time of all filaments, each frame counted: those that "
        "were set aside are in it, stuck ones too.",
    )
    problem = (
        f"Different shares were set aside: {shares[0]:.0%} of the filament-frames of "
        f"{condition.condition}, {shares[1]:.0%} of {reference.condition} "
        f"({_main_reasons(condition, reference)}). With nothing set aside the ratio of speeds is "
        f"{ratio.value:.3g}."
    )
    return look, problem


def _main_reasons(condition: ConditionResult, reference: ConditionResult) -> str:
    parts = []
    for reason in condition.counts.frames_set_aside:
        shares = [
            c.counts.frames_set_aside.get(reason, 0) / max(c.counts.frames_seen, 1)
            for c in (condition, reference)
        ]
        if max(shares) >= 0.01:
            parts.append(f"{reason} {shares[0]:.0%} and {shares[1]:.0%}")
    return ", ".join(parts)


def _by_chamber(tracks: Iterable[TrackResult]) -> dict[Key, list[TrackResult]]:
    out: dict[Key, list[TrackResult]] = {}
    for track in tracks:
        out.setdefault((track.day, track.chamber), []).append(track)
    return out


def _share_aside(chambers: Mapping[Key, list[TrackResult]]) -> Measure:
    """Share of filament-frames that were set aside, mean of the chambers of a group."""

    def of(tracks: list[TrackResult]) -> float:
        seen = sum(t.n_positions for t in tracks)
        return sum(t.n_positions for t in tracks if not t.kept) / seen if seen else NAN

    return lambda group: float(np.mean([of(chambers.get(key, [])) for key in group]))


def _net_speed(chambers: Mapping[Key, list[TrackResult]]) -> Measure:
    """Log of the mean of net advance over duration, each filament-frame counted."""

    def of(tracks: list[TrackResult]) -> float:
        there = [t for t in tracks if t.duration_s > 0]
        weight = sum(t.n_positions for t in there)
        if not weight:
            return NAN
        return sum(t.n_positions * t.net_advance_um / t.duration_s for t in there) / weight

    def log_mean(group: Iterable[Key]) -> float:
        value = float(np.mean([of(chambers.get(key, [])) for key in group]))
        return math.log(value) if value > 0 else NAN

    return log_mean


def _at_common_length(
    condition: ConditionResult,
    reference: ConditionResult,
    arrangement: Arrangement,
    level: float,
    rng: np.random.Generator,
) -> _Look:
    """Do filaments of the two differ in length, and what if they did not?

    Within chambers the relative speed is regressed on log length, one slope for all chambers of
    both; the speeds of the chambers are then read at the mean log length of both conditions.
    """
    one, two = _measured(condition), _measured(reference)
    if min(_number(one), _number(two)) < _FEWEST_TRACKS:
        return None, ""
    difference = judge(arrangement, _log_length(one), _log_length(two), rng=rng)
    if not _differs(difference, least=_LEAST_LENGTH, level=level):
        return None, ""
    slope = _slope([*one.values(), *two.values()])
    middle = (_log_length(one)(list(one)) + _log_length(two)(list(two))) / 2
    speeds = [
        {(c.day, c.chamber): c.speed_um_s for c in which.chambers}
        for which in (condition, reference)
    ]
    at = [
        _speed_at(speed, _log_length(by), slope=slope, log_length=middle)
        for speed, by in zip(speeds, (one, two), strict=True)
    ]
    ratio = _ratio(judge(arrangement, at[0], at[1], rng=rng), level)
    factor = math.exp(difference.difference.value)
    look = SideLook(
        name=f"at a common length of {math.exp(middle):.3g} µm",
        ratio=ratio,
        meaning=f"Filaments of {condition.condition} are {factor:.3g} times as long as those of "
        f"{reference.condition}; within chambers speed changes by {100 * slope * math.log(2):+.2g} "
        "% when the length doubles.",
    )
    problem = (
        f"Filaments of {condition.condition} are {factor:.3g} times as long as those of "
        f"{reference.condition}. At a common length the ratio of speeds is {ratio.value:.3g}."
    )
    return look, problem


_Lengths = dict[Key, tuple[Floats, Floats, Floats]]  # log length, speed, frames of each track


def _measured(condition: ConditionResult) -> _Lengths:
    out: _Lengths = {}
    for key, tracks in _by_chamber(condition.tracks).items():
        known = [t for t in tracks if t.kept and t.length_um > 0 and math.isfinite(t.speed_um_s)]
        if known:
            out[key] = (
                np.log([t.length_um for t in known]),
                np.array([t.speed_um_s for t in known]),
                np.array([float(t.n_positions) for t in known]),
            )
    return out


def _number(lengths: _Lengths) -> int:
    return sum(len(x) for x, _, _ in lengths.values())


def _log_length(lengths: _Lengths) -> Measure:
    """Mean log length, each filament-frame counted, mean of the chambers of a group."""

    def of(key: Key) -> float:
        if key not in lengths:
            return NAN
        x, _, weight = lengths[key]
        return float(np.average(x, weights=weight))

    return lambda group: float(np.mean([of(key) for key in group]))


def _slope(chambers: Iterable[tuple[Floats, Floats, Floats]]) -> float:
    """Relative change of speed with log length within chambers."""
    top = bottom = 0.0
    for x, speed, weight in chambers:
        mean = float(np.average(speed, weights=weight))
        dx = x - np.average(x, weights=weight)
        if mean > 0:
            top += float(np.sum(weight * dx * (speed / mean - 1)))
            bottom += float(np.sum(weight * dx**2))
    return top / bottom if bottom > 0 else 0.0


def _speed_at(
    speeds: Mapping[Key, float], length: Measure, *, slope: float, log_length: float
) -> Measure:
    """Log of the mean speed of a group, each chamber moved to the common length."""

    def log_mean(group: Iterable[Key]) -> float:
        moved = [speeds[k] * (1 + slope * (log_length - length([k]))) for k in group]
        value = float(np.mean(moved))
        return math.log(value) if value > 0 else NAN

    return log_mean


def _differs(judged: Judged, *, least: float, level: float) -> bool:
    """Large enough to matter, and not by chance where that can be told."""
    d = judged.difference
    if not abs(d.value) >= least:
        return False
    low, high = d.interval(level)
    return not low <= 0 <= high  # true without an interval too


def _ratio(judged: Judged, level: float) -> Ratio:
    d = judged.difference
    low, high = d.interval(level)
    return Ratio(value=math.exp(d.value), low=math.exp(low), high=math.exp(high), level=level)
