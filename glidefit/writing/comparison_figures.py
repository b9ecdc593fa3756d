"""Ratios to the reference on a logarithmic axis, with what single days say."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from glidefit.results import Comparison
from glidefit.writing.colours import HUES, INK, PAPER
from glidefit.writing.comparison_words import FRACTION, differs, effect, label
from glidefit.writing.drawing import (
    FONT,
    Drawing,
    canvas,
    draw_dots,
    drawing_style,
    panel,
    set_linear_axis,
    set_log_axis,
    svg_text,
)
from glidefit.writing.rounding import percent, rounded
from glidefit.writing.wording import named, shortened

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_LABEL, _LETTER_PX = 19, 6.4
_FARTHEST = 3.0  # an axis reaches no farther than this beyond the outermost value, as a factor
_MOST_DESCRIBED = 6


def ratio_figures(comparisons: Sequence[Comparison]) -> tuple[Drawing, ...]:
    """One figure a quantity, the primary one first; one without a value is left out."""
    keys = dict.fromkeys(c.quantity for c in sorted(comparisons, key=lambda c: not c.primary))
    drawings = (_figure([c for c in comparisons if c.quantity == key]) for key in keys)
    return tuple(drawing for drawing in drawings if drawing is not None)


def _figure(comparisons: Sequence[Comparison]) -> Drawing | None:
    if not any(math.isfinite(effect(c)[0]) for c in comparisons):
        return None
    quantity = comparisons[0].quantity
    fraction = quantity == FRACTION
    several = len({c.reference for c in comparisons}) > 1
    labels = [_label(c, several=several) for c in comparisons]
    row = 32.0 if len(comparisons) <= 12 else 22.0
    what = f"{label(quantity)}: {'difference from' if fraction else 'ratio to'} the reference"
    with drawing_style():
        figure = canvas(row * len(comparisons) + 50)
        left = 14 + _LETTER_PX * max(map(len, labels))
        ax = panel(figure, left=left, top=4, right=16, bottom=42)
        ax.set_ylim(len(comparisons) - 0.4, -0.5)
        _scale(ax, comparisons, fraction=fraction)
        _middle(ax, comparisons[0], fraction=fraction)
        for n, c in enumerate(comparisons):
            _mark(ax, n, c)
        ax.set_yticks(range(len(labels)), labels)
        ax.tick_params(axis="y", length=0)
        ax.spines["left"].set_visible(False)
        ax.set_xlabel("difference" if fraction else "ratio")
        svg = svg_text(
            figure,
            key="ratio-" + "".join(c if c.isalnum() else "-" for c in quantity),
            title=what[:1].upper() + what[1:],
            description=_description(comparisons),
        )
    heading = label(quantity).capitalize()
    primary = any(c.primary for c in comparisons)
    return Drawing(svg=svg, heading=heading + (", primary" if primary else ""), caption="")


def _label(c: Comparison, *, several: bool) -> str:
    width = _LABEL if not several else _LABEL // 2 + 2
    text = shortened(named(c.condition), width=width)
    return f"{text} / {shortened(named(c.reference), width=width)}" if several else text


def _scale(ax: Axes, comparisons: Sequence[Comparison], *, fraction: bool) -> None:
    values = [effect(c) for c in comparisons]
    centres = [v for v, _, _ in values if math.isfinite(v)]
    marks = [x for _, *ends in values for x in ends] + [
        u.change for c in comparisons for u in c.units
    ]
    margins = [m for c in comparisons if math.isfinite(m := c.margin)]
    if fraction:
        near = [*centres, 0.0, *(s * m for m in margins for s in (-1, 1))]
        near += [x for x in marks if abs(x) <= 1]
        low, high = min(near), max(near)
        room = 0.06 * ((high - low) or 1.0)
        ax.set_xlim(low - room, high + room)
        set_linear_axis(ax.xaxis)
        return
    reach = (min([*centres, 1.0]) / _FARTHEST, max([*centres, 1.0]) * _FARTHEST)
    near = [*centres, 1.0, *(1 + s * m for m in margins for s in (-1, 1))]
    near += [x for x in marks if reach[0] <= x <= reach[1]]
    near = [x for x in near if x > 0]
    low, high = min(near), max(near)
    room = (high / low) ** 0.06 if high > low else 1.1
    low, high = low / room, high * room
    ax.set_xscale("log")
    ax.set_xlim(low, high)
    set_log_axis(ax.xaxis, low, high)


def _middle(ax: Axes, c: Comparison, *, fraction: bool) -> None:
    """No difference as a line, and the margin within which two count as alike."""
    middle = 0.0 if fraction else 1.0
    if math.isfinite(c.margin):
        ax.axvspan(middle - c.margin, middle + c.margin, color=INK, alpha=0.08, lw=0)
    ax.axvline(middle, color=INK, lw=0.8, ls=(0, (4, 3)))


def _mark(ax: Axes, n: int, c: Comparison) -> None:
    value, low, high = effect(c)
    left, right = ax.get_xlim()
    if not math.isfinite(value):
        ax.annotate(
            "no value",
            (0.02, n),
            xycoords=("axes fraction", "data"),
            va="center",
            fontsize=FONT - 1,
        )
        return
    colour = HUES[1] if differs(c) else HUES[0]
    if math.isfinite(low) or math.isfinite(high):
        ends = (low if low >= left else left, high if high <= right else right)
        for end, inside, shape in ((ends[0], low, "<"), (ends[1], high, ">")):
            if end != inside:
                ax.plot([end], [n], shape, ms=7, mfc=colour, mec=colour, clip_on=False)
        ax.plot(list(ends), [n, n], color=colour, lw=3, solid_capstyle="butt", zorder=2)
    shape = "D" if differs(c) else "o"
    ax.plot([value], [n], shape, ms=8, mfc=colour, mec=PAPER, mew=1.2, zorder=4)
    dots = [u.change for u in c.units if left <= u.change <= right]
    heights = [n + 0.28 + 0.05 * (i % 2) for i in range(len(dots))]
    draw_dots(ax, dots, heights, colour=INK, size=4, alpha=0.6)


def _description(comparisons: Sequence[Comparison]) -> str:
    parts = [
        f"{named(c.condition)} to {named(c.reference)}: {rounded(*effect(c))}"
        for c in comparisons[:_MOST_DESCRIBED]
    ]
    more = len(comparisons) - len(parts)
    return "; ".join(parts) + (f"; and {more} more, see the table." if more else ".")


def ratio_caption(comparisons: Sequence[Comparison]) -> str:
    """What the marks of these figures are, said once for all of them."""
    levels = sorted({c.ratio.level for c in comparisons})
    margins = sorted({c.margin for c in comparisons if math.isfinite(c.margin)})
    text = "Large mark: the comparison; "
    text += f"bar: its {percent(levels[0])} interval; " if levels else ""
    text += "diamond where that excludes no difference (dashed line)."
    if any(c.units for c in comparisons):
        text += " Small dots: single days, or chambers of a single day."
    if margins:
        text += f" Grey: ±{percent(margins[0])}, within which two count as alike."
    return text
