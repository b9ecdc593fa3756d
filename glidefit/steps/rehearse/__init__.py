"""Rehearse an experiment: how it was filmed, and what many simulated ones of its kind found."""

from glidefit.steps.rehearse.against_bound import SimulatedChamber, chamber_outcomes
from glidefit.steps.rehearse.filmed import filmed_design, has_components
from glidefit.steps.rehearse.judge import REHEARSED, judge

__all__ = [
    "REHEARSED",
    "SimulatedChamber",
    "chamber_outcomes",
    "filmed_design",
    "has_components",
    "judge",
]
