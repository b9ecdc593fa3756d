"""Comparisons and control charts against published numbers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.control_chart import D2, c4
from glidefit.kernels.multiple import holm
from glidefit.kernels.paired import borrowed_difference, welch_difference
from glidefit.kernels.permutation import label_permutations, sign_flips

DATA = Path(__file__).parent / "data"


def mouse_days():
    lines = (DATA / "mouse_survival.csv").read_text().splitlines()
    rows = [line.split(",") for line in lines if not line.startswith("#")]
    return [
        np.array([float(days) for group, days in rows if group == name])
        for name in ("treated", "control")
    ]


def test_mouse_survival():
    # Efron & Tibshirani, An Introduction to the Bootstrap (1993), table 2.1 (data verified in
    # copies); 3184 of all 11440 splits differ at least as much, enumerated; t by other programs.
    treated, control = mouse_days()
    assert (len(treated), len(control)) == (7, 9)
    found = label_permutations(treated, control, rng=np.random.default_rng(0))
    assert found.exact
    assert_allclose(found.p_value, 3184 / 11440, rtol=1e-12)
    assert_allclose(treated.mean() - control.mean(), 30.634921, rtol=1e-7)
    assert_allclose(welch_difference(treated, control).p_value, 0.3155, atol=5e-5)
    assert_allclose(borrowed_difference(treated, control).p_value, 0.2812, atol=5e-5)


@pytest.mark.parametrize(("n", "smallest"), [(3, 0.10), (4, 0.0286), (5, 0.0079)])
def test_smallest_p_of_equal_groups(n, smallest):
    # 2 / C(2n, n): counting.
    found = label_permutations(np.arange(n) + 9.0, np.arange(n) + 0.0, rng=np.random.default_rng(0))
    assert_allclose(found.smallest, smallest, atol=5e-5)
    assert_allclose(found.p_value, found.smallest)


@pytest.mark.parametrize(("n", "smallest"), [(3, 0.25), (5, 0.0625), (6, 0.03125)])
def test_smallest_p_of_pairs(n, smallest):
    # 2 / 2^n: counting. Five pairs can never reject at 0.05.
    assert sign_flips(np.ones(n), rng=np.random.default_rng(0)).smallest == smallest


def test_holm_examples():
    # Same in R's p.adjust; the 15 values: Benjamini & Hochberg, J. R. Stat. Soc. B 57, 289 (1995),
    # where Holm's method rejects three at 0.05 (list verified in copies).
    assert_allclose(holm(np.array([0.01, 0.04, 0.03, 0.005])), [0.03, 0.06, 0.06, 0.02])
    texts = "0.0001 0.0004 0.0019 0.0095 0.0201 0.0278 0.0298 0.0344 0.0459 0.3240 0.4262 0.5719 "
    adjusted = holm(np.array(list(map(float, (texts + "0.6528 0.7590 1.0").split()))))
    assert_allclose(adjusted[:4], [0.0015, 0.0056, 0.0247, 0.1140], atol=5e-5)
    assert np.sum(adjusted < 0.05) == 3


def test_factors_of_control_charts():
    # Tables of ASTM E2587 and of every text on control charts, from memory; closed forms.
    for n, value in ((2, 0.7979), (3, 0.8862), (5, 0.9400), (10, 0.9727), (25, 0.9896)):
        assert_allclose(c4(n), value, atol=5e-5)
    assert_allclose(D2, 1.128, atol=5e-4)
    assert_allclose(3 / D2, 2.66, atol=5e-3)
