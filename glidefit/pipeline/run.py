"""The main job: assay sheets in, a folder of pages, tables and results out."""

from __future__ import annotations

import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import glidefit
from glidefit.assay import Assay, Recording
from glidefit.errors import InputError, InputErrors, input_errors
from glidefit.pipeline.prepare import Prepared, Task, prepare
from glidefit.pipeline.side_by_side import check_names
from glidefit.pipeline.study import study
from glidefit.results import StudyResult
from glidefit.running import folder as run_folder
from glidefit.running.checksums import sha256
from glidefit.running.progress import progress
from glidefit.running.workers import run_all
from glidefit.settings import SourcedSettings
from glidefit.tracks import Tracks


@dataclass(frozen=True, slots=True, kw_only=True)
class Job:
    """What a run was asked to do."""

    sheets: tuple[Path, ...]
    out: Path
    settings: SourcedSettings
    seed: int
    workers: int
    command: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Done:
    """What a run left behind."""

    out: Path
    tracks_kept: int
    tracks_set_aside: int
    problems: int


def run(job: Job) -> Done:
    """Everything: tracks, fits, intervals, tables and pages."""
    return _analyse(job, pages=True)


def fit(job: Job) -> Done:
    """Results and tables from track tables, without pages."""
    return _analyse(job, pages=False)


def _analyse(job: Job, *, pages: bool) -> Done:
    run_folder.check_output(job.out)
    assay = read_assay(job.sheets)
    check_names(assay, job.settings)
    if not pages:
        _only_tables(assay)
    prepared = prepare_all(assay, job)
    result = _study(assay, prepared, job)
    files = _tables(result, prepared)
    files |= {"provenance.json": _provenance(assay, result, job)}
    if pages:
        from glidefit.pipeline.report import pages_of

        files |= pages_of(result)
    with run_folder.replaced(job.out) as fresh:
        run_folder.write_files(fresh, files)
    kept = sum(r.tracks_kept for r in result.recordings)
    seen = sum(r.tracks_seen for r in result.recordings)
    return Done(
        out=job.out,
        tracks_kept=kept,
        tracks_set_aside=seen - kept,
        problems=count_problems(result),
    )


def count_problems(result: StudyResult) -> int:
    """Problems of the study and all its parts that wait to be read."""
    return (
        len(result.problems)
        + sum(len(c.problems) for c in result.conditions)
        + sum(len(r.problems) for r in result.recordings)
        + sum(len(p.problems) for p in result.pairs)
        + sum(len(r.problems) for r in result.responses)
        + sum(len(c.problems) for c in result.day_charts)
    )


def read_assay(sheets: Sequence[Path]) -> Assay:
    """One assay from one or several sheets.

    Raises
    ------
    InputErrors
        All that is wrong in any of them.
    """
    from glidefit.reading.sheet import read_sheet

    if len(sheets) == 1:
        return read_sheet(sheets[0])
    assays: list[Assay] = []
    errors = _given_twice(sheets)
    labels = _labels(sheets)
    for sheet, label in zip(sheets, labels, strict=True):
        try:
            assays.append(_labelled(read_sheet(sheet), sheet, label))
        except InputErrors as wrong:
            errors += [_moved(error, sheet, label) for error in wrong.errors]
    if errors:
        raise InputErrors(errors)
    return _joined(assays, labels)


def _given_twice(sheets: Sequence[Path]) -> list[InputError]:
    first: dict[Path, Path] = {}
    for sheet in sheets:
        if first.setdefault(sheet.resolve(), sheet) is not sheet:
            error = InputError(
                str(sheet), "given twice", expected="each sheet once", remedy="Name it once."
            )
            return [error]
    return []


def _labels(sheets: Sequence[Path]) -> list[str]:
    """Name of each sheet with as many folders in front as tell the sheets apart."""
    parts = [sheet.absolute().parts for sheet in sheets]
    for depth in range(1, max(map(len, parts)) + 1):
        labels = ["/".join(p[-depth:]) for p in parts]
        if len({label.rpartition(".")[0] for label in labels}) == len(labels):
            return labels
    return [sheet.name for sheet in sheets]


def _moved(error: InputError, sheet: Path, label: str) -> InputError:
    """The error with the label of the sheet in front, in place of its bare name."""
    where = error.where
    if where.startswith(sheet.name):
        where = label + where.removeprefix(sheet.name)
    return InputError(where, error.found, expected=error.expected, remedy=error.remedy)


def _labelled(assay: Assay, sheet: Path, label: str) -> Assay:
    """The assay with recordings whose names and places carry the label of their sheet."""
    stem = label.rpartition(".")[0]
    return replace(
        assay,
        recordings=tuple(
            replace(r, name=f"{stem}/{r.name}", where=label + r.where.removeprefix(sheet.name))
            for r in assay.recordings
        ),
    )


