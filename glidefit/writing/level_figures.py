"""Speeds of tracks, chambers and days in one figure, and rotational diffusion of chambers."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from glidefit.quantities import QUANTITIES
from glidefit.results import ChamberResult, ConditionResult, Estimate
from glidefit.writing.colours import INK, hue, marker
from glidefit.writing.drawing import (
    FONT,
    WIDTH,
    Drawing,
    canvas,
    draw_dots,
    drawing_style,
    panel,
    set_linear_axis,
    svg_text,
)
from glidefit.writing.rounding import percent, rounded, significant
from glidefit.writing.wording import counted, named, short_names, shortened

if TYPE_CHECKING:
    from matplotlib.axes import Axes

MOST_DOTS = 2000
_DAY_PX, _LETTER_PX = 20.0, 6.4
_GOLDEN = 0.618034


@dataclass(frozen=True, slots=True, kw_only=True)
class _Row:
    """One chamber of the figure: its label and where it lies, in px from the top."""

    chamber: ChamberResult
    label: str
    day: int
    top: float
    height: float

    @property
    def middle(self) -> float:
        return self.top + self.height / 2


def speeds_by_chamber(condition: ConditionResult) -> Drawing | None:
    """Speed of every kept track, the means of chambers and days, and the condition's own.

    None if no chamber has a speed.

    References
    ----------
    Lord et al., J. Cell Biol. 219, e202001064 (2020): single values and replicate means together.
    """
    dots: dict[tuple[str, str], list[float]] = {}
    for track in condition.tracks:
        if track.kept and math.isfinite(track.speed_um_s):
            dots.setdefault((track.day, track.chamber), []).append(track.speed_um_s)
    return _by_chamber(condition, "speed_um_s", "chamber-speed", dots)


def rotational_diffusion_by_chamber(condition: ConditionResult) -> Drawing | None:
    """Rotational diffusion of chambers and days, and the condition's own; None without any."""
    return _by_chamber(condition, "rotational_diffusion_rad2_s", "chamber-diffusion", {})


def _by_chamber(
    condition: ConditionResult,
    quantity: str,
    key: str,
    dots: dict[tuple[str, str], list[float]],
) -> Drawing | None:
    values = [float(getattr(c, quantity)) for c in condition.chambers]
    if not any(map(math.isfinite, values)):
        return None
    rows, height = _rows(condition.chambers)
    estimate = condition.estimates[quantity]
    spread = _thinned(dots)
    with drawing_style():
        figure = canvas(height + 46)
        letters = max(max(len(row.label), len(_day_label(row))) for row in rows)
        left = 14 + _LETTER_PX * letters
        ax = panel(figure, left=left, top=4, right=14, bottom=42)
        ax.set_ylim(height, 0)
        ax.set_yticks([])
        ax.spines["left"].set_visible(False)
        _limits(ax, values, estimate, spread)
        _condition_band(ax, estimate)
        for row in rows:
            own = spread.get((row.chamber.day, row.chamber.chamber), [])
            _chamber_marks(ax, row, float(getattr(row.chamber, quantity)), own)
        _day_marks(ax, rows, quantity, left)
        set_linear_axis(ax.xaxis)
        ax.set_xlabel(f"{QUANTITIES[quantity].label} ({QUANTITIES[quantity].unit})")
        svg = svg_text(
            figure,
            key=key,
            title=f"{QUANTITIES[quantity].label.capitalize()} by day and chamber",
            description=_description(condition, quantity, values),
        )
    return Drawing(
        svg=svg,
        heading=f"{QUANTITIES[quantity].label.capitalize()} by day and chamber",
        caption=_caption(estimate, spread, dots),
    )


def _rows(chambers: Sequence[ChamberResult]) -> tuple[list[_Row], float]:
    """Rows by day, and the height of all in px; many chambers make low rows."""
    row_height = 28.0 if len(chambers) <= 12 else 18.0
    by_day: dict[str, list[ChamberResult]] = {}
    for chamber in chambers:
        by_day.setdefault(chamber.day, []).append(chamber)
    rows: list[_Row] = []
    top = 0.0
    for day, own in enumerate(by_day.values()):
        top += _DAY_PX
        labels = short_names([c.chamber for c in own], width=14)
        for chamber, label in zip(own, labels, strict=True):
            rows.append(_Row(chamber=chamber, label=label, day=day, top=top, height=row_height))
            top += row_height
    return rows, top + 4


def _day_label(row: _Row) -> str:
    return shortened(named(row.chamber.day), width=16)


