"""Active Brownian motion against values from outside the package.

The sources give the models. Their formulas are re-derived here, and the values come from
integrals of the velocity correlation, moment equations or a simulation in the test itself.
"""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import active_brownian as ab

KINESIN_LIKE = {"speed": 0.8, "rotational_diffusion": 0.004, "diffusion": 0.001}
ACTIN_LIKE = {"speed": 5.0, "rotational_diffusion": 0.25, "diffusion": 0.01}
UNIT = {"speed": 1.0, "rotational_diffusion": 1.0}


# Mean squared displacement in the plane. Howse et al., Phys. Rev. Lett. 99, 048102 (2007): record
# verified, formula from memory. Bechinger et al., Rev. Mod. Phys. 88, 045006 (2016): from memory.
# Values: own check, numerical integral of the velocity correlation.
@pytest.mark.parametrize(
    ("numbers", "lag", "expected"),
    [
        (KINESIN_LIKE, 0.1, 0.00679914675199317),
        (KINESIN_LIKE, 1, 0.643147519317788),
        (KINESIN_LIKE, 10, 63.1951321858568),
        (KINESIN_LIKE, 100, 5626.00368285114),
        (KINESIN_LIKE, 1000, 241469.251111099),
        (ACTIN_LIKE, 0.1, 0.251929622666135),
        (ACTIN_LIKE, 1, 23.0806264571239),
        (ACTIN_LIKE, 10, 1266.06799889912),
        (ACTIN_LIKE, 100, 19204.0000000111),
        (UNIT, 1e-6, 9.9999966666675e-13),
    ],
)
def test_mean_squared_displacement(numbers, lag, expected):
    found = ab.mean_squared_displacement(np.array([float(lag)]), **numbers)
    assert_allclose(found, expected, rtol=1e-9)


def test_mean_squared_displacement_at_one_is_two_over_e():
    # 0.5677 is what the spelling for rotation in space gives, with τ = 1/D_r instead of 1/(2 D_r).
    found = ab.mean_squared_displacement(np.array([1.0]), **UNIT)
    assert_allclose(found, 0.735758882342885, rtol=1e-12)
    assert_allclose(found, 2 / math.e, rtol=1e-15)


# From memory, with own check.
@pytest.mark.parametrize(("numbers", "expected"), [(KINESIN_LIKE, 80.001), (ACTIN_LIKE, 50.01)])
def test_long_time_diffusion(numbers, expected):
    assert_allclose(ab.long_time_diffusion(**numbers), expected, rtol=1e-12)


# Own check.
def test_heading_correlation():
    found = ab.heading_correlation(np.array([100.0]), rotational_diffusion=0.004)
    assert_allclose(found, 0.670320046035639, rtol=1e-12)


def simulate_unit(n_tracks, n_steps, *, until, rng):
    """Ends of active Brownian paths with v = D_r = 1 from the origin, first heading along x.

    The mean of the heading over each step is taken at its two ends; the error is of order
    D_r dt, below one in a thousand for a thousand steps.
    """
    step = until / n_steps
    heading = np.zeros(n_tracks)
    x, y = np.zeros(n_tracks), np.zeros(n_tracks)
    for _ in range(n_steps):
        following = heading + rng.normal(0, math.sqrt(2 * step), n_tracks)
        x += step * (np.cos(heading) + np.cos(following)) / 2
        y += step * (np.sin(heading) + np.sin(following)) / 2
        heading = following
    return x, y


def test_a_simulation_agrees_on_advance_square_and_fourth_power():
    x, y = simulate_unit(40_000, 500, until=1.0, rng=np.random.default_rng(31))
    squares = x**2 + y**2
    one = np.array([1.0])
    # Theory 0.632121, 0.735759 and 0.572765; a simulation elsewhere gave 0.6325 ± 0.001 and
    # 0.57286 ± 0.00050.
    for values, theory in [
        (x, ab.mean_advance(one, **UNIT)),
        (squares, ab.mean_squared_displacement(one, **UNIT)),
        (squares**2, ab.fourth_moment(one, **UNIT)),
    ]:
        error = np.std(values) / math.sqrt(len(values))
        assert_allclose(np.mean(values), theory, atol=4 * error, rtol=0)
        assert error < 0.005 * theory


def test_mean_advance():
    assert_allclose(ab.mean_advance(np.array([1.0]), **UNIT), 0.632121, atol=5e-7)


