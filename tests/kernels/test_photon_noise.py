"""Poisson numbers from tables have the Poisson law."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_array_equal
from scipy import stats

from glidefit.kernels.photon_noise import poisson_counts


@pytest.mark.parametrize("mean", [0.1, 0.25, 3.6, 22.4, 100.0, 255.99, 256.0, 700.0])
def test_numbers_of_one_mean_have_its_probabilities(mean):
    n = 100_000
    counts = poisson_counts(np.full(n, mean), rng=np.random.default_rng(7)).astype(int)
    law = stats.poisson(mean)
    low, high = (int(law.ppf(p)) for p in (1e-3, 1 - 1e-3))
    seen = np.bincount(np.clip(counts, low, high) - low, minlength=high - low + 1)
    chance = law.pmf(np.arange(low, high + 1))
    chance[0], chance[-1] = law.cdf(low), law.sf(high - 1)
    # 0.001 of right generators would fail at each mean; the seed is fixed.
    assert stats.chisquare(seen, n * chance).pvalue > 1e-3


def test_nothing_expected_gives_nothing():
    counts = poisson_counts(np.zeros((3, 4)), rng=np.random.default_rng(1))
    assert_array_equal(counts, np.zeros((3, 4)))


def test_every_mean_of_a_frame_is_its_own():
    expected = np.linspace(0, 400, 2_000)
    rng = np.random.default_rng(2)
    total = sum(poisson_counts(expected, rng=rng).astype(float) for _ in range(400))
    z = (total - 400 * expected)[1:] / np.sqrt(400 * expected[1:])
    # Standard normal numbers, nearly; 4 standard errors of their mean and their mean square.
    assert abs(z.mean()) < 4 / 2_000**0.5
    assert abs((z**2).mean() - 1) < 4 * (2 / 2_000) ** 0.5


def test_a_negative_mean_is_refused():
    with pytest.raises(ValueError, match=">= 0"):
        poisson_counts(np.array([1.0, -0.1]), rng=np.random.default_rng(1))
