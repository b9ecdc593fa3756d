"""Drawn spots against their declared light and noise; random ones within 4 standard errors."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import dblquad

from glidefit.kernels.synthetic_frames import (
    OFFSET_COUNTS,
    CameraFaults,
    SpotOptics,
    counted,
    illumination,
    least_localization_error,
    spot_frames,
    spot_light,
)

PSF, PIXEL = 0.13, 0.1


def light_of(x, y, *, photons=1000.0, shape_px=(40, 50), psf_um=PSF, pixel_um=PIXEL):
    x, y = np.atleast_2d(x), np.atleast_2d(y)
    return spot_light(
        x,
        y,
        photons=np.full(len(x), photons),
        shape_px=shape_px,
        psf_um=psf_um,
        pixel_um=pixel_um,
    )


def frames_of(track, frame, x, y, *, n_frames, optics, faults=None, shape_px=(40, 50), seed=1):
    return spot_frames(
        np.asarray(track, dtype=np.int64),
        np.asarray(frame, dtype=np.int64),
        np.asarray(x, dtype=float).reshape(len(track), -1 if len(track) else 1),
        np.asarray(y, dtype=float).reshape(len(track), -1 if len(track) else 1),
        n_frames=n_frames,
        frame_s=0.5,
        shape_px=shape_px,
        optics=optics,
        faults=faults,
        rng=np.random.default_rng(seed),
    )


def assert_variance(values, expected):
    """The variance of near-normal values is the expected one within 4 standard errors."""
    assert_allclose(values.var(ddof=1), expected, rtol=4 * np.sqrt(2 / (len(values) - 1)))


# ---- light ----


def test_a_spot_is_the_gaussian_integrated_over_each_pixel():
    x, y = 1.237, 0.861
    image = light_of(x, y, photons=100.0)
    for row, column in [(9, 12), (8, 12), (10, 14), (5, 12)]:
        expected, _ = dblquad(
            lambda v, u: 100 / (2 * np.pi * PSF**2) * np.exp(-(u**2 + v**2) / (2 * PSF**2)),
            (column - 0.5) * PIXEL - x,
            (column + 0.5) * PIXEL - x,
            (row - 0.5) * PIXEL - y,
            (row + 0.5) * PIXEL - y,
        )
        assert_allclose(image[row, column], expected, rtol=1e-7)


@settings(max_examples=30, deadline=None)
@given(
    x=st.floats(1.0, 3.9),
    y=st.floats(1.0, 2.9),
    psf=st.floats(0.09, 0.18),
    length=st.floats(0, 0.2),
    photons=st.floats(1, 1e5),
)
def test_all_photons_land_on_the_image_with_their_centre_at_the_spot(x, y, psf, length, photons):
    along = np.linspace(-length, length, 5) / 2
    image = light_of([x + along], [y + along], photons=photons, psf_um=psf)
    # Beyond 5 SD of each axis there is 1.2e-6 of the light; coarser pixels would move the centre.
    assert_allclose(image.sum(), photons, rtol=3e-6)
    assert_allclose((image.sum(axis=0) @ np.arange(50)) * PIXEL / photons, x, atol=1e-5)
    assert_allclose((image.sum(axis=1) @ np.arange(40)) * PIXEL / photons, y, atol=1e-5)


def test_a_spot_that_moves_is_the_mean_of_its_places():
    x, y = np.array([1.0, 1.4, 1.9]), np.array([2.0, 2.1, 1.7])
    smeared = light_of([x], [y])
    parts = [light_of(a, b) for a, b in zip(x, y, strict=True)]
    assert_allclose(smeared, np.mean(parts, axis=0), atol=1000 * 3e-6)


def test_spots_add_up_in_any_order():
    x, y = np.array([[1.0], [1.1], [3.0]]), np.array([[2.0], [2.05], [0.5]])
    together = light_of(x, y)
    assert_allclose(together, sum(light_of(a, b) for a, b in zip(x, y, strict=True)), atol=1e-9)
    assert_allclose(together, light_of(x[::-1], y[::-1]), atol=1e-9)


@pytest.mark.parametrize(
    ("x", "y", "share"),
    [(-0.05, 2.0, 0.5), (4.95, 2.0, 0.5), (-0.05, 3.95, 0.25), (2.0, -3.0, 0.0)],
)
def test_a_spot_on_the_edge_shines_in_by_half(x, y, share):
    assert_allclose(light_of(x, y).sum(), 1000 * share, rtol=3e-6, atol=1e-9)


@settings(max_examples=20, deadline=None)
@given(scale=st.floats(0.01, 100))
def test_another_unit_of_length_gives_the_same_image(scale):
    # The positions stay off the middle between pixels, where rounding decides about the window.
    plain = light_of(1.237, 2.341)
    scaled = light_of(1.237 * scale, 2.341 * scale, psf_um=PSF * scale, pixel_um=PIXEL * scale)
    assert_allclose(scaled, plain, atol=1e-6)


def test_no_spot_is_no_light():
    assert_array_equal(light_of(np.zeros((0, 1)), np.zeros((0, 1))), np.zeros((40, 50)))


# ---- signal and noise ----


@settings(max_examples=30, deadline=None)
@given(
    ratio=st.floats(0.5, 50),
    background=st.floats(0, 1000),
    read_noise=st.floats(0, 10),
    psf=st.floats(0.05, 0.3),
)
def test_the_declared_signal_to_noise_is_that_of_the_optics(ratio, background, read_noise, psf):
    optics = SpotOptics.with_signal_to_noise(
        ratio,
        psf_um=psf,
        pixel_um=PIXEL,
        background_photons=background,
        read_noise=read_noise,
    )
    assert_allclose(optics.signal_to_noise, ratio, rtol=1e-9)
    brightest = light_of(2.0, 2.0, photons=optics.photons, psf_um=psf).max()
    assert_allclose(optics.peak_photons, brightest, rtol=1e-9)


def test_the_declared_signal_to_noise_is_seen_in_the_images():
    n = 4_000
    optics = SpotOptics.with_signal_to_noise(
        6.0, psf_um=PSF, pixel_um=PIXEL, background_photons=40.0, read_noise=2.0
    )
    frames = frames_of(
        np.zeros(n),
        np.arange(n),
        np.full(n, 0.5),
        np.full(n, 0.5),
        n_frames=n,
        optics=optics,
        shape_px=(11, 11),
    )
    peak = np.array([float(f.image[5, 5]) for f in frames]) - OFFSET_COUNTS - 40.0
    seen = peak.mean() / peak.std(ddof=1)
    # The relative error of a mean over an SD is sqrt(1 / (n 36) + 1 / (2 n)).
    assert_allclose(seen, 6.0, rtol=4 * np.sqrt(1 / (36 * n) + 1 / (2 * n)))


def test_photons_are_poisson_and_read_noise_adds_its_variance():
    expected = np.full((200, 200), 60.0)
    quiet = counted(expected, read_noise=0.0, rng=np.random.default_rng(2)).ravel() - 100.0
    assert abs(quiet.mean() - 60) < 4 * np.sqrt(60 / quiet.size)
    assert_variance(quiet, 60.0)
    noisy = counted(expected, read_noise=3.0, rng=np.random.default_rng(3)).ravel() - 100.0
    assert abs(noisy.mean() - 60) < 4 * np.sqrt(69 / noisy.size)
    assert_variance(noisy, 60.0 + 9.0 + 1 / 12)  # 1/12 from rounding to counts


def test_the_sum_over_a_spot_is_poisson():
    n = 2_000
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=500.0)
    sums = np.array(
        [
            f.image.sum(dtype=float) - OFFSET_COUNTS * f.image.size
            for f in frames_of(
                np.zeros(n),
                np.arange(n),
                np.full(n, 1.0),
                np.full(n, 1.0),
                n_frames=n,
                optics=optics,
                shape_px=(21, 21),
            )
        ]
    )
    assert abs(sums.mean() - 500) < 4 * np.sqrt(500 / n)
    assert_variance(sums, 500.0)


def test_a_dark_frame_is_the_offset_and_a_glaring_one_is_clipped():
    dark = counted(np.zeros((5, 6)), read_noise=0.0, rng=np.random.default_rng(4))
    assert dark.dtype == np.uint16
    assert_array_equal(dark, OFFSET_COUNTS)
    glaring = counted(np.full((2, 2), 1e6), read_noise=0.0, rng=np.random.default_rng(5))
    assert_array_equal(glaring, 65535)


# Mortensen et al., Nat. Methods 7, 377 (2010), formula from memory; s = 130 nm, a = 100 nm,
# N = 1000, b² = 100 photons a pixel. Without background: sqrt((s² + a²/12) / N) = 4.21110 nm.
@pytest.mark.parametrize(
    ("background", "read_noise", "nanometres"),
    [(100.0, 0.0, 10.4010630352313), (75.0, 5.0, 10.4010630352313), (0.0, 0.0, 4.21110)],
)
def test_least_localization_error(background, read_noise, nanometres):
    optics = SpotOptics(
        psf_um=PSF,
        pixel_um=PIXEL,
        photons=1000.0,
        background_photons=background,
        read_noise=read_noise,
    )
    assert_allclose(least_localization_error(optics) * 1000, nanometres, rtol=1e-6)


@pytest.mark.parametrize("background", [0.1, 5.0, 100.0, 2000.0])
def test_least_localization_error_is_the_information_bound_of_the_drawn_spot(background):
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=1000.0, background_photons=background)
    step = 1e-4
    errors = []
    for offset in (0.0, 0.02, 0.05):  # within a pixel
        mean = light_of(2.0 + offset, 2.0) + background
        slope = (light_of(2.0 + offset + step, 2.0) - light_of(2.0 + offset - step, 2.0)) / (
            2 * step
        )
        errors.append(1 / np.sqrt((slope**2 / mean).sum()))
    # The formula puts pixels of a / s = 0.77 into a wider Gaussian: good to 2 % of the bound.
    assert_allclose(np.mean(errors), least_localization_error(optics), rtol=0.02)


def test_no_light_is_no_localization():
    dark = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=0.0, background_photons=5.0)
    assert np.isinf(least_localization_error(dark))
    assert dark.signal_to_noise == 0


# ---- faults ----


def test_light_falls_off_to_the_corners():
    light = illumination((41, 61), unevenness=0.3)
    assert_allclose(light[20, 30], 1.0)
    assert_allclose([light[0, 0], light[-1, 0], light[-1, -1]], 0.7)
    assert_allclose(light, light[::-1, ::-1], rtol=1e-12)
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=0.0, background_photons=1e4)
    frames = frames_of(
        [], [], [], [], n_frames=1, optics=optics, faults=CameraFaults(unevenness=0.3)
    )
    image = next(frames).image - 100.0
    assert_allclose(image, 1e4 * illumination((40, 50), unevenness=0.3), rtol=0.06)  # 5 SD


def test_bleaching_dims_every_spot():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=1000.0)
    frames = frames_of(
        np.zeros(5),
        np.arange(5),
        np.ones(5),
        np.ones(5),
        n_frames=5,
        optics=optics,
        faults=CameraFaults(bleaching_rate=0.4),
    )
    photons = np.concatenate([f.photons for f in frames])
    assert_allclose(photons, 1000 * np.exp(-0.4 * 0.5 * np.arange(5)), rtol=1e-12)


def test_blinking_spots_are_dark_as_often_and_as_long_as_their_rates_say():
    n, m = 400, 200
    track, frame = np.tile(np.arange(m), n), np.repeat(np.arange(n), m)
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=10.0)
    frames = frames_of(
        track,
        frame,
        np.ones(n * m),
        np.ones(n * m),
        n_frames=n,
        optics=optics,
        faults=CameraFaults(dark_rate=0.5, bright_rate=1.5),
        shape_px=(21, 21),
    )
    bright = np.array([f.photons > 0 for f in frames])
    per_spot = bright.mean(axis=0)
    assert abs(per_spot.mean() - 0.75) < 4 * per_spot.std() / np.sqrt(m)
    assert abs(bright[0].mean() - 0.75) < 4 * np.sqrt(0.75 * 0.25 / m)
    went_dark = ~bright[1:][bright[:-1]]
    expected = 0.25 * (1 - np.exp(-2.0 * 0.5))
    assert_allclose(went_dark.mean(), expected, atol=4 * np.sqrt(0.25 / went_dark.size))


def test_hot_pixels_stay_where_they_are():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=0.0)
    faults = CameraFaults(hot_pixel_share=0.02, hot_pixel_photons=400.0)
    images = [
        f.image > 250 for f in frames_of([], [], [], [], n_frames=3, optics=optics, faults=faults)
    ]
    assert_array_equal(images[0], images[1])
    assert_array_equal(images[0], images[2])
    assert 15 <= images[0].sum() <= 65  # 40 expected, 4 SD


# ---- truth ----


def test_the_truth_of_a_frame_is_what_has_its_centre_inside():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=1000.0)
    # The image covers -0.05 to 4.95 and -0.05 to 3.95 µm.
    frames = frames_of(
        [3, 0, 1, 2, 0],
        [1, 0, 0, 0, 2],
        [[1.0, 1.2], [2.0, 2.0], [4.9, 5.1], [1.0, 1.0], [4.94, 4.94]],
        [[1.0, 1.0], [3.0, 3.2], [1.0, 1.0], [4.1, 4.1], [-0.04, -0.04]],
        n_frames=4,
        optics=optics,
    )
    frames = list(frames)
    assert [f.frame for f in frames] == [0, 1, 2, 3]
    assert [f.track.tolist() for f in frames] == [[0], [3], [0], []]
    assert_allclose(frames[0].x_um, [2.0])
    assert_allclose(frames[0].y_um, [3.1])
    assert_allclose(frames[1].x_um, [1.1])
    # The two spots without a truth still shine in by the part that lies inside.
    inside = frames[0].image.sum(dtype=float) - 100.0 * 2000
    assert 1000 < inside < 2000


def test_the_brightest_pixel_is_at_the_true_position():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=1e5)
    frame = next(frames_of([0], [0], [3.2], [1.1], n_frames=1, optics=optics))
    assert np.unravel_index(frame.image.argmax(), frame.image.shape) == (11, 32)


def test_frames_come_one_at_a_time():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=10.0)
    endless = frames_of([0], [0], [1.0], [1.0], n_frames=10**12, optics=optics)
    assert [f.frame for f in itertools.islice(endless, 2)] == [0, 1]


def test_the_same_seed_gives_the_same_bytes():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=100.0, background_photons=9.0)
    faults = CameraFaults(dark_rate=0.5, hot_pixel_share=0.01)
    bytes_of = [
        b"".join(
            f.image.tobytes()
            for f in frames_of(
                [0, 0], [0, 1], [1, 2], [1, 2], n_frames=2, optics=optics, faults=faults, seed=seed
            )
        )
        for seed in (6, 6, 7)
    ]
    assert bytes_of[0] == bytes_of[1]
    assert bytes_of[0] != bytes_of[2]


def test_a_track_twice_in_a_frame_is_refused():
    optics = SpotOptics(psf_um=PSF, pixel_um=PIXEL, photons=10.0)
    with pytest.raises(ValueError, match="two positions"):
        next(frames_of([1, 1], [0, 0], [1, 2], [1, 2], n_frames=1, optics=optics))


@pytest.mark.parametrize(
    ("kind", "wrong"),
    [
        (SpotOptics, {"psf_um": 0.0, "pixel_um": 0.1, "photons": 1.0}),
        (SpotOptics, {"psf_um": 0.1, "pixel_um": 0.1, "photons": -1.0}),
        (CameraFaults, {"unevenness": 1.5}),
        (CameraFaults, {"bleaching_rate": -1.0}),
        (CameraFaults, {"bright_rate": 0.0}),
    ],
)
def test_impossible_optics_are_refused(kind, wrong):
    with pytest.raises(ValueError, match="must be"):
        kind(**wrong)
