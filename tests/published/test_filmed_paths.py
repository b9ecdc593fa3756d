"""What frames with exposure and noise make of active Brownian paths.

Derivations and values: own, against simulations; the simulations here start from the same law of
motion and know nothing of the formulas.
"""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import active_brownian as ab


def filmed(n_tracks, n_frames, *, turn, exposed, fine=20, speed=1.0, error=0.0, rng):
    """Positions (n_tracks, n_frames) as complex numbers, the frame interval being 1.

    Each frame is the mean over the first `exposed` of its `fine` parts, at the middle of each.
    """
    heading = rng.uniform(-np.pi, np.pi, n_tracks)
    place = np.zeros(n_tracks, dtype=complex)
    frames = np.zeros((n_tracks, n_frames), dtype=complex)
    for frame in range(n_frames):
        for part in range(fine):
            stride = speed / fine * np.exp(1j * heading)
            if part < exposed:
                frames[:, frame] += (place + stride / 2) / exposed
            place += stride
            heading += rng.normal(0, math.sqrt(2 * turn / fine), n_tracks)
    noise = rng.normal(0, error, (2, n_tracks, n_frames)) if error else np.zeros((2, 1, 1))
    return frames + noise[0] + 1j * noise[1]


def turning_variances(positions, steps):
    """Variance of the turn between steps n and n + k, and its standard error, over tracks."""
    directions = np.unwrap(np.angle(np.diff(positions, axis=1)), axis=1)
    found = []
    for k in steps:
        per_track = np.mean((directions[:, k:] - directions[:, :-k]) ** 2, axis=1)
        found.append((np.mean(per_track), np.std(per_track) / math.sqrt(len(per_track))))
    return np.array(found).T


# Headings from frames: own derivation and simulation (first order in D_r δ).
@pytest.mark.parametrize(
    ("k", "exposure", "expected"),
    [
        (1, 0.0, 0.0266666666666667),
        (2, 0.0, 0.0666666666666667),
        (3, 0.0, 0.106666666666667),
        (5, 0.0, 0.186666666666667),
        (1, 1.0, 0.022),
        (2, 1.0, 0.0613333333333333),
    ],
)
def test_turning_variance(k, exposure, expected):
    found = ab.turning_variance(
        np.array([k]), speed=1.0, rotational_diffusion=0.02, frame_interval=1.0, exposure=exposure
    )
    assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize("exposed", [1, 10, 20])
def test_turning_variance_of_filmed_paths(exposed):
    steps = np.array([1, 2, 3, 5])
    rng = np.random.default_rng(exposed)
    positions = filmed(6000, 40, turn=0.02, exposed=exposed, rng=rng)
    measured, error = turning_variances(positions, steps)
    theory = ab.turning_variance(
        steps,
        speed=1.0,
        rotational_diffusion=0.02,
        frame_interval=1.0,
        exposure=exposed / 20,
    )
    # The formula is of first order in D_r δ = 0.02: 2 %, besides 4 standard errors.
    assert np.all(np.abs(measured - theory) < 4 * error + 0.02 * theory)
    assert np.all(error < 0.01 * theory)


def test_noise_turns_the_first_step_most():
    steps = np.arange(1, 6)
    numbers = {"speed": 0.8, "rotational_diffusion": 0.004, "frame_interval": 1.0}
    found = ab.turning_variance(steps, localization_error=0.03, **numbers)
    assert_allclose(found[0], 0.0137708, rtol=1e-5)
    # Half the variance over the interval, taken for D_r, is 72 % too large.
    assert_allclose(found[0] / 2, 0.00688541666666665, rtol=1e-12)
    # The slope from k = 2 on removes noise, diffusion and exposure.
    blurred = ab.turning_variance(
        steps, localization_error=0.03, diffusion=0.001, exposure=1.0, **numbers
    )
    for variances in (found, blurred):
        assert_allclose(np.diff(variances)[1:] / 2, 0.004, rtol=1e-9)


