"""One recording from file to clean tracks: the unit of work that workers share."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from glidefit.assay import Recording
from glidefit.errors import InputError
from glidefit.evidence import REASONS, CleanRecording
from glidefit.results import RecordingResult
from glidefit.running.checksums import sha256
from glidefit.settings import Settings
from glidefit.steps.plausible import implausible
from glidefit.tracks import Detections, Tracks

if TYPE_CHECKING:
    from glidefit.reading.video import VideoFacts
    from glidefit.steps.filaments import FilamentTracks

Floats = NDArray[np.float64]

# The sheet and the file may differ by this share before it is a contradiction.
_AGREE = 0.01
# Columns of a sheet that tell the field of a track table; `glidefit track` fills them.
FIELD_COLUMNS = ("field_width_um", "field_height_um")
# The box around all tracks is a little smaller than the field they were seen in.
_BOX_MARGIN = 1.02


@dataclass(frozen=True, slots=True, kw_only=True)
class Task:
    """A recording and the settings it is read with."""

    recording: Recording
    settings: Settings


@dataclass(frozen=True, slots=True, kw_only=True)
class Tracked:
    """Tracks of one recording as read or made from its video, before cleaning."""

    tracks: Tracks
    kind: str  # "video" or "track table"
    n_frames: int
    frame_s: float
    frame_s_source: str
    pixel_um: float  # NaN for a table in µm
    pixel_um_source: str
    exposure_s: float  # NaN if unknown
    exposure_source: str
    field_um: tuple[float, float]
    notes: tuple[str, ...]
    specks: Tracks | None = None  # of a video of filaments: what rests and is none


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """A cleaned recording, and its row of the results."""

    clean: CleanRecording
    result: RecordingResult


def track(task: Task) -> Tracked:
    """Tracks of a recording: read from its table, or detected and linked in its video."""
    return _from_video(task) if task.recording.is_video else _from_table(task)


def prepare(task: Task) -> Prepared:
    """Track and clean one recording."""
    from glidefit.steps.clean import clean

    recording, settings = task.recording, task.settings
    tracked = track(task)
    where = f"{recording.where}, {recording.name}"
    cleaned = clean(
        tracked.tracks,
        frame_s=tracked.frame_s,
        settings=settings.clean,
        where=where,
        resting=tracked.specks,
    )
    exposure = tracked.exposure_s
    if np.isnan(exposure):
        exposure = settings.fit.unknown_exposure * tracked.frame_s
    counted = {name: int((cleaned.reason == name).sum()) for name in REASONS}
    return Prepared(
        clean=CleanRecording(
            recording=recording.name,
            condition=recording.condition,
            day=recording.day,
            chamber=recording.chamber,
            field=recording.field,
            clean=cleaned,
            frame_s=tracked.frame_s,
            exposure_s=exposure,
            field_um=tracked.field_um,
            minutes=float("nan") if recording.minutes is None else recording.minutes,
        ),
        result=RecordingResult(
            recording=recording.name,
            condition=recording.condition,
            day=recording.day,
            chamber=recording.chamber,
            kind=tracked.kind,
            shape=recording.shape,
            sha256=sha256(recording.path),
            n_frames=tracked.n_frames,
            frame_s=tracked.frame_s,
            frame_s_source=tracked.frame_s_source,
            pixel_um=tracked.pixel_um,
            pixel_um_source=tracked.pixel_um_source,
            exposure_s=tracked.exposure_s,
            exposure_source=tracked.exposure_source,
            field_um=tracked.field_um,
            localization_error_um=cleaned.noise_um,
            smallest_speed_um_s=cleaned.smallest_speed_um_s,
            drift=cleaned.drift,
            tracks_seen=cleaned.tracks.n_tracks,
            tracks_kept=int(cleaned.kept.sum()),
            set_aside=counted,
            problems=(
                *tracked.notes,
                *implausible(
                    speed_um_s=cleaned.typical_speed_um_s,
                    noise_um=cleaned.noise_um,
                    frame_s=tracked.frame_s,
                    max_speed_um_s=settings.link.max_speed,
                ),
            ),
        ),
    )


def _from_table(task: Task) -> Tracked:
    from glidefit.reading.track_table import read_track_table

    recording = task.recording
    table = read_track_table(
        recording.path,
        columns=task.settings.columns,
        frame_s=recording.frame_s,
        pixel_um=recording.pixel_um,
        where=recording.name,
    )
    tracks = _frame_range(table.tracks, recording, offset=table.first_frame)
    exposure, source = _exposure(recording, None, table.frame_s)
    width, height = _field(tracks, task)
    return Tracked(
        tracks=tracks,
        kind="track table",
        n_frames=int(tracks.frame.max()) + 1,
        frame_s=table.frame_s,
        frame_s_source=table.frame_s_source,
        pixel_um=table.pixel_um,
        pixel_um_source="" if np.isnan(table.pixel_um) else "sheet",
        exposure_s=exposure,
        exposure_source=source,
        field_um=(width, height),
        notes=(*table.notes, *_unused_pixel(recording, table.pixel_um)),
    )


def _unused_pixel(recording: Recording, used: float) -> tuple[str, ...]:
    """A pixel size beside a table in µm: perhaps its positions are pixels after all."""
    if recording.pixel_um is None or not np.isnan(used):
        return ()
    return (
        f"the table has positions in µm, so pixel_um = {recording.pixel_um:g} of the sheet is not "
        "used; if they are pixels, call the columns x_px and y_px",
    )


def _field(tracks: Tracks, task: Task) -> tuple[float, float]:
    """Width and height in µm: from the settings, the sheet, or the box around all tracks."""
    recording, fit = task.recording, task.settings.fit
    box = float(np.ptp(tracks.x_um)), float(np.ptp(tracks.y_um))
    told = [recording.numbers.get(name) for name in FIELD_COLUMNS]
    width, height = (
        setting or in_sheet or side * _BOX_MARGIN
        for setting, in_sheet, side in zip(
            (fit.field_width, fit.field_height), told, box, strict=True
        )
    )
    if width < box[0] or height < box[1]:
        raise InputError(
            f"{recording.where}, {recording.name}",
            f"tracks extend over {box[0]:.4g} × {box[1]:.4g} µm",
            expected=f"tracks inside the field of {width:.4g} × {height:.4g} µm",
            remedy="Correct fit.field_width and fit.field_height (or field_width_um and "
            "field_height_um in the sheet), or the unit of the positions.",
        )
    return width, height


def _frame_range(tracks: Tracks, recording: Recording, *, offset: int) -> Tracks:
    """Only the frames that the sheet wants, in the table's own numbers, which begin at offset."""
    end = int(tracks.frame.max())
    first = max((recording.first_frame or 0) - offset, 0)
    last = end if recording.last_frame is None else recording.last_frame - offset
    if first == 0 and last >= end:
        return tracks
    inside = (tracks.frame >= first) & (tracks.frame <= last)
    if not inside.any():
        raise InputError(
            f"{recording.where}, {recording.name}",
            f"frames {recording.first_frame or 0} to {last + offset} hold no position; "
            f"the table has frames {offset} to {end + offset}",
            expected="a range of frames with positions",
            remedy="Correct first_frame and last_frame.",
        )
    table = tracks.to_frame()[inside].reset_index(drop=True)
    table["frame"] -= first
    return Tracks.from_frame(table)


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenVideo:
    """A video whose calibration is settled."""

    facts: VideoFacts
    first: int
    last: int
    pixel_um: float
    pixel_source: str
    frame_s: float
    frame_source: str
    exposure_s: float
    exposure_source: str

    def times(self, n_frames: int) -> Floats:
        """Start of the first frames after the first one; real times where the file has them."""
        if self.facts.times_s is None:
            return np.arange(n_frames, dtype=np.float64) * self.frame_s
        times = self.facts.times_s[self.first : self.first + n_frames]
        return np.asarray(times - times[0])


