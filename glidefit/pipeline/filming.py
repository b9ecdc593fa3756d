"""Simulated recordings as videos: of spots, and of filaments with the truth of every frame."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from zlib import crc32

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.synthetic_frames import SpotOptics, spot_frames
from glidefit.pipeline.recipe import FilamentFilming, Video
from glidefit.steps.simulate import Scenario, SimulatedRecording


def film_spots(path: Path, scenario: Scenario, video: Video, recording: SimulatedRecording) -> None:
    """Write a video of spots at the positions of a recording."""
    truth = recording.truth
    frames = spot_frames(
        truth.track,
        truth.frame,
        truth.exposed_x_um,
        truth.exposed_y_um,
        n_frames=scenario.n_frames,
        frame_s=scenario.frame_s,
        shape_px=_shape_px(scenario),
        optics=SpotOptics.with_signal_to_noise(
            video.signal_to_noise,
            psf_um=video.psf_um,
            pixel_um=scenario.pixel_um,
            background_photons=video.background_photons,
            read_noise=video.read_noise,
        ),
        faults=video.faults,
        rng=_stream(scenario, recording),
    )
    _write(path, (frame.image for frame in frames), scenario)


def film_filaments(
    path: Path, scenario: Scenario, filming: FilamentFilming, recording: SimulatedRecording
) -> str:
    """Write a video of the filaments of a recording; the truth of every frame, as CSV."""
    from glidefit.kernels.synthetic_filaments import filament_frames
    from glidefit.steps.simulate.filaments import simulate_filaments
    from glidefit.writing.filament_truth import HEADER, filament_truth_rows

    bodies, noise = _stream(scenario, recording).spawn(2)
    filaments, view = simulate_filaments(
        scenario,
        next(c for c in scenario.conditions if c.name == recording.condition),
        expected_in_field=recording.expected_in_field,
        chamber_truth=recording.chamber_truth,
        law=filming.law,
        rng=bodies,
    )
    frames = filament_frames(
        filaments,
        view=view,
        shape_px=_shape_px(scenario),
        optics=filming.optics(scenario.pixel_um),
        faults=filming.faults,
        rng=noise,
    )
    rows = [HEADER]

    def images() -> Iterator[NDArray[np.uint16]]:
        for frame in frames:
            rows.extend(
                filament_truth_rows(frame.truth, frame=frame.frame, frame_s=scenario.frame_s)
            )
            yield frame.image

    _write(path, images(), scenario)
    return "".join(rows)


def _stream(scenario: Scenario, recording: SimulatedRecording) -> np.random.Generator:
    """A random stream of the recording's own."""
    return np.random.default_rng([scenario.seed, crc32(recording.name.encode())])


def _shape_px(scenario: Scenario) -> tuple[int, int]:
    width, height = (round(side / scenario.pixel_um) for side in scenario.field_um)
    return height, width


def _write(path: Path, images: Iterator[NDArray[np.uint16]], scenario: Scenario) -> None:
    from glidefit.writing.recordings import write_video

    path.parent.mkdir(exist_ok=True)
    write_video(
        path,
        images,
        n_frames=scenario.n_frames,
        pixel_um=scenario.pixel_um,
        frame_s=scenario.frame_s,
        exposure_s=scenario.exposure_s,
    )
