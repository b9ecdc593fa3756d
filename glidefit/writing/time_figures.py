"""Speed and motile fraction against time: did the condition stay the same while it was filmed?"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from typing import TYPE_CHECKING

import numpy as np

from glidefit.results import ConditionResult, TimePoint
from glidefit.writing.colours import INK, hue, marker
from glidefit.writing.drawing import (
    Drawing,
    Key,
    canvas,
    drawing_style,
    panel,
    set_linear_axis,
    svg_text,
)
from glidefit.writing.rounding import significant
from glidefit.writing.wording import counted, named

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_MOST_BINS = 10


def course_within_recordings(condition: ConditionResult) -> Drawing | None:
    """Speed and motile fraction against the time since the start of each recording."""
    return _course(
        condition,
        condition.time_points,
        key="time",
        heading="Within recordings",
        axis="time in the recording (s)",
        line="recording",
        when=lambda point: point.time_s,
        whose=lambda point: (point.recording,),
    )


def course_within_chambers(condition: ConditionResult) -> Drawing | None:
    """The same against the time since the start in the chamber; None if no sheet tells it."""
    return _course(
        condition,
        [p for p in condition.time_points if math.isfinite(p.minutes)],
        key="minutes",
        heading="Within chambers",
        axis="time in the chamber (min)",
        line="chamber",
        when=lambda point: point.minutes,
        whose=lambda point: (point.day, point.chamber),
    )


def _course(
    condition: ConditionResult,
    points: Sequence[TimePoint],
    *,
    key: str,
    heading: str,
    axis: str,
    line: str,
    when: Callable[[TimePoint], float],
    whose: Callable[[TimePoint], tuple[str, ...]],
) -> Drawing | None:
    points = [p for p in points if math.isfinite(p.speed_um_s) or math.isfinite(p.motile_fraction)]
    if not points:
        return None
    days = list(dict.fromkeys(p.day for p in condition.time_points))
    lines: dict[tuple[str, ...], list[TimePoint]] = {}
    for point in sorted(points, key=when):
        lines.setdefault(whose(point), []).append(point)
    with drawing_style():
        figure = canvas(330)
        upper = panel(figure, left=50, top=8, right=12, bottom=178)
        lower = panel(figure, left=50, top=172, right=12, bottom=44)
        for ax, value in ((upper, _speed), (lower, _share)):
            for n, day in enumerate(days):
                own = [line for line in lines.values() if line[0].day == day]
                _lines(ax, own, when, value, day=n, faint=len(lines) > 1)
            if len(lines) > 1:
                _mean(ax, points, when, value)
            set_linear_axis(ax.xaxis)
        upper.tick_params(labelbottom=False)
        _room(upper, [p.speed_um_s for p in points])
        lower.set_ylim(-0.04, 1.04)
        lower.set_xlim(upper.get_xlim())
        set_linear_axis(upper.yaxis, ticks=4)
        set_linear_axis(lower.yaxis, ticks=2)
        upper.set_ylabel("speed (µm/s)")
        lower.set_ylabel("motile fraction")
        lower.set_xlabel(axis)
        figure.align_ylabels([upper, lower])
        svg = svg_text(
            figure,
            key=key,
            title=f"Speed and motile fraction against {axis}",
            description=_description(points, counted(len(lines), line), when),
        )
    return Drawing(
        svg=svg, heading=heading, caption=_caption(line, len(lines)), legend=_legend(days)
    )


def _speed(point: TimePoint) -> float:
    return point.speed_um_s


def _share(point: TimePoint) -> float:
    return point.motile_fraction


def _lines(
    ax: Axes,
    lines: Iterable[Sequence[TimePoint]],
    when: Callable[[TimePoint], float],
    value: Callable[[TimePoint], float],
    *,
    day: int,
    faint: bool,
) -> None:
    """All lines of one day, as one line with gaps."""
    gap = (math.nan, math.nan)
    points = [p for line in lines for p in [*((when(p), value(p)) for p in line), gap]]
    if points:
        ax.plot(
            *zip(*points, strict=True),
            color=hue(day),
            marker=marker(day),
            ms=3.5,
            lw=0.9,
            alpha=0.65 if faint else 1.0,
        )


def _mean(
    ax: Axes,
    points: Sequence[TimePoint],
    when: Callable[[TimePoint], float],
    value: Callable[[TimePoint], float],
) -> None:
    """Mean over all lines in stretches of time, each point weighted by its filament-frames."""
    own = [p for p in points if math.isfinite(value(p)) and p.n_frames > 0]
    if not own:
        return
    times = np.array([when(p) for p in own])
    weights = np.array([p.n_frames for p in own], dtype=float)
    values = np.array([value(p) for p in own])
    distinct = np.unique(times.round(6))
    if len(distinct) > _MOST_BINS:
        edges = np.linspace(times.min(), times.max(), _MOST_BINS + 1)[1:-1]
    else:
        edges = (distinct[1:] + distinct[:-1]) / 2
    bins = np.searchsorted(edges, times)
    total = np.bincount(bins, weights=weights)
    seen = total > 0
    x = np.bincount(bins, weights=weights * times)[seen] / total[seen]
    y = np.bincount(bins, weights=weights * values)[seen] / total[seen]
    ax.plot(x, y, color=INK, lw=2, marker="o", ms=4.5, zorder=4)


def _room(ax: Axes, values: list[float]) -> None:
    """From 0, so that a trifling trend does not look like a steep one."""
    highest = max((v for v in values if math.isfinite(v)), default=1.0)
    ax.set_ylim(0, 1.12 * highest if highest > 0 else 1.0)


def _description(
    points: Sequence[TimePoint], lines: str, when: Callable[[TimePoint], float]
) -> str:
    ordered = sorted((p for p in points if math.isfinite(p.speed_um_s)), key=when)
    if not ordered:
        return f"{lines}, no speed."
    third = max(len(ordered) // 3, 1)
    early = _weighted(ordered[:third])
    late = _weighted(ordered[-third:])
    return (
        f"{lines}; mean speed {significant(early)} µm/s in the first third of the points "
        f"and {significant(late)} µm/s in the last."
    )


def _weighted(points: Sequence[TimePoint]) -> float:
    total = sum(p.n_frames for p in points)
    return sum(p.speed_um_s * p.n_frames for p in points) / total if total else math.nan


def _caption(line: str, lines: int) -> str:
    if lines == 1:
        return f"Line: the only {line}."
    return f"Thin lines: {line}s, marked by day. Thick line: their mean."


def _legend(days: Sequence[str]) -> tuple[Key, ...]:
    return tuple(Key(hue=hue(i), marker=marker(i), text=named(d)) for i, d in enumerate(days))
