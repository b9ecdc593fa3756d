"""The example: its folder comes out of its recipe, its report out of its folder."""

from __future__ import annotations

import csv
import json
import math
import shutil
from pathlib import Path

import numpy as np
import pytest
import tifffile
from numpy.testing import assert_allclose
from scipy.stats import binom

from glidefit.pipeline.report import report
from glidefit.pipeline.run import Job, run
from glidefit.pipeline.simulate import simulate
from glidefit.settings import resolve

ROOT = Path(__file__).parents[1]
EXAMPLE, REPORT = ROOT / "example_tracks", ROOT / "reports/assay"
MEGABYTE = 1_000_000


def read(path):
    return json.loads(path.read_text(encoding="utf-8"))


def files(folder, pattern="*"):
    return {p.relative_to(folder).as_posix(): p for p in folder.rglob(pattern) if p.is_file()}


@pytest.fixture(scope="module")
def again(tmp_path_factory):
    """The example analysed anew."""
    out = tmp_path_factory.mktemp("again") / "assay"
    sheets = (EXAMPLE / "assay.csv",)
    run(Job(sheets=sheets, out=out, settings=resolve(), seed=1, workers=1, command="glidefit run"))
    return out


@pytest.fixture(scope="module")
def simulated(tmp_path_factory):
    """The example simulated anew."""
    out = tmp_path_factory.mktemp("simulated") / "example"
    assert simulate(EXAMPLE / "recipe.toml", out) == 44
    return out


def assert_same(found, expected, where="results"):
    """The same records, numbers within 1e-6 of each other."""
    if isinstance(expected, dict):
        assert found.keys() == expected.keys(), where
        for key, value in expected.items():
            assert_same(found[key], value, f"{where}.{key}")
    elif isinstance(expected, list):
        assert len(found) == len(expected), where
        for n, (one, two) in enumerate(zip(found, expected, strict=True)):
            assert_same(one, two, f"{where}[{n}]")
    elif isinstance(expected, float) and isinstance(found, (int, float)):
        # The rounding of another processor can move the point where the likelihood stops climbing,
        # by up to 0.02 standard errors; below 1e-3 (of µm, s, rad) that may be all there is.
        assert_allclose(found, expected, rtol=5e-3, atol=1e-3, err_msg=where)
    else:
        assert found == expected, where


def test_report_has_the_pages_of_a_run(again):
    """Tables and provenance are left out of the repository."""
    assert files(REPORT, "*.html").keys() == files(again, "*.html").keys()


def test_report_has_the_numbers_of_a_run(again):
    found, expected = read(again / "results.json"), read(REPORT / "results.json")
    for condition, old in zip(found["conditions"], expected["conditions"], strict=True):
        assert_same(condition["estimates"], old["estimates"], old["condition"])
    assert_same(found, expected)


def test_pages_are_those_of_the_results(tmp_path):
    shutil.copy(REPORT / "results.json", tmp_path)
    report(tmp_path)
    made, stored = files(tmp_path, "*.html"), files(REPORT, "*.html")
    assert made.keys() == stored.keys()
    assert len(made) == 13
    for name, path in made.items():
        assert path.read_bytes() == stored[name].read_bytes(), name


def test_pages_and_videos_are_small():
    assert sum(p.stat().st_size for p in files(REPORT, "*.html").values()) <= 3 * MEGABYTE
    videos = files(EXAMPLE, "*.tif")
    assert len(videos) == 4
    assert all(p.stat().st_size <= 3 * MEGABYTE for p in videos.values())


def test_folder_comes_out_of_its_recipe(simulated):
    assert files(simulated).keys() == files(EXAMPLE).keys()


@pytest.mark.parametrize("name", sorted(files(EXAMPLE, "*.csv")))
def test_table_comes_out_of_the_recipe(simulated, name):
    found, stored = (
        list(csv.reader((folder / name).read_text(encoding="utf-8").splitlines()))
        for folder in (simulated, EXAMPLE)
    )
    assert [len(row) for row in found] == [len(row) for row in stored]
    if name.startswith("tracks/"):
        assert found[0] == stored[0]
        numbers = (np.array(rows[1:], dtype=float) for rows in (found, stored))
        assert_allclose(*numbers, rtol=0, atol=1e-6)
    else:
        assert_same(*([list(map(number, row)) for row in rows] for rows in (found, stored)))


def number(text):
    try:
        return float(text)
    except ValueError:
        return text


@pytest.mark.parametrize("name", sorted(files(EXAMPLE, "*.tif")))
def test_video_comes_out_of_the_recipe(simulated, name):
    with tifffile.TiffFile(simulated / name) as found, tifffile.TiffFile(EXAMPLE / name) as stored:
        assert found.ome_metadata == stored.ome_metadata
        one, two = found.asarray(), stored.asarray()
    assert one.shape == two.shape
    # The rounding of another processor can move a photon number across a step.
    assert np.mean(one != two) < 1e-3


def test_intervals_hold_the_truth_as_often_as_they_say():
    with (EXAMPLE / "truth.csv").open(encoding="utf-8", newline="") as file:
        truth = {row["condition"]: row for row in csv.DictReader(file)}
    held = []
    for condition in read(REPORT / "results.json")["conditions"]:
        row = truth[condition["condition"]]
        speed, turning = float(row["speed_um_s"]), float(row["rotational_diffusion_rad2_s"])
        true = {
            "speed_um_s": speed,
            "rotational_diffusion_rad2_s": turning,
            "persistence_length_um": speed / turning,
            "motile_fraction": float(row["motile_fraction"]),
        }
        for key, value in true.items():
            estimate = condition["estimates"][key]
            low, high = estimate["low"], estimate["high"]
            assert estimate["level"] == 0.95
            if low is None and high is None:
                continue
            low = -math.inf if low is None else low
            high = math.inf if high is None else high
            held.append(low <= value <= high)
    assert len(held) >= 12
    assert sum(held) >= binom.ppf(0.001, len(held), 0.95)
