"""Free diffusion of rods and viscosity of water against values from outside."""

import math

import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.rods import rod_diffusion, water_viscosity


# Coefficients: verified in many public simulation codes that cite Tirado & García de la Torre,
# J. Chem. Phys. 71, 2581 (1979) and 73, 1986 (1980), records verified; Tirado, Martínez & García de
# la Torre, J. Chem. Phys. 81, 2047 (1984), and the range of 2 to 30 diameters: from memory.
@pytest.mark.parametrize(
    ("length", "diameter", "parallel", "perpendicular", "rotational", "in_space"),
    [
        (5, 0.025, 0.750284331767244, 0.451848313774725, 0.163980336680022, 0.551327),
        (2, 0.025, 1.54115998381924, 0.961256924096194, 2.06011164426491, 1.15456),
        (10, 0.025, 0.425986, 0.251419, 0.0235489, 0.309608),
        (1, 0.008, 3.40760327539583, 2.08645980853768, 18.4338113219514, 2.52684),
        (0.25, 0.025, 6.45504538899133, 4.65582975022954, 489.52338431694, 5.25557),
    ],
)
def test_rod_diffusion(length, diameter, parallel, perpendicular, rotational, in_space):
    rod = rod_diffusion(length, diameter=diameter, temperature=298.15, viscosity=0.8900e-3)
    assert_allclose(rod.parallel, parallel, rtol=1e-5)
    assert_allclose(rod.perpendicular, perpendicular, rtol=1e-5)
    assert_allclose(rod.rotational, rotational, rtol=1e-5)
    assert_allclose(rod.in_space, in_space, rtol=1e-5)
    # The mean was also fitted directly; the two fits differ by up to 0.3 % at ten diameters.
    p = length / diameter
    mean = 1.380649e-23 * 298.15 / (3 * math.pi * 0.89e-3 * length * 1e-6) * 1e12
    mean *= math.log(p) + 0.312 + 0.565 / p - 0.100 / p**2
    assert_allclose(rod.in_space, mean, rtol=4e-3)


def test_a_floating_filament_diffuses_along_itself_166_hundredths_of_across():
    rod = rod_diffusion(5.0, diameter=0.025, temperature=298.15, viscosity=0.8900e-3)
    assert_allclose(rod.parallel / rod.perpendicular, 1.66, rtol=0, atol=0.005)


# IAPWS R12-08, formulation of 2008 for any density; coefficients from memory, held by its table 4.
IDEAL = (1.67752, 2.20462, 0.6366564, -0.241605)
RESIDUAL = {
    (0, 0): 5.20094e-1,
    (1, 0): 8.50895e-2,
    (2, 0): -1.08374,
    (3, 0): -2.89555e-1,
    (0, 1): 2.22531e-1,
    (1, 1): 9.99115e-1,
    (2, 1): 1.88797,
    (3, 1): 1.26613,
    (5, 1): 1.20573e-1,
    (0, 2): -2.81378e-1,
    (1, 2): -9.06851e-1,
    (2, 2): -7.72479e-1,
    (3, 2): -4.89837e-1,
    (4, 2): -2.57040e-1,
    (0, 3): 1.61913e-1,
    (1, 3): 2.57399e-1,
    (0, 4): -3.25372e-2,
    (3, 4): 6.98452e-2,
    (4, 5): 8.72102e-3,
    (3, 6): -4.35673e-3,
    (5, 6): -5.93264e-4,
}


def viscosity_of_2008(temperature, density):
    """Viscosity of water in µPa s from K and kg/m³, without the critical enhancement."""
    t, rho = temperature / 647.096, density / 322.0
    ideal = 100 * math.sqrt(t) / sum(h / t**i for i, h in enumerate(IDEAL))
    bent = sum(h * (1 / t - 1) ** i * (rho - 1) ** j for (i, j), h in RESIDUAL.items())
    return ideal * math.exp(rho * bent)


# IAPWS R12-08, table 4: verified.
@pytest.mark.parametrize(
    ("temperature", "density", "expected"),
    [
        (298.15, 998, 889.735100149801),
        (298.15, 1200, 1437.64946668838),
        (373.15, 1000, 307.883622341523),
    ],
)
def test_formulation_of_2008_gives_its_own_table(temperature, density, expected):
    assert_allclose(viscosity_of_2008(temperature, density), expected, rtol=1e-9)


# Values at 0.101325 MPa: own evaluation of the formulation of 2008 with a standard density formula.
# Densities in kg/m³ as in any handbook, from memory; none matters beyond its third digit.
@pytest.mark.parametrize(
    ("celsius", "density", "expected"),
    [
        (4, 999.97, 1.5673),
        (10, 999.70, 1.3059),
        (15, 999.10, 1.1376),
        (20, 998.21, 1.00159817295535),
        (22, 997.77, 0.954397697880536),
        (25, 997.05, 0.890023336164702),
        (28, 996.23, 0.832378160754723),
        (30, 995.65, 0.797221900238866),
        (37, 993.33, 0.691303353332746),
        (40, 992.22, 0.6527),
    ],
)
def test_water_viscosity(celsius, density, expected):
    found = 1e3 * water_viscosity(273.15 + celsius)
    assert_allclose(found, expected, rtol=5e-4)
    # The liquid's equation agrees with the formulation to 3e-5, from 4 to 40 °C.
    assert_allclose(found, 1e-3 * viscosity_of_2008(273.15 + celsius, density), rtol=5e-5)


# IAPWS SR6-08: coefficients from memory, own cross-check.
@pytest.mark.parametrize(("celsius", "expected"), [(25, 0.89000), (20, 1.00157)])
def test_water_viscosity_to_its_own_digits(celsius, expected):
    assert_allclose(1e3 * water_viscosity(273.15 + celsius), expected, rtol=0, atol=5.1e-6)


# Kestin, Sokolov & Wakeham, J. Phys. Chem. Ref. Data 7, 941 (1978): datum of 1.0020 mPa s at 20 °C
# and ±0.05 % verified; its values lie 0.04 % above those of today.
def test_water_viscosity_and_the_older_datum():
    assert_allclose(1e3 * water_viscosity(293.15), 1.0020, rtol=5e-4)
