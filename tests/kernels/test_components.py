from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.components import (
    interaction_mean_square,
    mean_square_draws,
    nested_components,
)

UNEQUAL = np.array([0, 0, 0, 1, 1, 2, 3, 3, 3, 3])


def nested(rng, group, *, between, within):
    """Values with normal effects of groups and units."""
    return (
        1
        + between * rng.standard_normal(group.max() + 1)[group]
        + within * rng.standard_normal(len(group))
    )


def test_balanced_components_are_those_of_restricted_likelihood():
    """Oracle: statsmodels mixedlm by REML, equal to the ANOVA estimators in balanced data."""
    mixedlm = pytest.importorskip("statsmodels.regression.mixed_linear_model")
    group = np.repeat(np.arange(6), 3)
    values = nested(np.random.default_rng(3), group, between=0.5, within=0.3)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        fit = mixedlm.MixedLM(values, np.ones((18, 1)), groups=group).fit(reml=True)
    found = nested_components(values, group)
    # The optimiser of the oracle stops at a relative change of some 1e-5.
    assert_allclose(found.between, fit.cov_re[0, 0], rtol=1e-3)
    assert_allclose(found.within, fit.scale, rtol=1e-3)


def test_mean_squares_are_those_of_the_f_test():
    """Oracle: scipy.stats.f_oneway, which tests their ratio."""
    values = nested(np.random.default_rng(4), UNEQUAL, between=0.5, within=0.3)
    groups = [values[g == UNEQUAL] for g in range(4)]
    found = nested_components(values, UNEQUAL)
    ratio = found.between_mean_square / found.within_mean_square
    assert_allclose(ratio, stats.f_oneway(*groups).statistic, rtol=1e-10)
    assert (found.between_df, found.within_df) == (3, 6)


def test_components_are_unbiased_with_unequal_groups():
    rng = np.random.default_rng(5)
    found = [
        nested_components(nested(rng, UNEQUAL, between=0.5, within=0.3), UNEQUAL)
        for _ in range(4000)
    ]
    for name, true in (("between", 0.25), ("within", 0.09)):
        each = np.array([getattr(f, name) for f in found])
        error = each.std() / len(each) ** 0.5
        assert abs(each.mean() - true) < 4 * error, name


def test_units_alone_in_their_groups_are_one_level():
    values = np.array([1.0, 2.0, 4.0])
    found = nested_components(values, np.arange(3))
    assert_allclose(found.between, values.var(ddof=1), rtol=1e-12)
    assert np.isnan(found.within)


def test_one_group_knows_nothing_of_groups():
    found = nested_components(np.array([1.0, 2.0, 4.0]), np.zeros(3, dtype=np.int64))
    assert np.isnan(found.between)
    assert_allclose(found.within, np.var([1, 2, 4], ddof=1), rtol=1e-12)


@given(st.floats(-5, 5), st.floats(0.1, 10), st.permutations(range(len(UNEQUAL))))
def test_shift_scale_and_order(shift, scale, order):
    values = nested(np.random.default_rng(6), UNEQUAL, between=0.5, within=0.3)
    before = nested_components(values, UNEQUAL)
    order = np.array(order)
    after = nested_components(shift + scale * values[order], UNEQUAL[order])
    # Rounding of values up to 15 in squares of differences of 0.1 or more.
    assert_allclose(after.between, scale**2 * before.between, rtol=1e-8)
    assert_allclose(after.within, scale**2 * before.within, rtol=1e-8)


def test_values_must_fit_their_groups():
    with pytest.raises(ValueError, match="values have shape"):
        nested_components(np.zeros(3), np.zeros(2, dtype=np.int64))


def test_interaction_is_that_of_two_way_analysis_of_variance():
    """Oracle: the residual of statsmodels' OLS on row and column indicators."""
    ols = pytest.importorskip("statsmodels.regression.linear_model").OLS
    table = np.random.default_rng(7).normal(size=(3, 4))
    row, column = (index.ravel() for index in np.indices(table.shape))
    design = np.column_stack(
        [np.ones(12), *(row == r for r in (1, 2)), *(column == c for c in (1, 2, 3))]
    ).astype(float)
    assert_allclose(
        interaction_mean_square(table), ols(table.ravel(), design).fit().mse_resid, rtol=1e-10
    )


def test_interaction_forgets_rows_and_columns():
    table = np.arange(3.0)[:, None] + np.array([5.0, -2.0, 1.0, 0.5])
    assert interaction_mean_square(table) < 1e-28


def test_interaction_needs_two_of_each():
    with pytest.raises(ValueError, match="2 × 2"):
        interaction_mean_square(np.zeros((1, 4)))


def test_draws_have_the_quantiles_of_the_chi_square_interval():
    draws = mean_square_draws(2.0, df=4, n_draws=200_000, rng=np.random.default_rng(8))
    expected = 2.0 * 4 / stats.chi2.ppf([0.95, 0.05], 4)
    # Standard error of the upper quantile of 200,000 draws: 0.6 %.
    assert_allclose(np.quantile(draws, [0.05, 0.95]), expected, rtol=0.03)


def test_draws_need_a_degree_of_freedom():
    with pytest.raises(ValueError, match="df"):
        mean_square_draws(1.0, df=0, n_draws=2, rng=np.random.default_rng(1))
