"""Blur, localization error and what is estimated in their presence, against outside values."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import noise

BROWNIAN = {"diffusion": 0.05, "localization_error": 0.03}


# Michalet, Phys. Rev. E 82, 041914 (2010): record and abstract verified. Berglund, Phys. Rev. E 82,
# 011917 (2010); Savin & Doyle, Biophys. J. 88, 623 (2005): from memory. Formula: own check.
@pytest.mark.parametrize(
    ("exposure", "expected", "rtol"),
    [(0.0, 0.0236, 1e-9), (0.1, 0.0169333333333333, 1e-9), (0.05, 0.0202667, 2e-6)],
)
def test_brownian_mean_squared_displacement(exposure, expected, rtol):
    found = noise.brownian_msd(np.array([0.1]), exposure=exposure, **BROWNIAN)
    assert_allclose(found, expected, rtol=rtol)


def test_steps_of_a_filmed_random_walk():
    # A walk of 20 parts a frame, all of them exposed; a part's mean lies between its ends.
    rng = np.random.default_rng(41)
    n, fine = 100_000, 20
    walk = np.cumsum(rng.normal(0, math.sqrt(2 * 0.05 * 0.1 / fine), n * fine))
    between = (walk[1:] + walk[:-1]) / 2
    frames = between[: (n - 1) * fine].reshape(-1, fine).mean(axis=1)
    steps = np.diff(frames + rng.normal(0, 0.03, len(frames)))
    squares, products = steps**2, steps[1:] * steps[:-1]
    # Neighbours are correlated by a third at most; that widens the error by less than a half.
    error = 1.5 * np.std(squares) / math.sqrt(n)
    expected = noise.brownian_msd(np.array([0.1]), exposure=0.1, dimensions=1, **BROWNIAN)
    assert_allclose(squares.mean(), expected, rtol=0, atol=4 * error)
    expected = noise.step_covariance(exposure=0.1, **BROWNIAN)
    assert_allclose(products.mean(), expected, rtol=0, atol=4 * error)
    found = noise.covariance_estimate(steps, frame_interval=0.1, exposure=0.1)
    epsilon = noise.noise_to_motion(frame_interval=0.1, exposure=0.1, **BROWNIAN)
    spread = 0.05 * noise.covariance_relative_sd(n, noise=epsilon)
    assert_allclose(found[0], 0.05, rtol=0, atol=4 * spread)
    assert_allclose(found[1], 0.03**2, rtol=0, atol=8 * error)


# Vestergaard, Blainey & Flyvbjerg, Phys. Rev. E 89, 022726 (2014): from memory; mathematics own
# check.
@pytest.mark.parametrize(
    ("n_steps", "epsilon", "expected"),
    [
        (10, 0, 0.8),
        (10, 1, 1.16619037896906),
        (10, 5, 3.00665927567458),
        (100, 0, 0.24576411454889),
        (100, 1, 0.348711915483254),
        (100, 5, 0.88),
        (1000, 0, 0.0774854825112421),
        (1000, 1, 0.109617516848358),
        (1000, 5, 0.275942022896115),
    ],
)
def test_scatter_of_the_covariance_estimate(n_steps, epsilon, expected):
    assert_allclose(noise.covariance_relative_sd(n_steps, noise=epsilon), expected, rtol=1e-9)


@pytest.mark.parametrize(("n", "expected", "digits"), [(10, 1.0055, 4), (100, 1.00005, 5)])
def test_the_covariance_estimate_is_without_bias_and_its_scatter_as_stated(n, expected, digits):
    interval = exposure = 0.1
    square = noise.brownian_msd(np.array([interval]), exposure=exposure, dimensions=1, **BROWNIAN)
    product = noise.step_covariance(exposure=exposure, **BROWNIAN)
    covariance = square * np.eye(n) + product * (np.eye(n, k=1) + np.eye(n, k=-1))

    # The estimate is a quadratic form ΔᵀAΔ: A from its values for sums of two unit steps.
    def estimate(steps):
        return noise.covariance_estimate(steps, frame_interval=interval, exposure=exposure)[0]

    unit = np.eye(n)
    alone = [estimate(one) for one in unit]
    form = np.diag(alone)
    for i in range(n):
        for j in range(i):
            form[i, j] = form[j, i] = (estimate(unit[i] + unit[j]) - alone[i] - alone[j]) / 2
    # For Gaussian steps of covariance C: mean tr(AC), variance 2 tr(ACAC).
    assert_allclose(np.trace(form @ covariance), 0.05, rtol=1e-10)
    variance = 2 * np.trace(form @ covariance @ form @ covariance)
    epsilon = noise.noise_to_motion(frame_interval=interval, exposure=exposure, **BROWNIAN)
    stated = (0.05 * noise.covariance_relative_sd(n, noise=epsilon)) ** 2
    assert round(variance / stated, digits) == expected


# Thompson, Larson & Webb, Biophys. J. 82, 2775 (2002): record and formula verified. Mortensen et
# al., Nat. Methods 7, 377 (2010): from memory.
@pytest.mark.parametrize(
    ("precision", "expected", "with_em_gain"),
    [
        (noise.precision_by_centroid, 9.46123435692594, None),
        (noise.precision_by_least_squares, 10.5148055864365, 14.8702),
        (noise.precision_by_likelihood, 10.4010630352313, 14.7093),
    ],
)
def test_localization_precision(precision, expected, with_em_gain):
    found = precision(spot_sd=130.0, pixel_size=100.0, photons=1000.0, background=10.0)
    assert_allclose(found, expected, rtol=1e-6)
    if with_em_gain:
        assert_allclose(found * math.sqrt(2), with_em_gain, rtol=5e-6)


@pytest.mark.parametrize("precision", [noise.precision_by_centroid, noise.precision_by_likelihood])
def test_localization_precision_without_background(precision):
    # √(s_a² / N) is 4.2111 nm for 130.0, 100, 1000.
    found = precision(spot_sd=130.0, pixel_size=100.0, photons=1000.0, background=0.0)
    assert_allclose(found, math.sqrt((130**2 + 100**2 / 12) / 1000), rtol=1e-12)
    assert_allclose(found, 4.21110, rtol=2e-6)


# Qian, Sheetz & Elson, Biophys. J. 60, 910 (1991): from memory; own check exact.
@pytest.mark.parametrize(
    ("lag", "expected"),
    [
        (1, 0.01),
        (5, 0.0349826388888889),
        (10, 0.0716338606448497),
        (50, 0.49359477124183),
        (60, 0.622493224932249),
        (90, 0.921661054994388),
    ],
)
def test_scatter_of_time_averaged_msd(lag, expected):
    found = noise.msd_relative_variance(np.array([lag]), n_steps=100)
    assert_allclose(found, expected, rtol=1e-9)
