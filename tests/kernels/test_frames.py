"""Noise, background and fit of spots: drawn frames with known truth, a slow second fit."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import optimize, stats

from glidefit.kernels.frames import detection_height, filter_frame, fit_spots
from glidefit.kernels.synthetic_frames import SpotOptics, least_localization_error, spot_light

WIDTH, HALF, BLOCK = 1.35, 4, 18  # pixels, as at the default settings and 0.1 µm per pixel
SHAPE = (160, 192)


def drawn(x, y, *, photons, shape=SHAPE, width=1.3):
    x, y = np.atleast_1d(x).astype(float)[:, None], np.atleast_1d(y).astype(float)[:, None]
    return spot_light(
        x,
        y,
        photons=np.broadcast_to(np.asarray(photons, dtype=float), len(x)),
        shape_px=shape,
        psf_um=width,
        pixel_um=1.0,
    )


def scattered(n, rng, *, shape=SHAPE):
    """Spots on a loose grid, each anywhere within its pixel, none near another."""
    columns = shape[1] // 24
    k = np.arange(n)
    return (
        12 + 24 * (k % columns) + rng.uniform(-2, 2, n),
        12 + 24 * (k // columns) + rng.uniform(-2, 2, n),
    )


def filtered(frame):
    return filter_frame(frame, width_px=1.5, block_px=BLOCK)


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.float32, np.float64])
@pytest.mark.parametrize("spots", [0, 30])
def test_noise_and_background_do_not_depend_on_spots_or_number_type(dtype, spots):
    rng = np.random.default_rng(1)
    light = drawn(*scattered(spots, rng), photons=800) if spots else 0.0
    frame = rng.poisson(60 + light, SHAPE).astype(dtype)
    result = filtered(frame)
    # sd of a sd from 30 000 pixels is 0.4 %; what the background follows and faint skirts add 2 %.
    assert_allclose(np.median(result.noise), np.sqrt(60), rtol=0.03)
    assert_allclose(result.background, 60, atol=0.5 if spots == 0 else 1.0)


def test_significance_of_empty_background_has_unit_variance_and_no_mean():
    rng = np.random.default_rng(2)
    result = filtered(rng.normal(500, 7, (512, 512)))
    # 9 000 independent places: 4 standard errors are 3 % of a sd and 0.04 of a mean.
    assert_allclose(result.significance[20:-20, 20:-20].std(), 1.0, atol=0.03)
    assert_allclose(result.significance.mean(), 0.0, atol=0.04)
    assert result.skewness < 0.1


def test_noise_follows_uneven_light():
    rng = np.random.default_rng(3)
    y, x = np.mgrid[:512, :512]
    light = 20 + 300 * np.exp(-((x - 256) ** 2 + (y - 256) ** 2) / (2 * 150**2))
    result = filtered(rng.poisson(light))
    # The background's own scatter moves the line's prediction by some per cent.
    assert_allclose(result.noise, np.sqrt(light), rtol=0.1)
    centre, corner = (slice(200, 312),) * 2, (slice(0, 100),) * 2
    for part in (centre, corner):
        assert_allclose(result.noise[part].mean(), np.sqrt(light[part]).mean(), rtol=0.04)


def test_a_bright_spot_leaves_the_background_around_it_alone():
    rng = np.random.default_rng(4)
    frame = rng.normal(100, 1, SHAPE)
    with_spot = frame + drawn(80, 80, photons=50_000)
    ring = np.hypot(*np.mgrid[-80:80, -80:112]) > 8
    change = (filtered(with_spot).contrast - filtered(frame).contrast)[ring]
    assert np.abs(change).max() < 1.5  # of a spot whose peak is 4 700


@given(factor=st.floats(0.01, 50), offset=st.floats(-500, 500))
def test_significance_knows_no_unit_of_brightness(factor, offset):
    frame = np.random.default_rng(5).normal(100, 5, (64, 80)) + drawn(
        30, 40, photons=900, shape=(64, 80)
    )
    plain, scaled = filtered(frame), filtered(factor * frame + offset)
    # Frames are held in single precision.
    assert_allclose(scaled.significance, plain.significance, atol=2e-3)
    assert_allclose(scaled.noise, factor * plain.noise, rtol=1e-3)


@pytest.mark.parametrize("axis", [0, 1])
def test_a_mirrored_frame_has_mirrored_significance(axis):
    frame = np.random.default_rng(6).normal(100, 5, (54, 72)) + drawn(
        20, 31, photons=900, shape=(54, 72)
    )
    mirrored = filtered(np.flip(frame, axis)).significance
    assert_allclose(np.flip(mirrored, axis), filtered(frame).significance, rtol=5e-3, atol=1e-3)


@pytest.mark.parametrize("frame", [np.zeros((40, 40)), np.full((40, 40), 200, dtype=np.uint8)])
def test_nothing_stands_out_of_an_even_frame(frame):
    assert np.all(filtered(frame).significance == 0)


def test_a_small_frame_is_asked_for_the_threshold_itself():
    assert detection_height(5.0, looks=100) == 5.0


@given(threshold=st.floats(3, 10), looks=st.floats(140, 1e6))
def test_as_many_false_spots_in_every_larger_frame(threshold, looks):
    height = detection_height(threshold, looks=looks)
    expected = 140 * np.exp(-(threshold**2) / 2)  # but for the factor u, the same within 40 %
    assert_allclose(looks * np.exp(-(height**2) / 2), expected, rtol=1e-6)


# The chance that a gamma variate of this skewness is so high is that of a Gaussian above 5.
@pytest.mark.parametrize("skewness", [0.02, 0.1, 0.3, 0.6])
def test_height_in_skewed_noise_is_as_rare_as_in_gaussian_noise(skewness):
    exact = stats.pearson3.isf(stats.norm.sf(5.0), skewness)
    # Wilson and Hilferty's approximation is good to 2 % here.
    assert_allclose(detection_height(5.0, looks=1, skewness=skewness), exact, rtol=0.02)


def test_noise_seldom_rises_above_the_height():
    rng = np.random.default_rng(7)
    above = 0
    for k in range(80):
        result = filtered(rng.poisson([0.5, 3, 30, 1000][k % 4], (256, 256)))
        height = detection_height(4.0, looks=result.looks, skewness=result.skewness)
        above += result.significance.max() > height
    # Before the fit, 0.6 a frame are allowed at 4; then 36 frames have one, and in 99.7 % of cases
    # no more than 49.
    assert 5 <= above <= 49


def fitted(frame, x, y, *, gain=1.0, width=WIDTH):
    return fit_spots(filtered(frame), x, y, width_px=width, half_px=HALF, gain=gain)


def test_positions_reach_the_published_precision():
    rng = np.random.default_rng(8)
    optics = SpotOptics.with_signal_to_noise(4, psf_um=1.3, pixel_um=1.0, background_photons=100)
    errors, precisions = [], []
    for _ in range(12):
        x, y = scattered(48, rng)
        frame = rng.poisson(100 + drawn(x, y, photons=optics.photons))
        result = fitted(frame, np.rint(x), np.rint(y))
        errors += [result.x_px - x, result.y_px - y]
        precisions.append(result.precision_px)
    errors, precisions = np.concatenate(errors), np.concatenate(precisions)
    # Mortensen et al., Nat. Methods 7, 377 (2010), from memory, with 9 x 9 pixels and a level
    # that is fitted too; sd of a sd from 1 150 values: 2 %, so 4 standard errors are 8 %.
    theory = least_localization_error(optics)
    assert_allclose(errors.std(), theory, rtol=0.12)
    assert_allclose(np.median(precisions), theory, rtol=0.05)
    assert abs(errors.mean()) < 4 * theory / np.sqrt(len(errors))


def test_the_fit_of_a_lone_spot_is_that_of_a_general_program():
    rng = np.random.default_rng(9)
    frame = rng.poisson(50 + drawn(60.3, 71.8, photons=700)).astype(float)
    result = fitted(frame, np.array([60.0]), np.array([72.0]), gain=0.0)
    window = filtered(frame).contrast[72 - HALF : 72 + HALF + 1, 60 - HALF : 60 + HALF + 1]
    y, x = np.mgrid[72 - HALF : 72 + HALF + 1, 60 - HALF : 60 + HALF + 1]

    def off(p):
        g = np.exp(-((x - p[0]) ** 2 + (y - p[1]) ** 2) / (2 * WIDTH**2))
        return (p[2] * g + p[3] - window).ravel()

    best = optimize.least_squares(off, [60, 72, 50, 0], xtol=1e-12).x
    # The turns end when a step is below 0.001 pixels.
    assert_allclose([result.x_px[0], result.y_px[0]], best[:2], atol=1e-3)
    assert_allclose(result.amplitude[0], best[2], rtol=1e-3)


@pytest.mark.parametrize("distance", [3.5, 4.5, 7.0])
def test_neighbours_are_fitted_together(distance):
    rng = np.random.default_rng(10)
    x, y = np.array([60.2, 60.2 + distance]), np.array([70.4, 70.4])
    light = drawn(x, y, photons=[20_000, 12_000], width=1.3)
    frame = rng.normal(100 + light, 2.0)
    result = fitted(frame, np.array([60.0, 60 + distance]), y, width=np.hypot(1.3, 12**-0.5))
    # Noise alone is 0.01 pixels; the pixels' square shape adds as much.
    assert_allclose(result.x_px, x, atol=0.05)
    assert_allclose(result.y_px, y, atol=0.05)
    assert_allclose(result.amplitude[0] / result.amplitude[1], 20 / 12, rtol=0.05)


@pytest.mark.parametrize("width", [1.0, 1.4, 1.9])
def test_spots_tell_their_width(width):
    rng = np.random.default_rng(11)
    x, y = scattered(48, rng)
    frame = rng.poisson(40 + drawn(x, y, photons=3000, width=width))
    guess = 1.4
    for _ in range(4):  # each is one Newton step
        guess = np.median(fitted(frame, x, y, width=guess).width_px)
    # A Gaussian over square pixels is wider by their variance of 1/12.
    assert_allclose(guess, np.hypot(width, 12**-0.5), rtol=0.04)


@pytest.mark.parametrize("counts", [1, 5])
def test_spots_tell_the_noise_of_their_light(counts):
    rng = np.random.default_rng(12)
    x, y = scattered(48, rng)
    excess, light = np.zeros(2)
    gain = float(counts)
    for _ in range(6):
        frame = counts * rng.poisson(20 + drawn(x, y, photons=3000))
        sums = fitted(frame, x, y, gain=gain).excess.sum(axis=0)
        excess, light = excess + sums[0], light + sums[1]
    assert_allclose(excess / light, counts, rtol=0.15)  # 4 standard errors of 288 spots


def test_a_hot_pixel_is_a_spike_and_a_spot_is_not():
    rng = np.random.default_rng(13)
    frame = rng.poisson(100 + drawn(40.3, 50.2, photons=1500)).astype(float)
    frame[100, 120] += 600
    result = fitted(frame, np.array([40.0, 120.0]), np.array([50.0, 100.0]))
    assert result.spike[0] < 0.5
    assert result.spike[1] > 2


def test_a_spot_that_is_not_there_is_given_up():
    rng = np.random.default_rng(14)
    frame = rng.normal(100, 5, SHAPE)
    hole = frame - drawn(80, 80, photons=2000)
    result = fitted(hole, np.array([80.0]), np.array([80.0]))
    assert result.amplitude[0] == 0 or result.amplitude[0] < 4 * result.amplitude_sd[0]
    assert len(fitted(frame, np.empty(0), np.empty(0)).x_px) == 0