def open_video(recording: Recording) -> OpenVideo:
    """Settle calibration and range of frames of a video, without reading its frames.

    Raises
    ------
    InputError
        For a contradiction between sheet and file, or a missing calibration.
    """
    from glidefit.reading.video import read_facts

    where = f"{recording.where}, {recording.name}"
    facts = read_facts(recording.path, channel=recording.channel, position=recording.position)
    pixel_um, pixel_source = _agreed(
        where, "pixel_um", "µm per pixel", recording.pixel_um, facts.pixel_um
    )
    frame_s, frame_source = _agreed(
        where, "frame_s", "s between frames", recording.frame_s, facts.frame_s
    )
    exposure, exposure_source = _exposure(recording, facts.exposure_s, frame_s)
    first = recording.first_frame or 0
    last = facts.n_frames - 1 if recording.last_frame is None else recording.last_frame
    if last >= facts.n_frames or last - first < 2:
        raise InputError(
            where,
            f"frames {first} to {last} are wanted, the video has frames 0 to {facts.n_frames - 1}",
            expected="at least three frames inside the video",
            remedy="Correct first_frame and last_frame.",
        )
    return OpenVideo(
        facts=facts,
        first=first,
        last=last,
        pixel_um=pixel_um,
        pixel_source=pixel_source,
        frame_s=frame_s,
        frame_source=frame_source,
        exposure_s=exposure,
        exposure_source=exposure_source,
    )


def detect(
    recording: Recording, video: OpenVideo, *, settings: Settings, most_frames: int | None = None
) -> Detections:
    """Spots of a video, or of its first frames."""
    from glidefit.steps.detect import detect_spots

    where = f"{recording.where}, {recording.name}"
    frames = _frames(recording, video, settings=settings, most_frames=most_frames)
    return detect_spots(frames, pixel_um=video.pixel_um, settings=settings.detect, where=where)


