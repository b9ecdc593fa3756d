"""Worm-like chains against sums over bonds, and against the paths they stand for."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.kernels import active_brownian as ab
from glidefit.kernels import chains

LENGTHS = np.array([0.01, 1.0, 10.0, 300.0])


def of_bonds(length, decay, n=2000):
    """Mean square distance of the ends of n freely rotating bonds, by summing all pairs."""
    bond = length / n
    apart = np.arange(1, n)
    return bond**2 * (n + 2 * np.sum((n - apart) * np.exp(-apart * bond / decay)))


@pytest.mark.parametrize("persistence", [0.5, 10.0, 1000.0])
def test_chains_are_those_of_many_short_bonds(persistence):
    flat = chains.mean_square_end_to_end_flat(LENGTHS[:3], path_persistence_length=persistence)
    space = chains.mean_square_end_to_end_space(LENGTHS[:3], persistence_length=persistence)
    # The bonds differ from the thread by the square of bond over decay, at most (1/100)² / 12.
    assert_allclose(flat, [of_bonds(one, 2 * persistence) for one in LENGTHS[:3]], rtol=1e-5)
    assert_allclose(space, [of_bonds(one, persistence) for one in LENGTHS[:3]], rtol=1e-5)


@settings(deadline=None)
@given(speed=st.floats(0.01, 10), turn=st.floats(1e-6, 10))
def test_a_gliding_path_is_a_flat_chain_of_length_speed_times_lag(speed, turn):
    lag = np.array([0.1, 1.0, 10.0, 1000.0])
    length = chains.path_persistence_length(speed=speed, rotational_diffusion=turn)
    chain = chains.mean_square_end_to_end_flat(speed * lag, path_persistence_length=length)
    path = ab.mean_squared_displacement(lag, speed=speed, rotational_diffusion=turn)
    # Near the change from series to closed form the two may fall on different sides.
    assert_allclose(chain, path, rtol=1e-12)


@settings(deadline=None)
@given(scale=st.floats(1e-3, 1e3), persistence=st.floats(0.1, 1e4))
def test_chains_follow_the_unit_of_length(scale, persistence):
    def flat(longer):
        return chains.mean_square_end_to_end_flat(
            longer * LENGTHS, path_persistence_length=longer * persistence
        )

    assert_allclose(flat(scale), scale**2 * flat(1), rtol=1e-11)


def test_a_chain_without_bends_is_a_rod():
    found = chains.mean_square_end_to_end_flat(LENGTHS, path_persistence_length=math.inf)
    assert_allclose(found, LENGTHS**2, rtol=0)


def test_a_long_chain_is_a_random_walk():
    found = chains.mean_square_end_to_end_flat(np.array([1e7]), path_persistence_length=2.0)
    assert_allclose(found, 4 * 2.0 * 1e7, rtol=1e-6)


def test_the_two_lengths_differ_by_two_and_are_infinite_for_straight_paths():
    numbers = {"speed": 0.7, "rotational_diffusion": 0.013}
    both = chains.persistence_length(**numbers), chains.path_persistence_length(**numbers)
    assert both[0] == 2 * both[1]
    assert chains.persistence_length(speed=0.7, rotational_diffusion=0.0) == math.inf
    assert chains.path_persistence_length(speed=0.7, rotational_diffusion=0.0) == math.inf


def test_chains_refuse_lengths_and_rates_out_of_range():
    with pytest.raises(ValueError, match="contour lengths must be >= 0"):
        chains.mean_square_end_to_end_flat(np.array([-1.0]), path_persistence_length=1.0)
    with pytest.raises(ValueError, match="persistence length must be > 0"):
        chains.mean_square_end_to_end_space(LENGTHS, persistence_length=0.0)
    with pytest.raises(ValueError, match="must be >= 0"):
        chains.path_persistence_length(speed=1.0, rotational_diffusion=-0.1)
    with pytest.raises(ValueError, match="must be > 0"):
        chains.filament_persistence_length(7.3e-26, temperature=0.0)
