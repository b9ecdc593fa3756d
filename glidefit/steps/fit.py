"""Fit the active-Brownian model to the kept tracks of one condition, chamber by chamber."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import ChamberEvidence, CleanRecording
from glidefit.kernels import displacements, msd_fit
from glidefit.kernels.msd_fit import LagCurve
from glidefit.kernels.pairs import pairs_at_lag
from glidefit.settings import FitSettings
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Lags are looked at up to this share of the track length, and until the path is this share of
# the field: longer ones are seen on few and particular paths.
_TRACK_SHARE, _FIELD_SHARE = 0.6, 0.5
# Lags enter the fit only up to this share of the field.
_FITTED_FIELD_SHARE = 1 / 3
# The fit never stops before this many lags.
_FEWEST_FRAMES = 8
# A track's own speed is read at a lag of this share of the longest fitted one.
_SPEED_SHARE = 0.5
# Frame intervals that agree to this share are one.
_SAME_INTERVAL = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class CurveColumns:
    """Where the points of one frame interval stand among the evidence's columns."""

    frame_s: float
    lag_s: Floats
    fitted: Bools
    msd: slice
    model: slice
    heading_lag_s: Floats
    heading_fitted: Bools
    heading: slice
    heading_model: slice


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionFit:
    """What a fit leaves, whatever its method: evidence by chamber, curves, track speeds.

    Parameters
    ----------
    columns : dict of str: int
        Column of each scalar quantity in the evidence.
    chambers : tuple of ChamberEvidence
        Over the kept tracks, recordings in the order of ``recordings`` of the chamber.
    curves : tuple of CurveColumns
        One for each frame interval.
    track_speed_um_s : dict of str: (k,) array
        By recording, of its kept tracks.
    longest_lag_s : float
    model : str
    problems : tuple of str
    """

    columns: dict[str, int]
    chambers: tuple[ChamberEvidence, ...]
    curves: tuple[CurveColumns, ...]
    track_speed_um_s: dict[str, Floats]
    longest_lag_s: float
    pooled: Floats  # (4,) parameters of all tracks in one pot, for reading speeds off single lags
    model: str
    problems: tuple[str, ...]


SCALARS = (
    *msd_fit.PARAMETERS,
    "speed_variance",
    "frame_speed",
    "heading_diffusion",
)


def fit(recordings: Sequence[CleanRecording], *, settings: FitSettings) -> ConditionFit:
    """Fit speed, D_r, D∥ and localization error to the recordings of one condition.

    Parameters
    ----------
    recordings : sequence of CleanRecording
        At least one of them with a kept track.
    settings : FitSettings
    """
    kept = [_Kept.of(recording) for recording in recordings if recording.clean.kept.any()]
    groups = _intervals(kept)
    for group in groups:
        group.measure()
    longest, pooled = _longest_lag(groups, settings)
    chambers: dict[tuple[str, str], list[_Kept]] = {}
    for one in kept:
        chambers.setdefault((one.source.day, one.source.chamber), []).append(one)
    curves = _curve_columns(groups, longest)
    results = [
        _fit_chamber(members, groups, curves, longest, pooled) for members in chambers.values()
    ]
    spread = _speed_variance([evidence for evidence, _ in results])
    evidence = tuple(_mean_speed(evidence, spread) for evidence, _ in results)
    problems = [problem for _, problem in results if problem]
    return ConditionFit(
        columns={name: i for i, name in enumerate(SCALARS)},
        chambers=evidence,
        curves=curves,
        track_speed_um_s={
            one.source.recording: one.track_speed(longest, pooled.values) for one in kept
        },
        longest_lag_s=longest,
        pooled=pooled.values,
        model="active",
        problems=tuple(problems),
    )


