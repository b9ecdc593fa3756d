"""What more days bring: half width or power against the number of days."""

from __future__ import annotations

from typing import TYPE_CHECKING

from glidefit.designs import Cell, Goal, PlanTable
from glidefit.writing.colours import HUES, INK, PAPER
from glidefit.writing.drawing import (
    Drawing,
    Key,
    canvas,
    drawing_style,
    panel,
    plain_tick,
    set_linear_axis,
    set_log_axis,
    svg_text,
)
from glidefit.writing.rounding import percent

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_DRAWN = (1, 2, 4)
_MARKS = ("o", "s", "^", "D")


def against_days(table: PlanTable, goal: Goal, *, usual: int, heading: str, key: str) -> Drawing:
    """Lines for 1, 2 and 4 chambers a day, the band of the usual number, and the present design.

    Parameters
    ----------
    table : PlanTable
    goal : Goal
        Drawn as a line.
    usual : int
        Chambers a day as filmed.
    heading : str
    key : str
        Starts every id.
    """
    drawn = sorted({*_DRAWN, usual})
    styles = dict(zip(drawn, zip(HUES, _MARKS, strict=True), strict=False))
    by_chambers = {n: [c for c in table.cells if c.chambers == n and not c.endless] for n in drawn}
    wanted = goal.power if goal.is_difference else goal.half_width
    with drawing_style():
        figure = canvas(250)
        ax = panel(figure, left=58, top=8, right=12, bottom=42)
        _scale(ax, table, goal, [c for cells in by_chambers.values() for c in cells])
        bottom, top = ax.get_ylim()
        band = by_chambers[usual]
        ax.fill_between(
            [c.days for c in band],
            [max(100 * c.low, bottom) for c in band],
            [min(100 * c.high, top) for c in band],
            color=styles[usual][0],
            alpha=0.14,
            lw=0,
        )
        ax.axhline(100 * wanted, color=INK, lw=1.2, ls=(0, (4, 2)))
        for number, cells in by_chambers.items():
            colour, shape = styles[number]
            ax.plot(
                [c.days for c in cells],
                [100 * c.value for c in cells],
                f"{shape}-",
                color=colour,
                lw=1.6,
                ms=5,
                mec=PAPER,
                mew=0.8,
            )
        ax.plot(
            [table.present.days],
            [100 * table.present.value],
            "D",
            ms=10,
            mfc="none",
            mec=INK,
            mew=1.8,
            zorder=5,
        )
        ax.set_xlabel("days")
        ax.set_ylabel("power (%)" if goal.is_difference else "expected half width (± %)")
        svg = svg_text(figure, key=key, title=heading, description=_description(table, goal, usual))
    legend = tuple(
        Key(hue=colour, marker=shape, text=f"{n} chamber{'s' if n > 1 else ''} a day")
        for n, (colour, shape) in styles.items()
    )
    return Drawing(
        svg=svg,
        heading=heading,
        caption=f"Open diamond: designed as filmed. Dashed: wanted. Band: for {usual} "
        f"chamber{'s' if usual > 1 else ''} a day, 90 % of what the data leave open.",
        legend=legend,
    )


def _scale(ax: Axes, table: PlanTable, goal: Goal, cells: list[Cell]) -> None:
    ax.set_xlim(1.7, 10.3)
    set_linear_axis(ax.xaxis, ticks=10)
    ax.xaxis.set_major_formatter(plain_tick)
    if goal.is_difference:
        ax.set_ylim(0, 102)
        set_linear_axis(ax.yaxis)
        return
    values = [100 * c.value for c in (*cells, table.present)] + [100 * goal.half_width]
    low, high = 0.7 * min(v for v in values if v > 0), 1.4 * max(values)
    ax.set_yscale("log")
    ax.set_ylim(low, high)
    set_log_axis(ax.yaxis, low, high)


def _description(table: PlanTable, goal: Goal, usual: int) -> str:
    parts = [
        f"{c.days} days: {percent(c.value)}"
        for c in table.cells
        if c.chambers == usual and not c.endless
    ]
    what = "Power" if goal.is_difference else "Half width"
    return f"{what} with {usual} chambers a day; {'; '.join(parts)}."
