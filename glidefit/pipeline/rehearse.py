"""Rehearse a finished run: simulate its own design many times, analyse, judge the intervals."""

from __future__ import annotations

import math
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import glidefit
from glidefit.designs import (
    REHEARSAL_FORMAT,
    ChamberOutcome,
    Components,
    ConditionRehearsal,
    FilmedDesign,
    Outcome,
    Rehearsal,
)
from glidefit.errors import GlidefitError, InputError
from glidefit.pipeline.finished import chosen_condition, results_file, used_settings
from glidefit.pipeline.simulated import Analysed, analysed
from glidefit.results import ConditionResult, StudyResult
from glidefit.running import folder as run_folder
from glidefit.running.progress import progress
from glidefit.running.workers import run_all
from glidefit.settings import Settings
from glidefit.steps.rehearse import (
    REHEARSED,
    SimulatedChamber,
    chamber_outcomes,
    filmed_design,
    has_components,
    judge,
)
from glidefit.steps.simulate import Scenario, ScenarioCondition, Spread

FILES = ("rehearsal.json", "rehearsal.html")


@dataclass(frozen=True, slots=True, kw_only=True)
class _Experiment:
    """One simulated experiment of one condition: what a worker is given."""

    design: FilmedDesign
    scenario: Scenario
    settings: Settings
    seed: int
    number: int


@dataclass(frozen=True, slots=True, kw_only=True)
class _Found:
    """What a worker gives back."""

    outcomes: dict[str, Outcome]
    chambers: tuple[ChamberOutcome, ...]


def rehearse(
    run: Path,
    *,
    out: Path,
    experiments: int,
    conditions: Sequence[str],
    workers: int,
    seed: int,
) -> Rehearsal:
    """Write rehearsal.json and rehearsal.html for a finished run.

    Parameters
    ----------
    run : Path
        Run folder, or its results.json.
    out : Path
        Folder, new, empty or an earlier rehearsal.
    experiments : int
        For each condition.
    conditions : sequence of str
        Names; all that have a speed if there are none.
    workers, seed : int
        The result does not depend on the number of workers.

    Raises
    ------
    InputError
        For results that cannot be read, and conditions that are not there or have no speed.
    OutputError
        If the folder cannot be used.
    """
    from glidefit.reading.results_file import read_results

    source = results_file(run)
    study = read_results(source)
    run_folder.check_output(out, holds=_is_rehearsal)
    settings = used_settings(study, str(source))
    designs = [_design(study, c, settings) for c in _chosen(study, conditions, str(source))]
    tasks = [
        _Experiment(
            design=design, scenario=_scenario(design), settings=settings, seed=seed, number=i
        )
        for design in designs
        for i in range(experiments)
    ]
    found = _simulated(tasks, workers=workers)
    level = settings.interval.level
    rehearsal = Rehearsal(
        study=study.name,
        version=glidefit.__version__,
        seed=seed,
        experiments=experiments,
        level=level,
        conditions=tuple(
            _judged(design, found[k * experiments : (k + 1) * experiments], level)
            for k, design in enumerate(designs)
        ),
    )
    _write(out, rehearsal, study)
    return rehearsal


def _judged(design: FilmedDesign, found: Sequence[_Found], level: float) -> ConditionRehearsal:
    return judge(
        design,
        [one.outcomes for one in found],
        level=level,
        chambers=[one.chambers for one in found],
    )


def _chosen(study: StudyResult, names: Sequence[str], where: str) -> list[ConditionResult]:
    if names:
        wanted = [chosen_condition(study, name, where) for name in dict.fromkeys(names)]
    else:
        wanted = [c for c in study.conditions if c.estimates["speed_um_s"].value > 0]
    without = [c.condition for c in wanted if not c.estimates["speed_um_s"].value > 0]
    if without or not wanted:
        raise InputError(
            where,
            f"condition {without[0]!r} has no speed" if without else "no condition has a speed",
            expected="a condition whose tracks were fitted",
            remedy="Look at its page for the reason, or rehearse another condition.",
        )
    return wanted


def _design(study: StudyResult, condition: ConditionResult, settings: Settings) -> FilmedDesign:
    from glidefit.steps.components import components

    return filmed_design(
        condition,
        [r for r in study.recordings if r.condition == condition.condition],
        [components(condition, key) for key in has_components(condition)],
        unknown_exposure=settings.fit.unknown_exposure,
    )


