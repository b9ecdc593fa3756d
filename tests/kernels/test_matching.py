"""Links against brute force and a full Kalman filter; what is learned against what was put in."""

import dataclasses
import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.kernels.matching import (
    MotionLaw,
    Spots,
    best_links,
    born,
    clear_steps,
    continued,
    link_gain,
    predicted,
    reachable,
    speed_mixture,
    turning_and_wobble,
)

LAW = MotionLaw(
    slow_um_s=0.1,
    fast_um_s=1.0,
    fast_share=0.6,
    turning=0.3,
    wobble_um=0.01,
    missed=0.05,
    births=1e-3,
)


def spots(x, y, *, frame=0, time_s=0.0, precision=0.02):
    x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    return Spots(frame, time_s, x, y, np.full(len(x), precision))


def followed(positions, times, law=LAW):
    """One track through positions (n, 2)."""
    states = born(spots(*positions[:1].T), np.array([0]), first_track=0, law=law)
    states = dataclasses.replace(states, time_s=np.array([times[0]]))
    for k in range(1, len(times)):
        here = spots(*positions[k : k + 1].T, frame=k, time_s=times[k])
        ahead = predicted(states, time_s=times[k], law=law)
        states = continued(ahead, np.array([0]), here, np.array([0]), law=law)
    return states


def test_a_steady_track_is_that_of_a_kalman_filter_in_matrices():
    law = dataclasses.replace(LAW, changed=1e-12, fast_share=1e-12)
    rng = np.random.default_rng(1)
    times = np.array([0.0, 0.3, 0.7, 0.9, 1.6])
    positions = np.outer(times, [0.1, -0.05]) + 0.02 * rng.standard_normal((5, 2))
    noise = 0.02**2 + law.wobble_um**2
    state = np.array([positions[0], [0.0, 0.0]])
    spread = np.diag([noise, law.slow_um_s**2])
    for k in range(1, 5):
        dt = times[k] - times[k - 1]
        q = law.turning * (np.sum(state[1] ** 2) / 2 + spread[1, 1])
        move = np.array([[1, dt], [0, 1]])
        state = move @ state
        spread = move @ spread @ move.T + q * np.array([[dt**3 / 3, dt**2 / 2], [dt**2 / 2, dt]])
        weight = spread[:, :1] / (spread[0, 0] + noise)
        state = state + weight * (positions[k] - state[:1])
        spread = spread - weight @ spread[:1]
    result = followed(positions, times, law)
    assert_allclose([result.x[0], result.y[0]], state[0], rtol=1e-9)
    assert_allclose([result.vx[0], result.vy[0]], state[1], rtol=1e-9)
    assert_allclose([result.pp[0], result.pv[0], result.vv[0]], spread[[0, 0, 1], [0, 1, 1]])


def test_a_track_that_starts_to_move_is_followed_at_once():
    rest = np.zeros((8, 2))
    run = np.outer(np.arange(1, 4), [0.3, 0.0])
    times = np.arange(11) / 3
    state = followed(np.vstack([rest, run]), times)
    assert_allclose(state.vx[0], 0.9, rtol=0.1)
    ahead = predicted(state, time_s=11 / 3, law=LAW)
    assert_allclose(ahead.x[0], 1.2, atol=0.05)


@given(angle=st.floats(0, 6.28), dx=st.floats(-100, 100), mirrored=st.booleans())
def test_the_gain_of_a_link_knows_no_direction(angle, dx, mirrored):
    rng = np.random.default_rng(2)
    path, target = np.cumsum(rng.normal(0.1, 0.1, (4, 2)), axis=0), np.array([[0.6, 0.5]])
    turn = np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]])
    if mirrored:
        turn[1] *= -1

    def gain(move):
        state = followed(move(path), np.arange(4) / 3)
        here = spots(*move(target).T, frame=4, time_s=4 / 3)
        ahead = predicted(state, time_s=4 / 3, law=LAW)
        return link_gain(ahead, np.array([0]), here, np.array([0]), law=LAW)[0]

    assert_allclose(gain(lambda r: r @ turn.T + dx), gain(lambda r: r), atol=1e-6)


@given(factor=st.floats(0.1, 10))
def test_the_gain_of_a_link_knows_no_unit_of_length(factor):
    scaled = dataclasses.replace(
        LAW,
        slow_um_s=LAW.slow_um_s * factor,
        fast_um_s=LAW.fast_um_s * factor,
        wobble_um=LAW.wobble_um * factor,
        births=LAW.births / factor**2,
    )

    def gain(law, f):
        first = born(spots([0.0], [0.0], precision=0.02 * f), np.array([0]), first_track=0, law=law)
        here = spots([0.3 * f], [0.1 * f], frame=1, time_s=0.5, precision=0.02 * f)
        ahead = predicted(first, time_s=0.5, law=law)
        return link_gain(ahead, np.array([0]), here, np.array([0]), law=law)[0]

    assert_allclose(gain(scaled, factor), gain(LAW, 1.0), rtol=1e-9)


def test_a_link_gains_less_the_farther_off_and_after_a_miss():
    state = followed(np.outer(np.arange(4), [0.3, 0.0]), np.arange(4) / 3)
    here = spots(0.9 + np.array([0.3, 0.35, 0.5, 1.0, 4.0]), np.zeros(5), frame=4, time_s=4 / 3)
    j = np.arange(5)
    gain = link_gain(predicted(state, time_s=4 / 3, law=LAW), 0 * j, here, j, law=LAW)
    assert np.all(np.diff(gain) < 0)
    assert gain[0] > 0 > gain[-1]
    late = here._replace(frame=5)
    assert np.all(
        link_gain(predicted(state, time_s=4 / 3, law=LAW), 0 * j, late, j, law=LAW) < gain
    )