def test_turning_variance_of_noisy_filmed_paths():
    steps = np.array([1, 2, 3])
    rng = np.random.default_rng(7)
    positions = filmed(2000, 40, turn=0.004, exposed=1, speed=0.8, error=0.03, rng=rng)
    measured, error = turning_variances(positions, steps)
    theory = ab.turning_variance(
        steps,
        speed=0.8,
        rotational_diffusion=0.004,
        frame_interval=1.0,
        localization_error=0.03,
    )
    # Higher orders in noise over step made simulations up to 1.6 % larger.
    assert np.all(np.abs(measured - theory) < 4 * error + 0.02 * theory)
    assert np.all(error < 0.01 * theory)


def test_rms_step_speed():
    numbers = {"speed": 0.8, "rotational_diffusion": 0.004, "frame_interval": 1.0}
    # The value is √(v² + 4σ²/δ²), without the bend of the path within a step.
    straight = ab.rms_step_speed(localization_error=0.03, **(numbers | {"rotational_diffusion": 0}))
    assert_allclose(straight, 0.80225, rtol=0, atol=5e-6)
    # v² 2 (x - 1 + exp(-x)) / x² + 4σ²/δ² + 4D/δ, x = D_r δ, by its series.
    x = 0.004
    expected = 0.64 * (1 - x / 3 + x**2 / 12 - x**3 / 60) + 4 * 0.03**2 + 4 * 0.001
    found = ab.rms_step_speed(localization_error=0.03, diffusion=0.001, **numbers)
    assert_allclose(found**2, expected, rtol=1e-12)


def blurred(lag, **numbers):
    quiet = {"longitudinal_diffusion": 0.0, "localization_variance": 0.0}
    return ab.gliding_msd(np.array([lag]), **(quiet | numbers))


# Blur of any motion with stationary increments: own derivation.
def test_blurred_mean_squared_displacement():
    bent = {"speed": 1.0, "rotational_diffusion": 0.02}
    assert_allclose(blurred(1.0, exposure=1.0, **bent), 0.990732941673617, rtol=1e-7)
    assert_allclose(blurred(1.0, exposure=0.0, **bent), 0.99336653, rtol=5e-9)
    # Along the heading 2 D∥ does what 4 D_t does in the plane, here for D_t = 0.01 µm²/s.
    quick = {"speed": 5.0, "rotational_diffusion": 0.25, "longitudinal_diffusion": 0.02}
    assert_allclose(blurred(0.1, exposure=0.1, **quick), 0.24977585, rtol=5e-8)
    assert_allclose(blurred(0.1, exposure=0.0, **quick), 0.25192962, rtol=5e-8)


def test_blur_leaves_straight_paths_and_shortens_diffusion():
    straight = {"speed": 2.0, "rotational_diffusion": 0.0}
    assert_allclose(blurred(0.5, exposure=0.5, **straight), 1.0, rtol=1e-15)
    diffusing = {"speed": 0.0, "rotational_diffusion": 0.0, "longitudinal_diffusion": 0.1}
    assert_allclose(blurred(0.5, exposure=0.5, **diffusing), 2 * 0.1 * 0.5 * 2 / 3, rtol=1e-15)


def test_blurred_mean_squared_displacement_of_filmed_paths():
    # Strongly bent, so that the loss by blur is far above the scatter.
    rng = np.random.default_rng(12)
    positions = filmed(20_000, 3, turn=0.5, exposed=20, rng=rng)
    for lag in (1, 2):
        squares = np.abs(positions[:, lag] - positions[:, 0]) ** 2
        error = np.std(squares) / math.sqrt(len(squares))
        expected = blurred(float(lag), speed=1.0, rotational_diffusion=0.5, exposure=1.0)
        sharp = blurred(float(lag), speed=1.0, rotational_diffusion=0.5, exposure=0.0)
        assert_allclose(np.mean(squares), expected, rtol=0, atol=4 * error)
        assert sharp - expected > 8 * error
