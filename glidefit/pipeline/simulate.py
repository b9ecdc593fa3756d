"""Simulated assays as files: sheet, track tables or videos, and the truth."""

from __future__ import annotations

import dataclasses
import difflib
import types
import typing
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from glidefit.errors import InputError, InputErrors
from glidefit.kernels.synthetic_frames import CameraFaults, SpotOptics, spot_frames
from glidefit.running import folder as run_folder
from glidefit.running.progress import progress
from glidefit.steps.simulate import (
    Scenario,
    ScenarioCondition,
    SimulatedAssay,
    SimulatedRecording,
    Spread,
    simulate_assay,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Video:
    """How the spot videos of a part look; left out, the part gives track tables."""

    signal_to_noise: float = 6.0
    psf_um: float = 0.15
    background_photons: float = 20.0
    read_noise: float = 2.0
    faults: CameraFaults = dataclasses.field(default_factory=CameraFaults)


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One scenario of a recipe and how it is filmed."""

    scenario: Scenario
    video: Video | None = None
    chamber_prefix: str = "c"  # of chamber labels, so that parts filmed on one day stay apart


def read_recipe(path: Path) -> tuple[Part, ...]:
    """Parts of a recipe: TOML with one ``[[part]]`` a scenario.

    Raises
    ------
    InputErrors
        All that is wrong: unknown keys (with the nearest known one), wrong kinds, impossible
        values.
    """
    from glidefit.reading.settings_file import read_settings

    data = read_settings(path)
    parts = data.pop("part", None)
    errors = [_unknown(path.name, key, ["part"]) for key in data]
    if not isinstance(parts, list) or not parts:
        errors.append(
            InputError(
                path.name,
                "it has no [[part]]",
                expected="a recipe: one [[part]] for each scenario",
                remedy="Start from the recipe of the example.",
            )
        )
        raise InputErrors(errors)
    made = []
    for i, part in enumerate(parts):
        where = f"{path.name}, part {i + 1}"
        video = part.pop("video", None) if isinstance(part, dict) else None
        prefix = part.pop("chamber_prefix", "c") if isinstance(part, dict) else "c"
        prefix = _value(str, prefix, f"{where}, chamber_prefix", errors)
        scenario = _record(Scenario, part, where, errors)
        filmed = None if video is None else _record(Video, video, f"{where}.video", errors)
        if scenario is not None:
            made.append(Part(scenario=scenario, video=filmed, chamber_prefix=prefix))
    if errors:
        raise InputErrors(errors)
    return tuple(made)


def _unknown(where: str, key: str, known: list[str]) -> InputError:
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
    return InputError(
        where,
        f"{key!r} is no key of a recipe",
        expected=f"one of {', '.join(known)}",
        remedy=f"Did you mean {near[0]!r}?" if near else "Delete it.",
    )


_NESTED = {
    "conditions": ScenarioCondition,
    "speed_spread": Spread,
    "rotational_diffusion_spread": Spread,
    "faults": CameraFaults,
}


def _record(kind: type[Any], data: Any, where: str, errors: list[InputError]) -> Any:
    """A record from a TOML table; what is wrong goes into ``errors``, and None comes back."""
    if not isinstance(data, Mapping):
        errors.append(
            InputError(where, f"{data!r}", expected="a table of keys", remedy="See the example.")
        )
        return None
    hints = typing.get_type_hints(kind)
    known = [f.name for f in dataclasses.fields(kind)]
    before = len(errors)
    values: dict[str, Any] = {}
    for key, value in data.items():
        if key not in known:
            errors.append(_unknown(where, key, known))
        elif key == "conditions":
            items = value if isinstance(value, list) else [value]
            values[key] = tuple(
                _record(ScenarioCondition, item, f"{where}, condition {n + 1}", errors)
                for n, item in enumerate(items)
            )
        elif key in _NESTED:
            values[key] = _record(_NESTED[key], value, f"{where}.{key}", errors)
        else:
            values[key] = _value(hints[key], value, f"{where}, {key}", errors)
    if len(errors) > before:
        return None
    try:
        return kind(**values)
    except (ValueError, TypeError) as error:
        errors.append(
            InputError(
                where, str(error), expected="values that can be simulated", remedy="Correct it."
            )
        )
        return None


def _value(hint: Any, value: Any, where: str, errors: list[InputError]) -> Any:
    kinds = typing.get_args(hint) if isinstance(hint, types.UnionType) else (hint,)
    if typing.get_origin(hint) is tuple:
        if isinstance(value, list) and all(isinstance(v, (int, float)) for v in value):
            return tuple(map(float, value))
    elif float in kinds and isinstance(value, (int, float)) and not isinstance(value, bool):
        return float(value)
    elif type(value) in kinds or value in typing.get_args(hint):  # the latter for a Literal
        return value
    wanted = "a number" if float in kinds else getattr(hint, "__name__", str(hint))
    errors.append(
        InputError(where, f"the value is {value!r}", expected=wanted, remedy="Correct the recipe.")
    )
    return None


def simulate(recipe: Path, out: Path, *, seed: int | None = None) -> int:
    """Write the assay of a recipe: assay.csv, tracks/, videos/, truth.csv; number of recordings.

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
    assays = [
        simulate_assay(
            part.scenario,
            np.random.default_rng([part.scenario.seed if seed is None else seed, number]),
        )
        for number, part in enumerate(parts)
    ]
    total = sum(len(assay.recordings) for assay in assays)
    rows: list[dict[str, str]] = []
    truth: list[dict[str, str]] = []
    with (
        run_folder.replaced(out, holds=_is_simulation) as fresh,
        progress(total, "recordings") as done,
    ):
        for part, assay in zip(parts, assays, strict=True):
            for recording in assay.recordings:
                rows.append(_written(fresh, part, recording))
                done(recording.name)
            truth += _truth_rows(part, assay)
        _write_lists(fresh, recipe_text, rows, truth)
    return total


def _is_simulation(folder: Path) -> bool:
    """True for a folder that an earlier simulation wrote, with nothing else in it."""
    names = {path.name for path in folder.iterdir()}
    ours = {"assay.csv", "truth.csv", "recipe.toml", "tracks", "videos"}
    return "recipe.toml" in names and names <= ours


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


def _written(folder: Path, part: Part, recording: SimulatedRecording) -> dict[str, str]:
    """Write one recording and give its row of the sheet."""
    from glidefit.writing.recordings import track_table_text
    from glidefit.writing.slugs import slug

    scenario = part.scenario
    chamber = part.chamber_prefix + recording.chamber.removeprefix("c")
    name = slug(f"{recording.condition}-{recording.day}-{chamber}-{recording.field}")
    common = {
        "condition": recording.condition,
        "day": recording.day,
        "chamber": chamber,
        "field": recording.field,
        "minutes": f"{recording.minutes:g}",
        "control": "yes" if recording.control else "",
    }
    if part.video is None:
        run_folder.write_files(folder, {f"tracks/{name}.csv": track_table_text(recording.tracks)})
        return {
            "recording": f"tracks/{name}.csv",
            **common,
            "shape": "",
            "frame_s": f"{scenario.frame_s:.10g}",
            "exposure_s": f"{scenario.exposure_s:.10g}",
        }
    (folder / "videos").mkdir(exist_ok=True)
    _film(folder / f"videos/{name}.ome.tif", scenario, part.video, recording)
    return {"recording": f"videos/{name}.ome.tif", **common, "shape": "spot"}


def _film(path: Path, scenario: Scenario, video: Video, recording: SimulatedRecording) -> None:
    from zlib import crc32

    from glidefit.writing.recordings import write_video

    truth = recording.truth
    shape = tuple(round(side / scenario.pixel_um) for side in reversed(scenario.field_um))
    frames = spot_frames(
        truth.track,
        truth.frame,
        truth.exposed_x_um,
        truth.exposed_y_um,
        n_frames=scenario.n_frames,
        frame_s=scenario.frame_s,
        shape_px=(shape[0], shape[1]),
        optics=SpotOptics.with_signal_to_noise(
            video.signal_to_noise,
            psf_um=video.psf_um,
            pixel_um=scenario.pixel_um,
            background_photons=video.background_photons,
            read_noise=video.read_noise,
        ),
        faults=video.faults,
        rng=np.random.default_rng([scenario.seed, crc32(recording.name.encode())]),
    )
    write_video(
        path,
        (frame.image for frame in frames),
        n_frames=scenario.n_frames,
        pixel_um=scenario.pixel_um,
        frame_s=scenario.frame_s,
        exposure_s=scenario.exposure_s,
    )


def _truth_rows(part: Part, assay: SimulatedAssay) -> list[dict[str, str]]:
    def text(value: Any) -> str:
        return f"{value:.6g}" if isinstance(value, float) else str(value)

    rows = [{key: text(value) for key, value in row.items()} for row in assay.truth_table()]
    for row in rows:
        row["chamber"] = part.chamber_prefix + row["chamber"].removeprefix("c")
        del row["recording"]
    return rows
