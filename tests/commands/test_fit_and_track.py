"""`glidefit track` and `glidefit fit`: together they give what `glidefit run` gives."""

from __future__ import annotations

import csv
import json
import re

import numpy as np
import pytest
from numpy.testing import assert_allclose


def estimates(desk, folder):
    data = json.loads((desk.folder / folder / "results.json").read_text(encoding="utf-8"))
    return {
        (c["condition"], key): np.array([e["value"], e["low"], e["high"]], dtype=float)
        for c in data["conditions"]
        for key, e in c["estimates"].items()
    }


@pytest.fixture
def tracked(desk, study):
    said = desk.glidefit("track", f"{study}/assay.csv", "--out", "tracked", "--workers", "1")
    assert (said.code, said.err) == (0, "")
    return said


def test_fit_of_tracked_videos_gives_what_run_gives(desk, study, tracked):
    assert desk.glidefit("fit", "tracked/assay.csv", "--out", "two").code == 0
    assert desk.glidefit("run", f"{study}/assay.csv", "--out", "one", "--workers", "1").code == 0
    one, two = estimates(desk, "one"), estimates(desk, "two")
    assert one.keys() == two.keys()
    for key, estimate in one.items():
        # Track tables are rounded to 0.1 nm, 1 % of the localization error of these spots; it
        # is the error itself and what it is subtracted from that feel it most.
        rounded = 5e-3 if "dots" in key else 0
        # The climb ends within 0.02 standard errors, and one of a spread is about all of it.
        rounded = 2e-2 if key == ("dots", "speed_spread_um_s") else rounded
        assert_allclose(two[key], estimate, rtol=rounded, atol=1e-9, err_msg=str(key))


def test_tracked_folder(desk, study, tracked):
    found = re.fullmatch(r"tracked/assay\.csv: (\d+) tracks from 2 videos\.\n", tracked.out)
    files = desk.files("tracked")
    tables = [name for name in files if name.startswith("tracks/")]
    assert files.keys() == {"assay.csv", "provenance.json", *tables}
    labels = [{row.split(",")[0] for row in files[n].decode().split()[1:]} for n in tables]
    assert sum(map(len, labels)) == int(found[1]) > 10
    rows = list(csv.DictReader(files["assay.csv"].decode().splitlines()))
    assert [row["recording"] for row in rows[4:]] == tables
    assert {row["frame_s"] for row in rows} == {"0.5"}
    assert {row["exposure_s"] for row in rows} == {"0.1"}
    assert {(row["field_width_um"], row["field_height_um"]) for row in rows[4:]} == {("20", "20")}
    # Tables that were tables already are listed where they are.
    assert rows[0]["recording"] == str(desk.folder / study / "tracks/control-2026-03-02-c1-f1.csv")


def test_tracked_folder_is_replaced_by_the_same_bytes(desk, study, tracked):
    before = desk.files("tracked")
    again = desk.glidefit("track", f"{study}/assay.csv", "--out", "tracked", "--workers", "1")
    assert again == tracked
    assert desk.files("tracked") == before


def test_own_sheet_and_tables_are_not_replaced_by_tracked_ones(desk, study):
    desk.write("mine/assay.csv", "of somebody")
    desk.write("mine/tracks/a.csv", "of somebody")
    said = desk.glidefit("track", f"{study}/videos.csv", "--out", "mine")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: mine: the folder is not empty and holds no earlier output of this command of "
        "glidefit; nothing was changed. Choose another --out.\n"
    )
    assert desk.files("mine") == {"assay.csv": b"of somebody", "tracks/a.csv": b"of somebody"}


def test_nothing_to_track(desk):
    said = desk.glidefit("track", desk.two_conditions(), "--out", "tracked")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: assay.csv: none of its recordings is a video; expected videos to track. Use "
        "`glidefit run` or `glidefit fit` on the track tables.\n"
    )


def test_range_of_frames_of_a_table_outlives_tracking(desk, study):
    header = "recording,condition,day,chamber,shape,frame_s,first_frame,last_frame"
    desk.table("a.csv")
    [video, *_] = sorted(name for name in desk.files(study) if name.startswith("videos/"))
    desk.sheet(
        "a.csv,wild type,d1,c1,,0.5,2,11", f"{study}/{video},dots,d1,q1,spot,,3,10", header=header
    )
    assert desk.glidefit("track", "assay.csv", "--out", "tracked", "--workers", "1").code == 0
    rows = list(csv.DictReader((desk.folder / "tracked/assay.csv").read_text().splitlines()))
    assert [(row["first_frame"], row["last_frame"]) for row in rows] == [("2", "11"), ("", "")]
    assert desk.glidefit("fit", "tracked/assay.csv", "--out", "fit").code == 0
    results = json.loads((desk.folder / "fit/results.json").read_text(encoding="utf-8"))
    assert [r["n_frames"] for r in results["recordings"]] == [10, 8]


def test_files_and_last_line_of_fit(desk):
    said = desk.glidefit("fit", desk.two_conditions())
    assert (said.code, said.err) == (0, "")
    assert re.fullmatch(
        r"reports/assay/results\.json: 12 tracks kept, 0 set aside; .+\.\n", said.out
    )
    names = desk.files("reports/assay").keys()
    assert {"results.json", "provenance.json", "tables/estimates.csv"} <= names
    assert not any(name.endswith(".html") for name in names)
