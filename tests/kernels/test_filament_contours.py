"""Light of points in pixels and overlaps, against slow versions."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.kernels.filament_contours import add_points, on_path, overlapping
from glidefit.kernels.synthetic_frames import spot_light


def test_points_of_a_path_between_and_beyond_its_vertices():
    x, y = np.array([0.0, 1.0, 1.0]), np.array([0.0, 0.0, 1.0])
    assert_allclose(on_path(x, y, 1.0, 0.25, 0.0), (0.25, 0, 1, 0))
    assert_allclose(on_path(x, y, 1.0, 1.5, 0.0), (1, 0.5, 0, 1))
    assert_allclose(on_path(x, y, 1.0, -0.5, 0.0), (-0.5, 0, 1, 0))
    assert_allclose(on_path(x, y, 1.0, 2.5, 0.0), (1, 1.5, 0, 1))
    # To the right of someone who goes to the right of the screen is below.
    assert_allclose(on_path(x, y, 1.0, 0.25, 0.1), (0.25, 0.1, 1, 0))
    assert_allclose(on_path(x, y, 1.0, 1.5, 0.1), (0.9, 0.5, 0, 1))


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000), st.floats(0.6, 2.5))
def test_points_shine_as_spots_do(seed, spread):
    rng = np.random.default_rng(seed)
    x, y = rng.uniform(-12, 42, 30), rng.uniform(-12, 32, 30)
    photons = rng.uniform(0, 100, 30)
    image = np.zeros((20, 30))
    add_points(image, x, y, photons, spread)
    slow = spot_light(
        x[:, None], y[:, None], photons=photons, shape_px=(20, 30), psf_um=spread, pixel_um=1.0
    )
    # Both cut a point off where less than 1e-6 of it is left.
    assert_allclose(image, slow, atol=100 * 3e-6)


def test_a_point_loses_no_light():
    image = np.zeros((31, 31))
    add_points(image, np.array([15.3]), np.array([14.8]), np.array([1_000.0]), 1.3)
    assert image.sum() == pytest.approx(1_000, rel=1e-5)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10_000))
def test_overlaps_against_all_pairs_of_points(seed):
    rng = np.random.default_rng(seed)
    counts = rng.integers(1, 12, 8)
    offset = np.concatenate([[0], np.cumsum(counts)])
    x, y = (
        np.concatenate([rng.uniform(0, 20) + np.arange(n) * rng.normal() for n in counts])
        for _ in range(2)
    )
    shown = rng.random(8) < 0.8
    found = overlapping(offset, shown, x, y, 0.8)
    owner = np.repeat(np.arange(8), counts)
    near = np.hypot(np.subtract.outer(x, x), np.subtract.outer(y, y)) <= 0.8
    near &= (owner[:, None] != owner) & shown[owner][:, None] & shown[owner]
    assert_array_equal(found, [near[owner == k].any() for k in range(8)])
