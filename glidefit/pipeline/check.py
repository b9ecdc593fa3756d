"""Look at an assay sheet and at each of its recordings, without a full run."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from glidefit.assay import Assay
from glidefit.errors import InputError, input_errors
from glidefit.pipeline.prepare import OpenVideo, Task, detect, filaments, open_video, track
from glidefit.running.progress import progress
from glidefit.running.workers import run_all
from glidefit.settings import SourcedSettings
from glidefit.steps.plausible import implausible
from glidefit.tracks import Tracks

# Frames of a video that are looked at.
_LOOK = 25


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """What a look at one recording shows."""

    recording: str
    condition: str
    kind: str
    n_frames: int
    frame_s: float
    frame_source: str
    pixel_um: float  # NaN for a table in µm
    exposure_s: float  # NaN if unknown
    brightness: str  # background and noise of a video, in counts; "" for a table
    seen: str  # "24 spots a frame", "37 tracks"
    localization_error_um: float
    quick_speed_um_s: float  # median of tracks that advance; NaN if none does
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Checked:
    """The sheet, a look at every recording that can be read, and all that is wrong."""

    assay: Assay
    looks: tuple[Look, ...]
    errors: tuple[InputError, ...]
    notes: tuple[str, ...]


def check(sheet: Path, *, settings: SourcedSettings, workers: int) -> Checked:
    """Check a sheet and look at its recordings.

    Raises
    ------
    InputErrors
        If the sheet itself cannot be used; all that is wrong in it.
    """
    from glidefit.reading.sheet import read_sheet, sheet_notes

    assay = read_sheet(sheet)
    tasks = [Task(recording=r, settings=settings.values) for r in assay.recordings]
    if not any(task.recording.is_video for task in tasks):
        workers = 1
    with progress(len(tasks), "recordings") as done:
        results = run_all(
            look, tasks, workers=workers, name=lambda task: task.recording.name, done=done
        )
    return Checked(
        assay=assay,
        looks=tuple(r for r in results if isinstance(r, Look)),
        errors=tuple(input_errors(results)),
        notes=(*sheet_notes(assay), *_design_notes(assay)),
    )


def _design_notes(assay: Assay) -> list[str]:
    """What the sheet's design will not be able to say."""
    notes = []
    for condition in assay.conditions:
        own = [r for r in assay.recordings if r.condition == condition]
        days = {r.day for r in own}
        chambers = {(r.day, r.chamber) for r in own}
        if len(chambers) == 1:
            notes.append(f"{condition}: one chamber, so there will be no interval")
        elif len(days) == 1:
            notes.append(f"{condition}: one day, so intervals will cover chambers of that day only")
    if not any(r.control for r in assay.recordings):
        notes.append("no condition is marked as control")
    return notes


def look(task: Task) -> Look:
    """Read a recording as far as needed to see whether a run can work on it."""
    return _look_at_video(task) if task.recording.is_video else _look_at_table(task)


def _look_at_table(task: Task) -> Look:
    from glidefit.steps.clean import clean

    recording = task.recording
    tracked = track(task)
    where = f"{recording.where}, {recording.name}"
    cleaned = clean(
        tracked.tracks, frame_s=tracked.frame_s, settings=task.settings.clean, where=where
    )
    return Look(
        recording=recording.name,
        condition=recording.condition,
        kind=tracked.kind,
        n_frames=tracked.n_frames,
        frame_s=tracked.frame_s,
        frame_source=tracked.frame_s_source,
        pixel_um=tracked.pixel_um,
        exposure_s=tracked.exposure_s,
        brightness="",
        seen=f"{tracked.tracks.n_tracks} tracks",
        localization_error_um=cleaned.noise_um,
        quick_speed_um_s=cleaned.typical_speed_um_s,
        notes=(
            *tracked.notes,
            *implausible(
                speed_um_s=cleaned.typical_speed_um_s,
                noise_um=cleaned.noise_um,
                frame_s=tracked.frame_s,
                max_speed_um_s=task.settings.link.max_speed,
            ),
        ),
    )


def _look_at_video(task: Task) -> Look:
    from glidefit.kernels import motion

    recording, settings = task.recording, task.settings
    video = open_video(recording)
    seen = (_look_at_spots if recording.shape == "spot" else _look_at_filaments)(task, video)
    notes = [*video.facts.notes, *seen.notes]
    noise, speed = float("nan"), float("nan")
    t = seen.tracks
    if t.n_tracks:
        each = motion.localization_noise(t.frame, t.offsets, t.x_um, t.y_um)
        noise = motion.common_noise(each, t.n_positions)
    if np.isfinite(noise):
        measured = motion.measure(t.frame, t.offsets, t.x_um, t.y_um, noise=noise)
        moving = motion.advancing(measured)
        if moving.any():
            speed = float(np.median(measured.speed_um_frame[moving])) / video.frame_s
    return Look(
        recording=recording.name,
        condition=recording.condition,
        kind="video",
        n_frames=video.last - video.first + 1,
        frame_s=video.frame_s,
        frame_source=video.frame_source,
        pixel_um=video.pixel_um,
        exposure_s=video.exposure_s,
        brightness=f"{seen.background:.0f} ± {seen.noise:.3g} counts",
        seen=seen.count,
        localization_error_um=noise,
        quick_speed_um_s=speed,
        notes=(
            *notes,
            *implausible(
                speed_um_s=speed,
                noise_um=noise,
                frame_s=video.frame_s,
                max_speed_um_s=settings.link.max_speed,
            ),
        ),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Seen:
    """What the first frames of a video show."""

    tracks: Tracks
    count: str
    background: float
    noise: float
    notes: tuple[str, ...]


def _look_at_spots(task: Task, video: OpenVideo) -> _Seen:
    from glidefit.steps.link import link

    spots = detect(task.recording, video, settings=task.settings, most_frames=_LOOK)
    tracks, notes = link(
        spots,
        times_s=video.times(spots.n_frames),
        settings=task.settings.link,
        where=task.recording.name,
    )
    if len(spots.frame) == 0:
        notes = (f"no spot stands out of the noise in the first {spots.n_frames} frames",)
    return _Seen(
        tracks=tracks,
        count=f"{len(spots.frame) / spots.n_frames:.1f} spots a frame",
        background=float(np.median(spots.background)),
        noise=float(np.median(spots.noise)),
        notes=notes,
    )


def _look_at_filaments(task: Task, video: OpenVideo) -> _Seen:
    found = filaments(task.recording, video, settings=task.settings, most_frames=_LOOK)
    notes = found.notes
    if found.tracks.n_tracks == 0:
        none = f"no filament stands out of the noise in the first {found.n_frames} frames"
        notes = (none, *notes)
    return _Seen(
        tracks=found.tracks,
        count=f"{len(found.tracks.frame) / found.n_frames:.1f} filaments a frame",
        background=float(np.median(found.background)),
        noise=float(np.median(found.noise)),
        notes=notes,
    )
