"""Films of filaments: the same bytes from the same seed, numbers and motion as asked."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from numpy.testing import assert_array_equal

from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.filament_population import FilamentLaw, make_filament_video
from glidefit.kernels.simulation import FrameTiming

EVERYTHING = FilmFaults(
    unevenness=0.3,
    bleaching_rate=0.02,
    dark_rate=0.1,
    hot_pixel_share=1e-4,
    debris=4,
    haze_patches=3,
    focus_breathing=0.3,
)


def film(n_frames=5, seed=3, faults=EVERYTHING, law=None, **motion):
    return make_filament_video(
        seed=seed,
        shape_px=(200, 240),
        timing=FrameTiming(frame_s=0.5, n_frames=n_frames, exposure_s=0.2, exposed_steps=2),
        law=law or FilamentLaw(in_field=10, stuck_share=0.2, bundled_share=0.4, detach_rate=0.05),
        optics=FilamentOptics.with_signal_to_noise(4),
        faults=faults,
        **motion,
    )


def test_same_seed_same_bytes_and_another_seed_another_film():
    video = film(drift_um_s=0.02)
    first, again = ([f.image.tobytes() for f in v.frames()] for v in (video, film(drift_um_s=0.02)))
    assert first == again == [f.image.tobytes() for f in video.frames()]
    other = next(iter(film(seed=4).frames()))
    assert other.image.tobytes() != first[0]


def test_frames_do_not_depend_on_how_many_are_asked_for():
    frames = film().frames()
    first = next(frames)
    assert first.frame == 0
    assert first.image.shape == (200, 240)
    assert first.image.dtype == np.uint16
    assert [f.frame for f in frames] == [1, 2, 3, 4]


def test_gliding_filaments_move_at_their_speed_and_stuck_ones_rest():
    law = FilamentLaw(in_field=40, stuck_share=0.5)
    video = film(n_frames=6, law=law, rotational_diffusion=0.0, faults=None)
    truths = [f.truth for f in video.frames()]
    for before, after in itertools.pairwise(truths):
        _, a, b = np.intersect1d(before.track, after.track, return_indices=True)
        assert len(a) > 20
        step = np.hypot(after.x_um[b] - before.x_um[a], after.y_um[b] - before.y_um[a])
        speed = video.filaments.motion.speed[before.filament[a]] * ~before.stuck[a]
        np.testing.assert_allclose(step, 0.5 * speed, atol=1e-9)
        assert_array_equal(before.stuck[a], after.stuck[b])


def test_expected_numbers_stay_as_filaments_come_and_go():
    law = FilamentLaw(in_field=20, stuck_share=0.25, detach_rate=0.1)
    counts = []
    for seed in range(40):
        for truth in (f.truth for f in list(film(seed=seed, law=law).frames())[::4]):
            inside = (truth.x_um > 0) & (truth.x_um < 31.2) & (truth.y_um > 0)
            counts.append((inside & (truth.y_um < 26)).sum())
    first, last = np.array(counts).reshape(-1, 2).T
    # Poisson numbers: 4 standard errors of a mean of 40.
    assert first.mean() == pytest.approx(20, abs=4 * (20 / 40) ** 0.5)
    assert last.mean() == pytest.approx(20, abs=4 * (20 / 40) ** 0.5)
