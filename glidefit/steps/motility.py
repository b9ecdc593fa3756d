"""Who glides, and how that changes with time: motile fraction and speed by stretch."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import JUMP, KEPT, SHORT, STUCK, UNCLEAR, ChamberEvidence, CleanRecording
from glidefit.kernels import msd_fit
from glidefit.kernels.pairs import pairs_at_lag
from glidefit.results import TimePoint

Floats = NDArray[np.float64]

COLUMNS = {"motile_fraction": 0, "ever_moved_fraction": 1}
# A recording is looked at in this many stretches at most, each of at least so many frames.
_STRETCHES, _FEWEST_FRAMES = 6, 10


def motility(
    recordings: Sequence[CleanRecording], *, passive: bool = False
) -> tuple[ChamberEvidence, ...]:
    """Motile fraction and share that ever moved, by chamber, over all tracks seen.

    Motile fraction = filament-frames gliding / filament-frames seen: the chance that a filament
    present at a moment glides. Counting tracks instead favours fast filaments, which enter the
    field more often and leave it sooner. Tracks that cannot be judged (under three positions, too
    short to tell gliding from rest, a jump) count on neither side. Where filaments are passive,
    none glides.

    Returns
    -------
    tuple of ChamberEvidence
        Columns as in `COLUMNS`.
    """
    chambers: dict[tuple[str, str], list[CleanRecording]] = {}
    for recording in recordings:
        chambers.setdefault((recording.day, recording.chamber), []).append(recording)
    return tuple(_chamber(*key, them, passive) for key, them in chambers.items())


def _chamber(
    day: str, chamber: str, recordings: list[CleanRecording], passive: bool
) -> ChamberEvidence:
    fields = list(dict.fromkeys(r.field or r.recording for r in recordings))
    owner, rows = [], []
    for one in recordings:
        clean = one.clean
        judged = clean.decided & ~np.isin(clean.reason, (JUMP, SHORT, UNCLEAR))
        frames = clean.tracks.n_positions.astype(np.float64)
        gliding = judged & (clean.reason == KEPT) & (not passive)
        moved = judged & (clean.reason != STUCK)
        rows.append(np.stack([frames * gliding, frames * judged, moved, judged], axis=1))
        owner.append(np.full(clean.tracks.n_tracks, fields.index(one.field or one.recording)))
    table = np.concatenate(rows).astype(np.float64)
    values, influence = np.full(2, np.nan), np.zeros((len(table), 2))
    filaments = np.zeros(2)
    for column, (top, bottom) in enumerate(((0, 1), (2, 3))):
        total = table[:, bottom].sum()
        if total > 0:
            values[column] = table[:, top].sum() / total
            influence[:, column] = (table[:, top] - values[column] * table[:, bottom]) / total
            # So many of equal weight would say as much.
            filaments[column] = total**2 / np.sum(table[:, bottom] ** 2)
    return ChamberEvidence(
        day=day,
        chamber=chamber,
        values=values,
        influence=influence,
        recording_of_track=np.concatenate(owner),
        filaments=filaments,
    )


def time_course(
    recordings: Sequence[CleanRecording], *, longest_lag_s: float, pooled: Floats
) -> tuple[TimePoint, ...]:
    """Speed and motile fraction in successive stretches of every recording.

    Parameters
    ----------
    recordings : sequence of CleanRecording
    longest_lag_s : float
        Of the fit; speeds are read at a lag of at most half of it.
    pooled : (4,) array
        Parameters from which noise and bend at that lag are taken.
    """
    return tuple(point for one in recordings for point in _stretches(one, longest_lag_s, pooled))


def _stretches(one: CleanRecording, longest_lag_s: float, pooled: Floats) -> list[TimePoint]:
    tracks = one.clean.tracks
    n_frames = int(tracks.frame.max()) + 1
    n = int(np.clip(n_frames // _FEWEST_FRAMES, 1, _STRETCHES))
    edges = np.linspace(0, n_frames, n + 1).round().astype(np.int64)
    kept = np.repeat(one.clean.kept, tracks.n_positions)
    reason = np.repeat(one.clean.reason, tracks.n_positions)
    judged = np.repeat(one.clean.decided, tracks.n_positions) & (reason != JUMP)
    judged &= ~np.isin(reason, (SHORT, UNCLEAR))
    stretch = np.searchsorted(edges, tracks.frame, side="right") - 1
    seen = np.bincount(stretch[judged], minlength=n)
    gliding = np.bincount(stretch[judged & kept], minlength=n)
    speeds = _speeds(one, edges, longest_lag_s, pooled)
    middle = (edges[:-1] + edges[1:]) / 2 * one.frame_s
    return [
        TimePoint(
            recording=one.recording,
            day=one.day,
            chamber=one.chamber,
            time_s=float(middle[i]),
            minutes=one.minutes + float(middle[i]) / 60,
            speed_um_s=float(speeds[i]),
            motile_fraction=float(gliding[i] / seen[i]) if seen[i] else float("nan"),
            n_frames=int(seen[i]),
        )
        for i in range(n)
    ]


def _speeds(
    one: CleanRecording, edges: NDArray[np.int64], longest_lag_s: float, pooled: Floats
) -> Floats:
    """Root mean square speed in each stretch, noise and bend removed; NaN without pairs."""
    nan = np.full(len(edges) - 1, np.nan)
    if not one.clean.kept.any() or not np.all(np.isfinite(pooled)):
        return nan
    tracks = one.clean.tracks.select(one.clean.kept)
    stretch = int(np.diff(edges).min())
    lag = int(np.clip(round(longest_lag_s / 2 / one.frame_s), 1, max(stretch // 3, 1)))
    first, second = pairs_at_lag(tracks.frame, tracks.offsets, lag)
    square = (tracks.x_um[second] - tracks.x_um[first]) ** 2
    square += (tracks.y_um[second] - tracks.y_um[first]) ** 2
    where = np.searchsorted(edges, tracks.frame[first] + lag / 2, side="right") - 1
    count = np.bincount(where, minlength=len(nan))
    mean = np.bincount(where, weights=square, minlength=len(nan)) / np.maximum(count, 1)
    scale, offset = msd_fit.speed_law(lag * one.frame_s, exposure_s=one.exposure_s, values=pooled)
    speed = np.sqrt(np.maximum((mean - offset) / scale, 0.0))
    return np.where(count > 0, speed, nan)
