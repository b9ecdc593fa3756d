"""Free diffusion of stiff rods in water: what a filament that floats would show."""

from __future__ import annotations

import math
from dataclasses import dataclass

from glidefit.kernels.chains import BOLTZMANN


@dataclass(frozen=True, slots=True, kw_only=True)
class RodDiffusion:
    """Diffusion of a rod far from walls; translation in µm²/s, rotation in rad²/s."""

    parallel: float  # along its axis
    perpendicular: float  # across its axis
    rotational: float  # about a transverse axis: ⟨Δθ²⟩ = 2 rotational t in the plane

    @property
    def in_space(self) -> float:
        """Mean over all three directions, µm²/s."""
        return (self.parallel + 2 * self.perpendicular) / 3

    @property
    def in_plane(self) -> float:
        """Mean over the two directions of a thin chamber in which it lies flat, µm²/s."""
        return (self.parallel + self.perpendicular) / 2


def rod_diffusion(
    length: float, *, diameter: float, temperature: float, viscosity: float
) -> RodDiffusion:
    """Diffusion of a cylinder with the corrections for its ends.

    With p = length / diameter::

        parallel      = kT (ln p - 0.207 + 0.980/p - 0.133/p²) / (2π η length)
        perpendicular = kT (ln p + 0.839 + 0.185/p + 0.233/p²) / (4π η length)
        rotational    = 3 kT (ln p - 0.662 + 0.917/p - 0.050/p²) / (π η length³)

    Fitted for p from 2 to 30; used here, as is usual for filaments, also above.

    Parameters
    ----------
    length, diameter : float
        In µm; length at least twice the diameter.
    temperature : float
        In K.
    viscosity : float
        η in Pa s.

    Raises
    ------
    ValueError
        For a rod shorter than two diameters or a number that is not positive.

    References
    ----------
    Tirado & García de la Torre, J. Chem. Phys. 71, 2581 (1979) and 73, 1986 (1980).
    """
    if min(length, diameter, temperature, viscosity) <= 0:
        raise ValueError("length, diameter, temperature and viscosity must be > 0")
    p = length / diameter
    if p < 2:
        raise ValueError(f"a rod is at least 2 diameters long, this one {p:g}")
    # kT over Pa s µm is 1e6 m²/s, which is 1e18 µm²/s; the same factor holds per µm³ for rotation.
    mobility = BOLTZMANN * temperature / (math.pi * viscosity * length) * 1e18
    along = math.log(p) - 0.207 + 0.980 / p - 0.133 / p**2
    across = math.log(p) + 0.839 + 0.185 / p + 0.233 / p**2
    about = math.log(p) - 0.662 + 0.917 / p - 0.050 / p**2
    return RodDiffusion(
        parallel=mobility * along / 2,
        perpendicular=mobility * across / 4,
        rotational=3 * mobility * about / length**2,
    )


def water_viscosity(temperature: float) -> float:
    """Viscosity of water at 0.1 MPa in Pa s.

    With τ = temperature / 300 K, in µPa s::

        280.68 τ^-1.9 + 511.45 τ^-7.7 + 61.131 τ^-19.6 + 0.45903 τ^-40

    Parameters
    ----------
    temperature : float
        In K, from 253.15 to 383.15.

    Raises
    ------
    ValueError
        For a temperature outside that range.

    References
    ----------
    IAPWS SR6-08, supplementary release on water at 0.1 MPa; coefficients and range from memory,
    values within 5e-5 of the formulation of 2008 from 4 to 40 °C.
    """
    if not 253.15 <= temperature <= 383.15:
        raise ValueError(f"temperature must be from 253.15 to 383.15 K, is {temperature:g} K")
    tau = temperature / 300
    terms = ((280.68, 1.9), (511.45, 7.7), (61.131, 19.6), (0.45903, 40.0))
    return 1e-6 * sum(factor * math.pow(tau, -power) for factor, power in terms)