@given(
    gain=arrays(
        np.float64, st.tuples(st.integers(1, 4), st.integers(1, 4)), elements=st.floats(-3, 9)
    ),
    kept=st.integers(0, 2**16 - 1),
)
def test_the_best_links_are_those_of_trying_all(gain, kept):
    n, m = gain.shape
    possible = np.array([kept >> k & 1 for k in range(n * m)], dtype=bool).reshape(n, m)
    i, j = np.nonzero(possible)
    chosen, _ = best_links(i, j, gain[i, j], n_tracks=n, n_spots=m)
    assert len(set(i[chosen])) == len(chosen) == len(set(j[chosen]))
    worth = np.where(possible, np.maximum(gain, 0), 0)
    if n > m:
        worth = worth.T
    best = max(
        sum(worth[a, b] for a, b in enumerate(order))
        for order in itertools.permutations(range(worth.shape[1]), worth.shape[0])
    )
    assert_allclose(gain[i, j][chosen].sum(), best, atol=1e-9)


def test_groups_of_competing_links_are_counted():
    i, j = np.array([0, 0, 1, 2]), np.array([0, 1, 1, 2])
    chosen, largest = best_links(i, j, np.array([3.0, 5.0, 4.0, 1.0]), n_tracks=3, n_spots=3)
    assert_array_equal(chosen, [0, 2, 3])
    assert largest == 2
    chosen, largest = best_links(i, j, -np.ones(4), n_tracks=3, n_spots=3)
    assert len(chosen) == largest == 0


def test_reachable_pairs_are_those_of_trying_all():
    rng = np.random.default_rng(3)
    law = LAW
    states = born(spots(*rng.uniform(0, 10, (2, 40))), np.arange(40), first_track=0, law=law)
    states = dataclasses.replace(states, time_s=rng.choice([0.0, 0.5], 40))
    here = spots(*rng.uniform(0, 10, (2, 50)), frame=2, time_s=1.0, precision=0.1)
    i, j = reachable(states, here, max_speed=2.0)
    distance = np.hypot(
        np.subtract.outer(states.seen_x, here.x), np.subtract.outer(states.seen_y, here.y)
    )
    limit = 2.0 * (1.0 - states.time_s)[:, None] + 3 * np.hypot(0.02, 0.1)
    assert set(zip(i, j, strict=True)) == set(zip(*np.nonzero(distance <= limit), strict=True))


def test_steps_are_clear_only_without_another_one_nearby():
    before = spots([0.0, 5.0, 10.0, 20.0], [0.0, 0.0, 0.0, 0.0])
    after = spots([0.3, 5.5, 5.9, 9.9, 26.0], [0.0, 0.0, 0.0, 0.1, 0.0], frame=1, time_s=1.0)
    i, j = clear_steps(before, after, max_speed=4.0)
    assert_array_equal(i, [0, 2])  # of 5.0 there are two, 20.0 would be too fast
    assert_array_equal(j, [0, 3])
    assert len(clear_steps(before, spots([], []), max_speed=4.0)[0]) == 0


@pytest.mark.parametrize("share", [0.2, 0.5, 0.8])
def test_speeds_of_slow_and_fast_steps_are_told_apart(share):
    rng = np.random.default_rng(4)
    n, dt = 4000, rng.choice([0.3, 0.6], 4000)
    fast = rng.random(n) < share
    noise = np.full(n, 2 * 0.02**2)
    sd = np.hypot(np.where(fast, 1.0, 0.05) * dt, np.sqrt(noise))
    square = np.sum((sd * rng.standard_normal((2, n))) ** 2, axis=0)
    chance = rng.random(n) < 0.05
    square[chance] = (12 * dt[chance]) ** 2 * rng.random(chance.sum())
    slow, quick, found = speed_mixture(square, dt, noise, max_speed=12.0)
    assert_allclose([slow, quick, found], [0.05, 1.0, share], rtol=0.1)


@pytest.mark.parametrize("wobble", [0.0, 0.04])
def test_turning_and_wobble_of_curved_noisy_paths_are_found(wobble):
    rng = np.random.default_rng(5)
    n, per_frame, dt, speed, diffusion = 3000, 20, 0.2, 3.0, 0.3
    turns = np.sqrt(2 * diffusion * dt / per_frame) * rng.standard_normal((n, 4 * per_frame))
    heading = rng.uniform(0, 2 * np.pi, (n, 1)) + np.cumsum(turns, axis=1)
    steps = speed * dt / per_frame * np.stack([np.cos(heading), np.sin(heading)])
    path = np.concatenate([np.zeros((2, n, 1)), np.cumsum(steps, axis=2)], axis=2)[..., ::per_frame]
    x, y = path + np.hypot(0.02, wobble) * rng.standard_normal(path.shape)
    times = np.tile(np.arange(5) * dt, (n, 1))
    turning, found = turning_and_wobble(x, y, times, np.full((n, 5), 0.02))
    # All variance is across the path: v² D_r per coordinate is turning v²/2; the median of a
    # mixture of along and across is below that of a Gaussian of the same variance.
    assert 0.4 < turning / (2 * diffusion) < 1.1
    # The chord's shortening counts as wobble, 0.02 µm here.
    assert_allclose(found, wobble, atol=0.03)


def test_too_few_runs_tell_nothing():
    run = np.arange(5.0)[None, :].repeat(19, axis=0)
    assert turning_and_wobble(run, run, run, 0 * run + 0.1) == (None, None)
    still = np.random.default_rng(6).normal(0, 0.05, (2, 400, 5))
    times = np.arange(5.0)[None, :].repeat(400, axis=0)
    turning, wobble = turning_and_wobble(*still, times, np.full((400, 5), 0.03))
    assert turning is None
    assert_allclose(wobble, 0.04, rtol=0.1)
