from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.evidence import ChamberEvidence
from glidefit.settings import IntervalSettings
from glidefit.steps.uncertainty import combine, estimates
from glidefit.steps.uncertainty.borrowing import borrowed_spreads

COLUMNS = {"speed": 0, "rotational_diffusion": 1}
SETTINGS = IntervalSettings()
SPEED = "speed_um_s"


def load_benchmark():
    path = Path(__file__).parents[1] / "benchmarks" / "interval_step.py"
    spec = importlib.util.spec_from_file_location("interval_step_benchmark", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # dataclasses look themselves up there
    spec.loader.exec_module(module)
    return module


benchmark = load_benchmark()


def chambers(days, *, mean=0.8, turning=0.008):
    """Evidence of a condition from its relative speeds, a list of chambers for each day."""
    return [
        ChamberEvidence(
            day=f"day {d}",
            chamber=f"{c}",
            values=np.array([mean * value, turning * value]),
            influence=np.zeros((2, 2)),
            recording_of_track=np.zeros(2, dtype=np.int64),
        )
        for d, day in enumerate(days)
        for c, value in enumerate(day)
    ]


def borrowed(conditions, *, control=""):
    parts = {name: [(chambers(days), COLUMNS)] for name, days in conditions.items()}
    return borrowed_spreads(parts, control=control, settings=SETTINGS)


def spaced(n, sd):
    """n values of mean 1 and this standard deviation."""
    x = np.linspace(-1, 1, n)
    return list(1 + sd * x / x.std(ddof=1))


TEN = [[v] for v in spaced(10, 0.07)]
THREE = [[v] for v in spaced(3, 0.06)]


def test_days_are_borrowed_from_the_control_whatever_its_speed():
    """Student's t with the 9 degrees of freedom of the control, relative to the own mean."""
    found = borrowed({"mutant": THREE, "wild type": TEN}, control="wild type")
    own = found["mutant"][SPEED]
    assert_allclose(own.half_width, 0.8 * stats.t.ppf(0.975, 9) * 0.07 / 3**0.5, rtol=1e-9)
    assert (own.df, own.covers, own.sources) == (9, "days", ("wild type",))
    assert "borrowed from the 10 days of wild type" in own.method
    assert found["wild type"] == {}
    # Speed and D_r go together here, so that their ratio does not scatter and has nothing to lend.
    assert set(found["mutant"]) == {SPEED, "rotational_diffusion_rad2_s"}


def test_without_a_control_the_condition_of_most_days_lends():
    eight = [[v] for v in spaced(8, 0.05)]
    found = borrowed({"c": THREE, "a": eight, "b": TEN})
    assert found["c"][SPEED].sources == ("b",)
    assert borrowed({"c": THREE, "a": eight, "b": TEN}, control="a")["c"][SPEED].sources == ("a",)


@pytest.mark.parametrize(
    ("own", "lender"),
    [
        (spaced(3, 0.06), spaced(5, 0.07)),  # five days are not many
        (spaced(4, 0.06), spaced(7, 0.07)),  # nor are seven, beside four
        (spaced(3, 0.20), spaced(10, 0.07)),  # differs more from day to day
        (spaced(3, 0.005), spaced(10, 0.07)),  # differs less
        (spaced(3, 0.06), spaced(10, 0.80)),  # hardly resolved
    ],
    ids=["few", "not twice as many", "differs more", "differs less", "not resolved"],
)
def test_days_are_not_borrowed(own, lender):
    found = borrowed({"c": [[v] for v in own], "d": [[v] for v in lender]}, control="d")
    assert SPEED not in found["c"]


def test_conditions_of_the_same_few_days_do_not_pool_them():
    assert borrowed({"a": THREE, "b": THREE, "c": THREE}, control="a") == {
        "a": {},
        "b": {},
        "c": {},
    }


def test_chambers_of_one_day_are_pooled_over_the_conditions():
    found = borrowed({"a": [spaced(4, 0.05)], "b": [spaced(3, 0.04)], "c": [[1.0]]})
    own = found["a"][SPEED]
    square = (3 * 0.05**2 + 2 * 0.04**2) / 5
    assert_allclose(own.half_width, 0.8 * stats.t.ppf(0.975, 5) * (square / 4) ** 0.5, rtol=1e-9)
    assert (own.df, own.covers, own.sources) == (5, "chambers", ("b",))
    assert found["c"] == {}  # one chamber has shown nothing of itself


def test_one_day_covers_other_days_with_the_variance_of_days_borrowed():
    ten = [[v - 0.04, v + 0.04] for v in spaced(10, 0.07)]
    found = borrowed({"c": [spaced(4, 0.05)], "d": ten}, control="d")
    assert found["c"][SPEED].covers == "days"
    assert found["c"][SPEED].df == 9
    evidence = chambers([spaced(4, 0.05)])
    combined = combine(evidence, settings=SETTINGS, rng=np.random.default_rng(1))
    one = estimates(combined, COLUMNS, settings=SETTINGS, borrowed=found["c"])[SPEED]
    assert_allclose([one.low, one.high], 0.8 + found["c"][SPEED].half_width * np.array([-1, 1]))
    assert (one.covers, one.method) == ("days", found["c"][SPEED].method)


def test_a_chamber_without_a_value_is_left_out():
    with_gap = chambers(THREE) + chambers([[1.0]])
    with_gap[-1].values[:] = np.nan
    parts = {"c": [(with_gap, COLUMNS)], "d": [(chambers(TEN), COLUMNS)]}
    found = borrowed_spreads(parts, control="d", settings=SETTINGS)["c"][SPEED]
    assert found == borrowed({"c": THREE, "d": TEN}, control="d")["c"][SPEED]


@pytest.mark.parametrize(
    "case",
    [
        "3 x 2",
        "1 x 2 beside two conditions",
        "3 x 2, control 10 x 2, day x condition",
        "3 x 1, control 10 x 3",
        "1 x 4, control 10 x 2",
    ],
)
def test_small_version_of_the_benchmark(case):
    """300 experiments of each; outside the binomial 99.9 % range of 95 % is a failure."""
    n = 300
    rows = np.array(
        [
            benchmark.experiment(benchmark.CASES[case], np.random.default_rng([4, i]))
            for i in range(n)
        ],
        dtype=float,
    )
    held, width, shared, _, own_width = np.moveaxis(rows[:, :2], 2, 0)
    low, high = stats.binom.ppf([0.0005, 0.9995], n, 0.95)
    assert np.all((held.sum(axis=0) >= low) & (held.sum(axis=0) <= high))
    if "control" in case or "beside" in case:
        assert np.all(shared.mean(axis=0) > 0.5)
        if not case.startswith("1 x 4"):  # which covers more than its own interval does
            assert np.all(np.median(width, axis=0) < 0.8 * np.median(own_width, axis=0))
    else:
        assert not shared.any()
        assert_allclose(np.median(width, axis=0), np.median(own_width, axis=0), rtol=0.03)
