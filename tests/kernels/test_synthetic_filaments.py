"""Frames of filaments: light, camera and truth, on bodies laid by hand."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.filament_truth import film_truth
from glidefit.kernels.laid_paths import advances, filaments_on_paths
from glidefit.kernels.simulation import FrameTiming, Motion, PathState, View
from glidefit.kernels.synthetic_filaments import filament_frames

P = 0.13
CLEAN = FilamentOptics.with_signal_to_noise(20.0, labels_per_um=0)
SHAPE = (60, 80)


def bodies(rows, *, n_frames=4, speed=0.0, exposure_s=0.0, parts=1, frame_s=1.0, **changes):
    """Straight filaments from rows (x µm, y µm, heading, length); their timing."""
    x, y, heading, length = np.array(rows, dtype=float).T
    timing = FrameTiming(
        frame_s=frame_s, n_frames=n_frames, exposure_s=exposure_s, exposed_steps=parts
    )
    motion = Motion.of(len(x), speed=speed)
    state = PathState(x=x, y=y, heading=heading, running=np.ones(len(x), dtype=bool))
    rng = np.random.default_rng(1)
    gone = advances(motion, state.running, timing=timing, rng=rng)
    filaments = filaments_on_paths(state, motion, length_um=length, gone_um=gone, rng=rng)
    changes = {"stuck": np.zeros(len(x), dtype=bool)} | changes  # they only rest
    return dataclasses.replace(filaments, **changes), timing


def film(rows, *, optics=CLEAN, faults=None, drift=None, seed=2, **motion):
    filaments, timing = bodies(rows, **motion)
    return list(
        filament_frames(
            filaments,
            view=View(timing=timing, drift_um=drift),
            shape_px=SHAPE,
            optics=optics,
            faults=faults,
            rng=np.random.default_rng(seed),
        )
    )


def mean_image(rows, *, n=150, **changes):
    """Mean of frames in which all rests, without the offset."""
    frames = film(rows, n_frames=n, **changes)
    return np.mean([f.image for f in frames], axis=0) - 100, frames


# ---- light ----


def test_peak_and_noise_of_a_filament_give_its_signal_to_noise():
    optics = FilamentOptics.with_signal_to_noise(4.0, labels_per_um=0)
    frames = film([(40 * P, 30 * P, 0, 6.0)], optics=optics, n_frames=400)
    stack = np.array([f.image for f in frames], dtype=float)
    row = stack[:, 30, 30:50]
    peak = row.mean() - stack[:, :10].mean()
    ratio = peak / row.std(axis=0).mean()
    # A spread of 8000 numbers is known to 0.8 %, the peak to 0.3 %; 4 of both together.
    assert ratio == pytest.approx(4.0, rel=0.035)
    assert stack[:, :10].mean() == pytest.approx(120, abs=0.1)


def test_a_filament_has_the_light_of_its_length():
    image, _ = mean_image([(40 * P, 30 * P, 0.4, 4.0)])
    light = image.sum() - 20 * image.size
    # Poisson sums over 150 frames; 4 standard errors.
    error = np.sqrt((light + 22.6 * image.size) / 150)
    assert abs(light - 4.0 * CLEAN.photons_per_um) < 4 * error


def test_labels_are_a_pattern_that_the_filament_keeps():
    speckled = dataclasses.replace(CLEAN, labels_per_um=8.0)
    frames = film([(3.0, 30 * P, 0, 4.0)], optics=speckled, speed=P, n_frames=12)
    rows = np.array([f.image[30, 10 + k : 35 + k] for k, f in enumerate(frames)], dtype=float)
    still = np.corrcoef(rows - rows.mean(axis=0))
    assert rows.mean(axis=0).std() > 5 * rows.std(axis=0).mean() / np.sqrt(12)
    assert np.abs(still[np.triu_indices(12, 1)]).mean() < 0.3  # nothing is left but noise
    _, even = mean_image([(40 * P, 30 * P, 0, 6.0)])
    assert np.mean([f.image[30, 25:55] for f in even], axis=0).std() < 3


def test_exposure_smears_the_light_and_the_truth_is_its_mean():
    frames = film([(2.0, 30 * P, 0, 1.0)], speed=3.0, exposure_s=1.0, parts=8, n_frames=1)
    truth = frames[0].truth
    assert_allclose(truth.x_um, [2.0 + 1.5], atol=1e-9)
    assert_allclose(truth.head_x_um, [2.5 + 1.5], atol=1e-9)
    line = frames[0].image[30].astype(float) - 120
    assert_allclose((line * np.arange(80)).sum() / line.sum() * P, 3.5, atol=0.05)
    assert np.ptp(np.flatnonzero(line > 0.2 * line.max())) * P > 3.0


def test_uneven_light_bleaching_and_saturation():
    faults = FilmFaults(unevenness=0.6, bleaching_rate=0.5, saturation_counts=130)
    frames = film([(40 * P, 30 * P, 0, 6.0)], faults=faults, n_frames=3)
    images = np.array([f.image for f in frames], dtype=float)
    assert images.max() == 130
    assert images[:, :3, :3].mean() < 112 < images[:, 15:20, 35:45].mean()
    faults = dataclasses.replace(faults, saturation_counts=65_535, unevenness=0.0)
    frames = film([(40 * P, 30 * P, 0, 6.0)], faults=faults, n_frames=3)
    peaks = np.array([f.image[30, 25:55].mean() - 120 for f in frames])
    # 30 pixels of about 420 photons: 1 % each.
    assert_allclose(peaks[1:] / peaks[:-1], np.exp(-0.5), rtol=0.06)


def test_focus_breathes_once_in_its_period():
    faults = FilmFaults(focus_breathing=1.0, focus_period_s=4.0)
    frames = film([(40 * P, 30 * P, 0, 6.0)], faults=faults, n_frames=5)
    peaks = np.array([f.image[30, 30:50].mean() - 120 for f in frames])
    widths = 1 + np.sin(np.pi * np.arange(5) / 4) ** 2
    # 20 pixels of at least 200 photons: 2 % each, and a pixel blurs a little less in wide ones.
    assert_allclose(peaks / peaks[0], 1 / widths, rtol=0.1)


def test_hot_pixels_stay_where_they_are():
    faults = FilmFaults(hot_pixel_share=2e-3, hot_pixel_photons=300)
    drift = np.arange(8.0).reshape(4, 2)
    frames = film([(-40.0, 0, 0, 1.0)], faults=faults, drift=drift)
    hot = [np.flatnonzero(f.image.ravel() > 270) for f in frames]  # of 420 ± 18 and 120 ± 5
    assert len(hot[0]) > 2
    for other in hot[1:]:
        assert_array_equal(other, hot[0])


def test_debris_and_haze_shine_without_being_in_the_truth():
    plain, _ = mean_image([(-40.0, 0, 0, 1.0)], n=20)
    assert abs(plain.mean() - 20) < 0.1
    debris, frames = mean_image([(-40.0, 0, 0, 1.0)], n=20, faults=FilmFaults(debris=6))
    assert debris.max() > 20 + CLEAN.peak_photons / 4
    assert len(frames[0].truth.filament) == 0
    haze, _ = mean_image([(-40.0, 0, 0, 1.0)], n=20, faults=FilmFaults(haze_patches=6, haze=1.0))
    assert haze.mean() > 22
    assert haze.max() < 20 + 6 * 30  # no more than all patches in one place


# ---- truth ----


def test_places_of_a_resting_filament():
    truth = film([(5.0, 4.0, np.pi / 6, 4.0)], n_frames=1)[0].truth
    assert_allclose([truth.x_um[0], truth.y_um[0]], [5, 4], atol=1e-9)
    assert_allclose(truth.head_x_um, 5 + 2 * np.cos(np.pi / 6), atol=1e-9)
    assert_allclose(truth.tail_y_um, 4 - 1, atol=1e-9)
    assert_allclose([truth.heading_rad[0], truth.length_um[0]], [np.pi / 6, 4.0], rtol=1e-9)
    points = np.stack([truth.contour_x_um, truth.contour_y_um])
    assert truth.contour_offset.tolist() == [0, points.shape[1]]
    assert_allclose(np.hypot(*np.diff(points)).sum(), 4.0, atol=0.07)


def test_drift_moves_truth_and_light_alike():
    drift = np.array([[0.0, 0.0], [1.3, -0.65]])
    frames = film([(5.0, 4.0, 0, 1.0)], drift=drift, n_frames=2)
    assert_allclose([f.truth.x_um[0] for f in frames], [5.0, 6.3], atol=1e-9)
    assert_allclose([f.truth.y_um[0] for f in frames], [4.0, 3.35], atol=1e-9)
    rows = [int(f.image.astype(float).sum(axis=1).argmax()) for f in frames]
    assert rows == [31, 26]


# The field is 10.4 µm × 7.8 µm, its edges half a pixel out; cut is what comes within 0.39 µm.
@pytest.mark.parametrize(
    ("row", "cut"),
    [
        ((5.0, 4.0, 0, 4.0), False),
        ((2.4, 4.0, 0, 4.0), False),
        ((2.2, 4.0, 0, 4.0), True),
        ((8.1, 4.0, 0, 4.0), True),
        ((5.0, 0.4, 0, 4.0), False),
        ((5.0, 0.2, 0, 4.0), True),
        ((5.0, 7.6, 0, 4.0), True),
    ],
)
def test_filaments_at_the_edge_are_cut(row, cut):
    truth = film([row], n_frames=1)[0].truth
    assert truth.cut.tolist() == [cut]
    assert truth.counted.tolist() == [not cut]


def test_filaments_out_of_the_field_are_not_in_the_truth():
    assert len(film([(-2.2, 4.0, 0, 4.0)], n_frames=1)[0].truth.filament) == 0
    assert film([(-1.8, 4.0, 0, 4.0)], n_frames=1)[0].truth.cut.tolist() == [True]


def test_crossing_filaments_overlap_and_near_ones_do_not():
    rows = [(5.0, 4.0, 0, 4.0), (5.0, 4.0, 1.2, 3.0), (5.0, 5.9, 0, 2.0), (2.0, 1.0, 0, 2.0)]
    truth = film(rows, n_frames=1)[0].truth
    assert truth.overlapped.tolist() == [True, True, False, False]
    touching = film([(5.0, 4.0, 0, 4.0), (5.0, 4.38, 0, 4.0)], n_frames=1)[0].truth
    assert touching.overlapped.all()


def test_what_blinked_off_is_dark_and_overlaps_nothing():
    faults = FilmFaults(dark_rate=1.0, bright_rate=1.0)
    frames = film([(5.0, 4.0, 0, 4.0), (5.0, 4.0, 1.2, 3.0)], faults=faults, n_frames=40)
    dark = np.array([f.truth.dark for f in frames])
    assert 0.2 < dark.mean() < 0.8
    for number, f in enumerate(frames):
        assert f.truth.overlapped.all() == (not dark[number].any())
        assert_array_equal(f.truth.counted, ~dark[number])
        assert (f.image[31, 26:30].mean() > 300) == (not dark[number][0])


def test_bundled_and_stuck_filaments_do_not_count():
    rows = [(5.0, 4.0, 0, 4.0), (5.0, 2.0, 0, 4.0), (5.0, 6.0, 0, 4.0)]
    changes = {"stuck": np.array([True, False, False]), "bundle": np.array([-1, 1, -1])}
    truth = film(rows, n_frames=1, **changes)[0].truth
    assert truth.stuck.tolist() == [True, False, False]
    assert truth.bundled.tolist() == [False, True, False]
    assert truth.counted.tolist() == [False, False, True]


def test_filaments_land_and_detach():
    changes = {"first_frame": np.array([1, 0]), "end_frame": np.array([3, 2])}
    frames = film([(5.0, 2.0, 0, 3.0), (5.0, 5.0, 0, 3.0)], **changes)
    assert [f.truth.filament.tolist() for f in frames] == [[1], [0, 1], [0], []]
    bright = [[f.image[row, 30:45].mean() > 300 for row in (15, 38)] for f in frames]
    assert bright == [[False, True], [True, True], [True, False], [False, False]]


def test_a_filament_that_comes_back_is_another_track():
    # The stage moves it out and in again.
    drift = np.array([[0.0, 0.0], [-30.0, 0.0], [0.0, 0.0], [0.1, 0.0]])
    frames = film([(5.0, 4.0, 0, 3.0), (8.0, 6.0, 0, 1.0)], drift=drift)
    tracks = [f.truth.track.tolist() for f in frames]
    assert tracks == [[0, 1], [], [2, 3], [2, 3]]
    assert [f.truth.filament.tolist() for f in frames] == [[0, 1], [], [0, 1], [0, 1]]


def test_the_truth_of_a_film_keeps_bodies_that_do_not_count_as_blank_places():
    rows = [(5.0, 4.0, 0, 4.0), (0.5, 1.0, 0, 3.0)]
    truth = film_truth(f.truth for f in film(rows, n_frames=3))
    p = truth.positions
    assert p.frame.tolist() == [0, 0, 1, 1, 2, 2]
    assert p.track.tolist() == [0, 1] * 3
    assert p.counted.tolist() == [True, False] * 3
    assert np.unique(p.blank_frame).tolist() == [0, 1, 2]
    assert_allclose(p.blank_y, 1.0, atol=1e-9)
    assert_allclose([p.blank_x.min(), p.blank_x.max()], [-1.0, 2.0], atol=0.3)
    assert_allclose(truth.head_x_um, [7.0, 2.0] * 3, atol=1e-9)
