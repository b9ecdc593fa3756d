"""Spots found and followed in simulated films, beside a plain script, on the same frames.

Run: python tests/benchmarks/spots.py
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

from glidefit.kernels.simulation import (
    ExposedPaths,
    FrameTiming,
    Motion,
    PathState,
    SeenPositions,
    View,
    positions_around,
    seen,
    seen_active,
    standing_paths,
)
from glidefit.kernels.synthetic_frames import (
    CameraFaults,
    SpotFrame,
    SpotOptics,
    least_localization_error,
    spot_frames,
)
from glidefit.settings import DetectSettings, LinkSettings
from glidefit.steps.detect import detect_spots
from glidefit.steps.link import link

if TYPE_CHECKING:
    import pandas as pd

PIXEL_UM, PSF_UM, SIDE_PX, BACKGROUND = 0.1, 0.13, 512, 100.0
GATE_UM = 0.3  # a spot found within this of a true one is that one


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """What is filmed; 60 spots are gliding or stuck in a field of 51 µm."""

    signal_to_noise: float = 4.0  # peak over the noise at the peak
    spots: float = 60.0  # in the field, on average
    speed_um_s: float = 0.8
    rotational_diffusion: float = 0.004  # rad²/s
    frame_s: float = 1 / 3
    exposure_s: float = 0.03
    n_frames: int = 40
    stuck_share: float = 0.2
    faults: CameraFaults = CameraFaults()  # noqa: RUF009  (frozen)
    seed: int = 1

    @property
    def optics(self) -> SpotOptics:
        """Its spots."""
        return SpotOptics.with_signal_to_noise(
            self.signal_to_noise,
            psf_um=PSF_UM,
            pixel_um=PIXEL_UM,
            background_photons=BACKGROUND,
            read_noise=1.5,
        )

    @property
    def times_s(self) -> NDArray[np.float64]:
        """Of its frames."""
        return np.arange(self.n_frames) * self.frame_s


def film(case: Case) -> list[SpotFrame]:
    """Frames with spots that glide, turn, enter and leave, among stuck ones."""
    rng = np.random.default_rng(case.seed)
    timing = FrameTiming(
        frame_s=case.frame_s,
        n_frames=case.n_frames,
        exposure_s=case.exposure_s,
        exposed_steps=4,
    )
    field_um = (SIDE_PX * PIXEL_UM, SIDE_PX * PIXEL_UM)
    reach = case.speed_um_s * 1.3 * case.frame_s * case.n_frames
    gliding = case.spots * (1 - case.stuck_share)
    x, y = positions_around(gliding, field_um=field_um, reach_um=reach, rng=rng)
    motion = Motion.of(
        len(x),
        speed=case.speed_um_s * np.clip(rng.normal(1, 0.1, len(x)), 0.7, 1.3),
        rotational_diffusion=case.rotational_diffusion,
    )
    view = View(timing=timing, field_um=field_um)
    moving = seen_active(PathState.stationary(x, y, motion, rng=rng), motion, view=view, rng=rng)
    stuck = standing(case, timing, view, field_um, rng)
    positions = SeenPositions.join([moving, stuck], shifts=[0, len(x)])
    frames = spot_frames(
        positions.filament,
        positions.frame,
        positions.x,
        positions.y,
        n_frames=case.n_frames,
        frame_s=case.frame_s,
        shape_px=(SIDE_PX, SIDE_PX),
        optics=case.optics,
        faults=case.faults,
        rng=rng,
    )
    return list(frames)


def standing(
    case: Case,
    timing: FrameTiming,
    view: View,
    field_um: tuple[float, float],
    rng: np.random.Generator,
) -> SeenPositions:
    """Spots that do not move."""
    share = case.spots * case.stuck_share
    x, y = positions_around(share, field_um=field_um, reach_um=0.0, rng=rng)
    paths: ExposedPaths = standing_paths(x, y, timing=timing, rng=rng)
    return seen(paths, view=view)


@dataclass(frozen=True, slots=True, kw_only=True)
class Score:
    """How spots and tracks agree with the truth."""

    recall: float
    precision: float
    rmse_um: float  # per coordinate
    switches_per_1000: float  # a true spot goes on under another track: of 1000 of its frames
    idf1: float


def score(truth: list[SpotFrame], found: list[tuple[NDArray, NDArray, NDArray]]) -> Score:
    """Score of positions and their tracks, a tuple (x, y, track) for each frame.

    A true spot keeps its track while it is within the gate; then as many pairs as possible, the
    nearest ones. IDF1 pairs true spots with tracks once for the whole film. After Bernardin &
    Stiefelhagen, EURASIP J. Image Video Process. (2008), doi 10.1155/2008/246309, and Ristani
    et al., ECCV workshops (2016), from memory.
    """
    followed: dict[int, int] = {}
    together: dict[tuple[int, int], int] = {}
    errors = []
    n_true = n_found = n_matched = switches = 0
    for true, (x, y, track) in zip(truth, found, strict=True):
        lit = true.photons > 0
        name = true.track[lit]
        dx, dy = np.subtract.outer(true.x_um[lit], x), np.subtract.outer(true.y_um[lit], y)
        distance = np.hypot(dx, dy)
        near = distance < GATE_UM
        same = np.array([[followed.get(a) == b for b in track] for a in name]).reshape(near.shape)
        a, b = linear_sum_assignment(np.where(near, distance - 100 - 1e4 * same, 0.0))
        a, b = a[near[a, b]], b[near[a, b]]
        for true_name, track_name in zip(name[a], track[b], strict=True):
            switches += followed.get(true_name, track_name) != track_name
            followed[true_name] = track_name
        for i, j in zip(*np.nonzero(near), strict=True):
            pair = (name[i], track[j])
            together[pair] = together.get(pair, 0) + 1
        errors += [dx[a, b], dy[a, b]]
        n_true, n_found, n_matched = n_true + len(name), n_found + len(x), n_matched + len(a)
    return Score(
        recall=n_matched / n_true,
        precision=n_matched / max(n_found, 1),
        rmse_um=float(np.sqrt(np.mean(np.concatenate(errors) ** 2))),
        switches_per_1000=1000 * switches / n_true,
        idf1=2 * identities(together) / (n_true + n_found),
    )


def identities(together: dict[tuple[int, int], int]) -> int:
    """Most frames that pairs of a true spot and a track, each in one pair, are together."""
    rows = {name: k for k, name in enumerate(dict.fromkeys(a for a, _ in together))}
    columns = {name: k for k, name in enumerate(dict.fromkeys(b for _, b in together))}
    count = np.zeros((len(rows), len(columns)), dtype=np.int64)
    for (a, b), n in together.items():
        count[rows[a], columns[b]] = n
    return int(count[linear_sum_assignment(-count)].sum())


def ours(frames: list[SpotFrame], case: Case) -> list[tuple[NDArray, NDArray, NDArray]]:
    """Positions and tracks of glidefit with its default settings."""
    detections = detect_spots(
        (frame.image for frame in frames),
        pixel_um=PIXEL_UM,
        settings=DetectSettings(),
        where="film",
    )
    tracks, _ = link(detections, times_s=case.times_s, settings=LinkSettings(), where="film")
    rows = [np.flatnonzero(tracks.frame == f) for f in range(case.n_frames)]
    return [(tracks.x_um[r], tracks.y_um[r], tracks.index[r]) for r in rows]


def plain(
    frames: list[SpotFrame], case: Case, *, best_mass: bool
) -> list[tuple[NDArray, NDArray, NDArray]] | None:
    """A plain script: trackpy's defaults, a fixed search range of twice the usual step or 0.5 µm.

    With ``best_mass``, spots are kept from the mass on that is best for this film, which only
    someone who knows the truth can choose. None if its linker gives up.
    """
    import pandas as pd
    import trackpy

    trackpy.quiet()
    tables = [
        trackpy.locate(frame.image, 9, engine="numba").assign(frame=frame.frame) for frame in frames
    ]
    table = pd.concat(tables, ignore_index=True)
    if best_mass:
        table = table[table["mass"] >= mass_of_best_agreement(frames, table)]
    reach_px = max(2 * case.speed_um_s * case.frame_s, 0.5) / PIXEL_UM
    try:
        table = trackpy.link(table, reach_px, memory=2)
    except trackpy.SubnetOversizeException:
        return None
    rows = [table[table["frame"] == f] for f in range(case.n_frames)]
    return [
        (r["x"].to_numpy() * PIXEL_UM, r["y"].to_numpy() * PIXEL_UM, r["particle"].to_numpy())
        for r in rows
    ]


def mass_of_best_agreement(frames: list[SpotFrame], table: pd.DataFrame) -> float:
    """Smallest mass that gives the most agreement, 2 right / (found + true)."""
    right = np.zeros(len(table))
    for frame in frames:
        rows = np.flatnonzero(table["frame"] == frame.frame)
        x, y = (table[c].to_numpy()[rows] * PIXEL_UM for c in ("x", "y"))
        distance = np.hypot(np.subtract.outer(x, frame.x_um), np.subtract.outer(y, frame.y_um))
        right[rows] = distance.min(axis=1) < GATE_UM
    order = np.argsort(-table["mass"].to_numpy(), kind="stable")
    n_true = sum(len(frame.x_um) for frame in frames)
    agreement = 2 * np.cumsum(right[order]) / (np.arange(1, len(order) + 1) + n_true)
    return float(table["mass"].to_numpy()[order[np.argmax(agreement)]])


def processor_s(work: Callable[[], object]) -> float:
    """Processor time of a call, after a first one that compiles."""
    work()
    start = time.process_time()
    work()
    return time.process_time() - start


def line(name: str, result: Score | None, theory_um: float) -> str:
    """A row of the table."""
    if result is None:
        return f"  {name:16s}    the linker gave up: too many spots compete"
    return (
        f"  {name:16s} {result.recall:7.3f} {result.precision:10.3f} "
        f"{result.rmse_um / theory_um:11.2f} {result.switches_per_1000:14.1f} {result.idf1:7.3f}"
    )


def main() -> None:
    """Print the tables."""
    import trackpy

    warnings.simplefilter("ignore")  # the plain script's own
    print("                     recall  precision RMSE/theory  switches/1000    IDF1")
    cases = [
        Case(signal_to_noise=snr, spots=n) for snr in (2.0, 4.0, 10.0) for n in (20.0, 60.0, 150.0)
    ]
    actin = {"speed_um_s": 4.0, "rotational_diffusion": 0.25, "frame_s": 0.1, "exposure_s": 0.01}
    cases += [Case(**actin), Case(**actin, spots=150.0)]
    cases += [Case(exposure_s=1 / 3), Case(**{**actin, "exposure_s": 0.1})]
    faults = CameraFaults(unevenness=0.4, hot_pixel_share=1e-4, dark_rate=0.2, bright_rate=2.0)
    cases += [Case(faults=faults)]
    for case in cases:
        frames = film(case)
        theory_um = least_localization_error(case.optics)
        print(
            f"SNR {case.signal_to_noise:g}, {case.spots:g} spots, {case.speed_um_s:g} µm/s, "
            f"{1 / case.frame_s:.3g} frames/s, exposure {case.exposure_s:.2g} s"
            + (", uneven light, hot pixels, blinking" if case.faults != CameraFaults() else "")
        )
        print(line("glidefit", score(frames, ours(frames, case)), theory_um), flush=True)
        for name, best_mass in (("plain", False), ("plain, best mass", True)):
            found = plain(frames, case, best_mass=best_mass)
            result = None if found is None else score(frames, found)
            print(line(name, result, theory_um), flush=True)

    case = Case(n_frames=10)
    frames = film(case)
    both = processor_s(lambda: ours(frames, case)) / case.n_frames
    located = processor_s(lambda: [trackpy.locate(f.image, 9, engine="numba") for f in frames])
    located /= case.n_frames
    print(
        f"processor time a frame: detect and link {1e3 * both:.0f} ms, trackpy.locate alone "
        f"{1e3 * located:.0f} ms, ratio {both / located:.2f}"
    )


if __name__ == "__main__":
    main()
