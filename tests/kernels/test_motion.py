from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.kernels import motion


def table(paths):
    """Rows of tracks given as (frame, x, y) arrays."""
    offsets = np.concatenate([[0], np.cumsum([len(f) for f, _, _ in paths])])
    return tuple(np.concatenate(c) for c in zip(*paths, strict=True)), offsets


def straight(rng, *, n=100, step=0.3, noise=0.03, heading=0.7):
    t = np.arange(n)
    x = step * t * np.cos(heading) + noise * rng.standard_normal(n)
    y = step * t * np.sin(heading) + noise * rng.standard_normal(n)
    return t, x, y


def wandering(rng, *, n=100, step=0.5, noise=0.03):
    steps = step * rng.standard_normal((2, n))
    x, y = np.cumsum(steps, axis=1) + noise * rng.standard_normal((2, n))
    return np.arange(n), x, y


def measured(path, *, noise=0.03):
    (frame, x, y), offsets = table([path])
    return motion.measure(frame, offsets, x, y, noise=noise)


def test_noise_of_straight_and_of_resting_tracks_is_the_localization_error():
    rng = np.random.default_rng(1)
    paths = [straight(rng, n=400), straight(rng, n=400, step=0.0)] * 20
    (frame, x, y), offsets = table(paths)
    noise = motion.localization_noise(frame, offsets, x, y)
    # The median of 398 overlapping triples scatters by about 7 %; 20 tracks each.
    assert_allclose(noise[::2].mean(), 0.03, rtol=4 * 0.07 / np.sqrt(20))
    assert_allclose(noise[1::2].mean(), 0.03, rtol=4 * 0.07 / np.sqrt(20))


def test_noise_leaves_out_triples_that_a_gap_breaks():
    frame = np.array([0, 1, 3, 4, 6])
    noise = motion.localization_noise(
        frame, np.array([0, 5]), np.arange(5.0), np.array([0, 9, 0, 9, 0.0])
    )
    assert np.isnan(noise[0])


def test_common_noise_is_not_raised_by_a_minority_that_wriggles():
    noise = np.array([0.03] * 60 + [0.5] * 40)
    assert_allclose(motion.common_noise(noise, np.full(100, 50)), 0.03, rtol=1e-12)


@given(st.floats(0, 6.3), st.floats(0.1, 100), st.booleans())
@settings(deadline=None, max_examples=25)
def test_measures_follow_rotation_mirror_and_unit(angle, unit, mirrored):
    t, x, y = straight(np.random.default_rng(3), n=60, step=0.2)
    turned = x * np.cos(angle) - y * np.sin(angle), x * np.sin(angle) + y * np.cos(angle)
    u, v = unit * turned[0], unit * turned[1] * (-1 if mirrored else 1)
    one, two = measured((t, x, y)), measured((t, u, v), noise=0.03 * unit)
    assert two.lag[0] == one.lag[0]
    assert_allclose(two.spread_um, unit * one.spread_um, rtol=1e-9)
    assert_allclose(two.speed_um_frame, unit * one.speed_um_frame, rtol=1e-9)
    assert_allclose(two.advance, one.advance, rtol=1e-9)


def test_a_glider_advances_and_a_brownian_track_does_not():
    rng = np.random.default_rng(4)
    glider, free = measured(straight(rng)), measured(wandering(rng, n=400))
    assert_allclose(glider.advance, 1.0, atol=0.02)
    assert_allclose(glider.speed_um_frame, 0.3, rtol=0.02)
    # Cosines of ~400 independent pairs scatter by 1/sqrt(2 · 400).
    assert abs(free.advance[0]) < 4 / np.sqrt(2 * 400)


def test_a_resting_track_never_leaves_the_noise():
    rng = np.random.default_rng(5)
    rest = measured(straight(rng, step=0.0))
    assert rest.lag[0] == 0
    assert np.isnan(rest.advance[0])


def test_spread_of_a_straight_path_is_its_length_over_root_24():
    t = np.arange(2001)
    path = measured((t, 0.01 * t, 0.0 * t), noise=0.0)
    assert_allclose(path.spread_um, 20 / np.sqrt(24), rtol=1e-3)  # 1/n short of even visits


@pytest.mark.parametrize("n", [3, 5, 20, 200])
def test_rest_passes_for_motion_as_rarely_as_stated(n):
    rng = np.random.default_rng(n)
    x = rng.standard_normal((20_000, 2, n))
    spread = np.sqrt(x.var(axis=2, ddof=1).mean(axis=1))
    limit = motion.spread_limit(np.array([n]), multiple=1.0)[0]
    # 2 expected among 20,000; more than 9 has a Poisson probability below 1e-4.
    assert (spread > limit).sum() <= 9


def test_pivoting_and_small_circles_stay_in_place_and_gliding_does_not():
    rng = np.random.default_rng(7)
    angle = np.cumsum(0.6 * rng.standard_normal(300))
    t = np.arange(300)
    pivot = t, 1.5 * np.cos(angle), 1.5 * np.sin(angle)
    circle = t, 1.2 * np.cos(0.2 * t), 1.2 * np.sin(0.2 * t)
    wide = t, 16 * np.cos(0.02 * t), 16 * np.sin(0.02 * t)
    short = straight(rng, n=5)
    for path, expected in ((pivot, True), (circle, True), (wide, False), (short, False)):
        found = motion.in_place(measured(path), np.array([len(path[0])]), extent=5.0)
        assert found[0] == expected


def test_one_long_step_is_seen_and_does_not_hide_the_advance():
    rng = np.random.default_rng(8)
    t, x, y = straight(rng)
    x[50:] += 9.0
    jumped = measured((t, x, y))
    assert jumped.longest_step_um[0] > 8.5
    assert_allclose(jumped.median_step_um, 0.3, rtol=0.05)
    assert jumped.advance[0] > 0.9


def test_a_single_position_has_no_motion():
    one = measured((np.array([4]), np.array([1.0]), np.array([2.0])))
    assert one.lag[0] == 0
    assert one.spread_um[0] == 0


def test_noise_along_a_body_is_told_from_that_across():
    rng = np.random.default_rng(12)
    n, heading = 4000, 0.7
    along, across = rng.normal(0, 0.05, n), rng.normal(0, 0.01, n)
    s = 0.4 * np.arange(n) + along
    x = s * np.cos(heading) - across * np.sin(heading)
    y = s * np.sin(heading) + across * np.cos(heading)
    frame, offsets = np.arange(n), np.array([0, n])
    found = motion.noise_along(frame, offsets, x, y, np.full(n, heading + np.pi))
    # A median of 4000 overlapping differences: 2 %, so 4 standard errors are 8 %.
    assert_allclose(found, 0.05, rtol=0.08)
    short = motion.noise_along(frame[:2], np.array([0, 2]), x[:2], y[:2], np.zeros(2))
    assert np.isnan(short).all()
