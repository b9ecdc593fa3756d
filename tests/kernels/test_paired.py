"""Differences of means: against scipy, and interval and p value that agree."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.paired import borrowed_difference, paired_difference, welch_difference

SAMPLES = [np.random.default_rng(n).normal(0.2 * n, 1 + n, 4 + n) for n in range(4)]


@pytest.mark.parametrize("x", SAMPLES)
def test_paired_is_the_t_test_of_one_sample(x):
    found, other = paired_difference(x), stats.ttest_1samp(x, 0)
    assert_allclose(found.p_value, other.pvalue, rtol=1e-10)
    assert_allclose(found.interval(0.9), other.confidence_interval(0.9), rtol=1e-10)


@pytest.mark.parametrize("x", SAMPLES[:2])
@pytest.mark.parametrize("y", SAMPLES[2:])
def test_welch_and_borrowed_are_the_t_tests_of_two_samples(x, y):
    for found, equal in ((welch_difference(x, y), False), (borrowed_difference(x, y), True)):
        other = stats.ttest_ind(x, y, equal_var=equal)
        assert_allclose(found.p_value, other.pvalue, rtol=1e-10)
        assert_allclose(found.df, other.df, rtol=1e-10)
        assert_allclose(found.interval(0.95), other.confidence_interval(0.95), rtol=1e-10)


@given(st.lists(st.floats(-10, 10), min_size=2, max_size=8), st.floats(0.55, 0.99))
def test_p_value_is_small_exactly_when_the_interval_excludes_zero(values, level):
    found = paired_difference(np.array(values))
    low, high = found.interval(level)
    if found.known and abs(found.p_value - (1 - level)) > 1e-9:
        assert (found.p_value < 1 - level) == (low > 0 or high < 0)


def test_single_value_borrows_the_spread_of_the_others():
    others = np.array([1.0, 2.0, 4.0])
    found = borrowed_difference(np.array([3.0]), others)
    assert_allclose(found.value, 3 - 7 / 3)
    assert_allclose(found.error, others.std(ddof=1) * math.sqrt(1 + 1 / 3))
    assert found.df == 2


def test_nothing_repeats_no_interval():
    found = paired_difference(np.array([0.3]))
    assert found.value == 0.3
    assert not found.known
    assert all(map(math.isnan, (*found.interval(0.95), found.p_value)))
    assert not paired_difference(np.ones(3)).known


def test_too_few_values_are_refused():
    with pytest.raises(ValueError, match="no pair"):
        paired_difference(np.array([]))
    with pytest.raises(ValueError, match="at least 2"):
        welch_difference(np.ones(1), np.ones(3))
    with pytest.raises(ValueError, match="unknown"):
        borrowed_difference(np.ones(1), np.ones(1))