class _Kept:
    """The kept tracks of one recording and their sums."""

    def __init__(self, source: CleanRecording, tracks: Tracks) -> None:
        self.source, self.tracks = source, tracks
        self.index = 0  # of its interval group

    @classmethod
    def of(cls, recording: CleanRecording) -> _Kept:
        return cls(recording, recording.clean.tracks.select(recording.clean.kept))

    def sums(self, lags: Ints) -> displacements.Sums:
        weighted = partial(displacements.lag_sums, field=self.source.field_um)
        return self._summed(["x_um", "y_um"], lags, weighted)

    def heading_sums(self, lags: Ints) -> displacements.Sums:
        return self._summed(["x_um", "y_um"], lags, displacements.heading_sums)

    def lag_times(self, lags: Ints) -> displacements.Sums:
        return self._summed(["time_s"], lags, displacements.lag_times)

    def _summed(self, columns: list[str], lags: Ints, of_grids: object) -> displacements.Sums:
        t = self.tracks
        data = [getattr(t, name) for name in columns]
        return displacements.track_sums(t.frame, t.offsets, data, lags=lags, of_grids=of_grids)  # type: ignore[arg-type]

    def measure(self, lags: Ints, heading_lags: Ints) -> None:
        self.lag_sums, self.lag_counts = self.sums(lags)
        self.cosines, self.cosine_counts = self.heading_sums(heading_lags)

    def frame_speed(self) -> tuple[Floats, Floats]:
        """Path and time from position to position, summed by track."""
        t = self.tracks
        step = np.hypot(np.diff(t.x_um), np.diff(t.y_um))
        time = np.diff(t.time_s)
        inside = np.diff(t.index) == 0
        owner = t.index[1:][inside]
        path = np.bincount(owner, weights=step[inside], minlength=t.n_tracks)
        spent = np.bincount(owner, weights=time[inside], minlength=t.n_tracks)
        return path.astype(np.float64), spent.astype(np.float64)

    def track_speed(self, longest: float, values: Floats) -> Floats:
        """Speed of each track from one lag, noise and bend removed; NaN if it is too short."""
        return np.sqrt(np.maximum(self._squared_speed(longest, values)[0], 0.0))

    def halves(self, longest: float, values: Floats) -> tuple[Floats, Floats]:
        """Squared speed of each track in its first and in its second half."""
        first, second = self._squared_speed(longest, values)[1:]
        return first, second

    def _squared_speed(self, longest: float, values: Floats) -> tuple[Floats, Floats, Floats]:
        t, frame_s = self.tracks, self.source.frame_s
        if not np.all(np.isfinite(values)):  # only the measured noise is known
            values = np.array([0.0, 0.0, 0.0, self.source.clean.noise_um**2])
        spans = displacements.frame_spans(t.frame, t.offsets)
        wanted = max(1, round(_SPEED_SHARE * longest / frame_s)) if np.isfinite(longest) else 1
        own = np.clip((spans - 1) // 4, 1, wanted)
        first, second = pairs_at_lag(t.frame, t.offsets, own)
        square = (t.x_um[second] - t.x_um[first]) ** 2 + (t.y_um[second] - t.y_um[first]) ** 2
        law = {
            int(lag): msd_fit.speed_law(
                lag * frame_s, exposure_s=self.source.exposure_s, values=values
            )
            for lag in np.unique(own)
        }
        scale, offset = np.array([law[int(lag)] for lag in own]).T
        owner = t.index[first]
        middle = t.frame[t.offsets[:-1]] + spans // 2

        def speed(chosen: Bools) -> Floats:
            count = np.bincount(owner[chosen], minlength=t.n_tracks)
            total = np.bincount(owner[chosen], weights=square[chosen], minlength=t.n_tracks)
            mean = np.where(count > 0, total / np.maximum(count, 1), np.nan)
            return np.asarray((mean - offset) / scale)

        whole = speed(np.ones(len(first), dtype=bool))
        early = speed(t.frame[second] < middle[owner])
        return whole, early, speed(t.frame[first] >= middle[owner])


class _Interval:
    """Recordings of one frame interval and exposure, at common lags."""

    def __init__(self, members: list[_Kept]) -> None:
        self.members = members
        self.frame_s = float(np.median([one.source.frame_s for one in members]))
        self.exposure_s = float(np.median([one.source.exposure_s for one in members]))
        self.width = min(min(one.source.field_um) for one in members)
        spans = np.concatenate(
            [displacements.frame_spans(m.tracks.frame, m.tracks.offsets) for m in members]
        )
        positions = np.concatenate([m.tracks.n_positions for m in members])
        # The span at which nine tenths of the positions lie in shorter tracks.
        order = np.argsort(spans)
        share = np.cumsum(positions[order]) / positions.sum()
        self.span = int(spans[order][np.searchsorted(share, 0.9)])
        speeds = [m.source.clean.typical_speed_um_s for m in members]
        self.speed = float(np.nanmedian(speeds)) if np.any(np.isfinite(speeds)) else 0.0

    def measure(self) -> None:
        longest = max(min(self.span - 2, _FEWEST_FRAMES), int(_TRACK_SHARE * self.span))
        if self.speed > 0:
            across = int(_FIELD_SHARE * self.width / self.speed / self.frame_s)
            longest = min(longest, max(across, _FEWEST_FRAMES))
        lags = msd_fit.log_spaced_lags(max(longest, 1))
        self.heading_lags = lags[lags >= 2] if len(lags) > 1 else np.array([2])
        for one in self.members:
            one.measure(lags, self.heading_lags)
        times = [one.lag_times(lags) for one in self.members]
        total = sum(counts.sum(axis=0) for _, counts in times)
        elapsed = sum(sums.sum(axis=0) for sums, _ in times)
        self.lag_s = np.where(total > 0, elapsed / np.maximum(total, 1), lags * self.frame_s)

    def curve(self, members: Sequence[_Kept]) -> LagCurve:
        return LagCurve(
            lag_s=self.lag_s,
            sums=np.concatenate([one.lag_sums for one in members]),
            counts=np.concatenate([one.lag_counts for one in members]),
            exposure_s=min(self.exposure_s, float(self.lag_s[0])),
        )


def _intervals(kept: list[_Kept]) -> list[_Interval]:
    groups: list[list[_Kept]] = []
    for one in kept:
        for group in groups:
            first = group[0].source
            same_rate = abs(first.frame_s / one.source.frame_s - 1) <= _SAME_INTERVAL
            if same_rate and abs(first.exposure_s - one.source.exposure_s) <= (
                _SAME_INTERVAL * first.frame_s
            ):
                group.append(one)
                break
        else:
            groups.append([one])
    intervals = [_Interval(group) for group in groups]
    for index, interval in enumerate(intervals):
        for one in interval.members:
            one.index = index
    return intervals


def _longest_lag(groups: list[_Interval], settings: FitSettings) -> tuple[float, msd_fit.MsdFit]:
    curves = [group.curve(group.members) for group in groups]
    shortest = min(group.lag_s[min(_FEWEST_FRAMES, len(group.lag_s)) - 1] for group in groups)
    if settings.longest_lag is not None:
        return settings.longest_lag, msd_fit.fit_msd(
            [curve.up_to(settings.longest_lag) for curve in curves]
        )
    most = max(
        min(g.lag_s[-1], _FITTED_FIELD_SHARE * g.width / g.speed if g.speed > 0 else np.inf)
        for g in groups
    )
    return msd_fit.longest_lag(
        curves, bend=settings.bend, at_least=shortest, at_most=max(most, shortest)
    )


def _curve_columns(groups: list[_Interval], longest: float) -> tuple[CurveColumns, ...]:
    place, columns = len(SCALARS), []

    def taken(n: int) -> slice:
        nonlocal place
        place += n
        return slice(place - n, place)

    for group in groups:
        n, k = len(group.lag_s), len(group.heading_lags)
        heading_lag = group.heading_lags.astype(np.float64) * group.frame_s
        columns.append(
            CurveColumns(
                frame_s=group.frame_s,
                lag_s=group.lag_s,
                fitted=group.lag_s <= longest * (1 + 1e-9),
                msd=taken(n),
                model=taken(n),
                heading_lag_s=heading_lag,
                heading_fitted=heading_lag <= longest * (1 + 1e-9),
                heading=taken(k),
                heading_model=taken(k),
            )
        )
    return tuple(columns)


def _fit_chamber(
    members: list[_Kept],
    groups: list[_Interval],
    columns: tuple[CurveColumns, ...],
    longest: float,
    pooled: msd_fit.MsdFit,
) -> tuple[ChamberEvidence, str]:
    members = sorted(members, key=lambda one: one.index)
    present = sorted({one.index for one in members})
    curves = {i: groups[i].curve([m for m in members if m.index == i]) for i in present}
    start = None
    if np.all(np.isfinite(pooled.values)):
        start = dict(zip(msd_fit.PARAMETERS, map(float, pooled.values), strict=True))
    result = msd_fit.fit_msd([curve.up_to(longest) for curve in curves.values()], start=start)
    n_tracks = sum(one.tracks.n_tracks for one in members)
    width = columns[-1].heading_model.stop
    values, influence = np.full(width, np.nan), np.zeros((n_tracks, width))
    values[:4], influence[:, :4] = result.values, result.influence
    values[4], influence[:, 4] = _halves_covariance(members, longest, result.values)
    values[5], influence[:, 5] = _ratio(*_stacked([one.frame_speed() for one in members]))
    row = 0
    for i, curve in curves.items():
        rows = slice(row, row + len(curve.sums))
        row = rows.stop
        group = [one for one in members if one.index == i]
        _fill_curves(values, influence, rows, curve, columns[i], result, group)
    own = members[0].source
    fields = list(dict.fromkeys(one.source.field or one.source.recording for one in members))
    owner = np.concatenate(
        [
            np.full(one.tracks.n_tracks, fields.index(one.source.field or one.source.recording))
            for one in members
        ]
    )
    problem = f"{own.day}, chamber {own.chamber}: {result.problem}" if result.problem else ""
    return (
        ChamberEvidence(
            day=own.day,
            chamber=own.chamber,
            values=values,
            influence=influence,
            recording_of_track=owner,
        ),
        problem,
    )


def _fill_curves(
    values: Floats,
    influence: Floats,
    rows: slice,
    curve: LagCurve,
    columns: CurveColumns,
    result: msd_fit.MsdFit,
    members: list[_Kept],
) -> None:
    """Measured and fitted MSD and heading correlation of one chamber at one frame interval."""
    values[columns.msd] = curve.value
    influence[rows, columns.msd] = np.nan_to_num(curve.influence * curve.value)
    named = dict(zip(msd_fit.PARAMETERS, result.values, strict=True))
    if not result.problem:
        values[columns.model], slope = _model_and_slope(curve, named)
        influence[:, columns.model] = result.influence @ slope
    cosines = np.concatenate([one.cosines for one in members])
    counts = np.concatenate([one.cosine_counts for one in members])
    total = counts.sum(axis=0)
    mean = np.where(total > 0, cosines.sum(axis=0) / np.maximum(total, 1), np.nan)
    values[columns.heading] = mean
    moved = (cosines - mean * counts) / np.maximum(total, 1)
    influence[rows, columns.heading] = np.nan_to_num(moved)
    _fit_heading(values, influence, rows, columns, mean, np.nan_to_num(moved))


def _fit_heading(
    values: Floats,
    influence: Floats,
    rows: slice,
    columns: CurveColumns,
    mean: Floats,
    moved: Floats,
) -> None:
    """⟨cos Δθ⟩ = A exp(-D_r t) from lag 2 on, A free: noise only lowers A."""
    use = columns.heading_fitted & (mean > 0)
    if use.sum() < 3:
        return
    t = columns.heading_lag_s
    design = np.stack([np.ones(use.sum()), -t[use]], axis=1)
    solve = np.linalg.solve(design.T @ design, design.T)
    log_a, turning = solve @ np.log(mean[use])
    change = (moved[:, use] / mean[use]) @ solve.T  # of (log A, D_r) by each track
    if np.isnan(values[6]):  # the first frame interval of a chamber speaks for it
        values[6], influence[rows, 6] = turning, change[:, 1]
    model = np.exp(log_a - turning * t)
    values[columns.heading_model] = model
    influence[rows, columns.heading_model] = model * (change[:, :1] - change[:, 1:] * t)


def _model_and_slope(curve: LagCurve, named: dict[str, float]) -> tuple[Floats, Floats]:
    """Model at the lags, and its derivative by each parameter (4, l)."""
    slope = []
    for name in msd_fit.PARAMETERS:
        step = 1e-5 * max(abs(named[name]), 1e-9)
        above = msd_fit.model_values(curve, named | {name: named[name] + step})
        below = msd_fit.model_values(curve, named | {name: named[name] - step})
        slope.append((above - below) / (2 * step))
    return msd_fit.model_values(curve, named), np.array(slope)


def _stacked(pairs: list[tuple[Floats, Floats]]) -> tuple[Floats, Floats]:
    return np.concatenate([a for a, _ in pairs]), np.concatenate([b for _, b in pairs])


def _ratio(top: Floats, bottom: Floats) -> tuple[float, Floats]:
    """Σ top / Σ bottom, and what each track adds to it."""
    if not bottom.sum() > 0:
        return float("nan"), np.zeros(len(top))
    value = float(top.sum() / bottom.sum())
    return value, (top - value * bottom) / bottom.sum()


def _halves_covariance(
    members: list[_Kept], longest: float, values: Floats
) -> tuple[float, Floats]:
    """Variance of the true speed from track to track: covariance of v² in halves, over 4 v².

    Measurement errors of the two halves are independent, so only what lasts remains.
    """
    first, second = _stacked([one.halves(longest, values) for one in members])
    usable = np.isfinite(first) & np.isfinite(second)
    n = int(usable.sum())
    moved = np.zeros(len(first))
    if n < 3:
        return float("nan"), moved
    a, b = first[usable], second[usable]
    mean = float((a.mean() + b.mean()) / 2)
    product = (a - a.mean()) * (b - b.mean()) / (n - 1) / (4 * mean)
    value = float(product.sum())
    moved[usable] = product - value / n
    return value, moved


def _speed_variance(chambers: list[ChamberEvidence]) -> float:
    """Mean over chambers of the speed's variance from filament to filament, at least 0."""
    each = np.array([chamber.values[4] for chamber in chambers])
    return max(float(np.nanmean(each)), 0.0) if np.any(np.isfinite(each)) else 0.0


def _mean_speed(evidence: ChamberEvidence, variance: float) -> ChamberEvidence:
    """The MSD knows √⟨v²⟩; the mean speed is a little less where filaments differ."""
    values, influence = evidence.values.copy(), evidence.influence.copy()
    square = values[0] ** 2 - variance
    if np.isfinite(values[0]) and square > 0:
        influence[:, 0] *= values[0] / np.sqrt(square)
        values[0] = np.sqrt(square)
    return ChamberEvidence(
        day=evidence.day,
        chamber=evidence.chamber,
        values=values,
        influence=influence,
        recording_of_track=evidence.recording_of_track,
    )
