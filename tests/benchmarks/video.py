"""Filaments and spots followed in simulated films, beside a practitioner's script, same frames.

    python tests/benchmarks/video.py [--quick] [--only TEXT] [--long] [--repeats N] [--cost]

Precision, recall, recall where filaments overlap and IDF1 count a position within 0.5 µm of the
true midpoint; filaments cut by the edge, stuck, bundled or blinked off count neither way.
"""

from __future__ import annotations

import argparse
import dataclasses
import time
import warnings
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from video_cases import CASES, LONG, PIXEL_UM, Case, Film
from video_cost import print_costs
from video_trackers import Followed, cleaned, filament_tracks, glidefit, script

from glidefit.kernels.filament_truth import FilmTruth
from glidefit.kernels.synthetic_frames import SpotOptics, least_localization_error
from glidefit.kernels.tracking_scores import Pairing, pairing, scores_of

GATE_UM = 0.5
FEWEST_FRAMES = 10  # of a track whose speed or length is judged
HEADER = (
    "               precision recall overlap  IDF1  MOTA switches  RMSE   length   head   speed   "
    "CPU\n"
    "                                                      /1000    nm   error %    nm  error %  "
    "ms/frame"
)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--quick", action="store_true", help="a quarter of the field, 20 frames")
    parser.add_argument("--only", default="", help="cases whose name has this text")
    parser.add_argument("--long", action="store_true", help="also 2048 × 2048 × 300")
    parser.add_argument("--repeats", type=int, default=0, help="experiments for v and D_r")
    parser.add_argument("--cost", action="store_true", help="processor time and memory")
    chosen = parser.parse_args()
    warnings.simplefilter("ignore")  # the script's own
    for spots in (False, True):  # compiles
        small = Case(name="small", side_px=256, n_frames=8, filaments=160, spots=spots)
        for tracker in (script, glidefit):
            tracker(Film(small.video).images(), small)
    print(HEADER)
    for case in (*CASES, LONG) if chosen.long else CASES:
        if chosen.only in case.name:
            show(smaller(case) if chosen.quick else case)
    if chosen.repeats:
        case = smaller(CASES[0]) if chosen.quick else CASES[0]
        print_condition(case, repeats=chosen.repeats)
    if chosen.cost:
        print_costs(side_px=512 if chosen.quick else 1024)


def smaller(case: Case) -> Case:
    """The same in a quarter of the field and a third of the time."""
    return dataclasses.replace(
        case, side_px=case.side_px // 2, n_frames=max(case.n_frames // 3, 20)
    )


def show(case: Case) -> None:
    """The rows of a case: script, glidefit, and what each should be."""
    print(f"{case.name}")
    for name, tracker in (("script", script), ("glidefit", glidefit)):
        if tracker is script and case.side_px > 1024:
            continue
        film = Film(case.video)
        begun = time.process_time()
        played = CountedImages(film)
        found = tracker(played, case)
        used = time.process_time() - begun - played.used_s
        print(f"  {name:12s} {line(found, film, case, used)}", flush=True)
    if case.usual:
        print(f"  usual script: {case.usual}")
    if case.reach:
        print(f"  to reach:     {case.reach}")
    if case.spots:
        print(f"  theory:       {1e3 * theory_um(film.truth, case):.1f} nm")


class CountedImages:
    """The images of a film, with the processor time that making them took."""

    def __init__(self, film: Film) -> None:
        self.film = film
        self.used_s = 0.0

    def __iter__(self):
        frames = self.film.images()
        while True:
            begun = time.process_time()
            image = next(frames, None)
            self.used_s += time.process_time() - begun
            if image is None:
                return
            yield image


def theory_um(truth: FilmTruth, case: Case) -> float:
    """Least error of a spot's distance from its true place: root mean square over what counts.

    Each spot with the light that bleaching, uneven illumination and focus leave it.
    """
    p, faults = truth.positions, case.faults
    first = SpotOptics.with_signal_to_noise(
        case.signal_to_noise, psf_um=0.13, pixel_um=PIXEL_UM, background_photons=20, read_noise=1.6
    )
    squares = []
    for frame, x, y in zip(p.frame[p.counted], p.x[p.counted], p.y[p.counted], strict=True):
        time_s = frame * case.frame_s
        off_centre = (2 * np.array([x, y]) / case.field_um[0] - 1) ** 2
        light = 1 - faults.unevenness * off_centre.sum() / 2
        swing = np.sin(np.pi * time_s / faults.focus_period_s) ** 2
        here = dataclasses.replace(
            first,
            psf_um=first.psf_um * (1 + faults.focus_breathing * swing),
            photons=first.photons * light * np.exp(-faults.bleaching_rate * time_s),
            background_photons=first.background_photons * light,
        )
        squares.append(2 * least_localization_error(here) ** 2)
    return float(np.sqrt(np.mean(squares)))