def _thinned(dots: dict[tuple[str, str], list[float]]) -> dict[tuple[str, str], list[float]]:
    """Every n-th of the sorted speeds, so that a page stays light."""
    every = -(-sum(map(len, dots.values())) // MOST_DOTS) or 1
    return {chamber: sorted(speeds)[::every] for chamber, speeds in dots.items()}


def _limits(
    ax: Axes,
    values: list[float],
    estimate: Estimate,
    dots: dict[tuple[str, str], list[float]],
) -> None:
    """Room for all marks; an interval that dwarfs them is cut at the edge."""
    marks = [v for v in (*values, estimate.value) if math.isfinite(v)]
    marks += itertools.chain.from_iterable(dots.values())
    low, high = min(marks), max(marks)
    span = (high - low) or abs(high) or 1.0
    for end in (estimate.low, estimate.high):
        if low - 2 * span <= end <= high + 2 * span:
            low, high = min(low, end), max(high, end)
    room = 0.05 * (high - low or span)
    ax.set_xlim(low - room, high + room)


def _condition_band(ax: Axes, estimate: Estimate) -> None:
    left, right = ax.get_xlim()
    if math.isfinite(estimate.low) or math.isfinite(estimate.high):
        low = estimate.low if math.isfinite(estimate.low) else left
        high = estimate.high if math.isfinite(estimate.high) else right
        ax.axvspan(max(low, left), min(high, right), color=INK, alpha=0.1, lw=0)
    if math.isfinite(estimate.value):
        ax.axvline(estimate.value, color=INK, lw=1)


def _chamber_marks(ax: Axes, row: _Row, value: float, speeds: list[float]) -> None:
    # Scattered evenly over the row, and the same again every time.
    scatter = [(n * _GOLDEN) % 1 - 0.5 for n in range(len(speeds))]
    heights = [row.middle + 0.8 * row.height * part for part in scatter]
    draw_dots(ax, speeds, heights, colour=hue(row.day), size=3.6, alpha=0.55)
    if math.isfinite(value):
        ax.plot(
            [value], [row.middle], marker(row.day), ms=8, mfc=hue(row.day), mec=INK, mew=1, zorder=4
        )
    else:
        ax.annotate(
            "no value",
            (0.02, row.middle),
            xycoords=("axes fraction", "data"),
            va="center",
            fontsize=FONT - 1,
        )


def _day_marks(ax: Axes, rows: list[_Row], quantity: str, left: float) -> None:
    """Labels of days and chambers, and the mean of each day across its rows."""
    text = ax.get_yaxis_transform()
    for _, group in itertools.groupby(rows, key=lambda row: row.day):
        own = list(group)
        inside = WIDTH - left - 14
        start = -(left - 4) / inside
        top = own[0].top
        ax.text(
            start,
            top - _DAY_PX / 2 + 2,
            _day_label(own[0]),
            transform=text,
            va="center",
            fontweight="bold",
            fontsize=FONT - 0.5,
        )
        for row in own:
            ax.text(
                -6 / inside,
                row.middle,
                row.label,
                transform=text,
                va="center",
                ha="right",
                fontsize=FONT - 1,
            )
        values = [float(getattr(row.chamber, quantity)) for row in own]
        finite = [v for v in values if math.isfinite(v)]
        if finite:
            mean = sum(finite) / len(finite)
            bottom = own[-1].top + own[-1].height
            ax.plot([mean, mean], [top, bottom], color=hue(own[0].day), lw=2.4, ls=(0, (3, 1.5)))


def _description(condition: ConditionResult, quantity: str, values: list[float]) -> str:
    declared = QUANTITIES[quantity]
    finite = [v for v in values if math.isfinite(v)]
    estimate = condition.estimates[quantity]
    return (
        f"{counted(len(finite), 'chamber')} of {counted(condition.counts.days, 'day')}, "
        f"from {significant(min(finite))} to {significant(max(finite))} {declared.unit}; "
        f"the condition: {rounded(estimate.value, estimate.low, estimate.high)} {declared.unit}."
    )


def _caption(
    estimate: Estimate,
    drawn: dict[tuple[str, str], list[float]],
    dots: dict[tuple[str, str], list[float]],
) -> str:
    text = "Large marks: chambers. Dashed: mean of the chambers of a day. "
    if dots:
        shown, seen = sum(map(len, drawn.values())), sum(map(len, dots.values()))
        some = f" ({shown:,} of {seen:,} drawn)" if shown < seen else ""
        text = f"Dots: kept tracks{some}. {text}"
    if math.isfinite(estimate.low) or math.isfinite(estimate.high):
        return f"{text}Line and band: the condition with its {percent(estimate.level)} interval."
    return f"{text}Line: the condition, which has no interval."
