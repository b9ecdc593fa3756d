from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.pooling import (
    Scatter,
    alike,
    borrowed_days,
    pooled_chambers,
    scatter,
    second_factor,
)


def one(**changes):
    fields = {
        "days": 1,
        "chambers": 4,
        "day_square": float("nan"),
        "chamber_square": 1.0,
        "chamber_df": 3,
        "chamber_share": 0.25,
        "filament": 0.0,
    }
    return Scatter(**{**fields, **changes})


def test_scatter_is_the_variance_of_day_means_and_of_chambers_about_them():
    values = np.array([1.0, 3.0, 2.0, 6.0, 7.0, 8.0])
    found = scatter(values, np.array([0, 0, 1, 2, 2, 2]), np.full(6, 0.5))
    assert_allclose(found.day_square, np.var([2, 2, 7], ddof=1))
    assert_allclose(found.chamber_square, (2 + 2) / 3)
    assert (found.days, found.chambers, found.chamber_df, found.day_df) == (3, 6, 3, 2)
    assert_allclose(found.chamber_share, (1 / 2 + 1 + 1 / 3) / 3)
    assert found.filament == 0.5


def test_squares_are_alike_between_the_quantiles_of_f():
    low, high = stats.f.ppf([0.01, 0.75], 3, 9)
    for ratio, expected in ((1.01 * low, True), (0.99 * high, True), (0.99 * low, False)):
        assert alike(2 * ratio, 3, 2, 9) is expected
    assert not alike(2.02 * high, 3, 2, 9)
    assert not alike(1, 3, 0, 9)
    assert not alike(1, 0, 1, 9)


def test_pooled_chambers_are_students_t_with_all_degrees_of_freedom():
    half, df = pooled_chambers(one(chamber_square=1.2), [one(chamber_square=0.9)], level=0.95)
    assert df == 6
    assert_allclose(half, stats.t.ppf(0.975, 6) * np.sqrt((1.2 + 0.9) / 2 / 4), rtol=1e-12)
    assert pooled_chambers(one(chamber_square=9.0), [one()], level=0.95) is None
    assert pooled_chambers(one(), [one(chamber_df=0)], level=0.95) is None


def test_chambers_of_fewer_filaments_are_expected_to_scatter_more():
    """Beyond their filaments all scatter by 1; the own have 3 from filaments, the others none."""
    own = one(chamber_square=4.0, filament=3.0)
    half, _ = pooled_chambers(own, [one(), one()], level=0.95)
    assert_allclose(half, stats.t.ppf(0.975, 9) * np.sqrt(4.0 / 4), rtol=1e-12)


def test_borrowed_days_of_the_same_design_are_students_t_of_the_lender():
    lender = one(days=10, chambers=20, day_square=2.0, chamber_df=10, chamber_share=0.5)
    own = one(days=3, chambers=6, day_square=1.5, chamber_df=3, chamber_share=0.5)
    half, df = borrowed_days(own, lender, level=0.95)
    assert df == 9
    assert_allclose(half, stats.t.ppf(0.975, 9) * np.sqrt(2.0 / 3), rtol=1e-12)
    wild = one(days=3, chambers=6, day_square=9.0, chamber_df=3, chamber_share=0.5)
    assert borrowed_days(wild, lender, level=0.95) is None


def test_one_day_borrows_only_if_its_chambers_scatter_like_the_lenders():
    lender = one(days=10, chambers=40, day_square=2.0, chamber_df=30)
    half, df = borrowed_days(one(), lender, level=0.95)
    assert df == 9
    assert_allclose(half, stats.t.ppf(0.975, 9) * np.sqrt(2.0), rtol=1e-12)
    assert borrowed_days(one(chamber_square=5.0), lender, level=0.95) is None
    assert borrowed_days(one(chambers=1, chamber_df=0), lender, level=0.95) is None


@pytest.mark.parametrize(
    ("own_share", "lender_share"), [(1.0, 0.5), (0.5, 0.5), (1 / 3, 1.0)], ids=str
)
@pytest.mark.parametrize("day", [0.0, 0.5, 2.0])
def test_adjusted_for_chambers_the_interval_holds_whatever_the_days_bring(
    own_share, lender_share, day
):
    """40,000 normal experiments, chamber variance 1; below the level by 4 standard errors fails.

    Without the test of being alike: that both scatter alike is true here.
    """
    rng = np.random.default_rng(5)
    n, a, many = 40_000, 3, 10
    own_df, lender_df = round(a * (1 / own_share - 1)), round(many * (1 / lender_share - 1))
    df = own_df + lender_df
    change = own_share - lender_share
    held = np.abs(rng.standard_normal(n)) * np.sqrt((day + own_share) / a)
    first = (day + lender_share) * rng.chisquare(many - 1, n) / (many - 1)
    second = rng.chisquare(df, n) / df
    factor = second_factor(0.95, many - 1, df, change / own_share)
    square = stats.t.ppf(0.975, many - 1) ** 2 * first + factor * change * second
    coverage = np.mean(held < np.sqrt(np.maximum(square, 0) / a))
    error = np.sqrt(0.05 * 0.95 / n)
    assert coverage > 0.95 - 4 * error
    if change == 0 or day == 0:  # no wider than it need be where it is exact
        assert coverage < 0.955 + 4 * error


def test_second_factor_is_no_larger_than_banerjees():
    """Banerjee's inequality: t² of each is always enough."""
    for share in (0.1, 0.5, 0.9):
        for df, other in ((2, 2), (2, 10), (9, 4)):
            assert 0 < second_factor(0.95, df, other, share) <= stats.t.ppf(0.975, other) ** 2
    # All of it in the second: nothing less than its own t is enough.
    assert_allclose(second_factor(0.95, 3, 6, 0.999), stats.t.ppf(0.975, 6) ** 2, rtol=0.03)
    with pytest.raises(ValueError, match="share must be < 1"):
        second_factor(0.95, 3, 6, 1.0)


def test_pooling_after_the_test_keeps_the_level():
    """One day of four chambers beside two such conditions, 20,000 experiments of equal scatter."""
    rng = np.random.default_rng(6)
    n, held, used, halves = 20_000, 0, 0, []
    squares, means = rng.chisquare(3, (n, 3)) / 3, rng.standard_normal(n) / 2
    t = stats.t.ppf(0.975, 3)
    for (own, *rest), mean in zip(squares, means, strict=True):
        found = pooled_chambers(
            one(chamber_square=own), [one(chamber_square=r) for r in rest], level=0.95
        )
        half = found[0] if found else t * np.sqrt(own / 4)
        held, used = held + (abs(mean) < half), used + (found is not None)
        halves.append((half, t * np.sqrt(own / 4)))
    # What the test sends back has a large own square, so that it is a little above the level.
    assert stats.binom.ppf(0.0005, n, 0.95) <= held <= 0.96 * n
    assert_allclose(used / n, 0.74, atol=4 * np.sqrt(0.74 * 0.26 / n))
    median, own = np.median(halves, axis=0)
    assert median < 0.9 * own
