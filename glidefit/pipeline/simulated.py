"""Simulated assays through the same steps as filmed ones, without files in between."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from glidefit.evidence import CleanRecording
from glidefit.pipeline.study import ConditionNumbers, condition_numbers, with_borrowed
from glidefit.settings import Settings
from glidefit.steps.clean import clean
from glidefit.steps.fit import with_floating
from glidefit.steps.simulate import Scenario, SimulatedAssay, SimulatedRecording, simulate_assay


def cleaned(
    recording: SimulatedRecording, scenario: Scenario, *, settings: Settings
) -> CleanRecording:
    """A simulated recording as the fit takes it; the field is the simulated one."""
    return CleanRecording(
        recording=recording.name,
        condition=recording.condition,
        day=recording.day,
        chamber=recording.chamber,
        field=recording.field,
        clean=clean(
            recording.tracks,
            frame_s=scenario.frame_s,
            settings=settings.clean,
            where=recording.name,
        ),
        frame_s=scenario.frame_s,
        exposure_s=scenario.exposure_s,
        field_um=scenario.field_um,
        minutes=recording.minutes,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Analysed:
    """A simulated assay and what the analysis made of it.

    Parameters
    ----------
    assay : SimulatedAssay
    recordings : tuple of CleanRecording
        In the order of the assay.
    numbers : dict of str: ConditionNumbers
        By condition, without those that keep no track.
    """

    assay: SimulatedAssay
    recordings: tuple[CleanRecording, ...]
    numbers: dict[str, ConditionNumbers]


def analysed(scenario: Scenario, *, settings: Settings, rng: np.random.Generator) -> Analysed:
    """Simulate one assay and analyse it."""
    assay = simulate_assay(scenario, rng)
    recordings = tuple(cleaned(r, scenario, settings=settings) for r in assay.recordings)
    by_condition = {
        condition.name: [r for r in recordings if r.condition == condition.name]
        for condition in scenario.conditions
    }
    by_condition = {
        name: with_floating(own, settings=settings.fit) for name, own in by_condition.items()
    }
    numbers = {
        name: condition_numbers(own, settings=settings, rng=rng)
        for name, own in by_condition.items()
        if any(r.clean.kept.any() for r in own)
    }
    control = next((c.name for c in scenario.conditions if c.control), "")
    numbers = with_borrowed(numbers, control=control, settings=settings)
    return Analysed(assay=assay, recordings=recordings, numbers=numbers)


def experiment(
    scenario: Scenario, *, settings: Settings, rng: np.random.Generator
) -> dict[str, ConditionNumbers]:
    """Simulate one assay and analyse it; by condition, without those that keep no track."""
    return analysed(scenario, settings=settings, rng=rng).numbers
