"""The arithmetic without branches, against the mathematical library of Python."""

import math

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from glidefit.kernels import heading_filter as hf


@given(st.floats(-1000, 1000))
def test_direction_is_cosine_and_sine(angle):
    cos, sin = hf.direction(angle)
    # Bringing the angle back into one turn leaves its own rounding, 1e-13 of 1000.
    assert abs(cos - math.cos(angle)) < 3e-13
    assert abs(sin - math.sin(angle)) < 3e-13


@given(st.floats(-32, 32))
def test_exponential(x):
    # 64 times the rounding of one product; and, far out, the end of the series.
    tolerance = 3e-14 if abs(x) < 2 else 3e-8
    assert abs(hf.exp(x) / math.exp(x) - 1) < tolerance


def test_exponential_stands_still_far_out():
    assert hf.exp(1e300) == hf.exp(32.0)
    assert hf.exp(-1e300) == hf.exp(-32.0)


def test_lanes_do_not_know_of_each_other():
    rng = np.random.default_rng(2)
    model = np.array([0.8, 0.006, 0.016, 0.05, 0.001, 0.006, 0.001, 0.002, 1.0, 0.2])
    w = np.zeros(hf.N_WORK)
    w[2 * hf.LANES :][: hf.LANES] = rng.uniform(-3, 3, hf.LANES)
    w[3 * hf.LANES :][: hf.LANES] = rng.uniform(0.5, 1, hf.LANES)
    for variance, number in ((0.05, 14), (0.006, 17), (0.001, 19)):
        w[number * hf.LANES :][: hf.LANES] = variance
    w[hf.DARK :][: hf.LANES] = rng.uniform(0.1, 0.5, hf.LANES)
    w[hf.ERROR :][: hf.LANES] = 0.001
    alone = [np.repeat(w.reshape(-1, hf.LANES)[:, lane], hf.LANES) for lane in range(hf.LANES)]
    for v in (w, *alone):
        hf.begin(v, model)
        hf.advance(v, model)
        hf.observe(v, model)
    for lane, v in enumerate(alone):
        np.testing.assert_allclose(
            w.reshape(-1, hf.LANES)[:, lane], v.reshape(-1, hf.LANES)[:, 0], rtol=1e-12, atol=1e-15
        )
