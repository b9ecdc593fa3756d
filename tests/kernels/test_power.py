from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.power import (
    binomial_p_value,
    expected_half_width,
    mean_of_spread,
    power_of_t_test,
)


# Factor c4 of control charts for samples of 2, 3, 5, 10 and 25 (published tables, from memory;
# 2 and 3 are √(2/π) and √π / 2).
@pytest.mark.parametrize(
    ("n", "published"), [(2, 0.7979), (3, 0.8862), (5, 0.9400), (10, 0.9727), (25, 0.9896)]
)
def test_mean_of_spread_is_c4(n, published):
    assert_allclose(mean_of_spread(n - 1), published, atol=5e-5)


@pytest.mark.parametrize("df", [1, 3, 12])
def test_mean_of_spread_is_that_of_the_chi_distribution(df):
    assert_allclose(mean_of_spread(df), stats.chi(df).mean() / df**0.5, rtol=1e-10)


@pytest.mark.parametrize("n", [2, 3, 6])
def test_expected_half_width_is_the_mean_of_simulated_ones(n):
    rng = np.random.default_rng(n)
    s = rng.normal(0, 0.7, (20_000, n)).std(axis=1, ddof=1)
    half = stats.t.ppf(0.975, n - 1) * s / n**0.5
    error = half.std() / len(half) ** 0.5
    assert abs(half.mean() - expected_half_width(0.49, n=n, level=0.95)) < 4 * error


@pytest.mark.parametrize("effect", [0.0, 0.4, 1.5, 2.0])
@pytest.mark.parametrize(("n", "df"), [(3, 2), (6, 5), (11, 10)])
def test_power_of_a_paired_test(effect, n, df):
    """Oracle: statsmodels.stats.power.TTestPower, by the noncentral t distribution."""
    power = pytest.importorskip("statsmodels.stats.power")
    expected = power.TTestPower().power(effect, n, 0.05, df=df)
    found = power_of_t_test(effect * n**0.5, df=df, level=0.95)
    assert_allclose(found, expected, atol=1e-5)


@pytest.mark.parametrize("effect", [0.5, 1.5])
def test_power_of_two_groups(effect):
    """Oracle: statsmodels.stats.power.TTestIndPower."""
    power = pytest.importorskip("statsmodels.stats.power")
    expected = power.TTestIndPower().power(effect, 4, 0.05, ratio=1.0)
    found = power_of_t_test(effect / (2 / 4) ** 0.5, df=6, level=0.95)
    assert_allclose(found, expected, atol=1e-5)


@pytest.mark.parametrize("df", [2, 4, 9])
def test_power_is_the_tail_of_noncentral_t(df):
    effect = np.array([0.3, 1.0, 3.0, 6.0])
    limit = stats.t.ppf(0.95, df)
    expected = stats.nct.sf(limit, df, effect) + stats.nct.cdf(-limit, df, effect)
    assert_allclose(power_of_t_test(effect, df=df, level=0.90), expected, atol=1e-5)


def test_power_without_effect_is_the_size_and_without_error_is_one():
    # 1e-5 is the accuracy of the quadrature.
    assert_allclose(power_of_t_test([0.0, np.inf], df=1, level=0.95), [0.05, 1.0], atol=1e-5)


def test_power_rises_with_the_effect_and_forgets_its_sign():
    effect = np.linspace(0, 30, 200)
    power = power_of_t_test(effect, df=2, level=0.95)
    assert np.all(np.diff(power) >= 0)
    assert_allclose(power_of_t_test(-effect, df=2, level=0.95), power, rtol=1e-12)


def test_power_is_the_rate_at_which_simulated_experiments_reject():
    rng = np.random.default_rng(9)
    day = rng.normal(0, 0.07, (8000, 5, 1))
    first, second = np.moveaxis(day + rng.normal(0, 0.04, (8000, 5, 2)), -1, 0)
    rejected = stats.ttest_rel(second + 0.06, first, axis=1).pvalue < 0.05
    effect = 0.06 / (0.04 * (2 / 5) ** 0.5)
    expected = power_of_t_test(effect, df=4, level=0.95)
    assert stats.binomtest(int(rejected.sum()), 8000, float(expected)).pvalue > 1e-4


def test_binomial_p_value():
    # (1/2)^4 on both sides.
    assert_allclose(binomial_p_value(0, 4, share=0.5), 2 / 16, rtol=1e-12)
    assert binomial_p_value(190, 200, share=0.95) == 1.0


@pytest.mark.parametrize(
    "wrong",
    [
        lambda: mean_of_spread(0),
        lambda: expected_half_width(1.0, n=1, level=0.95),
        lambda: power_of_t_test(1.0, df=0, level=0.95),
        lambda: power_of_t_test(1.0, df=2, level=1.0),
        lambda: binomial_p_value(5, 4, share=0.5),
    ],
)
def test_numbers_out_of_range(wrong):
    with pytest.raises(ValueError, match=r".+"):
        wrong()
