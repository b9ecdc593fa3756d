"""Localization error and exposure: exact expectations over Gaussian steps, limits, refusals."""

import math

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.integrate import quad

from glidefit.kernels import noise

patient = settings(deadline=None)


def frame_covariance(n, *, diffusion, error, interval, exposure, fine=200):
    """Covariance of n measured positions of one coordinate, each frame cut into `fine` parts.

    A position is the mean of a random walk over the exposure, plus an error.
    """
    exposed = round(fine * exposure / interval)
    weights = np.zeros((n, n * fine))
    for frame in range(n):
        weights[frame, frame * fine : frame * fine + exposed] = 1 / exposed
    # How far a position follows the walk of each part: later parts whole, its own by one half.
    follows = np.cumsum(weights[:, ::-1], axis=1)[:, ::-1] - weights / 2
    # The mean of a walk over a part has 1/3 of its variance, of which 1/4 is counted in the half.
    walk = follows @ follows.T + weights @ weights.T / 12
    return 2 * diffusion * interval / fine * walk + error**2 * np.eye(n)


def step_matrix(n, **numbers):
    """Covariance of n steps between n + 1 positions."""
    differences = np.diff(np.eye(n + 1), axis=0)
    return differences @ frame_covariance(n + 1, **numbers) @ differences.T


@pytest.mark.parametrize("share", [0.005, 0.4, 1.0])
def test_brownian_msd_is_that_of_averages_of_a_random_walk(share):
    numbers = {"diffusion": 0.05, "interval": 0.1, "exposure": 0.1 * share, "error": 0.03}
    positions = frame_covariance(4, **numbers)
    expected = [2 * (positions[0, 0] + positions[k, k] - 2 * positions[0, k]) for k in (1, 2, 3)]
    found = noise.brownian_msd(
        0.1 * np.arange(1, 4), diffusion=0.05, localization_error=0.03, exposure=0.1 * share
    )
    assert_allclose(found, expected, rtol=1e-9)


@patient
@given(length=st.floats(0.01, 100), time=st.floats(0.01, 100), dimensions=st.integers(1, 3))
def test_brownian_msd_follows_units_and_dimensions(length, time, dimensions):
    lag = np.array([0.1, 0.5, 2.0])

    def msd(longer, slower, d):
        return noise.brownian_msd(
            lag * slower,
            diffusion=0.05 * longer**2 / slower,
            localization_error=0.03 * longer,
            exposure=0.05 * slower,
            dimensions=d,
        )

    assert_allclose(msd(length, time, dimensions), length**2 * dimensions * msd(1, 1, 1), rtol=1e-9)


def test_the_intercept_of_a_sharp_spot_is_negative():
    lag = np.array([0.1, 0.2])
    msd = noise.brownian_msd(lag, diffusion=0.05, localization_error=0.01, exposure=0.1)
    assert_allclose(2 * msd[0] - msd[1], 4 * (0.01**2 - 0.05 * 0.1 / 3), rtol=1e-12)
    assert 2 * msd[0] - msd[1] < 0


def test_successive_steps_covary_as_their_mean_squares_say():
    numbers = {"diffusion": 0.05, "localization_error": 0.03, "exposure": 0.07}
    one, two = noise.brownian_msd(np.array([0.1, 0.2]), dimensions=1, **numbers)
    # ⟨(Δ1 + Δ2)²⟩ = 2 ⟨Δ²⟩ + 2 ⟨Δ1 Δ2⟩
    assert_allclose(noise.step_covariance(**numbers), (two - 2 * one) / 2, rtol=1e-12)


def simple_covariance_estimate(steps, interval, exposure):
    squares, products = [], []
    for n, step in enumerate(steps):
        if not math.isnan(step):
            squares.append(step * step)
            if n + 1 < len(steps) and not math.isnan(steps[n + 1]):
                products.append(step * steps[n + 1])
    square, product = sum(squares) / len(squares), sum(products) / len(products)
    ratio = exposure / (6 * interval)
    variance = ratio * square + (2 * ratio - 1) * product
    return square / (2 * interval) + product / interval, variance


