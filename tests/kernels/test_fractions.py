from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.fractions import interval_by_effective_count, lowest_fraction_of_all


def test_independent_filaments_have_the_exact_binomial_limit():
    """Oracle: Clopper & Pearson as scipy has it, n of n."""
    expected = stats.binomtest(59, 59, alternative="greater").proportion_ci(0.95, method="exact")
    found = lowest_fraction_of_all(np.array([30.0, 29.0]), level=0.95, correlation=0.0)
    assert_allclose(found, expected.low, rtol=1e-12)
    # 59 of 59 give 95 %: the rule of three.
    assert_allclose(found, 0.95, atol=0.001)


def test_filaments_that_are_alike_say_less_as_the_beta_binomial_has_it():
    """Oracle: scipy.stats.betabinom at the limit."""
    filaments, c = np.array([33.0, 20.0, 40.0]), 0.1
    found = lowest_fraction_of_all(filaments, level=0.95, correlation=c)
    size = (1 - c) / c
    each = [stats.betabinom.pmf(m, int(m), found * size, (1 - found) * size) for m in filaments]
    assert_allclose(np.prod(each), 0.05, rtol=1e-9)
    assert found < lowest_fraction_of_all(filaments, level=0.95, correlation=0.0)


def test_nothing_seen_says_nothing():
    assert lowest_fraction_of_all(np.zeros(3), level=0.95, correlation=0.1) == 0.0
    with pytest.raises(ValueError, match="correlation"):
        lowest_fraction_of_all(np.ones(3), level=0.95, correlation=1.0)


def test_effective_count_of_independent_filaments_is_clopper_and_pearson():
    """Binomial variance and as many degrees of freedom as filaments leave the count as it is."""
    f, n = 0.9, 100
    expected = stats.binomtest(90, n).proportion_ci(0.95, method="exact")
    found = interval_by_effective_count(
        f, variance=f * (1 - f) / n, df=n - 1, filaments=n, level=0.95
    )
    assert_allclose(found, (expected.low, expected.high), rtol=1e-9)


def test_few_days_widen_it_and_it_stays_inside():
    low, high = interval_by_effective_count(0.98, variance=1e-4, df=2, filaments=200, level=0.95)
    wide, _ = interval_by_effective_count(0.98, variance=1e-4, df=50, filaments=200, level=0.95)
    assert 0 < low < wide < 0.98 < high < 1
