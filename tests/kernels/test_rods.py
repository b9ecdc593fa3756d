"""Rods and water: limits, units and refusals; the values are among the published checks."""

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.kernels.rods import rod_diffusion, water_viscosity

FILAMENTS = st.floats(2.01, 1e4)
patient = settings(deadline=None)


def diffusion(ratio, *, scale=1.0, temperature=300.0, viscosity=1e-3):
    return rod_diffusion(
        ratio * 0.01 * scale, diameter=0.01 * scale, temperature=temperature, viscosity=viscosity
    )


@patient
@given(ratio=FILAMENTS, scale=st.floats(0.1, 10))
def test_diffusion_falls_with_size_at_one_shape(ratio, scale):
    small, large = diffusion(ratio), diffusion(ratio, scale=scale)
    assert_allclose(large.parallel, small.parallel / scale, rtol=1e-9)
    assert_allclose(large.perpendicular, small.perpendicular / scale, rtol=1e-9)
    assert_allclose(large.rotational, small.rotational / scale**3, rtol=1e-9)


@patient
@given(ratio=FILAMENTS, factor=st.floats(0.5, 2))
def test_diffusion_is_proportional_to_temperature_over_viscosity(ratio, factor):
    warm = diffusion(ratio, temperature=300 * factor)
    thin = diffusion(ratio, viscosity=1e-3 / factor)
    for name in ("parallel", "perpendicular", "rotational"):
        assert_allclose(getattr(warm, name), factor * getattr(diffusion(ratio), name), rtol=1e-12)
        assert_allclose(getattr(warm, name), getattr(thin, name), rtol=1e-12)


@patient
@given(ratio=FILAMENTS)
def test_a_rod_moves_along_its_axis_more_easily_but_less_than_twice(ratio):
    rod = diffusion(ratio)
    assert 1 < rod.parallel / rod.perpendicular < 2
    assert rod.perpendicular < rod.in_space < rod.in_plane < rod.parallel


def test_the_ends_of_an_endless_rod_do_not_matter():
    # The ratio is 2 (ln p - 0.207) / (ln p + 0.839), short of 2 by 1.05 / ln p.
    rod = diffusion(1e100)
    assert_allclose(rod.parallel / rod.perpendicular, 2, rtol=1.05 / math.log(1e100))


def test_rods_refuse_what_is_no_rod():
    with pytest.raises(ValueError, match="at least 2 diameters"):
        diffusion(1.9)
    with pytest.raises(ValueError, match="must be > 0"):
        diffusion(10.0, viscosity=0.0)


def test_water_gets_thinner_when_warmed():
    values = [water_viscosity(273.15 + celsius) for celsius in range(0, 100, 5)]
    assert values == sorted(values, reverse=True)


@pytest.mark.parametrize("temperature", [25.0, 253.0, 384.0])
def test_water_refuses_temperatures_at_which_it_is_not_liquid(temperature):
    with pytest.raises(ValueError, match=r"from 253\.15 to 383\.15 K"):
        water_viscosity(temperature)
