"""Speed against a column of the sheet: points of days, the fitted curve, its band."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from glidefit.results import ResponseCurve
from glidefit.writing.colours import INK, PAPER, hue, marker
from glidefit.writing.comparison_words import axis_label, curve_name, label, parameter_text
from glidefit.writing.drawing import (
    Drawing,
    Key,
    canvas,
    drawing_style,
    panel,
    set_linear_axis,
    set_log_axis,
    svg_text,
)
from glidefit.writing.rounding import percent, significant
from glidefit.writing.wording import counted, named, shortened, visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_DECADES = 20.0  # a larger ratio of the ends is drawn on a logarithmic axis
_MOST_KEYS = 12


def response_figure(curve: ResponseCurve, *, number: int) -> Drawing | None:
    """The figure of one curve; None without a point.

    Parameters
    ----------
    curve : ResponseCurve
    number : int
        Tells the figures of a page apart.
    """
    if not curve.points:
        return None
    what = label(curve.quantity).capitalize()
    days = list(dict.fromkeys(p.day for p in curve.points))
    with drawing_style():
        figure = canvas(260)
        ax = panel(figure, left=52, top=8, right=14, bottom=42)
        _axes(ax, curve)
        _curves(ax, curve)
        _points(ax, curve, days)
        ax.set_ylim(bottom=0)
        set_linear_axis(ax.yaxis)
        unit = f" ({shortened(curve.unit, width=12)})" if curve.unit else ""
        ax.set_xlabel(f"{shortened(curve.label, width=36)}{unit}")
        ax.set_ylabel(shortened(axis_label(curve.quantity), width=32))
        svg = svg_text(
            figure,
            key=f"response-{number}",
            title=f"{what} against {visible(curve.label)}",
            description=_description(curve),
        )
    return Drawing(
        svg=svg,
        heading=f"{what} against {visible(curve.label)}"
        + (f", {named(curve.series)}" if curve.series else ""),
        caption=_caption(curve, days),
        legend=tuple(
            Key(hue=hue(n), marker=marker(n), text=shortened(named(day), width=16))
            for n, day in enumerate(days[:_MOST_KEYS])
        )
        if len(days) > 1
        else (),
    )


def _axes(ax: Axes, curve: ResponseCurve) -> None:
    xs = [p.x for p in curve.points]
    low, high = min(xs), max(xs)
    if low > 0 and high / low > _DECADES:
        room = (high / low) ** 0.06
        ax.set_xscale("log")
        ax.set_xlim(low / room, high * room)
        set_log_axis(ax.xaxis, low / room, high * room)
        return
    room = 0.06 * ((high - low) or abs(high) or 1.0)
    ax.set_xlim(low - room, high + room)
    set_linear_axis(ax.xaxis)


def _curves(ax: Axes, curve: ResponseCurve) -> None:
    """The curve with its band, a piece for each inhibitor."""
    x = np.array(curve.x)
    at = np.nan_to_num(np.array(curve.at_inhibitor))
    for n, level in enumerate(sorted(set(at.tolist()))):
        own = at == level
        low, high = np.array(curve.low)[own], np.array(curve.high)[own]
        ax.fill_between(x[own], low, high, color=INK, alpha=0.12, lw=0)
        style = "-" if n == 0 else (0, (5, 1 + n))
        ax.plot(x[own], np.array(curve.curve)[own], color=INK, lw=1.4, ls=style)


def _points(ax: Axes, curve: ResponseCurve, days: Sequence[str]) -> None:
    for n, day in enumerate(days):
        own = [p for p in curve.points if p.day == day]
        ax.plot(
            [p.x for p in own],
            [p.value for p in own],
            marker(n),
            ms=7,
            mfc=hue(n),
            mec=PAPER,
            mew=0.8,
            ls="none",
            clip_on=False,
            zorder=4,
        )


def _caption(curve: ResponseCurve, days: Sequence[str]) -> str:
    what = "means of a condition on a day" if len(days) > 1 else "chambers"
    text = f"Marks: {what}."
    if curve.model:
        text += (
            f" Line and band: {visible(curve.formula)}, with its {percent(curve.level)} interval"
            + (" for the mean of days." if curve.covers == "days" else " for that day.")
        )
    levels = sorted({v for v in curve.at_inhibitor if math.isfinite(v)})
    if len(levels) > 1:
        text += (
            f" One line for each inhibitor concentration ({', '.join(map(significant, levels))})."
        )
    return text


def _description(curve: ResponseCurve) -> str:
    points = counted(len(curve.points), "point")
    if not curve.model:
        return f"{points}, no curve."
    return (
        f"{points}; {curve_name(curve.model)}: {', '.join(map(parameter_text, curve.parameters))}."
    )
