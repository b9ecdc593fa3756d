"""F6: NIST/ITL Statistical Reference Datasets, nonlinear regression.

Certified values verified: digits read from the NIST files shipped in the lmfit 1.3.4 source
archive. They go through the same front that fits the mean squared displacement.
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.least_squares import fit_least_squares

DATA = Path(__file__).parent / "data"


def saturation(x, b1, b2):
    return b1 * -np.expm1(-b2 * x)


def mgh09(x, b1, b2, b3, b4):
    return b1 * (x**2 + x * b2) / (x**2 + x * b3 + b4)


def thurber(x, b1, b2, b3, b4, b5, b6, b7):
    return (b1 + b2 * x + b3 * x**2 + b4 * x**3) / (1 + b5 * x + b6 * x**2 + b7 * x**3)


def rat43(x, b1, b2, b3, b4):
    return b1 / (1 + np.exp(b2 - b3 * x)) ** (1 / b4)


MODELS = {
    "Misra1a": saturation,
    "BoxBOD": saturation,
    "MGH09": mgh09,
    "Thurber": thurber,
    "Rat43": rat43,
}


def rows(name):
    lines = (DATA / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


@pytest.mark.filterwarnings("ignore:overflow encountered:RuntimeWarning")
@pytest.mark.parametrize("start", ["start1", "start2"])
@pytest.mark.parametrize("problem", MODELS)
def test_certified_values_are_reached_from_both_starts(problem, start):
    data = rows(f"nist_{problem.lower()}.csv")
    x = np.array([float(row["x"]) for row in data])
    y = np.array([float(row["y"]) for row in data])
    certified = {r["parameter"]: r for r in rows("nist_certified.csv") if r["problem"] == problem}
    names = [name for name in certified if name.startswith("b")]

    fit = fit_least_squares(
        lambda p: MODELS[problem](x, **p) - y, {n: float(certified[n][start]) for n in names}
    )

    assert fit.problem == ""
    for name in names:
        assert_allclose(fit.values[name], float(certified[name]["certified_value"]), rtol=1e-6)
        assert_allclose(fit.errors[name], float(certified[name]["certified_sd"]), rtol=1e-4)
    rss = float(certified["RSS"]["certified_value"])
    assert_allclose(fit.residual @ fit.residual, rss, rtol=1e-8)
