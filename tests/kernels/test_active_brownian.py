"""The formulas of active Brownian motion against slow second versions, and their properties."""

import math
from decimal import Decimal, localcontext

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.integrate import quad
from scipy.linalg import expm

from glidefit.kernels import active_brownian as ab

RATES = st.floats(1e-6, 10)
SPEEDS = st.floats(0.01, 10)
SCALES = st.floats(0.01, 100)
LAGS = np.array([0.05, 0.3, 1.0, 4.0, 20.0])
patient = settings(deadline=None)

# Arguments on both sides of, and at, every change from series to closed form.
ARGUMENTS = [*10.0 ** np.arange(-12, 1.5, 0.5), 9.99e-4, 1.001e-3, 0.499, 0.501, 0.999, 1.001]
NEGATIVE = [-3.0, -1.001, -0.999, -0.3, -1e-2, -1.001e-3, -9.99e-4, -1e-4, -1e-8, -1e-12]


def exactly(formula, *numbers):
    """A formula of exponentials with 80 digits, in which nothing is lost to cancellation."""
    with localcontext() as context:
        context.prec = 80
        return float(formula(*map(Decimal, numbers)))


def exact_bend(u):
    return 2 * (u - 1 + (-u).exp()) / u**2


def exact_blurred(x, y):
    spread = ((y / 2).exp() - (-y / 2).exp()) ** 2 / y**2
    away = x - 1 + (-x).exp() * spread
    return 2 * (away - (y / 3 - 1 + exact_bend(y))) / x**2


def exact_fourth(x):
    closed = 8 * x**2 - 30 * x + Decimal(87) / 2 + (-4 * x).exp() / 18
    return (closed - (40 * x / 3 + Decimal(392) / 9) * (-x).exp()) / x**4


def by_correlation(correlation, lag):
    """2 ∫ (lag - s) C(s) ds, which is the mean squared displacement."""
    nodes, weights = np.polynomial.legendre.leggauss(60)
    times = lag * (nodes + 1) / 2
    return lag * sum(w * (lag - s) * correlation(s) for s, w in zip(times, weights, strict=True))


@pytest.mark.parametrize("u", ARGUMENTS + NEGATIVE)
def test_bend_keeps_its_digits(u):
    # The closed form at its smallest argument loses 3 of 16 digits.
    assert_allclose(ab.bend(np.array([u])), exactly(exact_bend, u), rtol=1e-12)


def test_bend_of_mixed_arguments_is_that_of_each():
    u = np.array([0.0, 1e-9, 5e-4, 2e-3, 3.0, -2.0])
    assert_allclose(ab.bend(u), [float(ab.bend(np.array([one]))[0]) for one in u], rtol=0, atol=0)


@pytest.mark.parametrize("share", [0.01, 0.5, 1.0])
@pytest.mark.parametrize("x", ARGUMENTS + NEGATIVE)
def test_gliding_msd_keeps_its_digits(x, share):
    lag, speed = 2.0, 0.8
    found = ab.gliding_msd(
        np.array([lag]),
        speed=speed,
        rotational_diffusion=x / lag,
        longitudinal_diffusion=0.0,
        localization_variance=0.0,
        exposure=share * lag,
    )
    expected = (speed * lag) ** 2 * exactly(exact_blurred, x, share * x)
    assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize("x", [*ARGUMENTS, *NEGATIVE, 0.0])
def test_gliding_msd_without_exposure_is_that_of_points(x):
    lag = np.array([2.0])
    found = ab.gliding_msd(
        lag,
        speed=0.8,
        rotational_diffusion=x / 2,
        longitudinal_diffusion=0.02,
        localization_variance=0.01,
        exposure=0.0,
    )
    assert_allclose(found, (0.8 * lag) ** 2 * ab.bend(np.array([x])) + 0.08 + 0.04, rtol=1e-14)


@patient
@given(speed=SPEEDS, turn=st.floats(-0.1, 2), share=st.floats(0.01, 1))
def test_gliding_msd_is_the_mean_over_pairs_of_exposure_times(speed, turn, share):
    exposure = share * LAGS[0]

    def moved(t):
        return (speed * t) ** 2 * float(ab.bend(np.array([turn * t]))[0]) + 2 * 0.03 * abs(t)

    def blurred(lag):
        def part(w):
            return (exposure - w) / exposure**2 * (moved(lag + w) + moved(lag - w) - 2 * moved(w))

        return quad(part, 0, exposure, epsrel=1e-11)[0]

    found = ab.gliding_msd(
        LAGS,
        speed=speed,
        rotational_diffusion=turn,
        longitudinal_diffusion=0.03,
        localization_variance=0.002,
        exposure=exposure,
    )
    assert_allclose(found, [blurred(lag) + 4 * 0.002 for lag in LAGS], rtol=1e-9)


