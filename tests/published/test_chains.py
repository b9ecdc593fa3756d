"""Worm-like chains, path persistence and filament stiffness against values from outside."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels import chains
from glidefit.kernels.active_brownian import mean_squared_displacement


# Formula in space: verified (a university page on the worm-like chain). Formula in the plane:
# from memory, with own check by integral, as are the values.
@pytest.mark.parametrize(
    ("length", "persistence", "flat", "space"),
    [
        (10, 10, 85.2245277701067, 73.5758882342885),
        (1000, 100, 320539.035759927, 180000.907998595),
        (10, 17.7, 91.2129198050855, 83.5531608720287),
        (50, 9.5, 1229.95854512592, 770.434795848893),
    ],
)
def test_mean_square_end_to_end(length, persistence, flat, space):
    lengths = np.array([float(length)])
    found = chains.mean_square_end_to_end_flat(lengths, path_persistence_length=persistence)
    assert_allclose(found, flat, rtol=1e-9)
    found = chains.mean_square_end_to_end_space(lengths, persistence_length=persistence)
    assert_allclose(found, space, rtol=1e-9)


# Own arithmetic: with L = v t the path is a flat chain of P = v / (2 D_r).
def test_path_persistence_length():
    slow = {"speed": 0.8, "rotational_diffusion": 0.004}
    assert_allclose(chains.path_persistence_length(**slow), 100.0, rtol=1e-12)
    assert_allclose(chains.persistence_length(**slow), 200.0, rtol=1e-12)
    fast = chains.path_persistence_length(speed=5.0, rotational_diffusion=0.25)
    assert_allclose(fast, 10.0, rtol=1e-12)


def test_path_and_chain_are_the_same_curve():
    length = chains.path_persistence_length(speed=0.8, rotational_diffusion=0.004)
    chain = chains.mean_square_end_to_end_flat(np.array([80.0]), path_persistence_length=length)
    path = mean_squared_displacement(np.array([100.0]), speed=0.8, rotational_diffusion=0.004)
    assert_allclose(chain, 5625.603682851, rtol=1e-12)
    assert_allclose(path, 5625.603682851, rtol=1e-12)


# Boltzmann constant, exact: SI of 2019, verified (scipy.constants).
def test_boltzmann_constant():
    assert chains.BOLTZMANN == 1.380649e-23
    assert_allclose(chains.BOLTZMANN * 298.15, 4.1164049935e-21, rtol=1e-9)


# Gittes, Mickey, Nettleton & Howard, J. Cell Biol. 120, 923 (1993): stiffness and length verified.
# The published pairs agree with EI / kT within 1 % (actin) and 3 % (microtubules), for one of
# each is rounded.
@pytest.mark.parametrize(
    ("rigidity", "temperature", "exact", "published", "rounding"),
    [
        (7.3e-26, 298.15, 17.7339207670942, 17.7, 0.01),
        (2.2e-23, 298.15, 5344.46927227497, 5200, 0.05),
        (2.2e-23, 310.15, 5137.7, 5200, 0.05),
    ],
)
def test_filament_persistence_length(rigidity, temperature, exact, published, rounding):
    found = chains.filament_persistence_length(rigidity, temperature=temperature)
    assert_allclose(found, exact, rtol=1e-5 if exact == 5137.7 else 1e-12)
    assert_allclose(found, published, rtol=rounding)