def _scenario(design: FilmedDesign) -> Scenario:
    """The design as something that can be simulated, with its own spread at every level."""
    parts = {c.quantity: c for c in design.components}
    speed, turning, motile = (
        parts.get(key) for key in ("speed_um_s", "rotational_diffusion_rad2_s", "motile_fraction")
    )
    return Scenario(
        name=design.condition,
        conditions=(
            ScenarioCondition(
                name=design.condition,
                speed_um_s=design.speed_um_s,
                rotational_diffusion_rad2_s=design.rotational_diffusion_rad2_s,
                longitudinal_diffusion_um2_s=design.longitudinal_diffusion_um2_s,
                stop_rate_per_s=design.stop_rate_per_s,
                start_rate_per_s=design.go_rate_per_s,
                motile_fraction=min(design.motile_fraction, 1.0),
            ),
        ),
        field_um=design.field_um,
        frame_s=design.frame_s,
        n_frames=design.n_frames,
        exposure_s=design.exposure_s,
        localization_error_um=design.localization_error_um,
        days=len(design.filaments),
        chambers_per_day=tuple(map(len, design.filaments)),
        recordings_per_chamber=design.recordings_per_chamber,
        filaments_in_field=design.filaments,
        speed_spread=_spread(speed, filament=design.filament_spread),
        rotational_diffusion_spread=_spread(turning),
        motile_fraction_spread=_spread(motile, times=design.motile_fraction),
        stuck_fraction=design.stuck,
        pivoting_fraction=design.pivoting,
        detached_fraction=design.detached,
    )


def _spread(parts: Components | None, *, filament: float = 0.0, times: float = 1.0) -> Spread:
    def sd(variance: float) -> float:
        return min(times * math.sqrt(variance), 1.0) if math.isfinite(variance) else 0.0

    if parts is None:
        return Spread(filament=filament)
    return Spread(day=sd(parts.day), chamber=sd(parts.chamber), filament=filament)


def _simulated(tasks: Sequence[_Experiment], *, workers: int) -> list[_Found]:
    with progress(len(tasks), "experiments") as done:
        results = run_all(
            _one,
            tasks,
            workers=workers,
            name=lambda task: f"{task.scenario.name}, {task.number + 1}",
            done=done,
        )
    found: list[_Found] = []
    for result in results:
        if isinstance(result, GlidefitError):
            raise result
        found.append(result)
    return found


def _one(task: _Experiment) -> _Found:
    """Simulate and analyse one experiment, with a random stream of its own."""
    name = task.scenario.name
    rng = np.random.default_rng([task.seed, zlib.crc32(name.encode(errors="replace")), task.number])
    made = analysed(task.scenario, settings=task.settings, rng=rng)
    if name not in made.numbers:
        nothing = Outcome(value=math.nan, low=math.nan, high=math.nan)
        return _Found(outcomes=dict.fromkeys(REHEARSED, nothing), chambers=())
    numbers = made.numbers[name]
    outcomes = {
        key: Outcome(
            value=_short(numbers.estimates[key].value),
            low=_short(numbers.estimates[key].low),
            high=_short(numbers.estimates[key].high),
        )
        for key in REHEARSED
    }
    fitted = numbers.fitted
    return _Found(
        outcomes=outcomes,
        chambers=chamber_outcomes(task.design, _chambers(made), fitted.chambers, fitted.columns),
    )


def _chambers(made: Analysed) -> list[SimulatedChamber]:
    """The truth of every chamber, and how long its gliding tracks are that were kept."""
    lengths: dict[tuple[str, str], list[np.ndarray]] = {}
    truths = {}
    for simulated, recording in zip(made.assay.recordings, made.recordings, strict=True):
        gliding = recording.clean.kept & (simulated.truth.kind == "gliding")
        place = simulated.day, simulated.chamber
        lengths.setdefault(place, []).append(recording.clean.tracks.n_positions[gliding])
        truths[place] = simulated.chamber_truth
    return [
        SimulatedChamber(
            day=day,
            chamber=chamber,
            speed_um_s=truths[day, chamber].speed_um_s,
            rotational_diffusion_rad2_s=truths[day, chamber].rotational_diffusion_rad2_s,
            n_positions=np.concatenate(parts),
        )
        for (day, chamber), parts in lengths.items()
    ]


def _short(value: float) -> float:
    return float(f"{value:.6g}")


def _is_rehearsal(folder: Path) -> bool:
    """True for a folder that an earlier rehearsal wrote, with nothing else in it."""
    return run_folder.is_marked(folder / FILES[0], REHEARSAL_FORMAT.partition("/")[0]) and {
        path.name for path in folder.iterdir()
    } <= set(FILES)


def _write(out: Path, rehearsal: Rehearsal, study: StudyResult) -> None:
    from glidefit.writing.json_files import record_text
    from glidefit.writing.rehearsal_page import rehearsal_page

    texts = (record_text(rehearsal), rehearsal_page(rehearsal, study))
    with run_folder.replaced(out, holds=_is_rehearsal) as fresh:
        run_folder.write_files(fresh, dict(zip(FILES, texts, strict=True)))
