"""Recordings of one frame interval, and the sums of their tracks at common lags."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import CleanRecording
from glidefit.kernels import displacements, msd_fit
from glidefit.kernels.displacements import Sums
from glidefit.kernels.msd_fit import LagCurve
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Lags are looked at up to this share of the track length, and until the path is this share of
# the field: longer ones are seen on few and particular paths.
_TRACK_SHARE, _FIELD_SHARE = 0.6, 0.5
# The fit never stops before this many lags.
FEWEST_FRAMES = 8
# Frame intervals and exposures that agree to this share of the interval are one.
_SAME = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class Kept:
    """The kept tracks of one recording."""

    source: CleanRecording
    tracks: Tracks

    @classmethod
    def of(cls, recording: CleanRecording) -> Kept:
        """Select them."""
        return cls(source=recording, tracks=recording.clean.tracks.select(recording.clean.kept))

    @property
    def field(self) -> str:
        """Field of view; recordings of one field are one sample."""
        return self.source.field or self.source.recording


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """Recordings of one frame interval and exposure, summed at common lags.

    ``squares`` and ``cosines`` hold (sums, counts) of each member: (tracks, lags) arrays.
    """

    members: tuple[Kept, ...]
    frame_s: float
    exposure_s: float
    width_um: float  # of the narrowest field
    speed_um_s: float  # typical; 0 if nothing advances
    lag_s: Floats
    heading_lags: Ints
    squares: tuple[Sums, ...]
    cosines: tuple[Sums, ...]

    def of(self, members: Sequence[Kept]) -> list[int]:
        """Places of some recordings among the members; those of other intervals are passed over."""
        wanted = {one.source.recording for one in members}
        return [i for i, one in enumerate(self.members) if one.source.recording in wanted]

    def curve(self, places: Sequence[int]) -> LagCurve:
        """Squared displacements of some members."""
        return LagCurve(
            lag_s=self.lag_s,
            sums=np.concatenate([self.squares[i][0] for i in places]),
            counts=np.concatenate([self.squares[i][1] for i in places]),
            exposure_s=min(self.exposure_s, float(self.lag_s[0])),
        )


def intervals(kept: Sequence[Kept]) -> tuple[Interval, ...]:
    """Recordings grouped by frame interval and exposure, each group with its sums."""
    groups: list[list[Kept]] = []
    for one in kept:
        for group in groups:
            if _alike(group[0].source, one.source):
                group.append(one)
                break
        else:
            groups.append([one])
    return tuple(_interval(tuple(group)) for group in groups)


def _alike(one: CleanRecording, two: CleanRecording) -> bool:
    same_rate = abs(one.frame_s / two.frame_s - 1) <= _SAME
    return same_rate and abs(one.exposure_s - two.exposure_s) <= _SAME * one.frame_s


def _interval(members: tuple[Kept, ...]) -> Interval:
    frame_s = float(np.median([one.source.frame_s for one in members]))
    width = min(min(one.source.field_um) for one in members)
    speeds = [one.source.clean.typical_speed_um_s for one in members]
    speed = float(np.nanmedian(speeds)) if np.any(np.isfinite(speeds)) else 0.0
    lags = msd_fit.log_spaced_lags(_longest(members, speed=speed, width=width, frame_s=frame_s))
    heading_lags = lags[lags >= 2] if len(lags) > 1 else np.array([2])
    return Interval(
        members=members,
        frame_s=frame_s,
        exposure_s=float(np.median([one.source.exposure_s for one in members])),
        width_um=width,
        speed_um_s=speed,
        lag_s=_elapsed(members, lags, frame_s),
        heading_lags=heading_lags,
        squares=tuple(
            _sums(
                one,
                ("x_um", "y_um"),
                lags,
                partial(displacements.lag_sums, field=one.source.field_um),
            )
            for one in members
        ),
        cosines=tuple(
            _sums(one, ("x_um", "y_um"), heading_lags, displacements.heading_sums)
            for one in members
        ),
    )


def _longest(members: Sequence[Kept], *, speed: float, width: float, frame_s: float) -> int:
    """Longest lag that is looked at, in frames."""
    tables = [one.tracks for one in members]
    spans = np.concatenate([displacements.frame_spans(t.frame, t.offsets) for t in tables])
    positions = np.concatenate([t.n_positions for t in tables])
    # The span below which nine tenths of the positions lie.
    order = np.argsort(spans)
    share = np.cumsum(positions[order]) / positions.sum()
    span = int(spans[order][np.searchsorted(share, 0.9)])
    longest = max(min(span - 2, FEWEST_FRAMES), int(_TRACK_SHARE * span))
    if speed > 0:
        across = int(_FIELD_SHARE * width / speed / frame_s)
        longest = min(longest, max(across, FEWEST_FRAMES))
    return max(longest, 1)


def _elapsed(members: Sequence[Kept], lags: Ints, frame_s: float) -> Floats:
    """Mean real time of each lag, s."""
    times = [_sums(one, ("time_s",), lags, displacements.lag_times) for one in members]
    count = np.sum([counts.sum(axis=0) for _, counts in times], axis=0)
    total = np.sum([sums.sum(axis=0) for sums, _ in times], axis=0)
    return np.where(count > 0, total / np.maximum(count, 1), lags * frame_s)


def _sums(one: Kept, columns: Sequence[str], lags: Ints, of_grids: displacements.OfGrids) -> Sums:
    t = one.tracks
    data = [getattr(t, name) for name in columns]
    return displacements.track_sums(t.frame, t.offsets, data, lags=lags, of_grids=of_grids)
