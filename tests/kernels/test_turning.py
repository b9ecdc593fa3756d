from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.kernels.turning import turning_rates

ONE = np.array([0, 81])
FRAME = np.arange(81)


def circle(rate, *, frame_s=0.5, speed=0.8, n=81):
    angle = rate * frame_s * np.arange(n)
    radius = speed / rate
    return radius * np.sin(angle), radius * (1 - np.cos(angle))


def rates(x, y, *, frame=FRAME, offsets=ONE, frame_s=0.5, lag=2):
    return turning_rates(frame, frame * frame_s, offsets, x, y, lag=lag)


@pytest.mark.parametrize("rate", [0.05, -0.05, 0.4])
@pytest.mark.parametrize("lag", [1, 3])
def test_rate_of_a_circle_in_all_and_in_both_halves(rate, lag):
    for found in rates(*circle(rate), lag=lag):
        assert_allclose(found, rate, rtol=1e-9)


@given(st.floats(0, 6.3), st.floats(0.01, 100))
@settings(deadline=None, max_examples=30)
def test_rate_does_not_change_with_rotation_or_unit_and_turns_over_in_a_mirror(angle, unit):
    x, y = circle(0.1)
    z = unit * (x + 1j * y) * np.exp(1j * angle)
    assert_allclose(rates(z.real, z.imag)[0], 0.1, rtol=1e-6)
    assert_allclose(rates(z.real, -z.imag)[0], -0.1, rtol=1e-6)


def test_gaps_are_left_out():
    there = np.random.default_rng(1).random(81) < 0.7
    x, y = circle(0.1)
    found = rates(x[there], y[there], frame=FRAME[there], offsets=np.array([0, there.sum()]))
    assert_allclose(found[0], 0.1, rtol=1e-9)


def test_a_track_too_short_has_no_rate():
    frame = np.array([0, 1, 2])
    assert np.isnan(rates(np.zeros(3), np.ones(3), frame=frame, offsets=np.array([0, 3]))[0])


def test_localization_error_does_not_turn_the_path():
    rng = np.random.default_rng(2)
    x, y = circle(0.05)
    many = [
        rates(x + 0.03 * rng.standard_normal(81), y + 0.03 * rng.standard_normal(81), lag=4)[0][0]
        for _ in range(300)
    ]
    assert_allclose(np.mean(many), 0.05, atol=4 * np.std(many) / np.sqrt(300))