@patient
@given(seed=st.integers(0, 2**32 - 1), exposure=st.floats(0, 0.1))
def test_covariance_estimate_with_gaps_is_that_of_a_plain_loop(seed, exposure):
    rng = np.random.default_rng(seed)
    steps = rng.normal(size=40)
    steps[rng.random(40) < 0.2] = np.nan
    found = noise.covariance_estimate(steps, frame_interval=0.1, exposure=exposure)
    assert_allclose(found, simple_covariance_estimate(steps, 0.1, exposure), rtol=1e-9, atol=1e-12)


@patient
@given(seed=st.integers(0, 2**32 - 1), length=st.floats(0.01, 100), time=st.floats(0.01, 100))
def test_covariance_estimate_follows_units_mirror_and_reversal(seed, length, time):
    steps = np.random.default_rng(seed).normal(size=30)
    diffusion, variance = noise.covariance_estimate(steps, frame_interval=0.1, exposure=0.05)
    scaled = noise.covariance_estimate(
        -length * steps[::-1], frame_interval=0.1 * time, exposure=0.05 * time
    )
    expected = (length**2 / time * diffusion, length**2 * variance)
    assert_allclose(scaled, expected, rtol=1e-9, atol=1e-11 * length**2 / min(time, 1))


def test_covariance_estimate_of_two_coordinates_is_their_mean():
    steps = np.random.default_rng(3).normal(size=(25, 2))
    both = noise.covariance_estimate(steps, frame_interval=0.2, exposure=0.2)
    each = [noise.covariance_estimate(one, frame_interval=0.2, exposure=0.2) for one in steps.T]
    assert_allclose(both, np.mean(each, axis=0), rtol=1e-12)


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_estimates_of_steps_have_no_bias(share):
    # Two steps whose mean square and mean product are exactly the expected ones.
    numbers = {"diffusion": 0.05, "localization_error": 0.03, "exposure": 0.1 * share}
    square = noise.brownian_msd(np.array([0.1]), dimensions=1, **numbers)[0]
    product = noise.step_covariance(**numbers)
    common, apart = math.sqrt((square + product) / 2), math.sqrt((square - product) / 2)
    pairs = np.array([common + apart, common - apart])
    found = noise.covariance_estimate(pairs, frame_interval=0.1, exposure=0.1 * share)
    assert_allclose(found, (0.05, 0.03**2), rtol=1e-9)
    known = noise.known_noise_estimate(
        pairs, localization_error=0.03, frame_interval=0.1, exposure=0.1 * share
    )
    assert_allclose(known, 0.05, rtol=1e-9)


@pytest.mark.parametrize("share", [0.25, 1.0])
def test_known_noise_scatter_is_that_of_gaussian_steps(share):
    n, interval = 400, 0.1
    exposure = share * interval
    numbers = {"diffusion": 0.05, "interval": interval, "exposure": exposure}
    covariance = step_matrix(n, error=0.03, fine=4, **numbers)
    # The estimate is Σ Δ² / (2 (interval - exposure/3) n) less a constant; Var Σ Δ² = 2 tr(C²).
    expected = math.sqrt(2 * np.sum(covariance**2)) / (2 * (interval - exposure / 3) * n) / 0.05
    epsilon = noise.noise_to_motion(
        diffusion=0.05, localization_error=0.03, frame_interval=interval, exposure=exposure
    )
    found = noise.known_noise_relative_sd(
        n, noise=epsilon, frame_interval=interval, exposure=exposure
    )
    # The formula is the leading order in 1/n.
    assert_allclose(found, expected, rtol=1 / n)


def test_estimates_refuse_too_few_steps_and_wrong_exposures():
    gap = np.array([1.0, np.nan, 1.0])
    with pytest.raises(ValueError, match="no two successive steps"):
        noise.covariance_estimate(gap, frame_interval=0.1, exposure=0.0)
    with pytest.raises(ValueError, match="exposure must be"):
        noise.covariance_estimate(np.ones(3), frame_interval=0.1, exposure=0.2)
    with pytest.raises(ValueError, match="there is no step"):
        noise.known_noise_estimate(
            gap[1:2], localization_error=0.1, frame_interval=0.1, exposure=0.0
        )
    with pytest.raises(ValueError, match="exposure must be"):
        noise.brownian_msd(np.array([0.1]), diffusion=1.0, exposure=0.2)
    with pytest.raises(ValueError, match="lags must be > 0"):
        noise.brownian_msd(np.array([0.0]), diffusion=1.0)
    with pytest.raises(ValueError, match="dimensions must be >= 1"):
        noise.brownian_msd(np.array([0.1]), diffusion=1.0, dimensions=0)


