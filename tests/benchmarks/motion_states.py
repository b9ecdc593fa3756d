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
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from glidefit.evidence import (
    DETACHED,
    JUMP,
    KEPT,
    MIN_POSITIONS,
    PIVOTING,
    SHORT,
    STUCK,
    CleanTracks,
)
from glidefit.kernels import motion
from glidefit.settings import CleanSettings
from glidefit.steps.clean import clean
from glidefit.steps.simulate import (
    KINDS,
    Scenario,
    ScenarioCondition,
    SimulatedRecording,
    simulate_assay,
)
from glidefit.tracks import Tracks

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
    wrong: float = 0.0  # share of the positions that lie a micrometre off


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
    "1 % wrong positions": Case(wrong=0.01),
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
    films = simulate_assay(scenario, np.random.default_rng(seed)).recordings
    rng = np.random.default_rng([seed, 1])
    return tuple(replace(one, tracks=spoiled(one.tracks, case.wrong, rng)) for one in films)


def spoiled(tracks: Tracks, share: float, rng: np.random.Generator) -> Tracks:
    off = (rng.random(len(tracks.frame)) < share) * np.exp(
        2j * np.pi * rng.random(len(tracks.frame))
    )
    return tracks.moved(tracks.x_um + off.real, tracks.y_um + off.imag)


def verdicts(found: CleanTracks) -> np.ndarray:
    """Verdict of each track; those set aside for a jump are never undecided."""
    named = np.where(found.kept, "kept", found.reason)
    return np.asarray(np.where(found.decided, named, "undecided"))


def motile_error(found: CleanTracks, kind: np.ndarray) -> float:
    """Motile fraction found less that of the same filament-frames in truth."""
    judged = found.decided & (found.reason != JUMP) & (found.reason != SHORT)
    frames = found.tracks.n_positions
    seen = frames * (frames >= MIN_POSITIONS)
    if not (frames * judged).sum():
        return float("nan")
    read = (frames * (judged & found.kept)).sum() / (frames * judged).sum()
    return float(read - (seen * (kind == "gliding")).sum() / seen.sum())


def by_thresholds(found: CleanTracks) -> CleanTracks:
    """Measures of each track against limits: spread 2 σ, mean cosine 0.4, extent 5 µm.

    Drift and noise are those of `clean`.
    """
    t, noise, stuck = found.tracks, found.noise_um, 2.0
    measured = motion.measure(t.frame, t.offsets, t.x_um, t.y_um, noise=noise)
    rest = measured.spread_um <= motion.spread_limit(t.n_positions, multiple=stuck) * noise
    advancing = ~rest & ~(measured.advance < 0.4)
    n_frames = t.frame[t.offsets[1:] - 1] - t.frame[t.offsets[:-1]]
    pivoting = ~rest & motion.in_place(measured, n_frames, extent=5.0)
    typical = median(measured.speed_um_frame[advancing & ~pivoting & (measured.lag > 0)])
    usual = np.fmax(typical, measured.median_step_um)
    reason = np.full(t.n_tracks, KEPT, dtype="U16")
    reason[~rest & ~advancing & ~pivoting] = DETACHED
    reason[pivoting] = PIVOTING
    reason[measured.longest_step_um > 5 * usual + 8 * noise] = JUMP
    reason[rest] = STUCK
    reason[t.n_positions < MIN_POSITIONS] = SHORT
    typical = median(measured.speed_um_frame[(reason == KEPT) & (measured.lag > 0)])
    # A straight path of length L has a spread of L/√24.
    limit = motion.spread_limit(t.n_positions, multiple=stuck) * noise
    noticed = np.sqrt(24) * limit / np.maximum(n_frames, 1)
    if not found.drift.measured and np.isfinite(typical):
        slowest = 0.03 * typical
        small = slowest * n_frames + 8 * noise
        creeping = (measured.extent_um <= small) & (typical * n_frames > 2 * small)
        reason[(reason == KEPT) & creeping] = STUCK
        noticed = np.maximum(noticed, slowest)
    undecided = (reason == STUCK) & (noticed > 0.5 * typical)
    return replace(
        found,
        reason=np.where(undecided, KEPT, reason),
        decided=(t.n_positions >= MIN_POSITIONS) & ~undecided,
    )


def median(values: np.ndarray) -> float:
    return float(np.median(values)) if len(values) else float("nan")


def run(case: Case, *, number: int, seed: int) -> None:
    films = recordings(case, number=number, seed=seed)
    frame_s = float(case.film.get("frame_s", 1 / 3))
    begun = time.process_time()
    likely = [
        clean(film.tracks, frame_s=frame_s, settings=CleanSettings(), where="film")
        for film in films
    ]
    middle = time.process_time()
    limited = [by_thresholds(found) for found in likely]
    spent = middle - begun, time.process_time() - middle
    for name, all_found, seconds in (
        ("thresholds", limited, spent[1]),
        ("likelihood, drift and all", likely, spent[0]),
    ):
        print(f"  {name}: {seconds / len(films):.2f} s")
        show(all_found, [film.truth.kind for film in films])


def show(all_found: Sequence[CleanTracks], kinds: Sequence[np.ndarray]) -> None:
    kind = np.concatenate(kinds)
    verdict = np.concatenate([verdicts(found) for found in all_found])
    frames = np.concatenate([found.tracks.n_positions for found in all_found])
    frames = frames * (frames >= MIN_POSITIONS)
    kept = np.concatenate([found.kept for found in all_found])
    errors = np.array([motile_error(*both) for both in zip(all_found, kinds, strict=True)])
    error = errors.std(ddof=1) / np.sqrt(len(errors)) if len(errors) > 1 else np.nan
    wrong = frames[kept & (kind != "gliding")].sum() / max(frames[kept].sum(), 1)
    print(f"    motile fraction {errors.mean():+.4f} ± {error:.4f}; ", end="")
    print(f"of what is kept {100 * wrong:.2f} % does not glide")
    print(f"    {'% of frames':12s}" + "".join(f"{name:>11s}" for name in VERDICTS))
    for one in KINDS:
        total = frames[kind == one].sum()
        if total:
            row = [frames[(kind == one) & (verdict == name)].sum() / total for name in VERDICTS]
            shares = "".join(f"{100 * share:11.2f}" for share in row)
            print(f"    {one:12s}{shares}   of {total}")


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
