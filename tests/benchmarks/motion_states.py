"""What becomes of tracks whose motion is known: the verdicts of cleaning, rule beside rule.

    python -P tests/benchmarks/motion_states.py [--recordings 4] [--case kinesin] [--seed 1]

Every recording is a field of 80 µm that filaments enter and leave. For each rule the table shows,
of the filament-frames of each true kind, the share that was given each verdict; then the motile
fraction found less the true one (of the same filament-frames), mean and standard error over
recordings, and the time of one thread. Tracks under three positions count on neither side.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from glidefit.evidence import JUMP, MIN_POSITIONS, SHORT, CleanTracks
from glidefit.settings import CleanSettings
from glidefit.steps.clean import clean
from glidefit.steps.simulate import (
    KINDS,
    Scenario,
    ScenarioCondition,
    SimulatedRecording,
    simulate_assay,
)

KINESIN = {
    "speed_um_s": 0.8,
    "rotational_diffusion_rad2_s": 0.008,
    "longitudinal_diffusion_um2_s": 0.003,
}
ACTIN = {
    "speed_um_s": 4.0,
    "rotational_diffusion_rad2_s": 0.2,
    "longitudinal_diffusion_um2_s": 0.05,
}
SLOW = {
    "speed_um_s": 0.05,
    "rotational_diffusion_rad2_s": 0.001,
    "longitudinal_diffusion_um2_s": 1e-4,
}
MIXED = {"stuck_fraction": 0.1, "pivoting_fraction": 0.05, "detached_fraction": 0.05}
VERDICTS = ("kept", "stuck", "pivoting", "detached", "jump", "undecided")


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One kind of recording: a condition, and what differs from a recording of kinesin."""

    condition: Mapping[str, float] = field(default_factory=lambda: dict(KINESIN))
    film: Mapping[str, Any] = field(default_factory=dict)


_ACTIN_FILM = {"frame_s": 0.1, "localization_error_um": 0.04}
_FLOATING_SLOWLY = {"detached_diffusion_um2_s": 0.05}
CASES = {
    "kinesin": Case(),
    "kinesin, detached at 0.05 µm²/s": Case(film=_FLOATING_SLOWLY),
    "actin": Case(condition=ACTIN, film=_ACTIN_FILM),
    "actin, detached at 0.05 µm²/s": Case(condition=ACTIN, film=_ACTIN_FILM | _FLOATING_SLOWLY),
    "slow": Case(condition=SLOW, film={"frame_s": 2.0}),
    "slow, detached at 0.05 µm²/s": Case(condition=SLOW, film={"frame_s": 2.0} | _FLOATING_SLOWLY),
    "pausing often": Case(
        condition=ACTIN
        | {
            "speed_um_s": 3.0,
            "rotational_diffusion_rad2_s": 0.3,
            "stop_rate_per_s": 0.5,
            "start_rate_per_s": 2.0,
        },
        film=_ACTIN_FILM | {"frame_s": 1 / 15},
    ),
    "pausing long": Case(condition=KINESIN | {"stop_rate_per_s": 0.03, "start_rate_per_s": 0.05}),
    "noisy": Case(film={"localization_error_um": 0.13}),
    "near the noise: 20 σ in all": Case(
        condition=SLOW | {"speed_um_s": 0.006, "longitudinal_diffusion_um2_s": 0.0},
        film={"frame_s": 0.5},
    ),
    "near the noise: 7 σ in all": Case(
        condition=SLOW | {"speed_um_s": 0.002, "longitudinal_diffusion_um2_s": 0.0},
        film={"frame_s": 0.5},
    ),
    "kinesin, 5 to 20 frames": Case(film={"break_probability": 0.1}),
    "actin, 5 to 20 frames": Case(condition=ACTIN, film=_ACTIN_FILM | {"break_probability": 0.1}),
    "slow, 5 to 20 frames": Case(condition=SLOW, film={"frame_s": 2.0, "break_probability": 0.1}),
    "circles of 1.6 µm": Case(condition=KINESIN | {"turning_rate_rad_s": 0.5}),
    "circles of 6 µm either way": Case(condition=KINESIN | {"turning_rate_sd_rad_s": 0.15}),
    "drift": Case(film={"drift_um_s": 0.01, "drift_wander_um_s": 0.005}),
    "drift, few stuck": Case(film={"drift_um_s": 0.01, "stuck_fraction": 0.02}),
    "lost frames": Case(film={"lost_probability": 0.1}),
    "few tracks": Case(film={"filaments_in_field": 6.0}),
    "one in ten glides": Case(condition=KINESIN | {"motile_fraction": 0.1}),
    "none glides": Case(condition=KINESIN | {"motile_fraction": 0.0}),
    "all glide": Case(condition=KINESIN | {"motile_fraction": 1.0}),
}


