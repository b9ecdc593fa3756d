"""Plan the next experiment from a finished run."""

from __future__ import annotations

import math
import statistics
from pathlib import Path

import numpy as np

import glidefit
from glidefit.designs import PLAN_FORMAT, Goal, Plan
from glidefit.errors import InputError
from glidefit.pipeline.finished import chosen_condition, results_file
from glidefit.results import ConditionResult, StudyResult
from glidefit.running import folder as run_folder
from glidefit.steps.components import components, interaction

FILES = ("plan.json", "plan.html")


def plan(
    run: Path, *, out: Path, condition: str | None, quantity: str, goal: Goal, seed: int
) -> Plan:
    """Write plan.json and plan.html for the next experiment after a finished run.

    Parameters
    ----------
    run : Path
        Run folder, or its results.json.
    out : Path
        Folder, new, empty or an earlier plan.
    condition : str, optional
        Name; without it the control, or the first that was filmed on two days.
    quantity : str
        Key of a quantity.
    goal : Goal
    seed : int
        For the bands.

    Raises
    ------
    InputError
        For results that cannot be read, and a condition that is not there, has no value or was
        filmed on one day.
    OutputError
        If the folder cannot be used.
    """
    from glidefit.reading.results_file import read_results

    source = results_file(run)
    study = read_results(source)
    run_folder.check_output(out, holds=_is_plan)
    made = _plan(study, _chosen(study, condition, quantity, str(source)), quantity, goal, seed)
    _write(out, made, study)
    return made


def _plan(
    study: StudyResult, chosen: ConditionResult, quantity: str, goal: Goal, seed: int
) -> Plan:
    from glidefit.steps import plan as step

    own = [r for r in study.recordings if r.condition == chosen.condition]
    parts = components(chosen, quantity)
    crossed = interaction(study.conditions, chosen, quantity)
    counts = chosen.counts
    tracks = counts.tracks_seen if quantity == "motile_fraction" else counts.tracks_kept
    filaments = tracks / max(counts.chambers, 1)
    seconds = statistics.median(r.n_frames * r.frame_s for r in own)
    planned = step.plan(
        parts,
        crossed,
        goal=goal,
        filaments_per_chamber=filaments,
        recording_s=seconds,
        rng=np.random.default_rng(seed),
    )
    return Plan(
        study=study.name,
        version=glidefit.__version__,
        seed=seed,
        condition=chosen.condition,
        quantity=quantity,
        goal=goal,
        components=parts,
        filaments_per_chamber=filaments,
        recording_s=seconds,
        frame_s=statistics.median(r.frame_s for r in own),
        interaction=crossed,
        tables=planned.tables,
        alone=planned.alone,
        advice=planned.advice,
        assumptions=planned.assumptions,
    )


def _chosen(study: StudyResult, name: str | None, quantity: str, where: str) -> ConditionResult:
    if name is not None:
        chosen = chosen_condition(study, name, where)
        if wrong := _why_not(chosen, quantity):
            raise _no_plan(where, chosen, wrong)
        return chosen
    in_order = sorted(study.conditions, key=lambda c: not c.control)
    for chosen in in_order:
        if not _why_not(chosen, quantity):
            return chosen
    raise _no_plan(where, in_order[0], _why_not(in_order[0], quantity))


def _why_not(condition: ConditionResult, quantity: str) -> str:
    """Why nothing can be planned with a condition; empty if it can."""
    if not condition.estimates[quantity].value > 0:
        return "has no value above 0 to plan with"
    days = {c.day for c in condition.chambers if math.isfinite(getattr(c, quantity))}
    return "was filmed on one day, which cannot tell how days differ" if len(days) < 2 else ""


def _no_plan(where: str, condition: ConditionResult, wrong: str) -> InputError:
    return InputError(
        where,
        f"condition {condition.condition!r} {wrong}",
        expected="a condition with values from at least two days",
        remedy="Film it on a second day, or name another --condition.",
    )


def _is_plan(folder: Path) -> bool:
    """True for a folder that an earlier plan wrote, with nothing else in it."""
    return run_folder.is_marked(folder / FILES[0], PLAN_FORMAT.partition("/")[0]) and {
        path.name for path in folder.iterdir()
    } <= set(FILES)


def _write(out: Path, made: Plan, study: StudyResult) -> None:
    from glidefit.writing.json_files import record_text
    from glidefit.writing.plan_page import plan_page

    texts = (record_text(made), plan_page(made, study))
    with run_folder.replaced(out, holds=_is_plan) as fresh:
        run_folder.write_files(fresh, dict(zip(FILES, texts, strict=True)))
