"""The likelihoods of motion states against the dense Gaussian and sums over all ways to pause."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import state_likelihood as states

NOISE, FAR = 0.03, 1e6
ONE = np.array([1.0])


def one(*values):
    return tuple(np.array([value]) for value in values)


def offered(wait):
    """One of each family, with the mean squared displacement of each in the plane."""
    (noise,) = one(NOISE)
    radius, memory = one(0.4, 7.0)
    speed, turning, diffusion = one(0.25, 0.1, 0.002)
    return {
        "at rest": (states.at_rest(wait, noise=noise), lambda t: 0 * t),
        "confined": (
            states.confined(wait, noise=noise, radius=radius, memory=memory),
            lambda t: 2 * 0.4**2 * (1 - np.exp(-t / 7.0)),
        ),
        "floating": (
            states.floating(wait, noise=noise, diffusion=diffusion),
            lambda t: 4 * 0.002 * t,
        ),
        "gliding": (
            states.gliding(wait, noise=noise, speed=speed, turning=turning, diffusion=diffusion),
            lambda t: 2 * 0.25**2 * (0.1 * t - 1 + np.exp(-0.1 * t)) / 0.1**2 + 4 * 0.002 * t,
        ),
    }


def likelihood(hypotheses, frame, x, y, *, reach=FAR):
    wait = np.unique(np.diff(frame))
    index = np.searchsorted(wait, np.diff(frame, prepend=frame[0] - wait[0]))
    offsets = np.array([0, len(frame)])
    return states.log_likelihoods(
        hypotheses, wait_index=index, x=x, y=y, offsets=offsets, reach=reach
    )[0]


def dense(msd, frame, x, y):
    """Of the displacements from the first position: what a flat place leaves."""
    t = (frame - frame[0]).astype(float)
    square = msd(np.abs(t[:, None] - t))
    covariance = (square[1:, :1] + square[:1, 1:] - square[1:, 1:]) / 2
    covariance = covariance + 2 * NOISE**2 * (1 + np.eye(len(t) - 1))
    z = ((x - x[0]) + 1j * (y - y[0]))[1:]
    return float(
        -np.linalg.slogdet(covariance)[1] - (z.conj() @ np.linalg.solve(covariance, z)).real
    )


@pytest.mark.parametrize("name", ["at rest", "confined", "floating", "gliding"])
def test_each_family_is_the_dense_gaussian_across_gaps(name):
    """Exact but for rounding: a hundred thousandth of a natural logarithm is far below 1."""
    rng = np.random.default_rng(1)
    frame = np.array([3, 4, 5, 7, 8, 13, 14, 15, 16, 18, 19, 20])
    hypothesis, msd = offered(np.unique(np.diff(frame)).astype(float))[name]
    x, y = 0.02 * rng.standard_normal((2, len(frame)))
    assert_allclose(
        likelihood(hypothesis, frame, x, y)[0], dense(msd, frame, x, y), rtol=0, atol=1e-5
    )


def test_the_series_for_hardly_any_turning_meets_the_closed_form():
    """On both sides of where they change over: the same to one part in 10^9 as their neighbour."""
    speed, none = one(0.25, 0.0)
    near = [
        states.gliding(ONE, noise=none, speed=speed, turning=np.array([u]), diffusion=none).step
        for u in (0.01 * (1 - 1e-10), 0.01 * (1 + 1e-10))
    ]
    assert_allclose(near[0][..., :2], near[1][..., :2], rtol=1e-9)
    # The variances are small differences, of order turning, of terms of order 1.
    assert_allclose(near[0][..., 2:], near[1][..., 2:], rtol=1e-6)


def runner(speed=0.25):
    noise, v, turning, diffusion = one(NOISE, speed, 0.02, 0.0)
    return states.gliding(ONE, noise=noise, speed=v, turning=turning, diffusion=diffusion)


def test_what_never_stops_is_a_glider_and_what_never_starts_rests():
    rng = np.random.default_rng(2)
    frame = np.arange(30)
    x, y = 0.25 * frame + NOISE * rng.standard_normal(30), NOISE * rng.standard_normal(30)
    always = states.pausing(ONE, runner(), stop=1e-9, start=1.0)
    assert_allclose(likelihood(always, frame, x, y), likelihood(runner(), frame, x, y), atol=1e-5)
    rest = NOISE * rng.standard_normal((2, 30))
    never = states.pausing(ONE, runner(), stop=1.0, start=1e-9)
    still = states.at_rest(ONE, noise=np.array([NOISE]))
    assert_allclose(likelihood(never, frame, *rest), likelihood(still, frame, *rest), atol=1e-5)


def test_pausing_is_near_the_sum_over_all_ways_to_pause():
    """One state of joined moments instead of 2^9: within 1, where models differ by tens."""
    stop, start, n = 0.2, 0.3, 10
    rng = np.random.default_rng(3)
    runs = np.array([1, 1, 1, 0, 0, 0, 1, 1, 1], dtype=bool)
    x = np.append(0, np.cumsum(0.25 * runs)) + NOISE * rng.standard_normal(n)
    y = NOISE * rng.standard_normal(n)
    step = runner().step[0, 0]
    switched = -np.expm1(-(stop + start)) / (stop + start)
    matrix = np.array(
        [[1 - start * switched, start * switched], [stop * switched, 1 - stop * switched]]
    )
    total = []
    for way in itertools.product((0, 1), repeat=n - 1):
        before = np.array([stop, start]) / (stop + start) @ matrix
        chance = before[way[0]] * np.prod([matrix[a, b] for a, b in itertools.pairwise(way)])
        total.append(np.log(chance) + along_one_way(step, way, x + 1j * y))
    pausing = states.pausing(ONE, runner(), stop=stop, start=start)
    found = likelihood(pausing, np.arange(n), x, y)[0]
    assert abs(found - np.logaddexp.reduce(total)) < 1
    assert found > likelihood(runner(), np.arange(n), x, y)[0] + 10


def along_one_way(step, way, z):
    """Log likelihood if it is known when the filament runs: a plain filter in matrices."""
    b, f, own, mixed, fresh = step
    mean, covariance = np.array([z[0], 0]), np.diag([2 * NOISE**2, 0.25**2])
    total = 0.0
    for runs, seen in zip(way, z[1:], strict=True):
        if runs:
            move = np.array([[1, b], [0, f]])
            noise = np.array([[own, mixed], [mixed, fresh]])
            mean, covariance = move @ mean, move @ covariance @ move.T + noise
        variance = covariance[0, 0] + 2 * NOISE**2
        rest = seen - mean[0]
        total += -np.log(variance) - abs(rest) ** 2 / variance
        gain = covariance[:, 0] / variance
        mean = mean + gain * rest
        covariance = covariance - np.outer(gain, covariance[0])
    return total


def test_a_wrong_position_costs_no_more_than_lying_anywhere():
    rng = np.random.default_rng(4)
    frame = np.arange(50)
    x, y = NOISE * rng.standard_normal((2, 50))
    still = states.at_rest(np.array([1.0, 2.0]), noise=np.array([NOISE]))
    without = likelihood(still, np.delete(frame, 20), np.delete(x, 20), np.delete(y, 20), reach=10)
    x[20] += 5.0
    found = likelihood(still, frame, x, y, reach=10)
    # One position in a hundred, anywhere within 10 µm; the gap leaves a resting object as it is.
    assert_allclose(found, without + np.log(0.01) - 2 * np.log(10), atol=1e-9)


def test_a_wait_that_was_not_prepared_is_refused():
    still = states.at_rest(ONE, noise=np.array([NOISE]))
    with pytest.raises(ValueError, match="wait_index must be 0 to 0"):
        likelihood(still, np.array([0, 1, 3]), np.zeros(3), np.zeros(3))


def test_what_is_given_up_was_hopeless():
    """Hypotheses that are not followed to the end would have stayed 40 below the best."""
    rng = np.random.default_rng(5)
    frame = np.arange(200)
    x, y = 0.02 * np.cumsum(rng.standard_normal((2, 200)), axis=1)
    diffusion = np.geomspace(1e-7, 1, 60)
    many = states.floating(ONE, noise=np.full(60, NOISE), diffusion=diffusion)
    found = likelihood(many, frame, x, y)
    each = np.array([likelihood(many.some([k]), frame, x, y)[0] for k in range(60)])
    followed = np.isfinite(found)
    assert 0 < followed.sum() < 60
    assert_allclose(found[followed], each[followed], rtol=0, atol=1e-9)
    assert np.all(each[~followed] < each.max() - 40)
