"""Tracks told apart by likelihood: simulated truth, and the least that can be seen."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.kernels.motion_states import smallest_noticed_speed, state_probabilities

NOISE = 0.03


def at_rest(rng, n):
    return np.zeros(n, dtype=complex)


def gliding(rng, n, *, speed=0.25, turning=0.003):
    heading = rng.uniform(0, 2 * np.pi) + np.cumsum(np.sqrt(2 * turning) * rng.standard_normal(n))
    return np.cumsum(speed * np.exp(1j * heading))


def floating(rng, n, *, diffusion=0.02):
    return np.cumsum(np.sqrt(2 * diffusion) * plane(rng, n))


def pivoting(rng, n, *, radius=1.0):
    return radius * np.exp(1j * np.cumsum(np.sqrt(2 * 0.07) * rng.standard_normal(n)))


def pausing(rng, n, *, speed=0.25):
    """Runs of 30 frames, pauses of 60."""
    runs = np.arange(n) % 90 < 30
    return np.cumsum(speed * runs) + 0j


def plane(rng, n):
    return rng.standard_normal(n) + 1j * rng.standard_normal(n)


def judged(paths, *, seed=9, noise=NOISE, gaps=0.0, scale=1.0, turn=0.0, eligible=None, **options):
    """The probabilities of paths, one complex position a frame, with localization error."""
    rng = np.random.default_rng(seed)
    frame, z, counts = [], [], []
    for path in paths:
        seen = np.append(True, rng.random(len(path) - 1) >= gaps)
        frame.append(np.flatnonzero(seen))
        z.append((path + noise * plane(rng, len(path)))[seen])
        counts.append(seen.sum())
    position = np.concatenate(z) * scale * np.exp(1j * turn)
    return state_probabilities(
        np.concatenate(frame),
        np.concatenate([[0], np.cumsum(counts)]),
        position.real,
        position.imag,
        noise=noise * scale,
        radius=1.8 * scale,
        **{
            "speed": np.full(len(paths), np.nan),
            "creep": 0.01,
            "eligible": np.ones(len(paths), dtype=bool) if eligible is None else eligible,
        }
        | options,
    )


def several(rng, kind, number, n, **options):
    return [kind(rng, n, **options) for _ in range(number)]


@pytest.mark.parametrize("gaps", [0.0, 0.3])
def test_each_kind_is_known_from_a_long_track(gaps):
    """Of 100 frames: their likelihoods differ by tens, so all are told with 99 %."""
    rng = np.random.default_rng(1)
    kinds = (gliding, at_rest, pivoting, floating, pausing)
    paths = [path for kind in kinds for path in several(rng, kind, 6, 100)]
    found = judged(paths, gaps=gaps)
    kind = np.repeat(np.arange(5), 6)
    assert np.all(found.gliding[(kind == 0) | (kind == 4)] > 0.99)
    assert np.all(found.gliding[(kind > 0) & (kind < 4)] < 0.01)
    # Confined within the noise, or floating hardly at all, is rest as well.
    assert np.mean(found.at_rest[kind == 1] > 0.9) > 0.5
    assert np.all(found.confined[kind == 2] + found.floating[kind == 2] > 0.99)
    assert np.all(found.floating[kind == 3] > 0.5)


def test_probabilities_sum_to_one_and_are_unknown_for_others():
    rng = np.random.default_rng(2)
    eligible = np.array([True, False, True])
    found = judged(several(rng, gliding, 3, 30), eligible=eligible)
    total = found.gliding + found.at_rest + found.confined + found.floating
    assert_allclose(total[eligible], 1, rtol=1e-12)
    assert np.isnan(found.gliding[1])
    none = judged(several(rng, gliding, 2, 30), eligible=np.zeros(2, dtype=bool))
    assert np.isnan(none.gliding).all()


@settings(max_examples=10, deadline=None)
@given(scale=st.sampled_from([1e-3, 0.1, 10.0, 1e3]), turn=st.floats(0, 6))
def test_unit_and_orientation_do_not_matter(scale, turn):
    """Rounding in sums of hundreds of logarithms: far less than 10^-6 of a probability."""
    rng = np.random.default_rng(3)
    paths = several(rng, gliding, 4, 30) + several(rng, floating, 3, 30) + [at_rest(rng, 30)]
    one = judged(paths)
    two = judged(paths, scale=scale, turn=turn)
    # The box around all tracks, in which wrong positions may lie, turns with them.
    assert_allclose(two.gliding, one.gliding, rtol=0, atol=1e-3 if turn else 1e-6)
    assert_allclose(two.slowest, one.slowest * scale, rtol=1e-9)


def test_the_order_of_tracks_does_not_matter():
    rng = np.random.default_rng(4)
    paths = several(rng, gliding, 5, 12) + several(rng, floating, 4, 12)
    exact = {"noise": 1e-12}  # so that both orders see the same positions
    paths = [path + NOISE * plane(rng, 12) for path in paths]
    there = judged(paths, **exact)
    back = judged(paths[::-1], **exact)
    # Sums over tracks in another order differ by rounding.
    assert_allclose(back.gliding[::-1], there.gliding, rtol=0, atol=1e-9)


@pytest.mark.parametrize("n", [2, 3, 4])
def test_tracks_of_few_positions_are_judged_by_what_the_others_do(n):
    """A glider's stride of 8 σ among gliders glides; none at all among resting objects rests."""
    rng = np.random.default_rng(5)
    paths = several(rng, gliding, 20, 60) + several(rng, at_rest, 20, 60)
    found = judged([*paths, gliding(rng, n), at_rest(rng, n)])
    assert found.gliding[-2] > 0.5
    assert found.gliding[-1] < 0.5


@pytest.mark.parametrize(("kind", "glides"), [(gliding, True), (at_rest, False)])
@pytest.mark.parametrize("number", [1, 20])
def test_all_of_one_kind(kind, glides, number):
    rng = np.random.default_rng(6)
    found = judged(several(rng, kind, number, 60))
    assert np.all((found.gliding > 0.5) == glides)


def test_without_noise_a_straight_track_glides():
    found = judged([np.arange(20) * 0.2 + 0j], noise=0.0)
    assert found.gliding[0] > 0.5


def test_slow_creeping_is_rest_where_others_glide_fast():
    rng = np.random.default_rng(7)
    paths = several(rng, gliding, 10, 200)
    creeps = [0.005 * np.arange(200) * np.exp(1j * a) for a in rng.uniform(0, 6, 4)]
    found = judged(paths + creeps, creep=0.03)
    assert np.all(found.at_rest[-4:] > 0.9)
    # The same motion is gliding where a stage is known not to creep so fast.
    assert np.all(judged(paths + creeps, creep=0.003).gliding[-4:] > 0.9)


@pytest.mark.parametrize("n", [50, 200])
def test_the_smallest_noticed_speed_lies_where_it_begins_to_be_noticed(n):
    """Slower by half it rests, faster by half it glides: 0.5 and 2.3 of what evidence is needed."""
    rng = np.random.default_rng(8)
    longest = several(rng, gliding, 10, 200)
    noticed = smallest_noticed_speed(np.array([float(n)]), np.array([n - 1.0]), noise=NOISE)[0]
    noticed = max(noticed, judged(longest, creep=0.0).slowest)
    for factor, glides in ((0.5, False), (2.0, True)):
        slow = [factor * noticed * np.arange(n) * np.exp(1j * a) for a in rng.uniform(0, 6, 10)]
        rest = several(rng, at_rest, 10, n)
        found = judged(longest + rest + slow, creep=0.0)
        assert np.mean((found.gliding[-10:] > 0.5) == glides) >= 0.8
