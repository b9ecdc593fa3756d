from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import msd_fit
from glidefit.kernels.active_brownian import gliding_msd

TRUTH = {
    "speed": 0.8,
    "rotational_diffusion": 0.008,
    "longitudinal_diffusion": 0.003,
    "localization_variance": 0.03**2,
}


def exact_curve(truth=TRUTH, *, frame_s=0.5, n=40, exposure=0.1, tracks=3):
    lag = frame_s * msd_fit.log_spaced_lags(n)
    counts = np.outer(np.arange(1, tracks + 1), np.linspace(100, 20, len(lag)))
    sums = counts * gliding_msd(lag, exposure=exposure, **truth)
    return msd_fit.LagCurve(lag_s=lag, sums=sums, counts=counts, exposure_s=exposure)


def test_exact_curve_gives_back_its_parameters():
    fit = msd_fit.fit_msd([exact_curve()])
    assert fit.problem == ""
    assert_allclose(fit.values, list(TRUTH.values()), rtol=1e-6)


@pytest.mark.parametrize("factor", [0.3, 0.8, 1.5, 3.0])
def test_optimum_does_not_depend_on_the_start(factor):
    start = {name: value * factor for name, value in TRUTH.items()}
    fit = msd_fit.fit_msd([exact_curve()], start=start)
    assert_allclose(fit.values, list(TRUTH.values()), rtol=1e-6)


def test_two_frame_intervals_share_one_set_of_parameters():
    curves = [exact_curve(frame_s=0.5), exact_curve(frame_s=0.2, exposure=0.2)]
    assert_allclose(msd_fit.fit_msd(curves).values, list(TRUTH.values()), rtol=1e-6)


def test_straighter_than_straight_gives_a_negative_rotational_diffusion():
    """A chamber may scatter below zero; cut off there, means over chambers would be biased."""
    truth = TRUTH | {"rotational_diffusion": -0.004}
    fit = msd_fit.fit_msd([exact_curve(truth)])
    assert_allclose(fit.values[1], -0.004, rtol=1e-5)


def test_influence_is_the_change_on_drawing_a_track_once_more():
    rng = np.random.default_rng(1)
    curve = exact_curve(tracks=40)
    sums = curve.sums * (1 + 0.1 * rng.standard_normal(curve.sums.shape))
    noisy = msd_fit.LagCurve(
        lag_s=curve.lag_s, sums=sums, counts=curve.counts, exposure_s=curve.exposure_s
    )
    fit = msd_fit.fit_msd([noisy])
    more = 1.0 + 0.02 * rng.standard_normal(40)[:, None]
    again = msd_fit.fit_msd(
        [
            msd_fit.LagCurve(
                lag_s=curve.lag_s,
                sums=sums * more,
                counts=curve.counts * more,
                exposure_s=curve.exposure_s,
            )
        ]
    )
    predicted = (more - 1).ravel() @ fit.influence
    # Second order in weights that differ by 2 % of 40 tracks.
    assert_allclose(again.values - fit.values, predicted, atol=0.02 * np.abs(predicted).max())


def test_too_few_lags_say_so():
    fit = msd_fit.fit_msd([exact_curve(n=4)])
    assert fit.problem == "4 lags have pairs, 5 are needed"
    assert np.isnan(fit.values).all()


def test_longest_lag_bends_by_what_was_asked():
    curve = exact_curve(n=400)
    lag, fit = msd_fit.longest_lag([curve], bend=0.15, at_least=4.0, at_most=200.0)
    # The search stops when a step would change the lag by less than a fifth.
    assert_allclose(0.008 * lag, 0.15, rtol=0.25)
    assert_allclose(fit.values, list(TRUTH.values()), rtol=1e-5)


def test_longest_lag_stays_inside_its_limits():
    curve = exact_curve(n=400)
    assert msd_fit.longest_lag([curve], bend=0.15, at_least=4.0, at_most=10.0)[0] == 10.0
    assert msd_fit.longest_lag([curve], bend=0.001, at_least=4.0, at_most=10.0)[0] == 4.0


def test_speed_law_takes_the_model_apart():
    values = np.array(list(TRUTH.values()))
    scale, offset = msd_fit.speed_law(3.0, exposure_s=0.1, values=values)
    whole = gliding_msd(np.array([3.0]), exposure=0.1, **TRUTH)[0]
    assert_allclose(scale * 0.8**2 + offset, whole, rtol=1e-12)


def test_lags_grow_by_about_a_fifth():
    lags = msd_fit.log_spaced_lags(100)
    assert lags[:8].tolist() == [1, 2, 3, 4, 5, 6, 7, 8]
    assert np.all(np.diff(lags[8:]) <= np.ceil(0.25 * lags[8:-1]))
    assert lags[-1] <= 100
