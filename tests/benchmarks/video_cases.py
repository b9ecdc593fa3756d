"""What the video benchmark films: filaments and spots of 0.13 µm pixels with known truth."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.filament_population import FilamentLaw, FilamentVideo, make_filament_video
from glidefit.kernels.filament_truth import FilamentTruth, FilmTruth, film_truth
from glidefit.kernels.simulation import FrameTiming

PIXEL_UM = 0.13
# The usual make: bleaching to half in 140 s, the corners a third darker, some hot pixels.
USUAL = FilmFaults(unevenness=0.3, bleaching_rate=0.005, hot_pixel_share=1e-5)
# All nuisances at once, in a field of 1024 × 1024 pixels.
ALL = FilmFaults(
    unevenness=0.3,
    bleaching_rate=0.005,
    dark_rate=0.02,
    bright_rate=1.0,
    hot_pixel_share=3e-5,
    debris=30,
    haze_patches=12,
    haze=0.5,
    focus_breathing=0.3,
    focus_period_s=20,
)
CROWDED = {"stuck_share": 0.1, "bundled_share": 0.1}


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """A film, and what glidefit shall reach on it (kind of score: bound)."""

    name: str
    filaments: float = 40.0  # in the field, on average
    signal_to_noise: float = 4.0
    side_px: int = 1024
    n_frames: int = 60
    frame_s: float = 0.5
    exposure_s: float = 0.05
    length_um: float = 8.0
    speed_um_s: float = 0.8
    rotational_diffusion: float = 0.001  # rad²/s: a path persistence of 400 µm
    drift_um_s: float = 0.0
    spots: bool = False
    law: dict[str, float] = dataclasses.field(default_factory=dict)
    faults: FilmFaults = USUAL
    seed: int = 1
    usual: str = ""  # what the script usually scores
    reach: str = ""  # what glidefit shall reach

    @property
    def times_s(self) -> NDArray[np.float64]:
        """Of its frames."""
        return np.arange(self.n_frames) * self.frame_s

    @property
    def field_um(self) -> tuple[float, float]:
        """Width and height."""
        return (self.side_px * PIXEL_UM,) * 2

    @property
    def video(self) -> FilamentVideo:
        """The film itself."""
        body = {"length_um": 0.01, "length_spread": 0.0} if self.spots else {}
        area = (self.side_px / 1024) ** 2
        return make_filament_video(
            seed=self.seed,
            shape_px=(self.side_px, self.side_px),
            timing=FrameTiming(
                frame_s=self.frame_s, n_frames=self.n_frames, exposure_s=self.exposure_s
            ),
            law=FilamentLaw(
                **{
                    "in_field": self.filaments * area,
                    "length_um": self.length_um,
                    "length_spread": 0.4,
                    **self.law,
                    **body,
                }
            ),
            optics=FilamentOptics.with_signal_to_noise(
                self.signal_to_noise,
                pixel_um=PIXEL_UM,
                labels_per_um=0 if self.spots else 60,
                body_um=0.01 if self.spots else 0.0,
            ),
            faults=dataclasses.replace(
                self.faults,
                debris=self.faults.debris * area,
                haze_patches=self.faults.haze_patches * area,
            ),
            speed_um_s=self.speed_um_s,
            rotational_diffusion=self.rotational_diffusion,
            drift_um_s=self.drift_um_s,
        )


@dataclass(slots=True)
class Film:
    """A film that is played once: frames for a tracker, its truth kept aside."""

    video: FilamentVideo
    truths: list[FilamentTruth] = dataclasses.field(default_factory=list)

    def images(self) -> Iterator[NDArray[np.uint16]]:
        """The frames."""
        for frame in self.video.frames():
            self.truths.append(slim(frame.truth))
            yield frame.image

    @property
    def truth(self) -> FilmTruth:
        """Of the frames played."""
        return film_truth(self.truths)


def slim(truth: FilamentTruth) -> FilamentTruth:
    """The truth without the contours of what counts."""
    rows = np.repeat(~truth.counted, np.diff(truth.contour_offset))
    points = np.where(truth.counted, 0, np.diff(truth.contour_offset))
    return dataclasses.replace(
        truth,
        contour_offset=np.concatenate([[0], np.cumsum(points)]),
        contour_x_um=truth.contour_x_um[rows],
        contour_y_um=truth.contour_y_um[rows],
    )


ACTIN: dict[str, Any] = {
    "length_um": 4.0,
    "speed_um_s": 4.0,
    "rotational_diffusion": 0.2,  # a path persistence of 10 µm
    "frame_s": 0.1,
    "exposure_s": 0.02,
}
NUISANCES: dict[str, Any] = {
    "filaments": 60,
    "faults": ALL,
    "drift_um_s": 0.01,
    "law": {**CROWDED, "detach_rate": 0.005},
}
FAST_NUISANCES: dict[str, Any] = {
    "filaments": 60,
    "faults": dataclasses.replace(
        ALL, bleaching_rate=0.025, dark_rate=0.1, bright_rate=5.0, focus_period_s=4
    ),
    "drift_um_s": 0.05,
    "law": {**CROWDED, "detach_rate": 0.025},
}

CASES = (
    Case(
        name="40 filaments, SNR 4",
        usual="0.92, 0.82, 0.09, 0.77; 93 nm",
        reach="0.99, 0.98, 0.90, 0.97; 65 nm; length 1 %, head 70 nm",
    ),
    Case(
        name="120 filaments, SNR 4",
        filaments=120,
        usual="0.86, 0.67, 0.13, 0.59",
        reach="0.97, 0.95, 0.85, 0.92",
    ),
    Case(
        name="40 filaments, SNR 2",
        signal_to_noise=2,
        usual="0.17, 0.25, 0.25, 0.07; 268 nm",
        reach="0.97, 0.95, 0.80, 0.93; 120 nm",
    ),
    Case(name="40 filaments, SNR 10", signal_to_noise=10, usual="63 nm", reach="45 nm"),
    Case(
        name="all nuisances, 60 microtubules, SNR 4",
        usual="IDF1 0.23 to 0.57",
        reach="0.96, 0.96, 0.85, 0.93",
        **NUISANCES,
    ),
    Case(
        name="all nuisances, 60 actin filaments, SNR 4",
        usual="IDF1 0.23 to 0.57",
        reach="0.96, 0.96, 0.85, 0.93",
        **ACTIN,
        **FAST_NUISANCES,
    ),
    Case(
        name="40 filaments, SNR 4, 10 frames/s",
        frame_s=0.1,
        exposure_s=0.02,
        usual="speed +20 %",
        reach="speed 0.5 %",
    ),
    Case(
        name="40 spots, SNR 4",
        spots=True,
        rotational_diffusion=0.004,
        usual="IDF1 0.95; 44 nm",
        reach="IDF1 0.98; RMSE 1.1 × theory",
    ),
    Case(
        name="all nuisances, 60 spots, SNR 4",
        spots=True,
        rotational_diffusion=0.004,
        usual="IDF1 0.31 to 0.43",
        reach="IDF1 0.92",
        **{
            **NUISANCES,
            # A speck of debris is what a spot that is stuck is.
            "faults": dataclasses.replace(ALL, debris=0),
            "law": {"stuck_share": 0.3, "detach_rate": 0.005},
        },
    ),
)
LONG = Case(
    name="2048 × 2048, 300 frames, all nuisances",
    reach="IDF1 0.90",
    side_px=2048,
    n_frames=300,
    **NUISANCES,
)
