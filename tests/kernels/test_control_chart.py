"""Control chart: factors, limits, rules, and how often it is right."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels import control_chart
from glidefit.kernels.control_chart import (
    BEYOND,
    EIGHT,
    TWO_OF_THREE,
    UNLIKE,
    c4,
    individuals_chart,
    run_signals,
    unlike_the_others,
)

STEADY = np.array([1.02, 0.98, 1.03, 1.00, 0.97, 1.01, 0.99, 1.02, 1.00, 0.98])


def test_factors_against_integrals():
    # E s of a chi distribution; E|x1 - x2| of a half-normal one with variance 2.
    for n in (2, 5, 30):
        assert_allclose(c4(n), stats.chi(n - 1).mean() / np.sqrt(n - 1), rtol=1e-10)
    assert_allclose(control_chart.D2, stats.halfnorm(scale=np.sqrt(2)).mean(), rtol=1e-12)
    with pytest.raises(ValueError, match="n must be"):
        c4(1)


def test_limits_are_the_mean_and_266_moving_ranges():
    chart = individuals_chart(STEADY)
    moving = np.abs(np.diff(STEADY)).mean()
    assert_allclose(chart.centre, STEADY.mean())
    assert_allclose(chart.high - chart.centre, 2.66 * moving, rtol=1e-3)  # 3/1.128 = 2.659
    assert_allclose(chart.centre - chart.low, chart.high - chart.centre)
    assert_allclose(chart.long_term, STEADY.std(ddof=1) / c4(10))
    assert not any(chart.signals)


def test_a_day_far_off_neither_hides_itself_nor_moves_the_limits():
    values = STEADY.copy()
    values[4] = 0.6
    chart = individuals_chart(values)
    assert chart.signals[4] == (UNLIKE, BEYOND)
    assert not any(chart.signals[:4] + chart.signals[5:])
    assert_allclose(chart.centre, np.delete(STEADY, 4).mean())


def test_prediction_interval_by_another_way():
    # Regression with a dummy for one value: its externally studentized residual.
    import statsmodels.api as sm

    values = STEADY + np.array([0, 0, 0, 0.14, 0, 0, 0, 0, 0, 0])
    studentized = sm.OLS(values, np.ones(10)).fit().get_influence().resid_studentized_external
    quantile = stats.t.ppf(stats.norm.cdf(3), 8)
    apart = unlike_the_others(values)
    assert apart.tolist() == (np.abs(studentized) > quantile).tolist()
    assert apart.sum() == 1


def test_runs():
    signals = run_signals(np.array([0.1, 2.1, -0.2, 2.2, 0.0, 0.0]), sigma=1.0)
    assert [bool(s) for s in signals] == [False, False, False, True, False, False]
    assert signals[3] == (TWO_OF_THREE,)
    assert not any(run_signals(np.array([2.1, -2.2, 0.0, 2.1]), sigma=1.0))
    drifting = run_signals(np.full(9, 0.5), sigma=1.0)
    assert [s == (EIGHT,) for s in drifting] == [False] * 7 + [True] * 2
    assert run_signals(np.array([3.1]), sigma=1.0) == ((BEYOND,),)


def test_false_alarms_are_rare_and_a_day_five_sigma_off_is_mostly_found():
    rng = np.random.default_rng(8)
    alarms = found = 0
    n = 300
    for _ in range(n):
        days = rng.standard_normal(10)
        alarms += any(individuals_chart(days).signals)
        days[rng.integers(10)] += (shift := 6 * rng.choice([-1, 1]))
        where = int(np.argmax(days * np.sign(shift)))
        found += bool(individuals_chart(days).signals[where])
    # Measured over 600: 5 % and 89 %; four standard errors of 300 are 5 % and 7 %.
    assert alarms / n < 0.10
    assert found / n > 0.80


def test_too_few_days_or_not_finite_are_refused():
    with pytest.raises(ValueError, match="at least 5"):
        individuals_chart(np.ones(4))
    with pytest.raises(ValueError, match="finite"):
        individuals_chart(np.array([1, 2, 3, 4, np.nan]))


def test_equal_values_give_limits_of_no_width_and_no_alarm():
    chart = individuals_chart(np.ones(6))
    assert chart.low == chart.high == 1
    assert not any(chart.signals)