def test_gliding_msd_takes_negative_variances_of_a_fit_on_its_way():
    found = ab.gliding_msd(
        LAGS,
        speed=1.0,
        rotational_diffusion=0.0,
        longitudinal_diffusion=-0.03,
        localization_variance=-0.001,
        exposure=0.03,
    )
    assert_allclose(found, LAGS**2 - 0.06 * (LAGS - 0.01) - 0.004, rtol=1e-13)


def test_gliding_msd_survives_an_absurd_rotational_diffusion():
    found = ab.gliding_msd(
        LAGS,
        speed=1.0,
        rotational_diffusion=1e6,
        longitudinal_diffusion=0.0,
        localization_variance=0.0,
        exposure=0.05,
    )
    # Headings forgotten at once are diffusion of speed² / (2 D_r) with its blur.
    assert_allclose(found, 2e-6 * (LAGS - 0.05 / 3), rtol=1e-3)


@pytest.mark.parametrize(("lag", "exposure"), [(0.0, 0.0), (-1.0, 0.0), (0.1, -0.01), (0.1, 0.11)])
def test_gliding_msd_refuses_lags_and_exposures_out_of_range(lag, exposure):
    with pytest.raises(ValueError, match=r"lags must be|exposure must be"):
        ab.gliding_msd(
            np.array([1.0, lag]),
            speed=1.0,
            rotational_diffusion=0.1,
            longitudinal_diffusion=0.0,
            localization_variance=0.0,
            exposure=exposure,
        )


@pytest.mark.parametrize("x", ARGUMENTS)
def test_mean_squared_displacement_keeps_its_digits(x):
    found = ab.mean_squared_displacement(np.array([2.0]), speed=0.5, rotational_diffusion=x / 2)
    assert_allclose(found, exactly(exact_bend, x), rtol=1e-12)


@patient
@given(speed=SPEEDS, turn=RATES, rate=st.floats(-3, 3))
def test_displacements_are_integrals_of_the_velocity_correlation(speed, turn, rate):
    def correlation(s):
        return speed**2 * math.cos(rate * s) * math.exp(-turn * s)

    lags = LAGS[:4]
    found = ab.circling_msd(lags, speed=speed, rotational_diffusion=turn, turning_rate=rate)
    # Circles that close leave little of (speed lag)², to which rounding is in proportion.
    expected = [by_correlation(correlation, lag) for lag in lags]
    assert_allclose(found, expected, rtol=1e-9, atol=1e-12 * (speed * lags[-1]) ** 2)
    straight = ab.circling_msd(lags, speed=speed, rotational_diffusion=turn, turning_rate=0.0)
    plain = ab.mean_squared_displacement(lags, speed=speed, rotational_diffusion=turn)
    assert_allclose(straight, plain, rtol=1e-11)


@patient
@given(turn=RATES, rate=st.floats(-3, 3))
def test_left_and_right_circles_displace_alike(turn, rate):
    left, right = (
        ab.circling_msd(LAGS, speed=1.0, rotational_diffusion=turn, turning_rate=one)
        for one in (rate, -rate)
    )
    assert_allclose(left, right, rtol=1e-15)


@patient
@given(length=SCALES, time=SCALES, turn=RATES, rate=st.floats(0, 3))
def test_displacements_follow_the_units_of_length_and_time(length, time, turn, rate):
    def msd(lag, longer, slower):
        return ab.circling_msd(
            lag,
            speed=0.8 * longer / slower,
            rotational_diffusion=turn / slower,
            turning_rate=rate / slower,
            diffusion=0.01 * longer**2 / slower,
            localization_error=0.05 * longer,
        )

    assert_allclose(msd(LAGS * time, length, time), length**2 * msd(LAGS, 1, 1), rtol=1e-9)


@patient
@given(length=SCALES, time=SCALES, turn=st.floats(-0.1, 2), share=st.floats(0, 1))
def test_gliding_msd_follows_the_units_of_length_and_time(length, time, turn, share):
    def msd(longer, slower):
        return ab.gliding_msd(
            LAGS * slower,
            speed=0.8 * longer / slower,
            rotational_diffusion=turn / slower,
            longitudinal_diffusion=0.01 * longer**2 / slower,
            localization_variance=0.0025 * longer**2,
            exposure=share * LAGS[0] * slower * (1 - 1e-12),
        )

    assert_allclose(msd(length, time), length**2 * msd(1, 1), rtol=1e-10)


