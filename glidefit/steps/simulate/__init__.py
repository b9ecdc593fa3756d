"""An assay that was never filmed: days, chambers and recordings whose truth is known."""

from glidefit.steps.simulate.assay import SimulatedAssay, SimulatedRecording, simulate_assay
from glidefit.steps.simulate.recording import clean_tracks, simulate_recording, tracks_seen
from glidefit.steps.simulate.scenario import (
    KINDS,
    LevelTruth,
    Scenario,
    ScenarioCondition,
    Spread,
)

__all__ = [
    "KINDS",
    "LevelTruth",
    "Scenario",
    "ScenarioCondition",
    "SimulatedAssay",
    "SimulatedRecording",
    "Spread",
    "clean_tracks",
    "simulate_assay",
    "simulate_recording",
    "tracks_seen",
]
