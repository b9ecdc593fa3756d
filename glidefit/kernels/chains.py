"""Paths and filaments as worm-like chains: length over which a direction is kept.

Two lengths describe how straight a gliding path in the plane is, a factor of 2 apart, and both
are in use. With s the length along the path and Δθ the change of heading over it:

- persistence length, ``speed / rotational_diffusion``: ⟨cos Δθ⟩ = exp(-s / length);
- path persistence length P, ``speed / (2 rotational_diffusion)``, the worm-like chain's:
  ⟨cos Δθ⟩ = exp(-s / 2P) in the plane, exp(-s / P) in space.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from glidefit.kernels.active_brownian import bend

Floats = NDArray[np.float64]

BOLTZMANN = 1.380649e-23
"""Boltzmann constant in J/K, exact by the definition of the kelvin (SI of 2019)."""


def _chain(contour_length: Floats, heading_length: float) -> Floats:
    if np.any(contour_length < 0):
        raise ValueError(f"contour lengths must be >= 0 µm, one is {contour_length.min():g} µm")
    if heading_length <= 0:
        raise ValueError("a persistence length must be > 0 µm")
    return contour_length**2 * bend(contour_length / heading_length)


def mean_square_end_to_end_flat(
    contour_length: Floats, *, path_persistence_length: float
) -> Floats:
    """Mean square distance of the ends of a worm-like chain that lies in the plane.

    ``4 P L (1 - (2P/L) (1 - exp(-L/2P)))``

    Parameters
    ----------
    contour_length : (n,) array
        L in µm, all >= 0.
    path_persistence_length : float
        P in µm, > 0; infinity is a straight rod.

    Returns
    -------
    (n,) array
        In µm²; relative error below 1e-12.

    Raises
    ------
    ValueError
        For a negative contour length or a persistence length that is not positive.
    """
    return _chain(contour_length, 2 * path_persistence_length)


def mean_square_end_to_end_space(contour_length: Floats, *, persistence_length: float) -> Floats:
    """Mean square distance of the ends of a worm-like chain in three dimensions.

    ``2 P L (1 - (P/L) (1 - exp(-L/P)))``; parameters, result and errors as in
    `mean_square_end_to_end_flat`. Fitted to a path in the plane it returns 2P.
    """
    return _chain(contour_length, persistence_length)


def _forgetting_length(speed: float, rotational_diffusion: float) -> float:
    if speed < 0 or rotational_diffusion < 0:
        raise ValueError(
            f"speed and rotational_diffusion must be >= 0, are {speed:g} µm/s and "
            f"{rotational_diffusion:g} rad²/s"
        )
    return speed / rotational_diffusion if rotational_diffusion > 0 else math.inf


def persistence_length(*, speed: float, rotational_diffusion: float) -> float:
    """Persistence length ``speed / rotational_diffusion`` in µm: ⟨cos Δθ⟩ = exp(-s / length).

    From µm/s and rad²/s; infinite for a rotational diffusion of 0.

    Raises
    ------
    ValueError
        For a negative speed or rotational diffusion.
    """
    return _forgetting_length(speed, rotational_diffusion)


def path_persistence_length(*, speed: float, rotational_diffusion: float) -> float:
    """Path persistence length P = ``speed / (2 rotational_diffusion)`` in µm.

    The worm-like chain's length in the plane, ⟨cos Δθ⟩ = exp(-s / 2P). Arguments and errors as in
    `persistence_length`, of which it is one half.
    """
    return _forgetting_length(speed, rotational_diffusion) / 2


def filament_persistence_length(flexural_rigidity: float, *, temperature: float) -> float:
    """Thermal persistence length of a filament from its stiffness, ``EI / kT``, in µm.

    Parameters
    ----------
    flexural_rigidity : float
        EI in N m², > 0.
    temperature : float
        In K, > 0.

    Raises
    ------
    ValueError
        Unless both are positive.

    References
    ----------
    Gittes et al., J. Cell Biol. 120, 923 (1993).
    """
    if flexural_rigidity <= 0 or temperature <= 0:
        raise ValueError(
            f"flexural_rigidity and temperature must be > 0, are {flexural_rigidity:g} N m² and "
            f"{temperature:g} K"
        )
    return flexural_rigidity / (BOLTZMANN * temperature) * 1e6
