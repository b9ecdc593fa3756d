"""Permutation tests: against another program, extremes, and drawn arrangements."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels import permutation
from glidefit.kernels.permutation import label_permutations, sign_flips

RNG = np.random.default_rng


def scipy_p(samples, kind):
    def difference(x, y, axis):
        return np.mean(x, axis=axis) - np.mean(y, axis=axis)

    return stats.permutation_test(
        samples, difference, permutation_type=kind, n_resamples=np.inf, vectorized=True
    ).pvalue


@pytest.mark.parametrize("seed", range(5))
def test_sign_flips_agree_with_scipy(seed):
    d = RNG(seed).normal(0.3, 1, 7)
    found = sign_flips(d, rng=RNG(0))
    assert found.exact
    assert_allclose(found.p_value, scipy_p((d, np.zeros(7)), "samples"), rtol=1e-12)


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("sizes", [(4, 4), (3, 6)])
def test_label_permutations_agree_with_scipy(seed, sizes):
    x, y = (RNG([seed, n]).normal(0.5 * n, 1, size) for n, size in enumerate(sizes))
    found = label_permutations(x, y, rng=RNG(0))
    assert found.exact
    # scipy doubles the smaller tail; with unequal sizes the tails differ, so count by hand.
    if sizes == (4, 4):
        assert_allclose(found.p_value, scipy_p((x, y), "independent"), rtol=1e-12)
    pooled, seen = np.concatenate([x, y]), abs(x.mean() - y.mean())
    masks = [m for m in range(2 ** len(pooled)) if m.bit_count() == len(x)]
    inside = np.array([[m >> k & 1 for k in range(len(pooled))] for m in masks], dtype=bool)
    every = np.array([abs(pooled[i].mean() - pooled[~i].mean()) for i in inside])
    assert_allclose(found.p_value, np.mean(every >= seen - 1e-12), rtol=1e-12)


@pytest.mark.parametrize("n", [1, 3, 6, 10])
def test_smallest_is_reached_when_all_pairs_agree(n):
    found = sign_flips(np.linspace(1, 2, n), rng=RNG(0))
    assert found.p_value == found.smallest == 2 / 2**n


@pytest.mark.parametrize(("n", "m"), [(2, 2), (3, 5), (5, 5)])
def test_smallest_is_reached_when_groups_do_not_overlap(n, m):
    found = label_permutations(np.arange(n) + 100.0, np.arange(m) * 0.1, rng=RNG(0))
    assert_allclose(found.p_value, found.smallest, rtol=1e-12)


def test_zero_differences_reject_nothing():
    assert sign_flips(np.zeros(6), rng=RNG(0)).p_value == 1
    assert label_permutations(np.ones(3), np.ones(3), rng=RNG(0)).p_value == 1


def test_drawn_arrangements_agree_with_enumerated_ones(monkeypatch):
    x, y = RNG(1).normal(0.9, 1, 8), RNG(2).normal(0, 1, 8)
    exact = label_permutations(x, y, rng=RNG(3)), sign_flips(x, rng=RNG(3))
    monkeypatch.setattr(permutation, "MOST_ENUMERATED", 10)
    drawn = label_permutations(x, y, rng=RNG(3)), sign_flips(x, rng=RNG(3))
    for e, d, n in zip(exact, drawn, (9_999, 99_999), strict=True):
        assert e.exact
        assert not d.exact
        assert d.smallest > 0
        # Four standard errors of a share of n.
        assert abs(d.p_value - e.p_value) < 4 * (e.p_value * (1 - e.p_value) / n) ** 0.5 + 1 / n


def test_nothing_to_permute_is_refused():
    with pytest.raises(ValueError, match="no difference"):
        sign_flips(np.array([]), rng=RNG(0))
    with pytest.raises(ValueError, match="empty"):
        label_permutations(np.array([]), np.ones(2), rng=RNG(0))
