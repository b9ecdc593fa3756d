"""Days, chambers and recordings of an assay."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date, timedelta

import numpy as np

from glidefit.kernels.simulation import SimulatedTracks
from glidefit.steps.simulate.recording import factors, simulate_recording, tracks_seen
from glidefit.steps.simulate.scenario import LevelTruth, Scenario, ScenarioCondition
from glidefit.tracks import Tracks

_FIRST_MINUTES, _MINUTES_A_RECORDING = 2.0, 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedRecording:
    """One recording: what a tracker would give, and the truth."""

    name: str
    condition: str
    control: bool
    columns: tuple[tuple[str, str], ...]
    day: str
    chamber: str  # unique within its day
    field: str
    minutes: float  # after the start in the chamber
    tracks: Tracks
    truth: SimulatedTracks  # the same tracks in the same order
    motile_fraction: float  # expected
    expected_in_field: dict[str, float]  # filaments of each kind, at a moment
    chamber_truth: LevelTruth
    day_truth: LevelTruth  # of the condition on that day


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedAssay:
    """All recordings of a scenario, in the order of filming."""

    scenario: Scenario
    recordings: tuple[SimulatedRecording, ...]

    def truth_table(self) -> list[dict[str, str | float]]:
        """The truth of each recording, a row each."""
        nominal = {condition.name: condition for condition in self.scenario.conditions}
        return [
            {
                "recording": r.name,
                "condition": r.condition,
                "day": r.day,
                "chamber": r.chamber,
                "motile_fraction": r.motile_fraction,
                "speed_um_s": nominal[r.condition].speed_um_s,
                "day_speed_um_s": r.day_truth.speed_um_s,
                "chamber_speed_um_s": r.chamber_truth.speed_um_s,
                "rotational_diffusion_rad2_s": nominal[r.condition].rotational_diffusion_rad2_s,
                "day_rotational_diffusion_rad2_s": r.day_truth.rotational_diffusion_rad2_s,
                "chamber_rotational_diffusion_rad2_s": r.chamber_truth.rotational_diffusion_rad2_s,
            }
            for r in self.recordings
        ]


def simulate_assay(scenario: Scenario, rng: np.random.Generator) -> SimulatedAssay:
    """All recordings of a scenario, with their truth.

    Every day, condition, chamber and recording has a random stream of its own, so that more
    days, chambers or recordings do not change those already there.

    Parameters
    ----------
    scenario : Scenario
        What to simulate; its seed is not used here.
    rng : Generator
        Used to spawn; a second assay from the same one is another assay.
    """
    recordings = []
    for number, day_rng in enumerate(rng.spawn(scenario.days)):
        recordings += _simulate_day(scenario, number, rng=day_rng)
    return SimulatedAssay(scenario=scenario, recordings=tuple(recordings))


def _simulate_day(
    scenario: Scenario, number: int, *, rng: np.random.Generator
) -> list[SimulatedRecording]:
    """The recordings of one day; the chambers of the conditions follow each other in turn."""
    filaments = scenario.filaments_of_day[number]
    shared = factors("day", scenario, rng=rng)
    if scenario.day_speed_factors:
        shared = (shared[0] * scenario.day_speed_factors[number], shared[1])
    today = [_moved(condition, scenario, "day", rng=rng) for condition in scenario.conditions]
    streams = rng.spawn(len(scenario.conditions))
    own = [
        condition.truth.times(shared).times(factors("day_condition", scenario, rng=stream))
        for condition, stream in zip(scenario.conditions, streams, strict=True)
    ]
    today = [
        _moved(condition, scenario, "day_condition", rng=stream)
        for condition, stream in zip(today, streams, strict=True)
    ]
    chambers = [stream.spawn(len(filaments)) for stream in streams]
    recordings = []
    for turn, in_field in enumerate(filaments):
        for k, condition in enumerate(today):
            recordings += _simulate_chamber(
                replace(scenario, filaments_in_field=in_field),
                condition,
                day=(date.fromisoformat(scenario.first_day) + timedelta(days=number)).isoformat(),
                chamber=f"c{turn * len(today) + k + 1}",
                day_truth=own[k],
                rng=chambers[k][turn],
            )
    return recordings


def _moved(
    condition: ScenarioCondition, scenario: Scenario, level: str, *, rng: np.random.Generator
) -> ScenarioCondition:
    """The condition with the motile fraction of one unit of a level.

    Drawn again where it would leave 0 to 1, or the other side as far: so the mean stays.
    """
    sd = float(getattr(scenario.motile_fraction_spread, level))
    fraction = scenario.motile_fraction_of(condition)
    room = min(fraction, 1 - fraction)
    if sd == 0 or room == 0:
        return condition
    step = sd * rng.standard_normal()
    while abs(step) > room:
        step = sd * rng.standard_normal()
    return replace(condition, motile_fraction=fraction + step)


def _simulate_chamber(
    scenario: Scenario,
    condition: ScenarioCondition,
    *,
    day: str,
    chamber: str,
    day_truth: LevelTruth,
    rng: np.random.Generator,
) -> list[SimulatedRecording]:
    chamber_truth = day_truth.times(factors("chamber", scenario, rng=rng))
    condition = _moved(condition, scenario, "chamber", rng=rng)
    expected = scenario.expected_in_field(condition)
    total = sum(expected.values())
    recordings = []
    for number, recording_rng in enumerate(rng.spawn(scenario.recordings_per_chamber)):
        truth = simulate_recording(
            scenario,
            condition,
            chamber_truth=chamber_truth,
            rng=recording_rng,
        )
        recordings.append(
            SimulatedRecording(
                name=f"{day}_{chamber}_f{number + 1}",
                condition=condition.name,
                control=condition.control,
                columns=condition.columns,
                day=day,
                chamber=chamber,
                field=f"f{number + 1}",
                minutes=_FIRST_MINUTES + _MINUTES_A_RECORDING * number,
                tracks=tracks_seen(truth),
                truth=truth,
                motile_fraction=expected["gliding"] / total if total > 0 else float("nan"),
                expected_in_field=expected,
                chamber_truth=chamber_truth,
                day_truth=day_truth,
            )
        )
    return recordings
