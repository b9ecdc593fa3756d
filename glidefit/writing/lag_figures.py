"""Mean squared displacement and heading correlation against lag, with the fitted model."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.results import ConditionResult, Curve
from glidefit.writing.colours import INK, PAPER, hue, marker
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
from glidefit.writing.rounding import significant
from glidefit.writing.wording import counted

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Floats = NDArray[np.float64]
_MOST_POINTS = 40
_WIDEST_BAND = 0.3  # of the model, in the panel of ratios


@dataclass(frozen=True, slots=True, kw_only=True)
class _Points:
    """The columns of a curve as arrays, at the lags that are drawn."""

    lag: Floats
    value: Floats
    low: Floats
    high: Floats
    model: Floats
    model_low: Floats
    model_high: Floats
    fitted: NDArray[np.bool_]
    frame_s: float


def _drawn(curves: Sequence[Curve], *, above: float) -> list[_Points]:
    """Curves with their finite points above a value; one without any is left out."""
    found = []
    for curve in curves:
        columns = {
            name: np.asarray(getattr(curve, name), dtype=float)
            for name in ("value", "low", "high", "model", "model_low", "model_high")
        }
        lag = np.asarray(curve.lag_s, dtype=float)
        shown = np.isfinite(columns["value"]) & (columns["value"] > above) & (lag > 0)
        rows = _even(np.flatnonzero(shown), lag)
        if len(rows):
            fitted = np.asarray(curve.fitted, dtype=bool)[rows]
            columns = {name: column[rows] for name, column in columns.items()}
            found.append(_Points(lag=lag[rows], fitted=fitted, frame_s=curve.frame_s, **columns))
    return found


def mean_squared_displacement(condition: ConditionResult) -> Drawing | None:
    """Measured points, the fitted model, and their ratio; None without points."""
    curves = _drawn(condition.msd, above=0)
    if not curves:
        return None
    with drawing_style():
        figure = canvas(380)
        upper = panel(figure, left=56, top=8, right=12, bottom=146)
        lower = panel(figure, left=56, top=250, right=12, bottom=44)
        for ax in (upper, lower):
            ax.set_xscale("log")
        upper.set_yscale("log")
        for n, points in enumerate(curves):
            _measured(upper, points, n, scale=np.ones(len(points.lag)))
            _model(upper, points)
            known = np.where(points.model > 0, points.model, np.nan)
            if np.any(np.isfinite(known)):
                _measured(lower, points, n, scale=known)
        lower.axhline(1, color=INK, lw=1)
        _msd_limits(upper, lower, curves)
        _fitted_range((upper, lower), curves)
        upper.tick_params(labelbottom=False)
        upper.set_ylabel("MSD (µm²)")
        lower.set_ylabel("MSD / model")
        lower.set_xlabel("lag (s)")
        figure.align_ylabels([upper, lower])
        svg = svg_text(
            figure,
            key="msd",
            title="Mean squared displacement against lag",
            description=_msd_description(curves),
        )
    return Drawing(
        svg=svg,
        heading="Mean squared displacement",
        caption=_caption(condition) + " Below: measured over fitted.",
        legend=_legend(curves),
    )


def heading_correlation(condition: ConditionResult) -> Drawing | None:
    """Mean cosine of the turn after each lag, with the model; None without points."""
    curves = _drawn(condition.heading_correlation, above=-math.inf)
    if not curves:
        return None
    with drawing_style():
        figure = canvas(290)
        ax = panel(figure, left=56, top=8, right=12, bottom=44)
        for n, points in enumerate(curves):
            _measured(ax, points, n, scale=np.ones(len(points.lag)))
            _model(ax, points)
        _correlation_limits(ax, curves)
        _fitted_range((ax,), curves)
        ax.set_ylabel("⟨cos Δθ⟩")
        ax.set_xlabel("lag (s)")
        svg = svg_text(
            figure,
            key="heading",
            title="Heading correlation against lag",
            description=_correlation_description(condition, curves),
        )
    read_off = significant(condition.heading_diffusion_rad2_s)
    caption = _caption(condition)
    if math.isfinite(condition.heading_diffusion_rad2_s):
        caption += f" D_r read off this curve alone: {read_off} rad²/s."
    return Drawing(svg=svg, heading="Heading correlation", caption=caption, legend=_legend(curves))


def _even(rows: NDArray[np.intp], lag: Floats) -> NDArray[np.intp]:
    if len(rows) <= _MOST_POINTS:
        return rows
    wanted = np.geomspace(lag[rows[0]], lag[rows[-1]], _MOST_POINTS)
    return rows[np.unique(np.clip(np.searchsorted(lag[rows], wanted), 0, len(rows) - 1))]


def _measured(ax: Axes, points: _Points, n: int, *, scale: Floats) -> None:
    """Points over a scale, with their band; those outside the fit are hollow."""
    low, high = points.low / scale, points.high / scale
    banded = np.isfinite(low) & np.isfinite(high)
    if ax.get_yscale() == "log":
        banded &= low > 0
    if banded.any():
        ax.fill_between(
            points.lag[banded], low[banded], high[banded], color=hue(n), alpha=0.22, lw=0
        )
    for used, face in ((points.fitted, hue(n)), (~points.fitted, PAPER)):
        ax.plot(
            points.lag[used],
            (points.value / scale)[used],
            marker(n),
            ms=4.5,
            mfc=face,
            mec=hue(n),
            mew=1,
            zorder=4,
        )


def _model(ax: Axes, points: _Points) -> None:
    known = np.isfinite(points.model)
    banded = np.isfinite(points.model_low) & np.isfinite(points.model_high)
    if banded.any():
        ax.fill_between(
            points.lag[banded],
            points.model_low[banded],
            points.model_high[banded],
            color=INK,
            alpha=0.14,
            lw=0,
        )
    if known.any():
        ax.plot(points.lag[known], points.model[known], color=INK, lw=1.5, zorder=3)


def _finite(parts: Sequence[Floats]) -> Floats:
    values = np.concatenate(parts)
    return values[np.isfinite(values)]


def _log_limits(values: Floats, *, room: float) -> tuple[float, float]:
    low, high = values.min(), values.max()
    factor = (high / low) ** room if high > low else 2.0
    return float(low / factor), float(high * factor)


def _msd_limits(upper: Axes, lower: Axes, curves: Sequence[_Points]) -> None:
    lags = _finite([c.lag for c in curves])
    heights = _finite([c.value for c in curves] + [c.model for c in curves])
    x = _log_limits(lags, room=0.04)
    y = _log_limits(heights[heights > 0], room=0.06)
    for ax in (upper, lower):
        ax.set_xlim(x)
        set_log_axis(ax.xaxis, *x)
    upper.set_ylim(y)
    set_log_axis(upper.yaxis, *y)
    with np.errstate(divide="ignore", invalid="ignore"):
        points = _farthest([c.value / c.model for c in curves])
        bands = _farthest([end / c.model for c in curves for end in (c.low, c.high)])
    # The band belongs to the picture unless it would flatten every departure of the points.
    reach = max(1.3 * points, min(1.15 * bands, _WIDEST_BAND), 0.02)
    lower.set_ylim(1 - reach, 1 + reach)
    set_linear_axis(lower.yaxis, ticks=3)


def _farthest(ratios: Sequence[Floats]) -> float:
    """Largest distance from 1."""
    finite = _finite(ratios)
    return float(np.abs(finite - 1).max()) if len(finite) else 0.0


def _correlation_limits(ax: Axes, curves: Sequence[_Points]) -> None:
    lags = _finite([c.lag for c in curves])
    heights = _finite([c.value for c in curves] + [c.model for c in curves])
    low = min(float(heights.min()), 0.9)
    room = 0.08 * (1 - low)
    ax.set_xlim(0, 1.04 * float(lags.max()))
    ax.set_ylim(low - room, max(1.0, float(heights.max())) + room)
    set_linear_axis(ax.xaxis)
    set_linear_axis(ax.yaxis)
    if low < 0:
        ax.axhline(0, color=INK, lw=0.6)


def _fitted_range(axes: Sequence[Axes], curves: Sequence[_Points]) -> None:
    fitted = _finite([c.lag[c.fitted] for c in curves])
    if not len(fitted):
        return
    for ax in axes:
        left, right = ax.get_xlim()
        ax.axvspan(
            max(float(fitted.min()), left),
            min(float(fitted.max()), right),
            color=INK,
            alpha=0.05,
            lw=0,
        )


def _msd_description(curves: Sequence[_Points]) -> str:
    parts = []
    for points in curves:
        text = (
            f"{counted(len(points.lag), 'point')} from {significant(points.value[0])} µm² after "
            f"{significant(points.lag[0])} s to {significant(points.value[-1])} µm² after "
            f"{significant(points.lag[-1])} s"
        )
        known = points.model > 0
        if known.any():
            ratio = points.value[known] / points.model[known]
            text += f"; over the model {significant(ratio.min())} to {significant(ratio.max())}"
        parts.append(text)
    return ". ".join(parts) + "."


def _correlation_description(condition: ConditionResult, curves: Sequence[_Points]) -> str:
    ends = [
        f"from {significant(c.value[0])} after {significant(c.lag[0])} s to "
        f"{significant(c.value[-1])} after {significant(c.lag[-1])} s"
        for c in curves
    ]
    return f"Mean cosine of the turn {'; '.join(ends)}."


def _caption(condition: ConditionResult) -> str:
    longest = ""
    if math.isfinite(condition.longest_lag_s):
        longest = f", up to {condition.longest_lag_s:.3g} s"
    return (
        "Marks and band: measured. Line and band: fitted model. Shaded, with filled marks: "
        f"the lags at which the fit is judged{longest}."
    )


def _legend(curves: Sequence[_Points]) -> tuple[Key, ...]:
    if len(curves) < 2:
        return ()
    return tuple(
        Key(hue=hue(n), marker=marker(n), text=f"frame interval {c.frame_s:.3g} s")
        for n, c in enumerate(curves)
    )
