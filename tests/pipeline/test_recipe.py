"""Recipes are read as they are written."""

from __future__ import annotations

from pathlib import Path

import pytest

from glidefit.errors import InputError, InputErrors
from glidefit.kernels.synthetic_frames import CameraFaults
from glidefit.pipeline.recipe import Part, Video, read_recipe
from glidefit.steps.simulate import Scenario, ScenarioCondition, Spread

RECIPE = """
[[part]]
name = "all"
seed = 5
field_um = [40, 30.5]
days = 2
turning = "per_path"
chamber_prefix = "q"
speed_spread = { day = 0.05, filament = 0 }

[part.video]
signal_to_noise = 8
faults = { bleaching_rate = 0.1 }

[[part.conditions]]
name = "a"
control = true
speed_um_s = 1
rotational_diffusion_rad2_s = 0.01
motile_fraction = 0.5
"""


def test_recipe_that_is_not_there(tmp_path):
    with pytest.raises(InputError, match=r"nothere: there is no such file .* a recipe in TOML"):
        read_recipe(tmp_path / "nothere")


def test_every_kind_of_value(tmp_path):
    path = tmp_path / "recipe.toml"
    path.write_text(RECIPE, encoding="utf-8")
    [part] = read_recipe(path)
    assert part == Part(
        scenario=Scenario(
            name="all",
            seed=5,
            field_um=(40.0, 30.5),
            days=2,
            turning="per_path",
            speed_spread=Spread(day=0.05, filament=0.0),
            conditions=(
                ScenarioCondition(
                    name="a",
                    control=True,
                    speed_um_s=1.0,
                    rotational_diffusion_rad2_s=0.01,
                    motile_fraction=0.5,
                ),
            ),
        ),
        video=Video(signal_to_noise=8.0, faults=CameraFaults(bleaching_rate=0.1)),
        chamber_prefix="q",
    )
    assert type(part.scenario.conditions[0].speed_um_s) is float


def test_recipe_of_the_example_shows_parts_with_and_without_video():
    parts = read_recipe(Path(__file__).parents[2] / "example_tracks/recipe.toml")
    assert [part.video is None for part in parts] == [True, True, True, True, False]
    assert [part.filament_video is None for part in parts] == [True, True, True, False, True]


@pytest.mark.parametrize("text", ["part = 3", "part = []", "part = [3]", "[[part]]\nvideo = 3"])
def test_shapes_that_are_no_recipe(tmp_path, text):
    path = tmp_path / "recipe.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputErrors):
        read_recipe(path)
