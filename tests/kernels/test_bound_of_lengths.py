"""The bound of many tracks against the sum of the bounds of each."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.bound import track_information
from glidefit.kernels.bound_of_lengths import (
    LENGTH_PARAMETERS,
    information_of_lengths,
    own_speed_errors,
)

CASES = {
    "kinesin": {
        "speed": 0.8,
        "rotational_diffusion": 0.008,
        "localization_error": 0.03,
        "longitudinal_diffusion": 0.003,
    },
    "actin": {
        "speed": 4.0,
        "rotational_diffusion": 0.2,
        "localization_error": 0.2,
        "longitudinal_diffusion": 0.05,
        "speed_spread": 0.4,
    },
    "straight": {"speed": 0.8, "rotational_diffusion": 0.0, "localization_error": 0.03},
}
FRAME_S = 0.3


def summed(lengths, **case):
    p = len(LENGTH_PARAMETERS)
    return sum(track_information(np.arange(n) * FRAME_S, **case)[:p, :p] for n in lengths)


def relative(information, case):
    """In units in which each parameter is one of its bound."""
    scale = np.sqrt(np.diag(case))
    return information / np.outer(scale, scale)


@pytest.mark.parametrize("exposure_s", [0.0, 0.1, 0.3])
@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("length", [3, 4, 8])
def test_information_of_one_length_is_that_of_a_track(name, length, exposure_s):
    """Lengths of the grid, where nothing is read between: only rounding is left."""
    one = {**CASES[name], "exposure_s": exposure_s}
    found = information_of_lengths(np.full(7, length), frame_s=FRAME_S, **one)
    expected = summed([length] * 7, **one)
    assert_allclose(relative(found, expected), relative(expected, expected), atol=1e-7)


@pytest.mark.parametrize("name", CASES)
def test_information_between_the_lengths_of_the_grid(name):
    """All lengths of 3 to 90: the straight lines between are within 2 %."""
    lengths = np.arange(3, 91)
    found = information_of_lengths(lengths, frame_s=FRAME_S, **CASES[name])
    expected = summed(lengths, **CASES[name])
    assert_allclose(relative(found, expected), relative(expected, expected), atol=0.02)


def test_very_long_tracks_tell_as_much_as_shorter_ones_in_a_row():
    case = CASES["actin"] | {"localization_error": 0.04}
    found = information_of_lengths(np.array([1000]), frame_s=FRAME_S, **case)
    expected = summed([1000], **case)
    # One place and orientation too many is 1/400 of what is known of D_r.
    assert_allclose(relative(found, expected), relative(expected, expected), atol=0.01)


def test_tracks_of_two_positions_tell_nothing():
    assert not information_of_lengths(np.array([1, 2]), frame_s=1.0, **CASES["kinesin"]).any()
    both = information_of_lengths(np.array([2, 5]), frame_s=1.0, **CASES["kinesin"])
    alone = information_of_lengths(np.array([5]), frame_s=1.0, **CASES["kinesin"])
    assert_allclose(both, alone, rtol=1e-12)


def test_own_speed_is_known_as_from_the_positions_along():
    """Of a track that does not turn: across it, nothing is told of the speed."""
    case = CASES["straight"] | {"exposure_s": 0.1, "longitudinal_diffusion": 0.003}
    lengths = np.array([2, 3, 8, 40, 90])
    of_track = [track_information(np.arange(n) * FRAME_S, **case)[0, 0] for n in lengths[1:]]
    del case["speed"], case["rotational_diffusion"]
    found = own_speed_errors(lengths, frame_s=FRAME_S, **case)
    assert found[0] == np.inf
    assert_allclose(found[1:], np.array(of_track) ** -0.5, rtol=2e-3)