@pytest.mark.parametrize("rate", [0.0, 0.1])
def test_long_times_diffuse(rate):
    lag = np.array([1e7])
    numbers = {"speed": 0.8, "rotational_diffusion": 0.05, "turning_rate": rate, "diffusion": 0.3}
    found = ab.circling_msd(lag, **numbers) / (4 * lag)
    # What is left is the constant of the bend, of order 1 / (D_r lag).
    assert_allclose(found, ab.long_time_diffusion(**numbers), rtol=1e-5)


def test_a_straight_path_has_no_long_time_diffusion():
    with pytest.raises(ValueError, match="rotational_diffusion must be > 0"):
        ab.long_time_diffusion(speed=1.0, rotational_diffusion=0.0)


@patient
@given(turn=RATES, speed=SPEEDS)
def test_mean_advance_is_the_integral_of_the_heading_correlation(turn, speed):
    def correlation(t):
        return float(ab.heading_correlation(np.array([t]), rotational_diffusion=turn)[0])

    found = ab.mean_advance(LAGS, speed=speed, rotational_diffusion=turn)
    expected = [speed * quad(correlation, 1e-300, lag, epsrel=1e-11)[0] for lag in LAGS]
    assert_allclose(found, expected, rtol=1e-9)


def test_a_straight_path_advances_by_its_speed():
    assert_allclose(ab.mean_advance(LAGS, speed=2.0, rotational_diffusion=0.0), 2 * LAGS, rtol=0)


def test_heading_correlation_of_a_circle_alone_is_its_cosine():
    found = ab.heading_correlation(LAGS, rotational_diffusion=0.0, turning_rate=0.3)
    assert_allclose(found, np.cos(0.3 * LAGS), rtol=1e-15)


@pytest.mark.parametrize("x", ARGUMENTS)
def test_fourth_moment_keeps_its_digits(x):
    found = ab.fourth_moment(np.array([2.0]), speed=0.5, rotational_diffusion=x / 2)
    assert_allclose(found, exactly(exact_fourth, x), rtol=1e-12)


@patient
@given(speed=SPEEDS, turn=st.floats(0.01, 5), diffusion=st.floats(0, 2))
def test_fourth_moment_solves_the_equations_of_the_moments(speed, turn, diffusion):
    # State: 1, ⟨r·n⟩, ⟨r²⟩, ⟨(r·n)²⟩, ⟨r² r·n⟩, ⟨r⁴⟩, n the heading; by Itô's rule.
    rates = np.zeros((6, 6))
    rates[1, [0, 1]] = speed, -turn
    rates[2, [0, 1]] = 4 * diffusion, 2 * speed
    rates[3, [0, 1, 2, 3]] = 2 * diffusion, 2 * speed, 2 * turn, -4 * turn
    rates[4, [1, 2, 3, 4]] = 8 * diffusion, speed, 2 * speed, -turn
    rates[5, [2, 4]] = 16 * diffusion, 4 * speed
    numbers = {"speed": speed, "rotational_diffusion": turn, "diffusion": diffusion}
    states = np.array([expm(rates * lag)[:, 0] for lag in LAGS])
    assert_allclose(ab.mean_squared_displacement(LAGS, **numbers), states[:, 2], rtol=1e-8)
    assert_allclose(ab.fourth_moment(LAGS, **numbers), states[:, 5], rtol=1e-8)


def test_kurtosis_of_straight_and_of_diffusing_tracers():
    straight = ab.excess_kurtosis(LAGS, speed=3.0, rotational_diffusion=0.0)
    assert_allclose(straight, -1, rtol=1e-14)
    diffusing = ab.excess_kurtosis(LAGS, speed=0.0, rotational_diffusion=1.0, diffusion=0.2)
    assert_allclose(diffusing, 0, atol=1e-14)


@patient
@given(turn=st.floats(1e-4, 3), stop=st.floats(0.01, 2), go=st.floats(0.01, 2))
def test_pausing_displacements_solve_the_equations_of_going_and_pausing(turn, stop, go):
    numbers = {"speed": 0.8, "rotational_diffusion": turn, "stop_rate": stop, "go_rate": go}

    def msd(turn_paused):
        # State: the heading kept while going and while paused, given that it went at first; its
        # integral while going, and the integral of that. C(t) is 0.64 share times the first.
        rates = np.zeros((4, 4))
        rates[:2, :2] = [[-stop - turn, go], [stop, -go - turn_paused]]
        rates[2, 0] = rates[3, 2] = 1
        return [2 * 0.64 * go / (stop + go) * expm(rates * lag)[3, 0] for lag in LAGS]

    assert_allclose(ab.pausing_msd_turning(LAGS, **numbers), msd(turn), rtol=1e-8)
    assert_allclose(ab.pausing_msd_frozen(LAGS, **numbers), msd(0.0), rtol=1e-8)