def _joined(assays: list[Assay], labels: list[str]) -> Assay:
    files: dict[tuple[Any, ...], Recording] = {}
    errors = []
    for r in (r for assay in assays for r in assay.recordings):
        key = (r.path.resolve(), r.channel, r.position, r.first_frame, r.last_frame)
        if first := files.get(key):
            errors.append(
                InputError(
                    r.where,
                    f"{r.path.name} is already the recording of {first.where}",
                    expected="every recording once",
                    remedy="Delete one of the two rows.",
                )
            )
        files.setdefault(key, r)
    controls = {r.condition for r in files.values() if r.control}
    if len(controls) > 1:
        errors.append(
            InputError(
                " and ".join(labels),
                f"{len(controls)} conditions are marked as control: {', '.join(sorted(controls))}",
                expected="one control",
                remedy="Mark the same condition in every sheet.",
            )
        )
    if errors:
        raise InputErrors(errors)
    return Assay(
        name=f"{assays[0].name}-and-{len(assays) - 1}-more",
        path=assays[0].path,
        recordings=tuple(files.values()),
    )


def _only_tables(assay: Assay) -> None:
    if errors := [
        InputError(
            r.where,
            f"{r.name} is a video",
            expected="track tables",
            remedy="Make tables with `glidefit track`, or use `glidefit run`.",
        )
        for r in assay.recordings
        if r.is_video
    ]:
        raise InputErrors(errors)


def prepare_all(assay: Assay, job: Job) -> list[Prepared]:
    """Every recording tracked and cleaned, spread over workers when there are videos.

    Raises
    ------
    InputErrors
        All that is wrong with any recording, at once.
    """
    tasks = [Task(recording=r, settings=job.settings.values) for r in assay.recordings]
    return collect(prepare, tasks, workers=job.workers, title="recordings")


def collect(
    work: Callable[[Task], Any], tasks: Sequence[Task], *, workers: int, title: str
) -> list[Any]:
    """Results of all tasks, or all their errors at once."""
    # Reading a table takes less time than starting a worker.
    if not any(task.recording.is_video for task in tasks):
        workers = 1
    with progress(len(tasks), title) as done:
        results = run_all(
            work, tasks, workers=workers, name=lambda task: task.recording.name, done=done
        )
    if errors := input_errors(results):
        raise InputErrors(errors)
    return list(results)


def _study(assay: Assay, prepared: list[Prepared], job: Job) -> StudyResult:
    from glidefit.writing.slugs import slugs

    slug = slugs(assay.conditions)
    controls = {r.condition for r in assay.recordings if r.control}
    return study(
        name=assay.name,
        conditions=[(name, name in controls, slug[name]) for name in assay.conditions],
        recordings=[p.clean for p in prepared],
        recording_results=[p.result for p in prepared],
        preparations={
            name: [r.preparation for r in assay.recordings if r.condition == name]
            for name in assay.conditions
        },
        settings=job.settings,
        seed=job.seed,
        sheet_sha256="+".join(sha256(sheet) for sheet in job.sheets),
        sheet=assay.recordings,
    )


def _with_flagged(prepared: Prepared) -> tuple[str, Tracks, list[str], list[str]]:
    """Recording, all its positions, a reason for each track, a flag for each position."""
    clean = prepared.clean.clean
    tracks, reason = clean.tracks, dict(zip(clean.tracks.label, clean.reason, strict=True))
    if clean.flagged is not None:
        tracks = tracks.joined(clean.flagged)
    flags = [""] * len(tracks.frame) if tracks.flag is None else tracks.flag.tolist()
    return prepared.clean.recording, tracks, [reason[name] for name in tracks.label], flags


def _tables(result: StudyResult, prepared: list[Prepared]) -> dict[str, str]:
    from glidefit.writing import json_files, tables

    tracks = tables.tracks_table(_with_flagged(p) for p in prepared)
    return {
        "results.json": json_files.results_text(result),
        "tables/tracks.csv": tracks,
        "tables/set_aside.csv": tables.set_aside_table(result),
        "tables/per_track.csv": tables.per_track_table(result),
        "tables/estimates.csv": tables.estimates_table(result),
        "tables/comparisons.csv": tables.comparisons_table(result),
        "tables/response.csv": tables.response_table(result),
    }


def _provenance(assay: Assay, result: StudyResult, job: Job) -> str:
    from importlib.metadata import version

    from glidefit.writing.json_files import provenance_text

    libraries = ("numpy", "scipy", "pandas", "lmfit", "trackpy", "matplotlib", "tifffile")
    return provenance_text(
        {
            "format": "glidefit-provenance/1",
            "finished": datetime.now(UTC).isoformat(timespec="seconds"),
            "command": job.command,
            "version": glidefit.__version__,
            "python": sys.version.split()[0],
            "libraries": {name: version(name) for name in libraries},
            "seed": job.seed,
            "sheets": [{"file": s.name, "sha256": sha256(s)} for s in job.sheets],
            "recordings": [
                {"recording": r.recording, "sha256": r.sha256} for r in result.recordings
            ],
            "settings": {
                row.key: {"value": row.value, "unit": row.unit, "source": row.source}
                for row in result.settings
            },
        }
    )
