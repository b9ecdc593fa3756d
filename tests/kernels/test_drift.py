from __future__ import annotations

import numpy as np
from numpy.testing import assert_allclose

from glidefit.kernels import drift


def objects(rng, *, n_objects, n_frames, noise, path):
    frame = np.tile(np.arange(n_frames), n_objects)
    index = np.repeat(np.arange(n_objects), n_frames)
    place = rng.uniform(0, 80, n_objects)
    x = place[index] + path[frame] + noise * rng.standard_normal(len(frame))
    return frame, index, x


def test_common_displacement_is_that_of_all_objects_also_where_some_are_missing():
    rng = np.random.default_rng(1)
    path = 0.002 * np.arange(100.0) ** 1.3
    frame, index, x = objects(rng, n_objects=12, n_frames=100, noise=0.0, path=path)
    there = rng.random(len(frame)) < 0.7
    found = drift.common_displacement(frame[there], index[there], x[there], 100)
    assert_allclose(found - found[0], path - path[0], atol=1e-6)  # the alternation's own limit


def test_common_displacement_scatters_by_noise_over_root_of_objects():
    rng = np.random.default_rng(2)
    frame, index, x = objects(rng, n_objects=25, n_frames=2000, noise=0.05, path=np.zeros(2000))
    found = drift.common_displacement(frame, index, x, 2000)
    # A standard deviation of 2000 values has a relative error of 1/sqrt(4000); 4 of them.
    assert_allclose(found.std(), 0.05 / 5, rtol=4 / np.sqrt(4000))


def test_frames_without_objects_are_interpolated():
    frame = np.array([0, 1, 4, 5])
    found = drift.common_displacement(frame, np.zeros(4, dtype=int), frame.astype(float), 6)
    assert_allclose(np.diff(found), 1.0, atol=1e-9)


def test_smoothing_keeps_a_line_and_takes_the_noise():
    rng = np.random.default_rng(3)
    line = 0.01 * np.arange(400.0)
    assert_allclose(drift.smooth(line), line, atol=1e-9)
    noisy = drift.smooth(line + 0.1 * rng.standard_normal(400))
    assert (noisy - line).std() < 0.04  # a Gaussian mean over ±10 frames leaves about a sixth


def test_still_objects_are_rarely_called_drifting_and_slow_drift_is_found():
    rng = np.random.default_rng(4)
    seen = np.full(200, 5)
    still = [
        drift.drift_is_significant(
            *(0.03 / np.sqrt(5) * rng.standard_normal((2, 200))), seen, noise=0.03
        )
        for _ in range(1000)
    ]
    # The constant is tested too although it is zero by construction: 8 degrees of freedom against
    # 6 raise the stated 1 in 1,000 to about 5; 16 or more of 1,000 has a probability below 1e-4.
    assert sum(still) < 16
    moving = 0.0005 * np.arange(200) + 0.013 * rng.standard_normal((2, 200))
    assert drift.drift_is_significant(moving[0], moving[1], seen, noise=0.03)


def test_objects_at_rest_are_told_from_gliders_by_their_common_velocity():
    rng = np.random.default_rng(5)
    heading = rng.uniform(0, 2 * np.pi, 40)
    gliders = 0.4 * np.stack([np.cos(heading), np.sin(heading)], axis=1)
    rest = np.tile([0.01, -0.004], (5, 1)) + 1e-5 * rng.standard_normal((5, 2))
    velocity = np.concatenate([gliders, rest])
    found = drift.resting_together(
        velocity,
        np.full(45, 1e-3),
        noise=0.03,
        slack=0.004,
        fastest=0.12,
        eligible=np.ones(45, dtype=bool),
    )
    assert found.tolist() == [False] * 40 + [True] * 5


def test_velocity_of_a_line_and_its_error():
    frame = np.array([0, 1, 2, 5, 9])
    velocity, error = drift.track_velocities(frame, np.array([0, 5]), 0.3 * frame, -0.1 * frame)
    assert_allclose(velocity, [[0.3, -0.1]], rtol=1e-12)
    assert_allclose(error, 1 / np.sqrt(((frame - frame.mean()) ** 2).sum()), rtol=1e-12)
