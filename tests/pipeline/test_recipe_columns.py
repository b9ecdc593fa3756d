"""Columns of the sheet, days and their mishaps in a recipe."""

from __future__ import annotations

import csv

import pytest

from glidefit.errors import InputErrors
from glidefit.pipeline.recipe import read_recipe
from glidefit.pipeline.simulate import simulate

RECIPE = """
[[part]]
name = "series"
first_day = "2026-05-04"
days = 2
day_speed_factors = [1, 0.5]
chambers_per_day = 1
filaments_in_field = 5
n_frames = 10
speed_spread = { day = 0 }

[[part.conditions]]
name = "a"
speed_um_s = 1
rotational_diffusion_rad2_s = 0.01
columns = {columns}
"""


def written(tmp_path, columns="{ atp_uM = 12.5, construct = 'short' }", old="", new=""):
    path = tmp_path / "recipe.toml"
    path.write_text(RECIPE.replace("{columns}", columns).replace(old, new), encoding="utf-8")
    return path


def rows(path):
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_columns_days_and_a_day_that_went_wrong(tmp_path):
    simulate(written(tmp_path), tmp_path / "out")
    sheet, truth = (rows(tmp_path / "out" / name) for name in ("assay.csv", "truth.csv"))
    assert [r["day"] for r in sheet] == ["2026-05-04", "2026-05-05"]
    assert {(r["atp_uM"], r["construct"]) for r in sheet} == {("12.5", "short")}
    speeds = [float(r["day_speed_um_s"]) for r in truth]
    assert speeds == pytest.approx([1, 0.5])


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"columns": "{ day = 1 }"}, "a column that the sheet does not have itself"),
        ({"columns": "{ atp_uM = [1] }"}, "a number or text"),
        ({"columns": "3"}, "columns with their values"),
        ({"old": "[1, 0.5]", "new": "[1]"}, "a number for each of the days"),
        ({"old": "[1, 0.5]", "new": "[1, 0]"}, "must be > 0"),
        ({"old": "2026-05-04", "new": "4 May"}, "isoformat"),
    ],
)
def test_what_is_wrong_is_said(tmp_path, change, said):
    with pytest.raises(InputErrors, match=said):
        read_recipe(written(tmp_path, **change))
