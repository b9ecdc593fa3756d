"""Response curves: shapes, several days, intervals that hold."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import optimize

from glidefit.kernels.response_curves import SHAPES, fit_response, linear_shape
from glidefit.kernels.response_intervals import curve_bounds, scale_bounds, shape_bounds

X = np.array([5.0, 10, 25, 50, 150, 1000])
MM = SHAPES["michaelis-menten"]


def assay(rng, *, days=3, x=X, half=50.0, v_max=0.8, day=0.07, interaction=0.03, chamber=0.04):
    """Points of an assay of two chambers a condition and day."""
    d = np.repeat(np.arange(days), len(x))
    xs = np.tile(x, days)
    logs = np.log(v_max * xs / (half + xs)) + (day * rng.standard_normal(days))[d]
    logs = logs + interaction * rng.standard_normal(len(xs))
    y = np.exp(logs[:, None] + chamber * rng.standard_normal((len(xs), 2))).mean(axis=1)
    return xs, y, d


TRUTH = {
    "michaelis-menten": {"half": 40.0},
    "hill": {"half": 40.0, "exponent": 1.7},
    "competitive": {"half": 40.0, "inhibition": 20.0},
    "arrhenius": {"activation": 55.0},
    "saturation": {"density": 60.0},
}


@pytest.mark.parametrize("scatter", ["relative", "constant"])
@pytest.mark.parametrize("name", TRUTH)
def test_parameters_are_found_again_without_noise(name, scatter):
    shape = SHAPES[name]
    x = np.array([15.0, 20, 24, 30, 35, 40]) if name == "arrhenius" else X
    x, inhibitor = np.tile(x, 4), np.repeat([0.0, 0, 15, 40], len(x))
    day = np.repeat([0, 1, 0, 1], len(x) // 4)
    y = np.array([0.7, 0.9])[day] * shape.of(x, inhibitor, **TRUTH[name])
    y = y * (1 + 1e-8 * np.cos(np.arange(len(y))))  # a residual of exactly 0 has no variance
    fit = fit_response(x, y, day, shape=shape, scatter=scatter, inhibitor=inhibitor)
    assert fit.fit.problem == ""
    found = fit.shape_values()
    assert_allclose([found[k] for k in TRUTH[name]], list(TRUTH[name].values()), rtol=1e-5)
    scales = [math.exp(fit.fit.values[f"day_{d}"]) for d in (0, 1)]
    assert_allclose(scales, [0.7, 0.9], rtol=1e-5)


def test_line_is_found_again():
    x = np.tile([1.0, 2, 4, 7], 2)
    day = np.repeat([0, 1], 4)
    shape = linear_shape(x)
    y = np.array([1.0, 2.0])[day] * (1 + 0.1 * (x - 3.5)) * (1 + 1e-8 * np.cos(x))
    fit = fit_response(x, y, day, shape=shape)
    assert_allclose(fit.fit.values["slope"], 0.1, rtol=1e-6)
    assert "3.5" in shape.formula


@given(st.integers(0, 10**6), st.floats(0.1, 10), st.floats(0.1, 10))
def test_units_carry_over(seed, of_x, of_y):
    x, y, day = assay(np.random.default_rng(seed % 20))
    one, two = (fit_response(a, b, day, shape=MM) for a, b in ((x, y), (of_x * x, of_y * y)))
    assert_allclose(two.shape_values()["half"], of_x * one.shape_values()["half"], rtol=1e-4)
    assert_allclose(two.fit.values["day_1"], one.fit.values["day_1"] + math.log(of_y), atol=1e-4)


def test_shape_is_free_of_what_days_differ_by():
    x, y, day = assay(np.random.default_rng(1))
    moved = y * np.array([0.5, 1.0, 3.0])[day]
    one, two = (fit_response(x, v, day, shape=MM) for v in (y, moved))
    assert_allclose(two.shape_values()["half"], one.shape_values()["half"], rtol=1e-5)
    a, b = (shape_bounds(f, "half", level=0.95) for f in (one, two))
    assert_allclose((b.low, b.high), (a.low, a.high), rtol=1e-3)
    assert scale_bounds(two, level=0.95).error > 3 * scale_bounds(one, level=0.95).error


def test_scale_is_students_t_over_fits_of_single_days():
    # To first order what a day says is the fit of that day alone; scatter is small here.
    x, y, day = assay(np.random.default_rng(11), interaction=0.003, chamber=0.003)
    alone = [
        fit_response(x[day == d], y[day == d], np.zeros(6, dtype=int), shape=MM).fit.values["day_0"]
        for d in range(3)
    ]
    found = scale_bounds(fit_response(x, y, day, shape=MM), level=0.95)
    assert_allclose(found.value, np.mean(alone), atol=1e-4)
    assert_allclose(found.error, np.std(alone, ddof=1) / math.sqrt(3), rtol=0.01)
    assert_allclose(found.high - found.value, 4.302653 * found.error, rtol=1e-4)  # t, 2 df, 97.5 %


def test_fit_is_that_of_another_program():
    x, y, _ = assay(np.random.default_rng(2), days=1)
    fit = fit_response(x, y, np.zeros(len(x), dtype=int), shape=MM)
    other, covariance = optimize.curve_fit(
        lambda c, v, k: np.log(v * c / (k + c)), x, np.log(y), p0=(1, 30)
    )
    found = np.array([math.exp(fit.fit.values["day_0"]), fit.shape_values()["half"]])
    assert_allclose(found, other, rtol=1e-5)
    errors = found * np.sqrt(np.diag(fit.covariance))
    assert_allclose(errors, np.sqrt(np.diag(covariance)), rtol=1e-3)


def test_criterion_is_akaikes():
    x, y, day = assay(np.random.default_rng(3))
    fit = fit_response(x, y, day, shape=MM)
    n, k = 18, 5  # three scales, K_m, the variance
    squares = float(np.sum(fit.fit.residual**2))
    assert_allclose(fit.criterion, n * np.log(squares / n) + 2 * k + 2 * k * (k + 1) / (n - k - 1))


def test_undetermined_curve_is_open_above():
    # Far below saturation only v_max / K_m is known.
    x, y, day = assay(np.random.default_rng(4), x=np.array([1.0, 2, 3, 4]), half=500.0)
    fit = fit_response(x, y, day, shape=MM)
    assert shape_bounds(fit, "half", level=0.95).high == math.inf
    assert scale_bounds(fit, level=0.95).high == math.inf
    assert math.isfinite(shape_bounds(fit, "half", level=0.95).low)


def test_band_agrees_with_the_scale_at_saturation_and_narrows_where_days_agree():
    x, y, day = assay(np.random.default_rng(5))
    fit = fit_response(x, y, day, shape=MM)
    middle, low, high = curve_bounds(fit, np.array([1e7]), np.zeros(1), level=0.95)
    v = scale_bounds(fit, level=0.95)
    assert_allclose(np.log(middle), v.value, atol=1e-4)
    # The band is linear, the other by profile.
    assert_allclose(np.log([low[0], high[0]]), [v.low, v.high], atol=0.02)
    alike = fit_response(x, y / np.exp([fit.fit.values[f"day_{d}"] for d in day]), day, shape=MM)
    assert np.ptp(np.log(curve_bounds(alike, X, np.zeros(6), level=0.95)[1:]), axis=0).max() < 0.2


def test_intervals_hold_the_truth():
    n, held = 40, np.zeros(2)
    for i in range(n):
        fit = fit_response(*assay(np.random.default_rng([6, i])), shape=MM)
        k, v = shape_bounds(fit, "half", level=0.95), scale_bounds(fit, level=0.95)
        held += [k.low <= math.log(50) <= k.high, v.low <= math.log(0.8) <= v.high]
    # Four standard errors of a share of 95 % in 40.
    assert np.all(held / n > 0.95 - 4 * math.sqrt(0.95 * 0.05 / n))


def test_too_few_points_or_no_logarithm_are_refused():
    with pytest.raises(ValueError, match="too few"):
        fit_response(X[:3], np.ones(3), np.arange(3), shape=MM)
    with pytest.raises(ValueError, match="> 0"):
        fit_response(X, np.array([0.0, 1, 1, 1, 1, 1]), np.zeros(6, dtype=int), shape=MM)
