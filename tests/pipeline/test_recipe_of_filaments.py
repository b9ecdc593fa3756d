"""README.md shows every key of a filament video, and what it shows can be read."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path

from glidefit.kernels.filament_optics import FilmFaults
from glidefit.pipeline.recipe import FilamentFilming, read_recipe

README = Path(__file__).parents[2] / "README.md"


def test_every_key_of_a_filament_video_stands_in_the_readme(tmp_path):
    text = README.read_text(encoding="utf-8")
    [block] = re.findall(r"```toml\n(\[part\.filament_video\].*?)```", text, re.DOTALL)
    for kind in (FilamentFilming, FilmFaults):
        for field in dataclasses.fields(kind):
            assert re.search(rf"^(\[.*\.)?{field.name}\b", block, re.MULTILINE), field.name
    recipe = tmp_path / "recipe.toml"
    recipe.write_text(
        '[[part]]\nname = "one"\nconditions = [{ name = "a", speed_um_s = 0.8, '
        f"rotational_diffusion_rad2_s = 0.01 }}]\n{block}",
        encoding="utf-8",
    )
    [part] = read_recipe(recipe)
    assert part.filament_video.faults.debris == 30
    # Where a key of the block is no nuisance, it stands there with its default.
    plain = dataclasses.replace(
        part.filament_video, faults=FilmFaults(), bundled_share=0.0, detach_rate_per_s=0.0
    )
    assert plain == FilamentFilming()