PRECISIONS = [
    noise.precision_by_centroid,
    noise.precision_by_least_squares,
    noise.precision_by_likelihood,
]


@pytest.mark.parametrize("background", [1e-3, 1.0, 9.0, 9.5, 30.0, 3000.0])
def test_precision_by_likelihood_is_its_integral(background):
    spot, pixel, photons = 130.0, 100.0, 1000.0
    wide = spot**2 + pixel**2 / 12
    tau = 2 * math.pi * wide * background**2 / (photons * pixel**2)
    # 1 + ∫ ln u / (1 + u/τ) du = -∫ ln u · (u/τ) / (1 + u/τ) du, as ∫ ln u du = -1.
    information = quad(lambda u: -math.log(u) * u / (tau + u), 0, 1, epsabs=0, epsrel=1e-12)[0]
    found = noise.precision_by_likelihood(
        spot_sd=spot, pixel_size=pixel, photons=photons, background=background
    )
    assert_allclose(found, math.sqrt(wide / photons / information), rtol=1e-9)


@pytest.mark.parametrize("precision", PRECISIONS)
@patient
@example(scale=1.0, background=1e-160)
@given(scale=st.floats(0.01, 100), background=st.floats(0, 30))
def test_precisions_follow_the_unit_of_length_and_worsen_with_background(
    precision, scale, background
):
    numbers = {"photons": 800.0, "background": background}
    found = precision(spot_sd=0.13, pixel_size=0.1, **numbers)
    scaled = precision(spot_sd=0.13 * scale, pixel_size=0.1 * scale, **numbers)
    assert_allclose(scaled, scale * found, rtol=1e-9)
    brighter = precision(spot_sd=0.13, pixel_size=0.1, photons=800.0, background=background + 1)
    assert brighter > found


def test_without_background_likelihood_reaches_the_floor_and_least_squares_4_thirds_of_it():
    numbers = {"spot_sd": 0.13, "pixel_size": 0.1, "photons": 800.0, "background": 0.0}
    floor = noise.precision_by_centroid(**numbers)
    assert_allclose(noise.precision_by_likelihood(**numbers), floor, rtol=1e-14)
    assert_allclose(noise.precision_by_least_squares(**numbers), 4 / 3 * floor, rtol=1e-14)


@pytest.mark.parametrize("precision", PRECISIONS)
@pytest.mark.parametrize("wrong", [{"photons": 0.0}, {"background": -1.0}, {"spot_sd": 0.0}])
def test_precisions_refuse_numbers_out_of_range(precision, wrong):
    numbers = {"spot_sd": 0.13, "pixel_size": 0.1, "photons": 800.0, "background": 1.0}
    with pytest.raises(ValueError, match="must be > 0"):
        precision(**(numbers | wrong))


@patient
@given(n_steps=st.integers(2, 60), data=st.data())
def test_scatter_of_msd_points_is_the_sum_over_pairs_of_windows(n_steps, data):
    n = data.draw(st.integers(1, n_steps))
    k = n_steps - n + 1
    apart = np.arange(k)[:, np.newaxis] - np.arange(k)
    # Windows share n - |apart| steps; Var Σ Δ² of a plane's two coordinates is 2·2 Σ cov²,
    # over (2 n)² for the squared mean.
    shared = np.maximum(n - np.abs(apart), 0)
    expected = np.sum(shared.astype(float) ** 2) / (n * k) ** 2
    found = noise.msd_relative_variance(np.array([n]), n_steps=n_steps)
    assert_allclose(found, expected, rtol=1e-9)


@pytest.mark.parametrize("lag", [0, 11])
def test_scatter_refuses_lags_outside_the_track(lag):
    with pytest.raises(ValueError, match="lags must be from 1 to 10"):
        noise.msd_relative_variance(np.array([lag]), n_steps=10)
