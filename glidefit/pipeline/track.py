"""Videos to track tables, and a sheet that lists them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from glidefit.assay import Assay, Recording
from glidefit.errors import InputError
from glidefit.pipeline.prepare import Task, Tracked, track
from glidefit.pipeline.run import collect, read_assay
from glidefit.running import folder as run_folder
from glidefit.settings import SourcedSettings


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

    Rows that are track tables already are listed in the new sheet as they are.
    """
    run_folder.check_output(out, holds=_is_ours)
    assay = read_assay(sheets)
    tasks = [Task(recording=r, settings=settings.values) for r in assay.recordings if r.is_video]
    if not tasks:
        raise InputError(
            assay.path.name,
            "none of its recordings is a video",
            expected="videos to track",
            remedy="Use `glidefit run` or `glidefit fit` on the track tables.",
        )
    tracked = collect(track, tasks, workers=workers, title="videos")
    _write(assay, dict(zip([t.recording.name for t in tasks], tracked, strict=True)), out)
    return TrackedVideos(
        sheet=out / "assay.csv",
        n_videos=len(tasks),
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
    return "assay.csv" in names and names <= {"assay.csv", "tracks"}


def _write(assay: Assay, tracked: dict[str, Tracked], out: Path) -> None:
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
    with run_folder.replaced(out, holds=_is_ours) as fresh:
        run_folder.write_files(fresh, files)


def _row(r: Recording, path: str, tracked: Tracked | None = None) -> dict[str, str]:
    """The row of the new sheet: calibration as settled, everything else as it was."""
    frame_s = r.frame_s if tracked is None else tracked.frame_s
    exposure_s = r.exposure_s if tracked is None else tracked.exposure_s
    known = {
        "frame_s": frame_s,
        "exposure_s": None if exposure_s is None or np.isnan(exposure_s) else exposure_s,
        "pixel_um": r.pixel_um if tracked is None else None,
        "minutes": r.minutes,
    }
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
        **{name: f"{value:.10g}" for name, value in r.numbers.items()},
        **r.labels,
    }