# Circling. van Teeffelen & Löwen, Phys. Rev. E 78, 020101 (2008): record verified (its abstract
# treats a confining channel). Ebbens et al., Phys. Rev. E 82, 015304 (2010): from memory.
# Values: own check, integral.
@pytest.mark.parametrize(
    ("lag", "speed", "turn", "rate", "expected"),
    [
        (1, 1, 1, 1, 0.690440124346888),
        (1, 1, 0.5, 2, 0.633189012713725),
        (10, 0.8, 0.05, 0.1, 50.6953410919287),
        (100, 0.8, 0.05, 0.1, 574.087643138464),
    ],
)
def test_circling_mean_squared_displacement(lag, speed, turn, rate, expected):
    numbers = {"speed": speed, "rotational_diffusion": turn, "turning_rate": rate}
    assert_allclose(ab.circling_msd(np.array([float(lag)]), **numbers), expected, rtol=1e-9)


def test_circling_without_diffusion_is_the_chord():
    one = np.array([1.0])
    found = ab.circling_msd(one, speed=1.0, rotational_diffusion=0.0, turning_rate=2.0)
    assert_allclose(found, 0.708073418, rtol=1e-9)
    assert_allclose(found, 4 * (1 / 2) ** 2 * math.sin(1.0) ** 2, rtol=1e-14)


def test_circling_long_time_diffusion():
    found = ab.long_time_diffusion(speed=0.8, rotational_diffusion=0.05, turning_rate=0.1)
    assert_allclose(found, 1.28, rtol=1e-12)


# ten Hagen, van Teeffelen & Löwen, J. Phys.: Condens. Matter 23, 194119 (2011): verified that it
# derives the first four moments and the kurtosis. Closed form and values: own derivation, not
# compared with theirs.
@pytest.mark.parametrize(
    ("lag", "moment", "kurtosis"),
    [
        (0.5, 0.0462010501675554, -0.982246456695704),
        (1, 0.5727648821851, -0.941952038509223),
        (2, 5.99647430286386, -0.836978573176431),
        (5, 92.7573285086598, -0.555537197611375),
        (10, 543.491969256869, -0.322572573837188),
        (100, 77043.5, -0.034805121926334),
    ],
)
def test_fourth_moment_and_kurtosis(lag, moment, kurtosis):
    lags = np.array([float(lag)])
    assert_allclose(ab.fourth_moment(lags, **UNIT), moment, rtol=1e-8)
    assert_allclose(ab.excess_kurtosis(lags, **UNIT), kurtosis, rtol=0, atol=1e-8)


def test_fourth_moment_with_diffusion():
    found = ab.fourth_moment(np.array([1.0]), diffusion=0.05, **UNIT)
    assert_allclose(found, 1.24137198805941, rtol=1e-8)


def test_kurtosis_at_both_ends():
    x = np.array([1e-2, 1e-3])
    small = ab.excess_kurtosis(x, **UNIT) + 1
    assert_allclose(small, 4 * x**2 / 45 - 8 * x**3 / 189, rtol=1e-3, atol=1e-14)
    large = np.array([1e4])
    assert_allclose(ab.excess_kurtosis(large, **UNIT), -7 / (2 * large), rtol=1e-3)


# Pauses. Two-state speed models with exact first moments: Jamali, arXiv:2012.14155, and Datta, Beta
# & Großmann, arXiv:2406.15277 (2024): verified as abstracts. Formulas: own derivation, values by
# matrix exponential.
PAUSING = {"speed": 0.8, "rotational_diffusion": 0.05, "stop_rate": 0.1, "go_rate": 0.4}


def test_pausing_long_time_diffusion():
    assert_allclose(ab.pausing_diffusion_turning(**PAUSING), 4.18909090909091, rtol=1e-9)
    assert_allclose(ab.pausing_diffusion_frozen(**PAUSING), 5.12, rtol=1e-9)
    without_stops = ab.long_time_diffusion(speed=0.8, rotational_diffusion=0.05)
    assert_allclose(without_stops, 6.4, rtol=1e-12)


def test_pausing_mean_squared_displacement():
    found = ab.pausing_msd_turning(np.array([1.0, 10.0, 100.0]), **PAUSING)
    expected = [0.488805989537516, 37.9573449904724, 1349.48722931564]
    assert_allclose(found, expected, rtol=1e-9)
    frozen = ab.pausing_msd_frozen(np.array([10.0]), **PAUSING)
    assert_allclose(frozen, 38.3140892, rtol=2e-9)
