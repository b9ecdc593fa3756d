"""What is filmed is what was simulated."""

from __future__ import annotations

import csv

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.pipeline.recipe import read_recipe
from glidefit.pipeline.simulate import simulate
from glidefit.reading.video import read_facts, read_frames
from glidefit.settings import DetectSettings
from glidefit.steps.detect import detect_spots
from glidefit.steps.simulate import simulate_assay

RECIPE = """
[[part]]
name = "one"
seed = 3
n_frames = 4
frame_s = 0.2
exposure_s = 0.05
pixel_um = 0.2
field_um = [30.0, 20.0]
days = 1
chambers_per_day = 1
filaments_in_field = 6.0
localization_error_um = 0.0
video = { signal_to_noise = 30.0 }
conditions = [{ name = "a", speed_um_s = 0.8, rotational_diffusion_rad2_s = 0.01 }]
"""


@pytest.fixture
def filmed(tmp_path):
    recipe = tmp_path / "recipe.toml"
    recipe.write_text(RECIPE, encoding="utf-8")
    assert simulate(recipe, tmp_path / "sim") == 1
    [part] = read_recipe(recipe)
    rng = np.random.default_rng([part.scenario.seed, 0])
    [truth] = simulate_assay(part.scenario, rng).recordings
    return tmp_path / "sim/videos/a-2026-03-02-c1-f1.ome.tif", truth


def test_video_has_the_size_and_calibration_of_the_recipe(filmed):
    facts = read_facts(filmed[0])
    assert (facts.n_frames, facts.height_px, facts.width_px) == (4, 100, 150)
    assert (facts.pixel_um, facts.frame_s, facts.exposure_s) == (0.2, 0.2, 0.05)
    assert facts.notes == ()


def test_spots_are_where_the_truth_is(filmed):
    path, recording = filmed
    spots = detect_spots(
        read_frames(path), pixel_um=0.2, settings=DetectSettings(), where="the video"
    )
    t = recording.truth
    inside = (t.x_um > 0.5) & (t.x_um < 29) & (t.y_um > 0.5) & (t.y_um < 19)
    assert inside.sum() >= 12
    found = np.stack([spots.frame * 1e6, spots.x_um, spots.y_um], axis=1)
    for frame, x, y in zip(t.frame[inside], t.x_um[inside], t.y_um[inside], strict=True):
        nearest = np.linalg.norm(found - [frame * 1e6, x, y], axis=1).min()
        # 30 times the noise locates a spot of 0.15 µm to 0.005 µm; motion smears it by 0.04 µm.
        assert nearest < 0.05


def test_truth_lists_nominal_day_and_chamber_values(filmed, tmp_path):
    with (tmp_path / "sim/truth.csv").open(encoding="utf-8", newline="") as file:
        [row] = csv.DictReader(file)
    recording = filmed[1]
    assert (row["condition"], row["day"], row["chamber"]) == ("a", "2026-03-02", "c1")
    told = [float(row[f"{level}speed_um_s"]) for level in ("", "day_", "chamber_")]
    truth = [0.8, recording.day_truth.speed_um_s, recording.chamber_truth.speed_um_s]
    assert_allclose(told, truth, rtol=1e-5)  # six digits are written
