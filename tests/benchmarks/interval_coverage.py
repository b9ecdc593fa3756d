"""Bias, scatter and coverage of the whole chain on simulated assays with known truth.

    python -P tests/benchmarks/interval_coverage.py [--experiments 400] [--case kinesin] [--seed 1]
        [--workers 2] [--direct]

With --direct, fit and intervals alone: every track that was simulated is kept without cleaning, and
the model is not chosen but active.

Unless its case says otherwise, an experiment is 3 days × 2 chambers × 33 filaments in an 80 µm
field that they enter and leave, with day, chamber and filament effects (SD of speed 7, 4 and 10 %;
of rotational diffusion 15, 10 and 15 %). Beside the interval of glidefit stands the percentile
interval of tracks resampled as if they were independent.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import replace

import numpy as np

from glidefit.evidence import KEPT, SHORT, CleanRecording, CleanTracks
from glidefit.pipeline.simulated import experiment
from glidefit.pipeline.study import ConditionNumbers, condition_numbers
from glidefit.results import Drift
from glidefit.running.workers import run_all
from glidefit.settings import Settings
from glidefit.steps.simulate import (
    Scenario,
    ScenarioCondition,
    SimulatedRecording,
    simulate_assay,
)

KINESIN = ScenarioCondition(
    name="c",
    speed_um_s=0.8,
    rotational_diffusion_rad2_s=0.008,
    longitudinal_diffusion_um2_s=0.003,
)
BASE = Scenario(name="s", conditions=(KINESIN,), frame_s=1 / 3, exposure_s=0.0, n_frames=200)
SPEED, TURNING = BASE.speed_spread, BASE.rotational_diffusion_spread
CASES = {
    "kinesin": BASE,
    "actin": replace(
        BASE,
        frame_s=0.1,
        localization_error_um=0.04,
        conditions=(
            ScenarioCondition(
                name="c",
                speed_um_s=4.0,
                rotational_diffusion_rad2_s=0.2,
                longitudinal_diffusion_um2_s=0.05,
            ),
        ),
    ),
    "half motile": replace(BASE, stuck_fraction=0.5, filaments_in_field=66.0),
    "dirt": replace(
        BASE,
        stuck_fraction=0.10,
        detached_fraction=0.05,
        drift_um_s=0.005,
        lost_probability=0.03,
        break_probability=0.005,
    ),
    "2 days x 3 chambers": replace(BASE, days=2, chambers_per_day=3),
    "6 days x 2 chambers": replace(BASE, days=6),
    # Of that day's value: no day is drawn.
    "1 day x 4 chambers": replace(
        BASE,
        days=1,
        chambers_per_day=4,
        speed_spread=replace(SPEED, day=0.0),
        rotational_diffusion_spread=replace(TURNING, day=0.0),
    ),
    "unequal filaments": replace(
        BASE, chambers_per_day=3, filaments_in_field=((150.0, 20.0, 20.0),) * 3
    ),
    "no day effects": replace(
        BASE,
        speed_spread=replace(SPEED, day=0.0),
        rotational_diffusion_spread=replace(TURNING, day=0.0),
    ),
    "day x condition effects": replace(
        BASE,
        speed_spread=replace(SPEED, day_condition=0.04),
        rotational_diffusion_spread=replace(TURNING, day_condition=0.08),
    ),
}
KEYS = ("speed_um_s", "rotational_diffusion_rad2_s", "persistence_length_um", "motile_fraction")


SETTINGS = Settings()
DIRECT = Settings(fit={"model": "active"})
STEADY = Drift(
    measured=False,
    subtracted=False,
    n_objects=0,
    speed_um_s=float("nan"),
    largest_um=0.0,
    note="",
)


def truth_of(scenario: Scenario) -> dict[str, float]:
    c = scenario.conditions[0]
    return {
        "speed_um_s": c.speed_um_s,
        "rotational_diffusion_rad2_s": c.rotational_diffusion_rad2_s,
        "persistence_length_um": c.speed_um_s / c.rotational_diffusion_rad2_s,
        "motile_fraction": 1 - scenario.stuck_fraction - scenario.detached_fraction,
    }


def resampled_tracks(numbers, rng):
    """Percentile interval of the speed with all tracks in one pot."""
    chambers = numbers.fitted.chambers
    influence = np.concatenate([c.influence[:, 0] / len(chambers) for c in chambers])
    draws = rng.multinomial(len(influence), np.full(len(influence), 1 / len(influence)), size=1000)
    value = numbers.combined.value[0]
    return np.quantile(value + (draws - 1) @ influence, [0.025, 0.975])


def uncleaned(recording: SimulatedRecording, scenario: Scenario) -> CleanRecording:
    """The recording with all its tracks kept, but those of two positions, which are no tracks."""
    tracks = recording.tracks
    short = tracks.n_positions < 3
    clean = CleanTracks(
        tracks=tracks,
        reason=np.where(short, SHORT, KEPT).astype(np.str_),
        decided=~short,
        gliding_probability=np.where(short, np.nan, 1.0),
        noise_um=scenario.localization_error_um,
        typical_speed_um_s=scenario.conditions[0].speed_um_s,
        smallest_speed_um_s=0.0,
        drift=STEADY,
        drift_x_um=np.zeros(scenario.n_frames),
        drift_y_um=np.zeros(scenario.n_frames),
    )
    return CleanRecording(
        recording=recording.name,
        condition=recording.condition,
        day=recording.day,
        chamber=recording.chamber,
        field=recording.field,
        clean=clean,
        frame_s=scenario.frame_s,
        exposure_s=scenario.exposure_s,
        field_um=scenario.field_um,
        minutes=recording.minutes,
    )


def numbers_of(scenario: Scenario, rng: np.random.Generator, *, direct: bool) -> ConditionNumbers:
    if not direct:
        return experiment(scenario, settings=SETTINGS, rng=rng)["c"]
    recordings = [uncleaned(r, scenario) for r in simulate_assay(scenario, rng).recordings]
    return condition_numbers(recordings, settings=DIRECT, rng=rng)


def one(task: tuple[str, int, int, bool]) -> tuple[list[tuple[float, float, float]], bool]:
    """Value and interval of every quantity, and whether the independent tracks hold the speed."""
    case, seed, i, direct = task
    scenario = CASES[case]
    rng = np.random.default_rng([seed, i])
    numbers = numbers_of(scenario, rng, direct=direct)
    found = [numbers.estimates[key] for key in KEYS]
    low, high = resampled_tracks(numbers, rng)
    speed = scenario.conditions[0].speed_um_s
    return [(e.value, e.low, e.high) for e in found], bool(low <= speed <= high)


def run(case: str, n: int, seed: int, workers: int, *, direct: bool) -> None:
    truth, began = truth_of(CASES[case]), time.perf_counter()
    tasks = [(case, seed, i, direct) for i in range(n)]
    done = run_all(one, tasks, workers=workers, name=str, done=lambda _: None)
    found = {key: [values[k] for values, _ in done] for k, key in enumerate(KEYS)}
    naive = sum(held for _, held in done)
    each = (time.perf_counter() - began) / n
    print(f"\n{case}: {n} experiments, {each:.2f} s each")
    print("quantity                        bias %  ± MC    SD %   coverage ± MC   half width %")
    for key, value in truth.items():
        table = np.array(found[key])
        known = table[np.isfinite(table[:, 0])]
        with_interval = table[np.isfinite(table[:, 1]) | np.isfinite(table[:, 2])]
        if len(with_interval) == 0:
            print(f"{key:30s} {100 * (known[:, 0].mean() / value - 1):+7.2f}   no interval")
            continue
        held = ~((with_interval[:, 1] > value) | (with_interval[:, 2] < value))
        rate = held.mean()
        spread = known[:, 0].std() / value
        half = np.nanmedian((table[:, 2] - table[:, 1]) / 2 / value)
        numbers = [
            f"{100 * (known[:, 0].mean() / value - 1):+7.2f} {100 * spread / n**0.5:5.2f}",
            f"{100 * spread:7.2f}",
            f"{rate:.3f} {(rate * (1 - rate) / len(held)) ** 0.5:.3f}",
            f"{100 * half:8.1f}",
            f"({n - len(known)} without a value)",
        ]
        print(f"{key:30s} {'   '.join(numbers)}")
    print(f"speed, tracks resampled as if independent: coverage {naive / n:.3f}")


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--experiments", type=int, default=400)
    parser.add_argument("--case", choices=CASES, action="append")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--direct", action="store_true")
    given = parser.parse_args()
    for name in given.case or CASES:
        run(name, given.experiments, given.seed, given.workers, direct=given.direct)
