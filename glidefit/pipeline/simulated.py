"""Simulated assays through the same steps as filmed ones, without files in between."""

from __future__ import annotations

import numpy as np

from glidefit.evidence import CleanRecording
from glidefit.pipeline.study import ConditionNumbers, condition_numbers, with_borrowed
from glidefit.settings import Settings
from glidefit.steps.clean import clean
from glidefit.steps.simulate import Scenario, SimulatedRecording, simulate_assay


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


def experiment(
    scenario: Scenario, *, settings: Settings, rng: np.random.Generator
) -> dict[str, ConditionNumbers]:
    """Simulate one assay and analyse it; by condition, without those that keep no track."""
    assay = simulate_assay(scenario, rng)
    recordings = [cleaned(r, scenario, settings=settings) for r in assay.recordings]
    by_condition = {
        condition.name: [r for r in recordings if r.condition == condition.name]
        for condition in scenario.conditions
    }
    numbers = {
        name: condition_numbers(own, settings=settings, rng=rng)
        for name, own in by_condition.items()
        if any(r.clean.kept.any() for r in own)
    }
    control = next((c.name for c in scenario.conditions if c.control), "")
    return with_borrowed(numbers, control=control, settings=settings)
