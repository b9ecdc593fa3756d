"""`glidefit simulate`: files, the same bytes from the same seed, and wrong recipes."""

from __future__ import annotations

import csv

import numpy as np
import pytest
import tifffile
from numpy.testing import assert_allclose

VIDEO = "videos/dots-2026-03-02-q1-f1.ome.tif"


def test_files_of_a_simulation(simulated, desk):
    names = {p.relative_to(simulated).as_posix() for p in simulated.rglob("*") if p.is_file()}
    assert names - {"tables.csv", "videos.csv"} == {
        "assay.csv",
        "truth.csv",
        "recipe.toml",
        "tracks/control-2026-03-02-c1-f1.csv",
        "tracks/control-2026-03-03-c1-f1.csv",
        "tracks/mutant-2026-03-02-c2-f1.csv",
        "tracks/mutant-2026-03-03-c2-f1.csv",
        VIDEO,
        "videos/dots-2026-03-02-q2-f1.ome.tif",
    }


def test_same_seed_same_bytes(simulated, desk):
    desk.write("recipe.toml", (simulated / "recipe.toml").read_text(encoding="utf-8"))
    said = desk.glidefit("simulate", "recipe.toml", "--out", "again")
    assert (said.code, said.err) == (0, "")
    assert said.out == "again/assay.csv: 6 recordings; the truth is in again/truth.csv.\n"
    again = desk.files("again")
    assert again.keys() >= {VIDEO, "assay.csv", "truth.csv"}
    for name, content in again.items():
        assert content == (simulated / name).read_bytes(), name


def test_another_seed_is_another_assay_with_other_camera_noise(simulated, desk):
    desk.write("recipe.toml", (simulated / "recipe.toml").read_text(encoding="utf-8"))
    desk.glidefit("simulate", "recipe.toml", "--out", "other", "--seed", "8")
    other = desk.files("other")
    for name in other.keys() - {"assay.csv", "recipe.toml"}:
        assert other[name] != (simulated / name).read_bytes(), name
    first = [tifffile.imread(f / VIDEO)[:, 0] for f in (simulated, desk.folder / "other")]
    difference = np.subtract(*first, dtype=float)
    assert np.mean(difference == 0) < 0.5  # the same noise would cancel where no spot is


def test_simulation_of_a_folder_replaces_it(simulated, desk):
    for name in ("recipe.toml", "truth.csv", "assay.csv"):
        desk.write(f"sim/{name}", (simulated / name).read_text(encoding="utf-8"))
    assert desk.glidefit("simulate", "sim/recipe.toml", "--out", "sim").code == 0
    assert VIDEO in desk.files("sim")


@pytest.mark.parametrize("other", ["notes.txt", "films/a.tif"])
def test_folder_with_something_else_is_left_alone(simulated, desk, other):
    for name in ("recipe.toml", "truth.csv", "assay.csv"):
        desk.write(f"sim/{name}", (simulated / name).read_text(encoding="utf-8"))
    desk.write(f"sim/{other}", "")
    before = desk.files()
    said = desk.glidefit("simulate", "sim/recipe.toml", "--out", "sim")
    assert (said.code, said.out) == (3, "")
    assert said.err.startswith("Error: sim: the folder is not empty and holds no earlier output ")
    assert desk.files() == before


def test_own_sheet_beside_a_recipe_is_left_alone(simulated, desk):
    desk.write("sim/recipe.toml", (simulated / "recipe.toml").read_text(encoding="utf-8"))
    desk.write("sim/assay.csv", "of somebody")
    assert desk.glidefit("simulate", "sim/recipe.toml", "--out", "sim").code == 3
    assert desk.files("sim")["assay.csv"] == b"of somebody"


def test_video_carries_its_calibration(simulated):
    with tifffile.TiffFile(simulated / VIDEO) as file:
        text = file.ome_metadata
        assert file.series[0].shape == (12, 125, 125)
    assert 'PhysicalSizeX="0.16"' in text
    assert 'TimeIncrement="0.5"' in text
    assert text.count('ExposureTime="0.1"') == 12


def test_truth_of_every_recording(simulated):
    with (simulated / "truth.csv").open(encoding="utf-8", newline="") as file:
        truth = list(csv.DictReader(file))
    with (simulated / "assay.csv").open(encoding="utf-8", newline="") as file:
        sheet = list(csv.DictReader(file))
    place = ("condition", "day", "chamber")
    assert [[r[k] for k in place] for r in truth] == [[r[k] for k in place] for r in sheet]
    assert_allclose([float(r["speed_um_s"]) for r in truth], [0.8, 0.5, 0.8, 0.5, 0.8, 0.8])


