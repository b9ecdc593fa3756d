"""Response curves against published fits and closed forms."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.response_curves import SHAPES, arrhenius, fit_response, q10, saturation
from glidefit.kernels.response_intervals import profile_interval, scale_bounds, shape_bounds

DATA = Path(__file__).parent / "data"
NONE = np.zeros(1)


def puromycin(state):
    lines = (DATA / "puromycin.csv").read_text(encoding="utf-8").splitlines()
    rows = [line.split(",") for line in lines if line[0].isdigit()]
    table = np.array([(float(c), float(v)) for c, v, which in rows if which == state])
    return table.T


# Treloar (1974), in Bates & Watts, Nonlinear Regression Analysis and Its Applications (1988),
# appendix A1.3; data verified in R's data set Puromycin. Parameters, standard errors, residual SD,
# correlation and profile intervals are those of R's nls.
PUROMYCIN = {
    "treated": {
        "v_max": (212.683743, 6.94716, 197.302, 229.289),
        "half": (0.0641212812, 0.00828095, 0.046920, 0.086157),
        "residual": 10.933658,
        "correlation": 0.76508,
        "df": 10,
    },
    "untreated": {
        "v_max": (160.280047, 6.48026, 145.637, 176.544),
        "half": (0.0477081851, 0.00778188, 0.031367, 0.070058),
        "residual": 9.773003,
        "correlation": 0.77683,
        "df": 9,
    },
}


@pytest.mark.parametrize("state", PUROMYCIN)
def test_puromycin(state):
    published = PUROMYCIN[state]
    x, y = puromycin(state)
    fit = fit_response(
        x, y, np.zeros(len(x), dtype=int), shape=SHAPES["michaelis-menten"], scatter="constant"
    )
    v_max, half = math.exp(fit.fit.values["day_0"]), fit.shape_values()["half"]
    errors = np.sqrt(np.diag(fit.covariance))  # of logarithms: relative
    assert fit.df == published["df"]
    assert_allclose(v_max, published["v_max"][0], rtol=1e-6)
    assert_allclose(half, published["half"][0], rtol=1e-6)
    assert_allclose(v_max * errors[0], published["v_max"][1], rtol=1e-3)
    assert_allclose(half * errors[1], published["half"][1], rtol=1e-3)
    assert_allclose(math.sqrt(fit.residual_variance), published["residual"], rtol=1e-6)
    correlation = fit.covariance[0, 1] / errors.prod()
    assert_allclose(correlation, published["correlation"], atol=2e-5)
    v, k = scale_bounds(fit, level=0.95), shape_bounds(fit, "half", level=0.95)
    assert_allclose(np.exp([v.low, v.high]), published["v_max"][2:], rtol=2e-5)
    assert_allclose(np.exp([k.low, k.high]), published["half"][2:], rtol=2e-4)


def test_puromycin_is_not_fitted_by_the_double_reciprocal_line():
    # 1/v against 1/c, treated: v_max 195.8, K 0.0484; same source.
    x, y = puromycin("treated")
    slope, intercept = np.polyfit(1 / x, 1 / y, 1)
    assert_allclose((1 / intercept, slope / intercept), (195.8, 0.0484), rtol=1e-3)
    fit = fit_response(
        x, y, np.zeros(len(x), dtype=int), shape=SHAPES["michaelis-menten"], scatter="constant"
    )
    assert math.exp(fit.fit.values["day_0"]) > 205
    assert fit.shape_values()["half"] > 0.06


def test_temperature_laws():
    # v ∝ exp(−E_a/RT), Q10 = v(T + 10)/v(T): own arithmetic for E_a = 50 kJ/mol.
    assert_allclose([q10(50), q10(50, celsius=25)], [1.967351, 1.924265], rtol=1e-6)
    v = arrhenius(np.array([20.0, 25.0, 26.0]), NONE, activation=50)
    assert_allclose(v[1] / v[0], 1.410604, rtol=1e-6)
    assert_allclose(v[2] - 1, 0.06975, rtol=1e-3)
    assert_allclose(q10(51.216), 2, rtol=1e-4)


def test_motor_density():
    # v = v_max [1 − (1 − f)^N], Uyeda, Kron & Spudich, J. Mol. Biol. 214, 699 (1990), formula from
    # memory; f = 0.05.
    v = saturation(np.array([10.0, 50.0]), NONE, density=-1 / math.log(0.95))
    assert_allclose(v, [0.401263, 0.923055], atol=1e-6)


def test_profile_of_a_mean_in_a_straight_model_is_students_t():
    # One temperature, so that only the mean is left: x̄ ± t s/√n on the logarithmic scale.
    y = np.array([0.7, 0.8, 0.75, 0.9, 0.82])
    x = np.array([20.0, 22, 25, 28, 30])
    fit = fit_response(x, y, np.zeros(5, dtype=int), shape=SHAPES["arrhenius"])
    bounds = shape_bounds(fit, "activation", level=0.95)
    from scipy import stats

    inverse = -1 / (8.314462618e-3 * (x + 273.15))
    line = stats.linregress(inverse, np.log(y))
    half = stats.t.ppf(0.975, 3) * line.stderr
    assert_allclose([bounds.value, bounds.error], [line.slope, line.stderr], rtol=1e-5)
    assert_allclose([bounds.low, bounds.high], [line.slope - half, line.slope + half], rtol=1e-5)
    ends = profile_interval(fit, {"activation": 1.0}, level=0.95)
    assert_allclose(ends, [bounds.low, bounds.high], rtol=1e-3)