def line(found: Followed | None, film: Film, case: Case, used_s: float) -> str:
    """A row of the table."""
    if found is None:
        return "cannot do it"
    truth = film.truth
    pairs = pairing(truth.positions, found.positions, gate=GATE_UM)
    s = scores_of(truth.positions, found.positions, pairs)
    speeds = film.video.filaments.motion.speed
    return (
        f"{s.precision:9.3f} {s.recall:6.3f} {s.recall_overlapped:7.3f} {s.idf1:5.3f} "
        f"{s.mota:5.2f} {1000 * s.switches / max(s.n_true, 1):8.2f} {1e3 * s.rmse:5.0f} "
        f"{100 * length_error(truth, found, pairs):8.2f} "
        f"{1e3 * head_distance(truth, found, pairs):6.0f} "
        f"{speed_error(truth, found, pairs, speeds):>7s} {1e3 * used_s / case.n_frames:9.0f}"
    )


def length_error(truth: FilmTruth, found: Followed, pairs: Pairing) -> float:
    """Median over tracks of |median of the found length over the true one - 1|."""
    if found.length_um is None:
        return float("nan")
    ratio = found.length_um[pairs.found] / truth.length_um[pairs.true]
    return median_over_tracks(found, pairs, lambda rows: abs(np.nanmedian(ratio[rows]) - 1))


def head_distance(truth: FilmTruth, found: Followed, pairs: Pairing) -> float:
    """Median distance of the found head from the true one, in µm."""
    if found.head_x_um is None or found.head_y_um is None:
        return float("nan")
    dx = found.head_x_um[pairs.found] - truth.head_x_um[pairs.true]
    dy = found.head_y_um[pairs.found] - truth.head_y_um[pairs.true]
    return float(np.nanmedian(np.hypot(dx, dy)))


def speed_error(
    truth: FilmTruth, found: Followed, pairs: Pairing, speeds: NDArray[np.float64]
) -> str:
    """Median over tracks of the relative error of the speed, and of its size, in per cent."""
    if not found.speed_um_s:
        return "-"
    errors = []
    for track, rows in rows_of_tracks(found, pairs):
        if track in found.speed_um_s:
            owner = np.bincount(truth.filament[pairs.true[rows]]).argmax()
            errors.append(found.speed_um_s[track] / speeds[owner] - 1)
    if not errors:
        return "-"
    return f"{100 * np.nanmedian(errors):+.2f}/{100 * np.nanmedian(np.abs(errors)):.1f}"


def rows_of_tracks(found: Followed, pairs: Pairing) -> list[tuple[int, NDArray[np.int64]]]:
    """Pairs of each track that has enough of them."""
    track = found.positions.track[pairs.found]
    rows = [(int(t), np.flatnonzero(track == t)) for t in np.unique(track)]
    return [(t, own) for t, own in rows if len(own) >= FEWEST_FRAMES]


def median_over_tracks(
    found: Followed, pairs: Pairing, of_track: Callable[[NDArray[np.int64]], float]
) -> float:
    """Median over the tracks of a number of each."""
    values = [of_track(rows) for _, rows in rows_of_tracks(found, pairs)]
    return float(np.nanmedian(values)) if values else float("nan")


def print_condition(case: Case, *, repeats: int) -> None:
    """Bias of v and D_r of a condition of three chambers, from videos to numbers."""
    from glidefit.pipeline.study import condition_numbers
    from glidefit.settings import Settings

    settings = Settings()
    values = []
    for experiment in range(repeats):
        recordings = []
        for chamber in range(3):
            own = dataclasses.replace(case, seed=1000 + 3 * experiment + chamber)
            done = filament_tracks(Film(own.video).images(), own)
            recordings.append(cleaned(done.tracks, own, chamber=f"c{chamber}", resting=done.specks))
        numbers = condition_numbers(
            recordings, settings=settings, rng=np.random.default_rng(experiment)
        )
        values.append(
            [
                numbers.estimates["speed_um_s"].value / case.speed_um_s,
                numbers.estimates["rotational_diffusion_rad2_s"].value / case.rotational_diffusion,
            ]
        )
    bias = 100 * (np.mean(values, axis=0) - 1)
    error = 100 * np.std(values, axis=0, ddof=1) / np.sqrt(repeats) if repeats > 1 else [np.nan] * 2
    print(f"condition of 3 chambers, {case.name}: {repeats} experiments")
    for name, b, e, reach in zip(("v", "D_r"), bias, error, (0.5, 5), strict=True):
        print(f"  bias of {name}: {b:+.2f} ± {e:.2f} %, to reach {reach} %")


if __name__ == "__main__":
    main()