def recordings(case: Case, *, number: int, seed: int) -> tuple[SimulatedRecording, ...]:
    film = {
        "frame_s": 1 / 3,
        "exposure_s": 0.0,
        "localization_error_um": 0.03,
        "filaments_in_field": 60.0,
        **MIXED,
    } | dict(case.film)
    scenario = Scenario(
        name="states",
        conditions=(ScenarioCondition(name="c", **case.condition),),
        days=1,
        chambers_per_day=number,
        n_frames=200,
        **film,
    )
    return simulate_assay(scenario, np.random.default_rng(seed)).recordings


def verdicts(found: CleanTracks) -> np.ndarray:
    named = np.where(found.kept, np.where(found.decided, "kept", "undecided"), found.reason)
    return np.asarray(named)


def motile_error(found: CleanTracks, kind: np.ndarray) -> float:
    """Motile fraction found less that of the same filament-frames in truth."""
    judged = found.decided & (found.reason != JUMP) & (found.reason != SHORT)
    frames = found.tracks.n_positions
    seen = frames * (frames >= MIN_POSITIONS)
    if not (frames * judged).sum():
        return float("nan")
    read = (frames * (judged & found.kept)).sum() / (frames * judged).sum()
    return float(read - (seen * (kind == "gliding")).sum() / seen.sum())


Rule = Callable[[SimulatedRecording, float], CleanTracks]


def present(recording: SimulatedRecording, frame_s: float) -> CleanTracks:
    return clean(recording.tracks, frame_s=frame_s, settings=CleanSettings(), where="film")


RULES: dict[str, Rule] = {"thresholds": present}


def run(case: Case, *, number: int, seed: int) -> None:
    films = recordings(case, number=number, seed=seed)
    frame_s = float(case.film.get("frame_s", 1 / 3))
    for name, rule in RULES.items():
        table = np.zeros((len(KINDS), len(VERDICTS)))
        errors, spent = [], 0.0
        for film in films:
            begun = time.process_time()
            found = rule(film, frame_s)
            spent += time.process_time() - begun
            frames, given = found.tracks.n_positions, verdicts(found)
            for i, kind in enumerate(KINDS):
                for j, verdict in enumerate(VERDICTS):
                    these = (film.truth.kind == kind) & (given == verdict)
                    table[i, j] += frames[these].sum()
            errors.append(motile_error(found, film.truth.kind))
        show(name, table, np.array(errors), spent / len(films))


def show(name: str, table: np.ndarray, errors: np.ndarray, seconds: float) -> None:
    error = errors.std(ddof=1) / np.sqrt(len(errors)) if len(errors) > 1 else np.nan
    print(f"  {name}: motile fraction {errors.mean():+.4f} ± {error:.4f}, {seconds:.3f} s")
    print(f"    {'% of frames':12s}" + "".join(f"{verdict:>11s}" for verdict in VERDICTS))
    for kind, row in zip(KINDS, table, strict=True):
        if row.sum():
            shares = "".join(f"{100 * share:11.2f}" for share in row / row.sum())
            print(f"    {kind:12s}{shares}   of {row.sum():.0f}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--recordings", type=int, default=4)
    parser.add_argument("--case", choices=tuple(CASES))
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    for name in [options.case] if options.case else CASES:
        print(f"{name}: {options.recordings} recordings", flush=True)
        run(CASES[name], number=options.recordings, seed=options.seed)


if __name__ == "__main__":
    main()
