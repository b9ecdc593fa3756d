"""The evidence of one chamber: its values, and how each track moves them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import ChamberEvidence
from glidefit.kernels import msd_fit
from glidefit.kernels.msd_fit import LagCurve, MsdFit
from glidefit.steps.fit.evidence_columns import COLUMN, CurveColumns
from glidefit.steps.fit.intervals import Interval, Kept
from glidefit.steps.fit.track_speeds import frame_speed, lasting_variance

Floats = NDArray[np.float64]

_N_PARAMETERS = len(msd_fit.PARAMETERS)


def fit_chamber(
    members: Sequence[Kept],
    intervals: Sequence[Interval],
    columns: Sequence[CurveColumns],
    *,
    longest_s: float,
    start: dict[str, float] | None,
) -> tuple[ChamberEvidence, str]:
    """Fit one chamber; its evidence, and the problem if it could not be fitted."""
    parts = [(c, i, i.of(members)) for c, i in zip(columns, intervals, strict=True)]
    parts = [(c, i, places) for c, i, places in parts if places]
    # Rows of the evidence follow the curves, interval by interval.
    ordered = [i.members[place] for _, i, places in parts for place in places]
    curves = [i.curve(places) for _, i, places in parts]
    result = msd_fit.fit_msd([curve.up_to(longest_s) for curve in curves], start=start)
    n_tracks = sum(one.tracks.n_tracks for one in ordered)
    width = columns[-1].heading_model.stop
    values, influence = np.full(width, np.nan), np.zeros((n_tracks, width))
    values[:_N_PARAMETERS], influence[:, :_N_PARAMETERS] = result.values, result.influence
    _set(
        values,
        influence,
        "speed_variance",
        lasting_variance(ordered, longest_s=longest_s, parameters=result.values),
    )
    _set(values, influence, "frame_speed", _mean_frame_speed(ordered))
    row = 0
    for (column, interval, places), curve in zip(parts, curves, strict=True):
        rows = slice(row, row + len(curve.sums))
        row = rows.stop
        _fill_msd(values, influence, rows, curve, column, result)
        cosines = [interval.cosines[place] for place in places]
        _fill_heading(values, influence, rows, cosines, column)
    own = ordered[0].source
    problem = f"{own.day}, chamber {own.chamber}: {result.problem}" if result.problem else ""
    return (
        ChamberEvidence(
            day=own.day,
            chamber=own.chamber,
            values=values,
            influence=influence,
            recording_of_track=_field_of_track(ordered),
        ),
        problem,
    )


def _set(values: Floats, influence: Floats, name: str, known: tuple[float, Floats]) -> None:
    values[COLUMN[name]], influence[:, COLUMN[name]] = known


def _field_of_track(members: Sequence[Kept]) -> NDArray[np.int64]:
    fields = list(dict.fromkeys(one.field for one in members))
    each = [np.full(one.tracks.n_tracks, fields.index(one.field)) for one in members]
    return np.concatenate(each).astype(np.int64)


def _mean_frame_speed(members: Sequence[Kept]) -> tuple[float, Floats]:
    sums = [frame_speed(one) for one in members]
    path = np.concatenate([p for p, _ in sums])
    time = np.concatenate([t for _, t in sums])
    if not time.sum() > 0:
        return float("nan"), np.zeros(len(path))
    value = float(path.sum() / time.sum())
    return value, (path - value * time) / time.sum()


def _fill_msd(
    values: Floats,
    influence: Floats,
    rows: slice,
    curve: LagCurve,
    columns: CurveColumns,
    result: MsdFit,
) -> None:
    values[columns.msd] = curve.value
    influence[rows, columns.msd] = np.nan_to_num(curve.influence * curve.value)
    if result.problem:
        return
    named = dict(zip(msd_fit.PARAMETERS, map(float, result.values), strict=True))
    values[columns.model] = msd_fit.model_values(curve, named)
    influence[:, columns.model] = result.influence @ _slope(curve, named)


def _slope(curve: LagCurve, named: dict[str, float]) -> Floats:
    """Derivative of the model at the lags by each parameter, (4, l)."""
    slope = []
    for name in msd_fit.PARAMETERS:
        step = 1e-5 * max(abs(named[name]), 1e-9)
        above = msd_fit.model_values(curve, named | {name: named[name] + step})
        below = msd_fit.model_values(curve, named | {name: named[name] - step})
        slope.append((above - below) / (2 * step))
    return np.array(slope)


def _fill_heading(
    values: Floats,
    influence: Floats,
    rows: slice,
    cosines: Sequence[tuple[Floats, Floats]],
    columns: CurveColumns,
) -> None:
    """Heading correlation, and A exp(-D_r t) through it from lag 2 on: noise lowers only A."""
    sums = np.concatenate([s for s, _ in cosines])
    counts = np.concatenate([c for _, c in cosines])
    total = counts.sum(axis=0)
    mean = np.where(total > 0, sums.sum(axis=0) / np.maximum(total, 1), np.nan)
    moved = np.nan_to_num((sums - mean * counts) / np.maximum(total, 1))
    values[columns.heading] = mean
    influence[rows, columns.heading] = moved
    use = columns.heading_fitted & (mean > 0)
    if use.sum() < 3:
        return
    t = columns.heading_lag_s
    design = np.stack([np.ones(use.sum()), -t[use]], axis=1)
    solve = np.linalg.solve(design.T @ design, design.T)
    log_a, turning = solve @ np.log(mean[use])
    change = (moved[:, use] / mean[use]) @ solve.T  # of (log A, D_r), by each track
    if np.isnan(values[COLUMN["heading_diffusion"]]):  # the first interval speaks for the chamber
        values[COLUMN["heading_diffusion"]] = turning
        influence[rows, COLUMN["heading_diffusion"]] = change[:, 1]
    model = np.exp(log_a - turning * t)
    values[columns.heading_model] = model
    influence[rows, columns.heading_model] = model * (change[:, :1] - change[:, 1:] * t)
