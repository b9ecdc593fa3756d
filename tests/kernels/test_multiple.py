"""Holm's adjustment: against another program, and its properties."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from statsmodels.stats.multitest import multipletests

from glidefit.kernels.multiple import holm

PROBABILITIES = st.lists(st.floats(0, 1), min_size=1, max_size=12).map(np.array)


@pytest.mark.parametrize("seed", range(6))
def test_agrees_with_statsmodels(seed):
    rng = np.random.default_rng(seed)
    p = np.round(rng.random(2 + 2 * seed) ** 2, 2)  # rounded: some are equal
    assert_allclose(holm(p), multipletests(p, method="holm")[1], rtol=1e-12)


@given(PROBABILITIES, st.randoms())
def test_order_does_not_matter(p, random):
    order = list(range(len(p)))
    random.shuffle(order)
    assert_allclose(holm(p[order]), holm(p)[order])


def test_unknown_ones_are_no_members():
    assert_allclose(holm(np.array([0.01, np.nan, 0.04])), [0.02, np.nan, 0.04])


def test_impossible_probability_is_refused():
    with pytest.raises(ValueError, match="between 0 and 1"):
        holm(np.array([0.5, 1.2]))
