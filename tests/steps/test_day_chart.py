"""The day chart: order of days, days out of control, and who is told."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.control_chart import BEYOND, UNLIKE
from glidefit.results import ConditionPair
from glidefit.steps.day_chart import (
    day_charts,
    natural_order,
    with_pair_problems,
    with_problems,
)

SPEEDS = (0.80, 0.79, 0.82, 0.81, 0.78, 0.62, 0.80, 0.79, 0.81, 0.82)


@pytest.fixture(scope="module")
def made(finished_study):
    base = finished_study.conditions[0]

    def make(name, speeds, *, control=False, first=1):
        chambers = tuple(
            dataclasses.replace(
                base.chambers[0], day=f"day {n}", chamber=c, speed_um_s=float(v * side)
            )
            for n, v in enumerate(speeds, start=first)
            for c, side in (("a", 0.99), ("b", 1.01))
        )
        return dataclasses.replace(
            base, condition=name, control=control, chambers=chambers, problems=()
        )

    return make


def test_a_day_out_of_control_is_found(made):
    (chart,) = day_charts([made("wt", SPEEDS, control=True)])
    assert [d.day for d in chart.days] == [f"day {n}" for n in range(1, 11)]
    assert [d.day for d in chart.days if d.signals] == ["day 6"]
    assert chart.days[5].signals == (UNLIKE, BEYOND)
    assert_allclose([d.value for d in chart.days], SPEEDS)
    assert_allclose(chart.centre, np.delete(SPEEDS, 5).mean())
    assert chart.low < 0.78
    assert chart.high > 0.82
    (problem,) = chart.problems
    assert problem.startswith("day 6 is out of control: wt ran at 0.62 µm/s, 23% below its centre")


def test_conditions_of_that_day_are_told_and_others_are_not(made):
    control = made("wt", SPEEDS, control=True)
    that, other = made("that", SPEEDS[:2], first=6), made("other", SPEEDS[:2], first=1)
    charts = day_charts([control, that, other])
    told = with_problems([control, that, other], charts)
    assert [len(c.problems) for c in told] == [1, 1, 0]
    assert told[1].problems[0].startswith("On day 6 the control was out of control (wt ran at")
    pairs = [
        ConditionPair(
            condition=name,
            reference="wt",
            paired=True,
            covers="days",
            shared_days=2,
            days=2,
            reference_days=10,
            note="",
        )
        for name in ("that", "other")
    ]
    found = with_pair_problems(pairs, [control, that, other], charts)
    assert found[0].problems == ("It rests on day 6 too, when the control was out of control.",)
    assert found[1].problems == ()


def test_a_condition_that_is_no_control_has_a_chart_but_judges_no_other(made):
    condition, other = made("mutant", SPEEDS), made("other", SPEEDS[:2], first=6)
    charts = day_charts([condition, other])
    assert [c.condition for c in charts] == ["mutant"]
    assert len(charts[0].problems) == 1
    assert [c.problems for c in with_problems([condition, other], charts)] == [(), ()]


def test_four_days_are_no_chart(made):
    assert day_charts([made("wt", SPEEDS[:4], control=True)]) == ()


def test_days_come_in_natural_order():
    labels = ["day 10", "day 2", "2026-03-02", "2026-11-01", "2026-03-10", "day b", "x"]
    assert sorted(labels, key=natural_order) == [
        *("2026-03-02", "2026-03-10", "2026-11-01"),
        *("day 2", "day 10", "day b", "x"),
    ]
