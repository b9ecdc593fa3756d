"""The intervals of simulated experiments against the truth."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from glidefit.designs import Outcome, RehearsedQuantity
from glidefit.quantities import QUANTITIES
from glidefit.writing.colours import HUES, INK
from glidefit.writing.drawing import (
    Drawing,
    Key,
    canvas,
    draw_dots,
    drawing_style,
    panel,
    set_linear_axis,
    svg_text,
)
from glidefit.writing.rounding import significant

if TYPE_CHECKING:
    from matplotlib.axes import Axes

HOLDS, MISSES = HUES[0], HUES[1]
_MARGINS = 3.0  # median half widths that are drawn on either side of the truth


def intervals_against_truth(quantity: RehearsedQuantity, *, key: str) -> Drawing | None:
    """Estimate and interval of each experiment shown; None if none has a value."""
    known = [o for o in quantity.shown if math.isfinite(o.value)]
    if not known:
        return None
    declared = QUANTITIES[quantity.quantity]
    missed = [misses(o, quantity.truth) for o in quantity.shown]
    with drawing_style():
        figure = canvas(220)
        ax = panel(figure, left=58, top=8, right=10, bottom=42)
        ax.set_xlim(0, len(quantity.shown) + 1)
        ax.set_ylim(_limits(quantity, known))
        for misses_it, colour, width in ((False, HOLDS, 1.4), (True, MISSES, 2.8)):
            numbers = [n for n, m in enumerate(missed) if m == misses_it]
            _intervals(ax, quantity.shown, numbers, colour=colour, width=width)
        ax.axhline(quantity.truth, color=INK, lw=1.2, ls=(0, (4, 2)))
        set_linear_axis(ax.xaxis)
        set_linear_axis(ax.yaxis)
        ax.set_xlabel("simulated experiment")
        ax.set_ylabel(f"{declared.label}{f' ({declared.unit})' if declared.unit else ''}")
        svg = svg_text(
            figure,
            key=key,
            title=f"{declared.label.capitalize()} of simulated experiments",
            description=f"{len(known)} experiments; the truth is {significant(quantity.truth)} "
            f"{declared.unit}; {sum(missed)} intervals miss it.",
        )
    legend = (
        Key(hue=HOLDS, marker="o", text=f"holds the truth: {len(missed) - sum(missed)}"),
        Key(hue=MISSES, marker="o", text=f"misses it: {sum(missed)}"),
    )
    return Drawing(
        svg=svg,
        heading=declared.label.capitalize(),
        caption="" if quantity.with_interval else "Dots alone: there is no interval.",
        legend=legend if quantity.with_interval else (),
    )


def misses(outcome: Outcome, truth: float) -> bool:
    """True for an interval beside the truth; an open end misses nothing."""
    return bool(outcome.low > truth or outcome.high < truth)


def _limits(quantity: RehearsedQuantity, known: Sequence[Outcome]) -> tuple[float, float]:
    values = np.array([o.value for o in known])
    ends = np.array([(o.low, o.high) for o in known])
    arms = np.abs(ends - quantity.truth)
    near = values[np.abs(values - quantity.truth) <= 3 * quantity.truth]
    reach = float(np.abs(near - quantity.truth).max()) if len(near) else quantity.truth
    if np.isfinite(arms).any():
        reach = max(reach, min(_MARGINS * float(np.nanmedian(arms)), float(np.nanmax(arms))))
    reach = 1.05 * (reach or 1.0)
    low, high = quantity.truth - reach, quantity.truth + reach
    if quantity.quantity.endswith("fraction"):
        high = min(high, 1.02)
    return (max(low, 0.0) if values.min() >= 0 else low), high


def _intervals(
    ax: Axes, outcomes: Sequence[Outcome], numbers: Sequence[int], *, colour: str, width: float
) -> None:
    """One path of vertical lines, cut at the edges, and a dot at each estimate."""
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path

    bottom, top = ax.get_ylim()
    points: list[tuple[float, float]] = []
    for n in numbers:
        o = outcomes[n]
        if math.isnan(o.low) and math.isnan(o.high):
            continue
        low = bottom if math.isnan(o.low) else min(max(o.low, bottom), top)
        high = top if math.isnan(o.high) else max(min(o.high, top), bottom)
        points += [(n + 1, low), (n + 1, high)]
    if points:
        codes = [Path.MOVETO, Path.LINETO] * (len(points) // 2)
        ax.add_patch(PathPatch(Path(points, codes), fill=False, ec=colour, lw=width, alpha=0.8))
    dots = [n for n in numbers if bottom <= outcomes[n].value <= top]
    draw_dots(
        ax,
        [n + 1 for n in dots],
        [outcomes[n].value for n in dots],
        colour=colour,
        size=2.6 + width / 2,
        alpha=1.0,
    )