@pytest.mark.parametrize(
    ("msd", "diffusion"),
    [
        (ab.pausing_msd_turning, ab.pausing_diffusion_turning),
        (ab.pausing_msd_frozen, ab.pausing_diffusion_frozen),
    ],
)
def test_pausing_tracers_diffuse_at_long_times(msd, diffusion):
    numbers = {"speed": 0.8, "rotational_diffusion": 0.05, "stop_rate": 0.1, "go_rate": 0.4}
    lag = np.array([1e7])
    assert_allclose(msd(lag, **numbers) / (4 * lag), diffusion(**numbers), rtol=1e-5)


@pytest.mark.parametrize("name", ["msd_turning", "msd_frozen"])
def test_rare_pauses_leave_the_plain_displacement(name):
    numbers = {"speed": 0.8, "rotational_diffusion": 0.05}
    found = getattr(ab, f"pausing_{name}")(LAGS, stop_rate=1e-9, go_rate=1.0, **numbers)
    # Of the time 1e-9 is spent in pauses.
    assert_allclose(found, ab.mean_squared_displacement(LAGS, **numbers), rtol=1e-8)


@pytest.mark.parametrize(("stop", "go"), [(0.0, 1.0), (1.0, -1.0)])
def test_pausing_refuses_rates_that_are_not_positive(stop, go):
    with pytest.raises(ValueError, match="rates must be > 0"):
        ab.pausing_diffusion_frozen(speed=1.0, rotational_diffusion=0.1, stop_rate=stop, go_rate=go)


@pytest.mark.parametrize("share", [0.0, 0.3, 1.0])
def test_turning_variance_is_that_of_averages_of_a_random_walk(share):
    # One frame interval is 600 steps; a direction is the walk averaged over interval and exposure.
    n, interval, turn, error, sideways = 600, 0.1, 0.02, 0.004, 0.0003
    exposed = np.full(max(1, round(share * n)), 1.0)
    direction = np.convolve(np.full(n, 1 / n), exposed / exposed.sum())
    found, expected = [], []
    for k in (1, 2, 5):
        weights = np.zeros(len(direction) + k * n)
        weights[k * n :] += direction
        weights[: len(direction)] -= direction
        walked = 2 * turn * interval / n * np.sum(np.cumsum(weights) ** 2)
        strayed = 2 * sideways * interval * n * np.sum(weights**2) / (0.8 * interval) ** 2
        errors = np.zeros(k + 2)
        errors[[k, k + 1]] += -1, 1
        errors[[0, 1]] -= -1, 1
        misread = error**2 * np.sum(errors**2) / (0.8 * interval) ** 2
        expected.append(walked + strayed + misread)
        found.append(
            ab.turning_variance(
                np.array([k]),
                speed=0.8,
                rotational_diffusion=turn,
                frame_interval=interval,
                exposure=share * interval,
                localization_error=error,
                diffusion=sideways,
            )[0]
        )
    # Steps of 1/600 frame stand for continuous time.
    assert_allclose(found, expected, rtol=0.005)


def test_turning_variance_refuses_what_is_out_of_range():
    numbers = {"speed": 1.0, "rotational_diffusion": 0.1, "frame_interval": 0.1}
    with pytest.raises(ValueError, match="distances must be >= 1"):
        ab.turning_variance(np.array([1, 0]), **numbers)
    with pytest.raises(ValueError, match="exposure must be"):
        ab.turning_variance(np.array([1]), exposure=0.2, **numbers)


@pytest.mark.parametrize(
    "formula",
    [ab.mean_squared_displacement, ab.mean_advance, ab.fourth_moment, ab.excess_kurtosis],
)
@pytest.mark.parametrize(("lag", "turn"), [(0.0, 0.1), (-1.0, 0.1), (1.0, -0.1)])
def test_formulas_refuse_lags_and_rates_out_of_range(formula, lag, turn):
    with pytest.raises(ValueError, match=r"lags must be > 0|rotational_diffusion must be >= 0"):
        formula(np.array([1.0, lag]), speed=1.0, rotational_diffusion=turn)
