"""Videos to track tables, and a sheet that lists them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

import glidefit
from glidefit.assay import Assay, Recording
from glidefit.errors import InputError
from glidefit.pipeline.prepare import FIELD_COLUMNS, Task, Tracked, track
from glidefit.pipeline.run import collect, read_assay
from glidefit.running import folder as run_folder
from glidefit.running.checksums import sha256
from glidefit.settings import ColumnSettings, SourcedSettings, declarations

MARK = "provenance.json"
_FORMAT = "glidefit-tracks/1"


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackedVideos:
    """What was written."""

    sheet: Path
    n_videos: int
    n_tracks: int
    notes: tuple[str, ...]


def track_videos(
    sheets: tuple[Path, ...], out: Path, *, settings: SourcedSettings, workers: int
) -> TrackedVideos:
    """Detect and link every video of the sheets; write tables and a sheet for `glidefit fit`.

    Rows that are track tables already are listed in the new sheet as they are; where settings name
    their columns otherwise, they are written anew, so that one sheet can be read with one setting.
    """
    run_folder.check_output(out, holds=_is_ours)
    assay = read_assay(sheets)
    renamed = settings.values.columns != ColumnSettings()
    tasks = [
        Task(recording=r, settings=settings.values)
        for r in assay.recordings
        if r.is_video or renamed
    ]
    n_videos = sum(r.is_video for r in assay.recordings)
    if not n_videos:
        raise InputError(
            assay.path.name,
            "none of its recordings is a video",
            expected="videos to track",
            remedy="Use `glidefit run` or `glidefit fit` on the track tables.",
        )
    tracked = collect(track, tasks, workers=workers, title="videos")
    files = _files(assay, dict(zip([t.recording.name for t in tasks], tracked, strict=True)))
    files[MARK] = _provenance(sheets, tasks, settings)
    with run_folder.replaced(out, holds=_is_ours) as fresh:
        run_folder.write_files(fresh, files)
    return TrackedVideos(
        sheet=out / "assay.csv",
        n_videos=n_videos,
        n_tracks=sum(t.tracks.n_tracks for t in tracked),
        notes=tuple(
            f"{task.recording.name}: {note}"
            for task, t in zip(tasks, tracked, strict=True)
            for note in t.notes
        ),
    )


def _is_ours(folder: Path) -> bool:
    """True for a folder that an earlier `glidefit track` wrote, with nothing else in it."""
    names = {path.name for path in folder.iterdir()}
    # The mark: somebody's own sheet and tables may well have these names.
    marked = run_folder.is_marked(folder / MARK, _FORMAT)
    return marked and names <= {MARK, "assay.csv", "tracks"}


def _files(assay: Assay, tracked: dict[str, Tracked]) -> dict[str, str]:
    from glidefit.writing.recordings import sheet_text, track_table_text
    from glidefit.writing.slugs import slugs

    slug = slugs(r.name for r in assay.recordings)
    rows = []
    files: dict[str, str] = {}
    for r in assay.recordings:
        one = tracked.get(r.name)
        if one is None:
            rows.append(_row(r, str(r.path)))
            continue
        name = f"tracks/{slug[r.name]}.csv"
        files[name] = track_table_text(one.tracks)
        rows.append(_row(r, name, one))
    files["assay.csv"] = sheet_text(rows)
    return files


def _provenance(sheets: tuple[Path, ...], tasks: list[Task], settings: SourcedSettings) -> str:
    from glidefit.writing.json_files import provenance_text

    used = settings.values
    return provenance_text(
        {
            "format": _FORMAT,
            "version": glidefit.__version__,
            "sheets": [{"file": s.name, "sha256": sha256(s)} for s in sheets],
            "recordings": [
                {"recording": t.recording.name, "sha256": sha256(t.recording.path)} for t in tasks
            ],
            "settings": {
                d.key: {
                    "value": getattr(getattr(used, d.section), d.name),
                    "unit": d.unit,
                    "source": settings.source(d.key),
                }
                for d in declarations()
                if d.section in ("detect", "link")
            },
        }
    )


def _row(r: Recording, path: str, tracked: Tracked | None = None) -> dict[str, str]:
    """The row of the new sheet: calibration as settled, everything else as it was."""
    frame_s = r.frame_s if tracked is None else tracked.frame_s
    exposure_s = r.exposure_s if tracked is None else tracked.exposure_s
    known = {
        "frame_s": frame_s,
        "exposure_s": None if exposure_s is None or np.isnan(exposure_s) else exposure_s,
        "pixel_um": r.pixel_um if tracked is None else None,
        "minutes": r.minutes,
        **_range_or_field(r, tracked),
    }
    own = {name: value for name, value in r.numbers.items() if name not in known}
    return {
        "recording": path,
        "condition": r.condition,
        "day": r.day,
        "chamber": r.chamber,
        "shape": r.shape,
        **{name: "" if value is None else f"{value:.10g}" for name, value in known.items()},
        "control": "yes" if r.control else "",
        "preparation": r.preparation,
        "field": r.field,
        **{name: f"{value:.10g}" for name, value in own.items()},
        **r.labels,
    }


def _range_or_field(r: Recording, tracked: Tracked | None) -> dict[str, float | None]:
    """Range of frames of a table that is listed as it is; field of a video, cut already."""
    if tracked is None:
        return {"first_frame": r.first_frame, "last_frame": r.last_frame}
    return dict(zip(FIELD_COLUMNS, tracked.field_um, strict=True))