RECIPE = """
[[part]]
name = "one"
n_frames = 5
conditions = [{ name = "a", speed_um_s = 0.8, rotational_diffusion_rad2_s = 0.01 }]
"""


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        (
            "n_frames = 5",
            "n_frame = 5",
            "part 1: 'n_frame' is no key of a recipe; expected a known key. Did you mean "
            "'n_frames'?",
        ),
        (
            "n_frames = 5",
            "n_frames = 'five'",
            "part 1, n_frames: the value is 'five'; expected a whole number. Correct the recipe.",
        ),
        (
            "n_frames = 5",
            "frame_s = inf",
            "part 1, frame_s: the value is inf; expected a number. Correct the recipe.",
        ),
        (
            "n_frames = 5",
            "field_um = [80.0]",
            "part 1, field_um: the value is [80.0]; expected 2 numbers in brackets. Correct the "
            "recipe.",
        ),
        (
            "n_frames = 5",
            "turning = 'left'",
            "part 1, turning: the value is 'left'; expected 'per_time' or 'per_path'. Correct the "
            "recipe.",
        ),
        (
            "n_frames = 5",
            "seed = -1",
            "part 1: seed must be >= 0; expected values that can be simulated. Correct it.",
        ),
        (
            "n_frames = 5",
            "video = { psf_um = 0.0 }",
            "part 1, video: signal_to_noise and psf_um must be > 0; expected values that can be "
            "simulated. Correct it.",
        ),
        (
            "n_frames = 5",
            "video = { faults = { unevenness = 2.0 } }",
            "part 1, video.faults: unevenness and hot_pixel_share must be 0 to 1; expected values "
            "that can be simulated. Correct it.",
        ),
        (
            "speed_um_s = 0.8",
            "speed_um_s = 0",
            "part 1, condition 1: a: speed_um_s must be > 0; use motile_fraction=0 for none; "
            "expected values that can be simulated. Correct it.",
        ),
    ],
)
def test_wrong_recipe(desk, old, new, told):
    desk.write("recipe.toml", RECIPE.replace(old, new))
    said = desk.glidefit("simulate", "recipe.toml", "--out", "sim")
    assert (said.code, said.out) == (3, "")
    assert said.err == f"Error: recipe.toml, {told}\n"
    assert not (desk.folder / "sim").exists()


def test_everything_wrong_in_a_recipe_is_listed_at_once(desk):
    two = RECIPE.replace("n_frames", "nframes") + RECIPE.replace("name = ", "nam = ", 1)
    desk.write("recipe.toml", "seed = 3\n" + two)
    said = desk.glidefit("simulate", "recipe.toml", "--out", "sim")
    assert said.code == 3
    first, *lines = said.err.splitlines()
    assert first == "3 errors:"
    assert [line.partition(": ")[0] for line in lines] == [
        "- recipe.toml",
        "- recipe.toml, part 1",
        "- recipe.toml, part 2",
    ]


def test_file_without_parts(desk):
    desk.write("recipe.toml", "")
    said = desk.glidefit("simulate", "recipe.toml", "--out", "sim")
    assert said.code == 3
    assert said.err == (
        "Error: recipe.toml: it has no [[part]]; expected a recipe: one [[part]] for each "
        "scenario. Start from the recipe of the example.\n"
    )


def test_parts_that_film_the_same_chamber(desk):
    desk.write("recipe.toml", RECIPE + RECIPE)
    said = desk.glidefit("simulate", "recipe.toml", "--out", "sim")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: recipe.toml: two parts film 'a-2026-03-02-c1-f1'; expected chambers of their own "
        "for parts with the same condition. Give one of the parts another chamber_prefix.\n"
    )


def test_long_names_stay_apart(desk):
    long = "a very long name of a condition that was written by somebody with time to spare"
    desk.write("recipe.toml", RECIPE.replace('name = "a"', f'name = "{long}"'))
    assert desk.glidefit("simulate", "recipe.toml", "--out", "sim").code == 0
    with (desk.folder / "sim/assay.csv").open(encoding="utf-8", newline="") as file:
        names = [row["recording"] for row in csv.DictReader(file)]
    assert len(names) == 6
    assert {n for n in desk.files("sim") if n.startswith("tracks/")} == set(names)
