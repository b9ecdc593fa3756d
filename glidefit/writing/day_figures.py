"""The chart of a condition day by day."""

from __future__ import annotations

from typing import TYPE_CHECKING

from glidefit.results import DayChart
from glidefit.writing.colours import HUES, INK, PAPER
from glidefit.writing.comparison_words import axis_label, days_sentence, label
from glidefit.writing.drawing import (
    FONT,
    Drawing,
    canvas,
    drawing_style,
    panel,
    set_linear_axis,
    svg_text,
)
from glidefit.writing.rounding import percent, significant
from glidefit.writing.wording import named, shortened

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_MOST_LABELS = 20
_PANEL_PX, _LETTER_PX = 138.0, 14.0


def day_figure(chart: DayChart, *, number: int) -> Drawing:
    """Values of the days with centre line and limits; days out of control stand out.

    Parameters
    ----------
    chart : DayChart
    number : int
        Tells the figures of a page apart.
    """
    with drawing_style():
        figure = canvas(210)
        ax = panel(figure, left=52, top=8, right=44, bottom=64)
        _lines(ax, chart)
        _points(ax, chart)
        _days(ax, chart)
        ax.set_ylabel(shortened(axis_label(chart.quantity), width=20))
        set_linear_axis(ax.yaxis)
        svg = svg_text(
            figure,
            key=f"days-{number}",
            title=f"{label(chart.quantity).capitalize()} of {named(chart.condition)} day by day",
            description=_description(chart),
        )
    return Drawing(
        svg=svg,
        heading=named(chart.condition) + (", control" if chart.control else ""),
        caption=_caption(chart),
    )


def _caption(chart: DayChart) -> str:
    n_out = sum(bool(day.signals) for day in chart.days)
    limits = f"{significant(chart.low)} and {significant(chart.high)}"
    return (
        f"{days_sentence(n_out, len(chart.days))} Line: centre {significant(chart.centre)}; "
        f"dashed: limits {limits}, 3 sigma away. Sigma is {percent(chart.relative_sigma)} from "
        f"day to day, the SD of all days that are like the others {percent(chart.relative_sd)}."
    )


def _lines(ax: Axes, chart: DayChart) -> None:
    """Centre line and limits, each with its number where there is room for it."""
    ax.set_xlim(-0.6, len(chart.days) - 0.4)
    values = [day.value for day in chart.days]
    ends = [*values, chart.low, chart.high]
    room = 0.08 * (max(ends) - min(ends) or 1.0)
    ax.set_ylim(min(ends) - room, max(ends) + room)
    apart = (chart.high - chart.centre) / (max(ends) - min(ends) + 2 * room) * _PANEL_PX
    for level, style in ((chart.high, (0, (4, 3))), (chart.centre, "-"), (chart.low, (0, (4, 3)))):
        ax.axhline(level, color=INK, lw=0.9, ls=style)
        if apart < _LETTER_PX and level != chart.centre:
            continue
        ax.annotate(
            significant(level),
            (1, level),
            xycoords=("axes fraction", "data"),
            xytext=(5, 0),
            textcoords="offset points",
            va="center",
            fontsize=FONT - 2,
        )


def _points(ax: Axes, chart: DayChart) -> None:
    values = [day.value for day in chart.days]
    ax.plot(range(len(values)), values, color=HUES[0], lw=1, alpha=0.6)
    for n, day in enumerate(chart.days):
        out = bool(day.signals)
        ax.plot(
            [n],
            [day.value],
            "D" if out else "o",
            ms=10 if out else 7,
            mfc=HUES[1] if out else HUES[0],
            mec=INK if out else PAPER,
            mew=1,
            zorder=4,
        )


def _days(ax: Axes, chart: DayChart) -> None:
    every = -(-len(chart.days) // _MOST_LABELS)
    shown = [n for n in range(len(chart.days)) if n % every == 0]
    ax.set_xticks(
        shown,
        [shortened(named(chart.days[n].day), width=10) for n in shown],
        rotation=90,
        fontsize=FONT - 2,
    )


def _description(chart: DayChart) -> str:
    out = [
        f"{named(day.day)}: {significant(day.value)}, {', '.join(day.signals)}"
        for day in chart.days
        if day.signals
    ]
    text = (
        f"Centre {significant(chart.centre)}, limits {significant(chart.low)} to "
        f"{significant(chart.high)}. "
    )
    return text + ("; ".join(out) + "." if out else "No day is out of control.")
