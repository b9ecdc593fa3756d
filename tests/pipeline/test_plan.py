from __future__ import annotations

import dataclasses
import json
import math

import pytest

from glidefit.designs import Goal
from glidefit.errors import InputError
from glidefit.pipeline.plan import plan
from glidefit.writing.json_files import results_text

INTERVAL = Goal(half_width=0.05, difference=math.nan, power=math.nan)


@pytest.fixture(scope="module")
def planned(finished_run):
    def call(out, *, run=finished_run, **options):
        given = {"condition": None, "quantity": "speed_um_s", "goal": INTERVAL, "seed": 1}
        return plan(run, out=out, **(given | options))

    return call


def test_files_of_a_plan(planned, tmp_path):
    made = planned(tmp_path / "out")
    assert made.condition == "wild type"
    assert sorted(p.name for p in (tmp_path / "out").iterdir()) == ["plan.html", "plan.json"]
    data = json.loads((tmp_path / "out/plan.json").read_text(encoding="utf-8"))
    assert (next(iter(data)), data["format"]) == ("format", "glidefit-plan/1")
    assert data["advice"] == list(made.advice)
    assert data["goal"] == {"half_width": 0.05, "difference": None, "power": None}
    # 9 numbers of days × 4 of chambers, and 9 with endless filaments.
    assert len(data["tables"][0]["cells"]) == 45
    before = (tmp_path / "out/plan.html").read_bytes()
    planned(tmp_path / "out")
    assert (tmp_path / "out/plan.html").read_bytes() == before


def test_present_design_is_narrower_than_its_interval_by_the_mean_of_chi(planned, tmp_path):
    """E[s]/σ with 2 degrees of freedom is √π/2; the components here are not clipped."""
    made = planned(tmp_path / "out")
    ratio = made.tables[0].present.value / made.components.half_width
    assert made.components.day > 0
    assert made.components.chamber > 0
    assert ratio == pytest.approx(math.pi**0.5 / 2, rel=1e-3)  # given with five digits


def test_interaction_comes_from_the_conditions_of_the_same_days(planned, tmp_path):
    goal = Goal(half_width=math.nan, difference=0.1, power=0.8)
    made = planned(tmp_path / "out", goal=goal)
    assert made.interaction.conditions == ("wild type", "loop mutant", "long neck")
    assert [t.name for t in made.tables] == ["same days", "different days"]


def test_condition_of_one_day(planned, tmp_path):
    with pytest.raises(InputError, match=r"filmed on one day.*Film it on a second day"):
        planned(tmp_path / "out", condition="wild type, quantum dots")


def test_first_condition_with_two_days_stands_in_for_a_control_without(
    planned, finished_study, tmp_path
):
    study = finished_study
    dots = dataclasses.replace(study.conditions[3], control=True)
    others = [dataclasses.replace(c, control=False) for c in study.conditions[:3]]
    study = dataclasses.replace(study, conditions=(dots, *others))
    (tmp_path / "results.json").write_text(results_text(study), encoding="utf-8")
    assert planned(tmp_path / "out", run=tmp_path / "results.json").condition == "wild type"


def test_quantity_without_a_value(planned, finished_study, tmp_path):
    study = finished_study
    conditions = [
        dataclasses.replace(
            c,
            estimates=c.estimates
            | {
                "motile_fraction": dataclasses.replace(
                    c.estimates["motile_fraction"], value=0.0, low=math.nan, high=math.nan
                )
            },
        )
        for c in study.conditions
    ]
    study = dataclasses.replace(study, conditions=tuple(conditions))
    (tmp_path / "results.json").write_text(results_text(study), encoding="utf-8")
    with pytest.raises(InputError, match="'wild type' has no value above 0"):
        planned(tmp_path / "out", run=tmp_path, quantity="motile_fraction")