def filaments(
    recording: Recording, video: OpenVideo, *, settings: Settings, most_frames: int | None = None
) -> FilamentTracks:
    """Filaments of a video, or of its first frames."""
    from glidefit.steps.filaments import track_filaments

    return track_filaments(
        _frames(recording, video, settings=settings, most_frames=most_frames),
        pixel_um=video.pixel_um,
        times_s=video.times(_last(video, most_frames) - video.first + 1),
        detect=settings.detect,
        link=settings.link,
        where=f"{recording.where}, {recording.name}",
        exposure_s=video.exposure_s,
    )


def _last(video: OpenVideo, most_frames: int | None) -> int:
    return video.last if most_frames is None else min(video.last, video.first + most_frames - 1)


def _frames(
    recording: Recording, video: OpenVideo, *, settings: Settings, most_frames: int | None
) -> Iterator[NDArray[np.generic]]:
    """Frames with bright tracers."""
    from glidefit.reading.video import read_frames

    for frame in read_frames(
        recording.path,
        first=video.first,
        last=_last(video, most_frames),
        channel=recording.channel,
        position=recording.position,
    ):
        dark = settings.detect.contrast == "dark" and frame.dtype.kind in "uif"
        yield -frame.astype(np.int64 if frame.dtype.kind in "ui" else np.float64) if dark else frame


def _from_video(task: Task) -> Tracked:
    """Tracks of the tracers in a video."""
    video = open_video(task.recording)
    find = _spot_tracks if task.recording.shape == "spot" else _filament_tracks
    tracks, specks, n_frames, notes = find(task, video)
    facts = video.facts
    return Tracked(
        tracks=tracks,
        kind="video",
        n_frames=n_frames,
        frame_s=video.frame_s,
        frame_s_source=video.frame_source,
        pixel_um=video.pixel_um,
        pixel_um_source=video.pixel_source,
        exposure_s=video.exposure_s,
        exposure_source=video.exposure_source,
        field_um=(facts.width_px * video.pixel_um, facts.height_px * video.pixel_um),
        notes=(*facts.notes, *notes),
        specks=specks,
    )


_Found = tuple[Tracks, Tracks | None, int, tuple[str, ...]]


def _filament_tracks(task: Task, video: OpenVideo) -> _Found:
    recording, settings = task.recording, task.settings
    found = filaments(recording, video, settings=settings)
    if found.tracks.n_tracks == 0:
        raise InputError(
            f"{recording.where}, {recording.name}",
            "no filament stands out of the noise in three frames"
            + "".join(f"; {note}" for note in found.notes),
            expected=f"filaments above {settings.detect.threshold:g} × noise",
            remedy="Look at the video; lower detect.threshold, or correct detect.spot_diameter or "
            "detect.contrast.",
        )
    return found.tracks, found.specks, found.n_frames, found.notes


def _spot_tracks(task: Task, video: OpenVideo) -> _Found:
    from glidefit.steps.link import link

    recording, settings = task.recording, task.settings
    where = f"{recording.where}, {recording.name}"
    detections = detect(recording, video, settings=settings)
    if len(detections.frame) == 0:
        raise InputError(
            where,
            "no spot stands out of the noise in any frame",
            expected=f"spots above {settings.detect.threshold:g} × noise",
            remedy="Look at the video; lower detect.threshold or correct detect.spot_diameter.",
        )
    times = video.times(detections.n_frames)
    tracks, notes = link(detections, times_s=times, settings=settings.link, where=where)
    return tracks, None, detections.n_frames, notes


def _agreed(
    where: str, column: str, unit: str, sheet: float | None, file: float | None
) -> tuple[float, str]:
    """A calibration from sheet or file; both may say it if they agree."""
    if sheet is not None and file is not None and abs(sheet / file - 1) > _AGREE:
        raise InputError(
            where,
            f"the sheet says {column} = {sheet:g}, the file says {file:g} {unit}",
            expected="the same calibration in both",
            remedy=f"Correct the sheet, or empty its {column} to take the file's.",
        )
    if sheet is not None:
        return sheet, "sheet"
    if file is not None:
        return file, "file"
    raise InputError(
        where,
        f"neither the sheet nor the file tells {unit}",
        expected=f"a number of {unit}",
        remedy=f"Fill the column {column} of the sheet.",
    )


def _exposure(recording: Recording, file: float | None, frame_s: float) -> tuple[float, str]:
    """Exposure in s and its source; NaN if unknown."""
    sheet = recording.exposure_s
    value, source = (sheet, "sheet") if sheet is not None else (file, "file")
    if value is None:
        return float("nan"), "unknown"
    if value > frame_s * (1 + 1e-6):
        raise InputError(
            f"{recording.where}, {recording.name}",
            f"exposure_s = {value:g} s from the {source} is longer than the frame interval of "
            f"{frame_s:g} s",
            expected="an exposure that ends before the next frame begins",
            remedy="Correct exposure_s or frame_s; both are in seconds.",
        )
    return value, source
