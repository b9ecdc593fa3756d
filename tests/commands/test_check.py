"""`glidefit check`: a look at every recording, and all that is wrong at once."""

from __future__ import annotations

import re


def test_look_at_every_recording(desk, study):
    said = desk.glidefit("check", f"{study}/assay.csv", "--workers", "1")
    assert (said.code, said.err) == (0, "")
    looks = said.out.split("tracks/")[1:]
    assert len(looks) == 4
    number = r"[\d.]+"
    assert re.fullmatch(
        r"control-2026-03-02-c1-f1\.csv  \(control, track table\)\n"
        r"  40 frames every 0\.5 s \(sheet\), exposure 0\.1 s\n"
        rf"  \d+ tracks, localization error {number} µm\n"
        rf"  quick speed {number} µm/s\n",
        looks[0],
    )
    video = said.out.split("videos/")[1]
    assert re.fullmatch(
        r"dots-2026-03-02-q1-f1\.ome\.tif  \(dots, video\)\n"
        r"  12 frames every 0\.5 s \(file\), pixel 0\.16 µm, exposure 0\.1 s\n"
        rf"  {number} spots a frame, background \d+ ± {number} counts, "
        rf"localization error {number} µm\n"
        rf"  quick speed {number} µm/s\n",
        video,
    )
    # Truth 0.8 µm/s, days and chambers apart by 8 %; the median of a dozen tracks by as much.
    speeds = [float(v) for v in re.findall(r"quick speed ([\d.]+)", said.out.partition("dots-")[2])]
    assert all(0.6 < speed < 1.0 for speed in speeds)
    assert said.out.endswith(
        "Note: dots: one day, so intervals will cover chambers of that day only.\n"
        "6 recordings of 3 conditions can be run.\n"
    )
    assert list(desk.files()) == [f"study/{name}" for name in desk.files("study")]


def test_what_is_wrong_is_listed_with_what_is_right(desk):
    desk.table("a.csv")
    desk.table("b.csv", change={1: "track,frame,x_px,y_px"})
    desk.table("c.csv", change={6: "1,4,nan,nan"})
    desk.sheet(*(f"{name}.csv,wild type,d1,{name},0.5,0.1" for name in "abc"))
    said = desk.glidefit("check", "assay.csv")
    assert said.code == 3
    assert said.out.startswith("a.csv  (wild type, track table)\n")
    assert "b.csv" not in said.out
    first, *errors, last = said.err.splitlines()
    assert first == "3 errors:"
    assert [line.partition(": ")[0] for line in errors] == [
        "- b.csv",
        "- c.csv, row 6, column 'x_um'",
        "- c.csv, row 6, column 'y_um'",
    ]
    assert last == "2 of 3 recordings cannot be used as they are."


def test_one_wrong_recording(desk):
    desk.write("a.csv", "")
    said = desk.glidefit("check", desk.sheet("a.csv,wild type,d1,c1,0.5,0.1"))
    assert said.code == 3
    assert said.err == (
        "Error: a.csv: the file is empty; expected a track table. Check that it was saved whole.\n"
        "1 of 1 recording cannot be used as it is.\n"
    )


def test_design_that_will_say_little_is_noted(desk):
    desk.table("a.csv")
    said = desk.glidefit("check", desk.sheet("a.csv,wild type,d1,c1,0.5,"))
    assert (said.code, said.err) == (0, "")
    assert "exposure unknown" in said.out
    assert said.out.endswith(
        "Note: wild type: one chamber, so there will be no interval.\n"
        "Note: no condition is marked as control.\n"
        "1 recording of 1 condition can be run.\n"
    )


def test_nothing_advances(desk):
    desk.table("a.csv", speed=0)
    said = desk.glidefit("check", desk.sheet("a.csv,wild type,d1,c1,0.5,0.1"))
    assert said.code == 0
    assert "  quick speed unknown: no track advances\n" in said.out


def test_wrong_sheet(desk):
    said = desk.glidefit("check", desk.sheet("nosuch.csv,wild type,d1,c1,0.5,"))
    assert (said.code, said.out) == (3, "")
    assert said.err.startswith("Error: assay.csv, row 2, column 'recording': there is no file ")
