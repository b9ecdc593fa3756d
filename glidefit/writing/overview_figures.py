"""All conditions side by side: value, interval and chambers of each main quantity."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from glidefit.quantities import QUANTITIES
from glidefit.results import ChamberResult, ConditionResult, Estimate
from glidefit.writing.colours import HUES, INK, PAPER
from glidefit.writing.drawing import (
    FONT,
    Drawing,
    canvas,
    draw_dots,
    drawing_style,
    panel,
    set_linear_axis,
    svg_text,
)
from glidefit.writing.rounding import percent, rounded
from glidefit.writing.wording import named, shortened

if TYPE_CHECKING:
    from matplotlib.axes import Axes

OVERVIEW = (
    "speed_um_s",
    "rotational_diffusion_rad2_s",
    "persistence_length_um",
    "motile_fraction",
)
_LABEL, _LETTER_PX = 19, 6.4
_MOST_DESCRIBED = 6


def overview(conditions: Sequence[ConditionResult]) -> tuple[Drawing, ...]:
    """One figure a quantity; a quantity that no condition has is left out."""
    return tuple(
        drawing for key in OVERVIEW if (drawing := _side_by_side(conditions, key)) is not None
    )


def _side_by_side(conditions: Sequence[ConditionResult], key: str) -> Drawing | None:
    estimates = [c.estimates[key] for c in conditions]
    chambers = [[_chamber_value(r, key) for r in c.chambers] for c in conditions]
    limits = _limits(estimates, chambers, share=key.endswith("fraction"))
    if limits is None:
        return None
    declared = QUANTITIES[key]
    labels = [_label(n, c.condition) for n, c in enumerate(conditions, start=1)]
    row = 32.0 if len(conditions) <= 12 else 22.0
    with drawing_style():
        figure = canvas(row * len(conditions) + 50)
        left = 14 + _LETTER_PX * max(map(len, labels))
        ax = panel(figure, left=left, top=4, right=16, bottom=42)
        ax.set_xlim(limits)
        ax.set_ylim(len(conditions) - 0.4, -0.5)
        for n, condition in enumerate(conditions):
            if condition.control and math.isfinite(estimates[n].value):
                ax.axvline(estimates[n].value, color=INK, lw=0.8, ls=(0, (4, 3)))
            _interval(ax, n, estimates[n], control=condition.control)
            _chambers(ax, n, chambers[n])
        ax.set_yticks(range(len(labels)), labels)
        ax.tick_params(axis="y", length=0)
        ax.spines["left"].set_visible(False)
        set_linear_axis(ax.xaxis)
        unit = f" ({declared.unit})" if declared.unit else ""
        ax.set_xlabel(f"{declared.label}{unit}")
        svg = svg_text(
            figure,
            key=f"overview-{key.replace('_', '-')}",
            title=f"{declared.label.capitalize()} of all conditions",
            description=_description(conditions, key),
        )
    return Drawing(
        svg=svg,
        heading=declared.label.capitalize() + (f", {declared.formula}" if "length" in key else ""),
        caption="",
    )


def _label(number: int, name: str) -> str:
    """The number that the condition has in the table, and as much of its name as there is room."""
    return f"{number}  {shortened(named(name), width=_LABEL)}"


def _chamber_value(chamber: ChamberResult, key: str) -> float:
    if key == "persistence_length_um":
        turning = chamber.rotational_diffusion_rad2_s
        return chamber.speed_um_s / turning if turning > 0 else math.nan
    return float(getattr(chamber, key))


def _limits(
    estimates: Sequence[Estimate], chambers: Sequence[Sequence[float]], *, share: bool
) -> tuple[float, float] | None:
    """Room for values and intervals, but no farther than three times the largest value."""
    if share:
        known = any(math.isfinite(e.value) for e in estimates)
        return (-0.02, 1.02) if known else None
    values = [e.value for e in estimates if math.isfinite(e.value)]
    if not values:
        return None
    reach = 3 * max(abs(v) for v in values) or 1.0
    marks = [x for e in estimates for x in (e.low, e.high)] + [x for own in chambers for x in own]
    near = values + [x for x in marks if abs(x) <= reach]
    low, high = min(near), max(near)
    room = 0.05 * ((high - low) or abs(high) or 1.0)
    return low - room, high + room


def _interval(ax: Axes, n: int, estimate: Estimate, *, control: bool) -> None:
    left, right = ax.get_xlim()
    colour = INK if control else HUES[0]
    if not math.isfinite(estimate.value):
        limit = rounded(estimate.value, estimate.low, estimate.high).interval
        text = "no value" if limit == "no interval" else limit
        ax.text(left, n, text, va="center", fontsize=FONT - 1)
        return
    if math.isfinite(estimate.low) or math.isfinite(estimate.high):
        # NaN is an open end and compares as false.
        low = estimate.low if estimate.low >= left else left
        high = estimate.high if estimate.high <= right else right
        for end, inside, shape in ((low, estimate.low, "<"), (high, estimate.high, ">")):
            if end != inside:
                ax.plot([end], [n], shape, ms=7, mfc=colour, mec=colour, clip_on=False)
        ax.plot(
            [low, high],
            [n, n],
            color=colour,
            lw=3,
            solid_capstyle="butt",
            zorder=2,
        )
    shape = "s" if control else "o"
    ax.plot([estimate.value], [n], shape, ms=8, mfc=colour, mec=PAPER, mew=1.2, zorder=4)


def _chambers(ax: Axes, n: int, values: Sequence[float]) -> None:
    left, right = ax.get_xlim()
    finite = [v for v in values if left <= v <= right]
    heights = [n + 0.28 + 0.05 * (i % 2) for i in range(len(finite))]
    draw_dots(ax, finite, heights, colour=INK, size=4, alpha=0.6)


def _description(conditions: Sequence[ConditionResult], key: str) -> str:
    parts = []
    for condition in conditions[:_MOST_DESCRIBED]:
        e = condition.estimates[key]
        unit = QUANTITIES[key].unit
        text = f"{named(condition.condition)}: {rounded(e.value, e.low, e.high)} {unit}"
        parts.append(text.strip())
    more = len(conditions) - len(parts)
    return "; ".join(parts) + (f"; and {more} more, see the table." if more else ".")


def overview_caption(conditions: Sequence[ConditionResult]) -> str:
    """What the marks of these figures are, said once for all of them."""
    estimates = [c.estimates[key] for c in conditions for key in OVERVIEW]
    levels = sorted({e.level for e in estimates if math.isfinite(e.low) or math.isfinite(e.high)})
    bars = f"bar: its {percent(levels[0])} interval" if levels else "no interval"
    text = f"Large mark: the condition; {bars}; small dots: chambers."
    if levels:
        text += " An arrow head at the end of a bar: the interval goes on."
    if any(c.control for c in conditions):
        text += " Square and dashed line: the control."
    return text
