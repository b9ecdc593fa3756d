"""`glidefit simulate` with filaments: a video, its row of the sheet, the truth of every frame."""

from __future__ import annotations

import csv
import tomllib

import numpy as np
import pytest
import tifffile
from numpy.testing import assert_allclose

RECIPE = """
[[part]]
name = "filaments"
seed = 3
field_um = [26.0, 19.5]
pixel_um = 0.13
frame_s = 0.5
n_frames = 8
exposure_s = 0.1
days = 1
chambers_per_day = 1
filaments_in_field = 12.0
stuck_fraction = 0.3
turning = "per_path"

[part.filament_video]
signal_to_noise = 6.0
length_um = 4.0
bundled_share = 0.3
detach_rate_per_s = 0.02
faults = { unevenness = 0.3, bleaching_rate = 0.01, debris = 3, haze_patches = 2, dark_rate = 0.1 }

[[part.conditions]]
name = "fast"
speed_um_s = 1.0
rotational_diffusion_rad2_s = 0.01
"""
NAME = "fast-2026-03-02-c1-f1"


@pytest.fixture
def filmed(desk):
    desk.write("recipe.toml", RECIPE)
    said = desk.glidefit("simulate", "recipe.toml", "--out", "sim")
    assert (said.code, said.err) == (0, "")
    assert said.out == "sim/assay.csv: 1 recording; the truth is in sim/truth.csv.\n"
    return desk.folder / "sim"


def rows(path):
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_video_and_truth_of_filaments(filmed):
    [row] = rows(filmed / "assay.csv")
    assert (row["recording"], row["shape"]) == (f"videos/{NAME}.ome.tif", "filament")
    with tifffile.TiffFile(filmed / row["recording"]) as file:
        stack = file.series[0].asarray()
        assert 'PhysicalSizeX="0.13"' in file.ome_metadata
    assert stack.shape == (8, 150, 200)
    truth = rows(filmed / f"truth/{NAME}.csv")
    assert {row["frame"] for row in truth} == {str(k) for k in range(8)}
    flags = {flag for row in truth for flag in row["flags"].split()}
    assert flags <= {"cut", "stuck", "bundled", "dark", "overlapped"}
    assert {"cut", "stuck"} <= flags
    # Where a filament shines and nothing else is said of it, its midpoint is bright.
    clear = [row for row in truth if row["flags"] == ""]
    at = np.array([[float(r[k]) for k in ("y_um", "x_um")] for r in clear]) / 0.13
    frame = np.array([int(r["frame"]) for r in clear])
    light = stack[frame, *np.rint(at).astype(int).T]
    assert len(clear) > 10
    assert light.mean() > np.median(stack) + 10


def test_filaments_glide_at_the_speed_of_their_chamber(filmed):
    [chamber] = rows(filmed / "truth.csv")
    steps = {}
    for row in rows(filmed / f"truth/{NAME}.csv"):
        if "stuck" not in row["flags"]:
            steps.setdefault(row["track"], []).append((float(row["x_um"]), float(row["y_um"])))
    speeds = [
        np.hypot(*np.diff(np.array(path), axis=0).T).mean() / 0.5
        for path in steps.values()
        if len(path) == 8
    ]
    assert len(speeds) >= 3
    # Filaments differ by 10 %: 4 standard errors.
    expected = float(chamber["chamber_speed_um_s"])
    assert_allclose(np.mean(speeds), expected, rtol=0.4 / np.sqrt(len(speeds)))


def test_same_seed_same_bytes_of_filament_videos(filmed, desk):
    desk.write("recipe.toml", RECIPE)
    desk.glidefit("simulate", "recipe.toml", "--out", "again")
    for name, content in desk.files("again").items():
        assert content == (filmed / name).read_bytes(), name
    assert desk.glidefit("simulate", "recipe.toml", "--out", "sim", "--seed", "4").code == 0
    truth = f"truth/{NAME}.csv"
    assert desk.files("sim")[truth] != desk.files("again")[truth]


def test_field_without_filaments_is_noise(desk):
    desk.write("recipe.toml", RECIPE.replace("filaments_in_field = 12.0", "filaments_in_field = 0"))
    assert desk.glidefit("simulate", "recipe.toml", "--out", "sim").code == 0
    assert rows(desk.folder / f"sim/truth/{NAME}.csv") == []


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        (
            "length_um = 4.0",
            "lenght_um = 4.0",
            "part 1, filament_video: 'lenght_um' is no key of a recipe; expected a known key. Did "
            "you mean 'length_um'?",
        ),
        (
            "length_um = 4.0",
            "length_um = 0",
            "part 1, filament_video: length_um must be > 0; numbers, spread and rate >= 0; "
            "expected values that can be simulated. Correct it.",
        ),
        (
            "debris = 3",
            "debris = -3",
            "part 1, filament_video.faults: debris, haze and focus must be >= 0, focus_period_s > "
            "0; expected values that can be simulated. Correct it.",
        ),
        (
            "debris = 3",
            "dust = 3",
            "part 1, filament_video.faults: 'dust' is no key of a recipe; expected a known key. "
            "The keys here are unevenness, bleaching_rate, dark_rate, bright_rate, "
            "hot_pixel_share, hot_pixel_photons, debris, haze_patches, haze, focus_breathing, "
            "focus_period_s, saturation_counts.",
        ),
        (
            "days = 1",
            "days = 1\nvideo = {}",
            "part 1: a part has a video (of spots) or a filament_video, not both; expected values "
            "that can be simulated. Correct it.",
        ),
        (
            "days = 1",
            "days = 1\npivoting_fraction = 0.1",
            "part 1: pivoting_fraction and detached_fraction must be 0 with a filament_video; "
            "expected values that can be simulated. Correct it.",
        ),
    ],
)
def test_wrong_recipe_of_filaments(desk, old, new, told):
    text = RECIPE.replace(old, new)
    tomllib.loads(text)
    desk.write("recipe.toml", text)
    said = desk.glidefit("simulate", "recipe.toml", "--out", "sim")
    assert (said.code, said.out) == (3, "")
    assert said.err == f"Error: recipe.toml, {told}\n"
