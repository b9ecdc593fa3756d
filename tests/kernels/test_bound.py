"""The Cramér-Rao bound: its covariances, its closed forms, and the scores it stands for."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.bound import (
    BOUND_PARAMETERS,
    exposed_integral,
    exposed_wiener,
    least_relative_error_of_ratio,
    least_standard_errors,
    own_speed_hides,
    track_information,
)

MOTION = {
    "speed": 0.8,
    "rotational_diffusion": 0.02,
    "localization_error": 0.03,
    "longitudinal_diffusion": 0.003,
}


def row(name):
    return BOUND_PARAMETERS.index(name)


@pytest.mark.parametrize("exposure", [0.0, 0.2, 0.5])
def test_covariances_over_exposures_are_those_of_summed_steps(exposure):
    # A fine walk written as a matrix: each row sums the steps that a mean over an exposure sees.
    start, fine = np.array([0.0, 0.5, 1.0, 2.5]), 2000
    step = 3.0 / (6 * fine)
    edges = np.arange(6 * fine) * step
    middles = (np.arange(400) + 0.5) / 400 * exposure if exposure else np.zeros(1)
    seen = start[:, None] + middles
    since = np.maximum(seen[:, :, None] - edges, 0).clip(max=step) / step
    walk = since.mean(axis=1)
    assert_allclose(exposed_wiener(start, exposure), walk @ walk.T * step, rtol=2e-3, atol=2e-3)
    area = np.maximum(seen[:, :, None] - edges - step / 2, 0).mean(axis=1)
    assert_allclose(exposed_integral(start, exposure), area @ area.T * step, rtol=2e-3, atol=1e-5)


def test_speed_without_localization_error_is_known_as_its_diffusion_allows():
    time = np.arange(21) * 0.5
    information = track_information(time, **MOTION | {"localization_error": 1e-9})
    # Independent steps of mean v h and variance 2 D h: I_vv = T / (2 D), I_DD = N / (2 D²).
    across = (len(time) - 2) / 2 * (2 / 0.8) ** 2  # v scales the covariance across as v²
    along = information[row("speed"), row("speed")] - across
    assert_allclose(along, 10.0 / (2 * 0.003), rtol=1e-6)
    diffusion = information[row("longitudinal_diffusion"), row("longitudinal_diffusion")]
    assert_allclose(diffusion, 20 / (2 * 0.003**2), rtol=1e-6)


def test_turning_without_localization_error_is_known_like_a_variance_of_n_minus_2_numbers():
    information = track_information(
        np.arange(30) * 0.5, exposure_s=0.2, **MOTION | {"localization_error": 1e-7}
    )
    turning = information[row("rotational_diffusion"), row("rotational_diffusion")]
    assert_allclose(turning, 28 / (2 * 0.02**2), rtol=1e-5)


def test_mean_speed_is_known_no_better_than_its_spread_between_tracks_allows():
    information = track_information(np.arange(50) * 0.5, speed_spread=0.1, **MOTION)
    known = least_standard_errors(information, unknown=["speed", "rotational_diffusion"])
    assert known["speed"] > 0.99 * 0.1
    assert known["speed"] < 0.12


def test_rotational_diffusion_is_known_although_speeds_differ():
    """Each track knows its own speed: 40 tracks of speeds 30 % apart know D_r as alike ones do."""
    unknown = ["speed", "rotational_diffusion", "localization_variance"]
    time = np.arange(100) * 0.5
    alike, apart = (
        least_standard_errors(
            track_information(time, speed_spread=spread, **MOTION), unknown=unknown, n_tracks=40
        )
        for spread in (0.0, 0.24)
    )
    assert_allclose(apart["speed"], 0.24 / 40**0.5, rtol=0.02)
    ratio = apart["rotational_diffusion"] / alike["rotational_diffusion"]
    assert 1 < ratio < 1.01


def test_bound_across_where_speeds_differ_is_that_of_the_joint_law():
    """Speed of the track, mean and others in one curvature, the speed then taken out of it."""
    rng = np.random.default_rng(2)
    root = rng.normal(size=(3, 3))
    across, told, variance = root @ root.T, 1.7, 0.4
    found = across.copy()
    own_speed_hides(found, speed_variance=variance, told=told)
    # Order: the track's own speed, the mean, two others.
    joint = np.zeros((4, 4))
    joint[:2, :2] = np.array([[1, -1], [-1, 1]]) / variance
    joint[0, 0] += told
    along = joint.copy()
    joint[np.ix_([0, 2, 3], [0, 2, 3])] += across
    with_across, alone = (
        m[1:, 1:] - np.outer(m[0, 1:], m[0, 1:]) / m[0, 0] for m in (joint, along)
    )
    assert_allclose(found, with_across - alone, rtol=1e-10, atol=1e-12)


def test_scores_of_simulated_tracks_have_the_information_as_their_covariance():
    # An independent second version: positions drawn step by step, log likelihood of contrasts
    # free of place and orientation, slopes by differences.
    rng = np.random.default_rng(1)
    time, exposure, n, fine = np.arange(8) * 0.5, 0.25, 40_000, 20
    truth = np.array([0.8, 0.02, 0.003, 0.03**2, 0.001])
    along, across = _small_angle_tracks(truth, time, exposure, n, fine, rng)

    def log_likelihood(values):
        v, turning, diffusion, variance, sideways = values
        middle = time + exposure / 2
        x = 2 * diffusion * exposed_wiener(time, exposure) + variance * np.eye(len(time))
        y = 2 * turning * v**2 * exposed_integral(time, exposure) + variance * np.eye(len(time))
        y += 2 * sideways * exposed_wiener(time, exposure)
        return _of_contrasts(along - v * middle, x, 1) + _of_contrasts(across, y, 2)

    scores = []
    for i in range(5):
        step = np.zeros(5)
        step[i] = 1e-3 * truth[i]
        scores.append((log_likelihood(truth + step) - log_likelihood(truth - step)) / step[i] / 2)
    scores = np.stack(scores, axis=1) * truth
    rows = [*range(4), row("sideways_diffusion")]
    information = track_information(
        time, exposure_s=exposure, sideways_diffusion=truth[4], **MOTION
    )[np.ix_(rows, rows)]
    expected = information * np.outer(truth, truth)
    size = np.sqrt(np.diag(expected))
    # Products of scores of 40 000 tracks scatter by about 1 % of the diagonal; the walk's own
    # steps add less.
    measured = scores.T @ scores / n
    assert_allclose(measured / np.outer(size, size), expected / np.outer(size, size), atol=0.04)
    assert_allclose(scores.mean(axis=0) / size, 0, atol=0.03)


def _small_angle_tracks(truth, time, exposure, n, fine, rng):
    v, turning, diffusion, variance, sideways = truth
    per_frame = 2 * fine  # frames of 0.5 s, exposed during their first half
    step = 0.5 / per_frame
    count = per_frame * len(time)
    heading = np.cumsum(rng.normal(0, np.sqrt(2 * turning * step), (n, count)), axis=1)
    aside = rng.normal(0, np.sqrt(2 * sideways * step), (n, count))
    y = np.cumsum(v * heading * step + aside, axis=1)
    x = np.cumsum(v * step + rng.normal(0, np.sqrt(2 * diffusion * step), (n, count)), axis=1)
    seen = np.arange(len(time))[:, None] * per_frame + np.arange(fine)
    noise = rng.normal(0, np.sqrt(variance), (2, n, len(time)))
    return x[:, seen].mean(axis=2) + noise[0], y[:, seen].mean(axis=2) + noise[1]


def _of_contrasts(positions, covariance, order):
    """Log density up to a constant of differences, which are free of place (and orientation)."""
    contrasts = np.diff(np.eye(len(covariance)), order, axis=0)
    seen = contrasts @ covariance @ contrasts.T
    z = positions @ contrasts.T
    square = np.einsum("ni,ij,nj->n", z, np.linalg.inv(seen), z)
    return -square / 2 - np.linalg.slogdet(seen)[1] / 2


def test_errors_fall_with_the_number_of_tracks_and_the_ratio_follows_from_both():
    unknown = BOUND_PARAMETERS[:4]
    information = track_information(np.arange(200) / 3, **MOTION)
    one = least_standard_errors(information, unknown=unknown)
    many = least_standard_errors(information, unknown=unknown, n_tracks=100)
    assert_allclose(list(one.values()), 10 * np.array(list(many.values())), rtol=1e-12)
    ratio = least_relative_error_of_ratio(
        information, speed=0.8, rotational_diffusion=0.02, unknown=unknown
    )
    turning = one["rotational_diffusion"] / 0.02
    assert abs(ratio - turning) < one["speed"] / 0.8 * 1.5


def test_what_cannot_be_determined_is_an_error():
    information = track_information(np.arange(20) / 3, **MOTION)
    nothing = information * 0
    with pytest.raises(np.linalg.LinAlgError):
        least_standard_errors(nothing, unknown=BOUND_PARAMETERS[:2])


@pytest.mark.parametrize("scale", [1e-3, 1e3])
def test_relative_errors_do_not_depend_on_the_unit_of_length(scale):
    scaled = {
        "speed": 0.8 * scale,
        "rotational_diffusion": 0.02,
        "localization_error": 0.03 * scale,
        "longitudinal_diffusion": 0.003 * scale**2,
    }
    time, unknown = np.arange(40) / 3, BOUND_PARAMETERS[:4]
    one = least_standard_errors(track_information(time, **MOTION), unknown=unknown)
    other = least_standard_errors(track_information(time, **scaled), unknown=unknown)
    assert_allclose(other["speed"], one["speed"] * scale, rtol=1e-6)
    assert_allclose(other["rotational_diffusion"], one["rotational_diffusion"], rtol=1e-6)
