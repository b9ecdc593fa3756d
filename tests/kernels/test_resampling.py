"""Draws of units with replacement: counts, families, spreads, and intervals for few units."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy import stats

from glidefit.kernels import resampling
from glidefit.kernels.resampling import draw_counts, level_draws, nested_draws, resampled_sums

patient = settings(deadline=None)
parents_of_children = st.lists(st.integers(0, 6), min_size=1, max_size=40).map(np.array)


def test_draw_counts_occur_as_often_as_a_multinomial_says():
    counts = draw_counts(3, n_resamples=40_000, rng=np.random.default_rng(1))
    outcomes = [one for one in itertools.product(range(4), repeat=3) if sum(one) == 3]
    seen = [int(np.sum(np.all(counts == one, axis=1))) for one in outcomes]
    chances = [stats.multinomial.pmf(one, 3, [1 / 3] * 3) for one in outcomes]
    assert sum(seen) == 40_000
    assert stats.chisquare(seen, 40_000 * np.array(chances)).pvalue > 1e-4


@patient
@given(child_parent=parents_of_children, seed=st.integers(0, 2**32 - 1))
def test_level_draws_keep_the_size_of_each_family(child_parent, seed):
    counts = level_draws(child_parent, n_resamples=7, rng=np.random.default_rng(seed))
    assert counts.shape == (7, len(child_parent))
    assert counts.min() >= 0
    for row in counts:
        drawn = np.bincount(child_parent, weights=row)
        assert_array_equal(drawn, np.bincount(child_parent))


def test_each_child_of_a_family_is_drawn_as_often_as_its_siblings():
    child_parent = np.array([1, 0, 1, 0, 1, 2])
    counts = level_draws(child_parent, n_resamples=40_000, rng=np.random.default_rng(2))
    # A count has mean 1 and variance 1 - 1/b; 4.5 standard errors of 40 000.
    assert_allclose(counts.mean(axis=0), 1, atol=4.5 * math.sqrt(2 / 3 / 40_000))
    variances = 1 - 1 / np.bincount(child_parent)[child_parent]
    assert_allclose(counts.var(axis=0), variances, atol=0.03)
    # Within a family of b counts are correlated by -1/(b - 1), between families not at all.
    correlation = np.corrcoef(counts[:, :5].T)
    expected = np.array(
        [
            [1, 0, -0.5, 0, -0.5],
            [0, 1, 0, -1, 0],
            [-0.5, 0, 1, 0, -0.5],
            [0, -1, 0, 1, 0],
            [-0.5, 0, -0.5, 0, 1],
        ]
    )
    assert_allclose(correlation, expected, atol=4.5 / math.sqrt(40_000))


@patient
@given(child_parent=parents_of_children, seed=st.integers(0, 2**32 - 1))
def test_resampled_sums_are_those_of_a_plain_loop_over_level_draws(child_parent, seed):
    values = np.random.default_rng(seed).normal(size=(len(child_parent), 3))
    sums = resampled_sums(child_parent, values, n_resamples=5, rng=np.random.default_rng(seed))
    counts = level_draws(child_parent, n_resamples=5, rng=np.random.default_rng(seed))
    expected = np.zeros((5, child_parent.max() + 1, 3))
    for b, row in enumerate(counts):
        for parent, count, value in zip(child_parent, row, values, strict=True):
            expected[b, parent] += count * value
    assert_allclose(sums, expected, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("cells", [1, 37, 100])
def test_draws_do_not_depend_on_how_they_are_cut(monkeypatch, cells):
    child_parent = np.array([0, 0, 1, 1, 1, 0, 2])
    values = np.random.default_rng(0).normal(size=(7, 2))

    def both():
        return (
            level_draws(child_parent, n_resamples=30, rng=np.random.default_rng(5)),
            resampled_sums(child_parent, values, n_resamples=30, rng=np.random.default_rng(5)),
        )

    whole = both()
    monkeypatch.setattr(resampling, "_CELLS_AT_ONCE", cells)
    for cut, together in zip(both(), whole, strict=True):
        assert_array_equal(cut, together)


def test_resampled_sums_of_the_same_seed_are_the_same_bytes():
    child_parent = np.random.default_rng(0).integers(0, 9, 500)
    values = np.random.default_rng(1).normal(size=(500, 4))
    first, again = (
        resampled_sums(child_parent, values, n_resamples=50, rng=np.random.default_rng(8))
        for _ in range(2)
    )
    assert first.tobytes() == again.tobytes()


def test_a_parent_without_children_sums_to_nothing():
    sums = resampled_sums(
        np.array([0, 2]), np.ones((2, 1)), n_resamples=3, rng=np.random.default_rng(0)
    )
    assert_array_equal(sums[:, :, 0], [[1, 0, 1]] * 3)


def test_nested_draws_give_every_copy_of_a_unit_its_own_children():
    days, chambers = np.array([0, 0, 1, 1, 1]), np.array([0, 1, 1, 2, 3, 3, 3, 4])
    drawn = nested_draws([days, chambers], n_resamples=500, rng=np.random.default_rng(4))
    assert [one.shape for one in drawn] == [(500, 2), (500, 5), (500, 8)]
    for row_days, row_chambers, row_tracks in zip(*drawn, strict=True):
        assert row_days.sum() == 2
        assert_array_equal(np.bincount(days, row_chambers), row_days * np.bincount(days))
        assert_array_equal(np.bincount(chambers, row_tracks), row_chambers * np.bincount(chambers))


def test_variances_of_the_levels_add_up_to_that_of_nested_draws():
    rng = np.random.default_rng(6)
    values, parent = rng.normal(size=12) + np.repeat(rng.normal(size=4), 3), np.repeat(range(4), 3)
    top = draw_counts(4, n_resamples=40_000, rng=rng)
    low = resampled_sums(parent, values[:, np.newaxis], n_resamples=40_000, rng=rng)[:, :, 0]
    means = values.reshape(4, 3).mean(axis=1)
    apart = np.var(top @ means / 4) + np.var(low.sum(axis=1) / 12)
    nested = nested_draws([parent], n_resamples=40_000, rng=rng)[-1] @ values / 12
    # A variance from 40 000 values has a standard error of 0.7 %; two of them.
    assert_allclose(np.var(nested), apart, rtol=0.04)


def test_draws_refuse_what_is_no_tree():
    rng = np.random.default_rng(0)
    with pytest.raises(ValueError, match="n must be >= 1"):
        draw_counts(0, n_resamples=1, rng=rng)
    with pytest.raises(ValueError, match="n_resamples must be >= 1"):
        draw_counts(3, n_resamples=0, rng=rng)
    with pytest.raises(ValueError, match="negative parent"):
        level_draws(np.array([0, -1]), n_resamples=1, rng=rng)
    with pytest.raises(ValueError, match=r"shape \(3,\) for 3 units"):
        resampled_sums(np.zeros(3, dtype=int), np.ones(3), n_resamples=1, rng=rng)
    with pytest.raises(ValueError, match="no level"):
        nested_draws([], n_resamples=1, rng=rng)
    with pytest.raises(ValueError, match="not the parents"):
        nested_draws([np.array([0, 0]), np.array([0, 2])], n_resamples=1, rng=rng)
    with pytest.raises(ValueError, match="not the parents"):
        nested_draws([np.array([0, 2])], n_resamples=1, rng=rng)


@pytest.mark.parametrize("n", [2, 3, 10])
def test_small_sample_factor_makes_the_bootstrap_variance_of_a_mean_classical(n):
    values = np.random.default_rng(n).normal(size=n)
    # All n**n resamples of up to 3, the formula of their spread beyond.
    spread = np.std(values) / math.sqrt(n)
    if n <= 3:
        means = [np.mean(one) for one in itertools.product(values, repeat=n)]
        assert_allclose(np.std(means), spread, rtol=1e-12)
    corrected = spread * resampling.small_sample_factor(n)
    assert_allclose(corrected, np.std(values, ddof=1) / math.sqrt(n), rtol=1e-12)


def test_t_quantile_is_closed_for_two_degrees_of_freedom_and_normal_for_many():
    for level in (0.5, 0.9, 0.95, 0.99):
        # The quantile function with 2 degrees of freedom is (2p - 1) / √(2p (1 - p)).
        expected = level / math.sqrt((1 - level**2) / 2)
        assert_allclose(resampling.t_quantile(level, 2), expected, rtol=1e-10)
        normal = stats.norm.ppf((1 + level) / 2)
        assert_allclose(resampling.t_quantile(level, 1e9), normal, rtol=1e-6)
    assert resampling.t_quantile(0.95, 2.5) < resampling.t_quantile(0.95, 2)


@patient
@given(shift=st.floats(-100, 100), scale=st.floats(0.01, 100), level=st.floats(0.5, 0.99))
def test_student_interval_moves_with_the_values(shift, scale, level):
    values = np.array([0.3, 1.1, 0.7, 0.2])
    low, high = resampling.student_interval(values, level=level)
    moved = resampling.student_interval(shift - scale * values, level=level)
    assert_allclose(moved, (shift - scale * high, shift - scale * low), rtol=1e-9, atol=1e-9)


def test_student_interval_is_that_of_scipy():
    values = np.array([0.81, 0.77, 0.84, 0.79])
    expected = stats.t.interval(0.9, 3, loc=values.mean(), scale=stats.sem(values))
    assert_allclose(resampling.student_interval(values, level=0.9), expected, rtol=1e-10)


def test_intervals_refuse_a_single_unit_and_levels_out_of_range():
    with pytest.raises(ValueError, match="at least 2"):
        resampling.small_sample_factor(1)
    with pytest.raises(ValueError, match="at least 2"):
        resampling.student_interval(np.array([1.0]), level=0.95)
    with pytest.raises(ValueError, match="level must be between 0 and 1"):
        resampling.t_quantile(95, 3)
    with pytest.raises(ValueError, match="df must be > 0"):
        resampling.t_quantile(0.95, 0)
