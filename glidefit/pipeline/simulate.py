"""Simulated assays as files: sheet, track tables or videos, and the truth."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from glidefit.errors import InputError
from glidefit.pipeline.filming import film_filaments, film_spots
from glidefit.pipeline.recipe import Part, read_recipe
from glidefit.running import folder as run_folder
from glidefit.running.progress import progress
from glidefit.steps.simulate import SimulatedAssay, SimulatedRecording, simulate_assay


def simulate(recipe: Path, out: Path, *, seed: int | None = None) -> int:
    """Write the assay of a recipe; number of recordings.

    The folder gets assay.csv, truth.csv and recipe.toml, and what it needs of tracks/, videos/
    and, for the filaments of every frame, truth/.

    Parameters
    ----------
    recipe : Path
    out : Path
        Folder, new, empty or an earlier simulation.
    seed : int, optional
        In place of those in the recipe.
    """
    parts = read_recipe(recipe)
    recipe_text = recipe.read_text(encoding="utf-8")  # which may lie in the folder itself
    if seed is not None:
        parts = tuple(
            dataclasses.replace(p, scenario=dataclasses.replace(p.scenario, seed=seed))
            for p in parts
        )
    run_folder.check_output(out, holds=_is_simulation)
    assays = [
        simulate_assay(part.scenario, np.random.default_rng([part.scenario.seed, number]))
        for number, part in enumerate(parts)
    ]
    films = [
        _Film(part=part, recording=recording)
        for part, assay in zip(parts, assays, strict=True)
        for recording in assay.recordings
    ]
    names = _file_names(films, recipe.name)
    with (
        run_folder.replaced(out, holds=_is_simulation) as fresh,
        progress(len(films), "recordings") as done,
    ):
        rows = []
        for film, name in zip(films, names, strict=True):
            rows.append(_written(fresh, film, name))
            done(name)
        truth = [
            row
            for part, assay in zip(parts, assays, strict=True)
            for row in _truth_rows(part, assay)
        ]
        _write_lists(fresh, recipe_text, rows, truth)
    return len(films)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Film:
    """One recording and the part of the recipe that says how it is filmed."""

    part: Part
    recording: SimulatedRecording

    @property
    def chamber(self) -> str:
        return self.part.chamber_prefix + self.recording.chamber.removeprefix("c")

    @property
    def label(self) -> str:
        r = self.recording
        return f"{r.condition}-{r.day}-{self.chamber}-{r.field}"


def _file_names(films: list[_Film], recipe: str) -> list[str]:
    """A name for the file of each recording.

    Raises
    ------
    InputError
        If two parts film the same condition in the same chamber.
    """
    from glidefit.writing.slugs import slugs

    labels = [film.label for film in films]
    if twice := next((label for n, label in enumerate(labels) if label in labels[:n]), None):
        raise InputError(
            recipe,
            f"two parts film {twice!r}",
            expected="chambers of their own for parts with the same condition",
            remedy="Give one of the parts another chamber_prefix.",
        )
    found = slugs(labels)
    return [found[label] for label in labels]


def _is_simulation(folder: Path) -> bool:
    """True for a folder that an earlier simulation wrote, or that holds a recipe alone."""
    names = {path.name for path in folder.iterdir()}
    lists = {"assay.csv", "truth.csv", "recipe.toml"}
    return names == {"recipe.toml"} or lists <= names <= lists | {"tracks", "videos", "truth"}


def _write_lists(
    folder: Path, recipe: str, rows: list[dict[str, str]], truth: list[dict[str, str]]
) -> None:
    from glidefit.writing.recordings import sheet_text

    run_folder.write_files(
        folder,
        {
            "assay.csv": sheet_text(rows),
            "truth.csv": sheet_text(truth),
            "recipe.toml": recipe,
        },
    )


def _written(folder: Path, film: _Film, name: str) -> dict[str, str]:
    """Write one recording and give its row of the sheet."""
    from glidefit.writing.recordings import track_table_text

    scenario, recording = film.part.scenario, film.recording
    common = {
        "condition": recording.condition,
        "day": recording.day,
        "chamber": film.chamber,
        "field": recording.field,
        "minutes": f"{recording.minutes:g}",
        "control": "yes" if recording.control else "",
        **dict(recording.columns),
    }
    video = f"videos/{name}.ome.tif"
    if film.part.filament_video is not None:
        truth = film_filaments(folder / video, scenario, film.part.filament_video, recording)
        run_folder.write_files(folder, {f"truth/{name}.csv": truth})
        return {"recording": video, **common, "shape": "filament"}
    if film.part.video is not None:
        film_spots(folder / video, scenario, film.part.video, recording)
        return {"recording": video, **common, "shape": "spot"}
    run_folder.write_files(folder, {f"tracks/{name}.csv": track_table_text(recording.tracks)})
    return {
        "recording": f"tracks/{name}.csv",
        **common,
        "shape": "",
        "frame_s": f"{scenario.frame_s:.10g}",
        "exposure_s": f"{scenario.exposure_s:.10g}",
    }


def _truth_rows(part: Part, assay: SimulatedAssay) -> list[dict[str, str]]:
    def text(value: Any) -> str:
        return f"{value:.6g}" if isinstance(value, float) else str(value)

    rows = [{key: text(value) for key, value in row.items()} for row in assay.truth_table()]
    for row in rows:
        row["chamber"] = part.chamber_prefix + row["chamber"].removeprefix("c")
        del row["recording"]
    return rows
