"""A finished run as other jobs take it up: its results, settings, conditions, neighbours."""

from __future__ import annotations

import difflib
import os
from pathlib import Path
from typing import Any

from glidefit.errors import InputError, InputErrors
from glidefit.results import ConditionResult, StudyResult
from glidefit.settings import Settings, declarations, resolve


def results_file(run: Path) -> Path:
    """results.json of a run folder, or the file itself."""
    return run / "results.json" if run.is_dir() or run.suffix != ".json" else run


def sibling(run: Path, ending: str) -> Path:
    """Folder beside the run folder, with its name and an ending."""
    folder = Path(os.path.abspath(run if run.is_dir() or run.suffix != ".json" else run.parent))
    beside = folder.with_name(f"{folder.name or 'run'}-{ending}")
    return beside if run.is_absolute() else Path(os.path.relpath(beside))


def chosen_condition(study: StudyResult, name: str, where: str) -> ConditionResult:
    """The condition of this name.

    Raises
    ------
    InputError
        If there is none; the nearest is named.
    """
    by_name = {c.condition: c for c in study.conditions}
    if name in by_name:
        return by_name[name]
    near = difflib.get_close_matches(name, by_name, n=1)
    raise InputError(
        where,
        f"there is no condition {name!r}",
        expected=f"one of {', '.join(map(repr, by_name))}",
        remedy=f"Did you mean {near[0]!r}?" if near else "Name one of them.",
    )


def used_settings(study: StudyResult, where: str) -> Settings:
    """The settings that a run was made with.

    Raises
    ------
    InputError
        If a value is none that the setting may have.
    """
    declared = {d.key: d for d in declarations()}
    given: dict[str, Any] = {}
    for row in study.settings:
        d = declared.get(row.key)
        if d is None or row.source == "default":
            continue
        try:
            given[row.key] = d.kind(row.value)
        except ValueError:
            raise _wrong(where, f"{row.key} is {row.value!r}") from None
    try:
        return resolve(options=given).values
    except InputErrors as errors:
        raise _wrong(where, str(errors.errors[0])) from errors


def _wrong(where: str, found: str) -> InputError:
    return InputError(
        where,
        found,
        expected="the settings of a run",
        remedy="Take the results.json of a finished run, or run the analysis again.",
    )
