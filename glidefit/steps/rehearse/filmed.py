"""How a condition was filmed, and what it showed: what a rehearsal repeats."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence

import numpy as np

from glidefit.designs import WITH_COMPONENTS, Components, FilmedDesign
from glidefit.quantities import QUANTITIES
from glidefit.results import ConditionResult, RecordingResult


def filmed_design(
    condition: ConditionResult,
    recordings: Sequence[RecordingResult],
    components: Sequence[Components],
    *,
    unknown_exposure: float,
) -> FilmedDesign:
    """How a condition was filmed, and what it showed.

    Parameters
    ----------
    condition : ConditionResult
        With a speed.
    recordings : sequence of RecordingResult
        Those of the condition.
    components : sequence of Components
        Of the quantities of `WITH_COMPONENTS` that the condition has.
    unknown_exposure : float
        Share of the frame interval that stands for an exposure that nobody told.
    """
    notes: list[str] = []
    frame_s = _usual([r.frame_s for r in recordings], "frame interval", "s", notes)
    n_frames = round(_usual([float(r.n_frames) for r in recordings], "frames", "", notes))
    exposure = _usual(
        [
            r.exposure_s if math.isfinite(r.exposure_s) else unknown_exposure * r.frame_s
            for r in recordings
        ],
        "exposure",
        "s",
        notes,
    )
    chambers = Counter((r.day, r.chamber) for r in recordings)
    each = _usual([float(n) for n in chambers.values()], "recordings per chamber", "", notes)
    frames, seen = condition.counts.frames_set_aside, max(condition.counts.frames_seen, 1)
    estimates = {key: e.value for key, e in condition.estimates.items()}

    def known(key: str, otherwise: float, instead: str) -> float:
        if math.isfinite(estimates[key]) and estimates[key] > 0:
            return estimates[key]
        notes.append(f"The {QUANTITIES[key].label} is not resolved; {instead}.")
        return otherwise

    noise = float(np.nanmedian([0.0, *(r.localization_error_um for r in recordings)][1:]))
    speed = estimates["speed_um_s"]
    rates = estimates["stop_rate_per_s"], estimates["go_rate_per_s"]
    pauses = all(math.isfinite(rate) and rate > 0 for rate in rates)
    if pauses:
        notes.append("Filaments pause; the least scatter is that of some that do not.")
    return FilmedDesign(
        condition=condition.condition,
        slug=condition.slug,
        frame_s=frame_s,
        exposure_s=min(exposure, frame_s),
        n_frames=n_frames,
        field_um=_field(recordings, notes),
        recordings_per_chamber=round(each),
        filaments=_filaments(condition, recordings),
        motile_fraction=known("motile_fraction", 1.0, "all filaments are taken to glide"),
        stuck=frames.get("stuck", 0) / seen,
        pivoting=frames.get("pivoting", 0) / seen,
        detached=frames.get("detached", 0) / seen,
        localization_error_um=known(
            "localization_error_um", noise, f"the noise of the tracks, {noise:.3g} µm, is taken"
        ),
        speed_um_s=speed,
        rotational_diffusion_rad2_s=known(
            "rotational_diffusion_rad2_s", 0.0, "the simulated paths are straight"
        ),
        longitudinal_diffusion_um2_s=known("translational_diffusion_um2_s", 0.0, "0 is taken"),
        stop_rate_per_s=rates[0] if pauses else 0.0,
        go_rate_per_s=rates[1] if pauses else 0.0,
        filament_spread=min(known("speed_spread_um_s", 0.0, "0 is taken") / speed, 1.0),
        components=tuple(components),
        notes=tuple(notes),
    )


def _usual(values: Sequence[float], name: str, unit: str, notes: list[str]) -> float:
    """The commonest value; a note if there are others."""
    value, n = Counter(values).most_common(1)[0]
    if n < len(values):
        notes.append(
            f"Recordings differ in {name}; the commonest is simulated: {value:g} {unit}".rstrip()
            + "."
        )
    return value


def _field(recordings: Sequence[RecordingResult], notes: list[str]) -> tuple[float, float]:
    """Median field: without a declared one it is the extent of the tracks, never quite the same."""
    sides = np.array([r.field_um for r in recordings])
    width, height = np.median(sides, axis=0)
    if np.any(np.ptp(sides, axis=0) > 0.05 * sides.min(axis=0)):
        notes.append(
            f"Recordings differ in their fields; one of {width:.3g} × {height:.3g} µm is simulated."
        )
    return _short(width), _short(height)


def _filaments(
    condition: ConditionResult, recordings: Sequence[RecordingResult]
) -> tuple[tuple[float, ...], ...]:
    """Filaments in the field at a moment, by day and chamber: filament-frames over frames."""
    frames: dict[tuple[str, str], float] = {}
    for r in recordings:
        frames[r.day, r.chamber] = frames.get((r.day, r.chamber), 0.0) + r.n_frames
    seen = dict.fromkeys(frames, 0)
    for track in condition.tracks:
        seen[track.day, track.chamber] += track.n_positions
    days = sorted({day for day, _ in frames})
    return tuple(
        tuple(float(f"{seen[key] / frames[key]:.4g}") for key in sorted(frames) if key[0] == day)
        for day in days
    )


def has_components(condition: ConditionResult) -> tuple[str, ...]:
    """Quantities of the condition of which components can be told."""
    return tuple(
        key
        for key in WITH_COMPONENTS
        if condition.estimates[key].value > 0
        and any(math.isfinite(getattr(c, key)) for c in condition.chambers)
    )


def _short(value: float) -> float:
    return float(f"{value:.6g}")
