"""Numbers of a recipe that may differ by day and chamber."""

from __future__ import annotations

import pytest

from glidefit.errors import InputErrors
from glidefit.pipeline.recipe import read_recipe
from glidefit.steps.simulate import Spread

RECIPE = """
[[part]]
name = "unequal"
days = 2
{keys}

[[part.conditions]]
name = "a"
speed_um_s = 1
rotational_diffusion_rad2_s = 0.01
"""


def read(tmp_path, keys):
    path = tmp_path / "recipe.toml"
    path.write_text(RECIPE.format(keys=keys), encoding="utf-8")
    return read_recipe(path)[0].scenario


def test_a_number_for_each_day_and_chamber(tmp_path):
    scenario = read(
        tmp_path,
        "chambers_per_day = [1, 2]\nfilaments_in_field = [[20], [30.5, 10]]\n"
        "motile_fraction_spread = { day = 0.05 }",
    )
    assert scenario.chambers_per_day == (1, 2)
    assert scenario.filaments_in_field == ((20.0,), (30.5, 10.0))
    assert scenario.motile_fraction_spread == Spread(day=0.05)


def test_one_number_for_all(tmp_path):
    scenario = read(tmp_path, "chambers_per_day = 3\nfilaments_in_field = 12")
    assert (scenario.chambers_per_day, scenario.filaments_in_field) == (3, 12.0)


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ("chambers_per_day = 1.5", "whole number"),
        ('chambers_per_day = [1, "two"]', "whole number"),
        ("filaments_in_field = [[20], [true, 1]]", "a number"),
        ("chambers_per_day = [1, 2, 3]", "one for each of the days"),
    ],
)
def test_numbers_that_are_none(tmp_path, keys, said):
    with pytest.raises(InputErrors, match=said):
        read(tmp_path, keys)
