"""What a user reads when a track table is wrong: the whole text, and exit code 3."""

from __future__ import annotations

import re

import pytest


def refused(desk, *tables):
    rows = [f"{name},wild type,d1,c{n},0.5," for n, name in enumerate(tables, 1)]
    said = desk.glidefit("run", desk.sheet(*rows))
    assert (said.code, said.out) == (3, "")
    assert not (desk.folder / "reports").exists()
    return said.err


def problems(said):
    """How many of them the last line of a run counts."""
    count = re.search(r"; (no|\d+) problems?", said.out)[1]
    return 0 if count == "no" else int(count)


@pytest.mark.parametrize(
    ("cell", "told"),
    [
        (
            "half",
            "holds 'half', which is not a number; expected a position in µm. Write the number "
            "alone, without a unit.",
        ),
        (
            "1;5",
            "holds '1;5', which is not a number; expected a position in µm. Write the number "
            "alone, without a unit.",
        ),
        (
            "",
            "is empty; expected a position in µm. Fill it in, or delete the row: a missing frame "
            "is a gap.",
        ),
    ],
)
def test_position_that_is_no_number(desk, cell, told):
    name = desk.table("a.csv", change={6: f"1,4,{cell},3"})
    assert refused(desk, name) == f"Error: a.csv, row 6, column 'x_um': {told}\n"


def test_nan_position(desk):
    name = desk.table("a.csv", change={6: "1,4,nan,3", 9: "1,7,NaN,3"})
    assert refused(desk, name) == (
        "Error: a.csv, row 6, column 'x_um': holds 'nan', which is not a number (and 1 more cell "
        "of this column); expected a position in µm. Delete the row: a missing frame is a gap.\n"
    )


def test_repeated_frame(desk):
    name = desk.table("a.csv", change={6: "1,3,2,3"})
    assert refused(desk, name) == (
        "Error: a.csv, row 6: frame 3 of track '1' was already in row 5; expected each frame once "
        "in a track. Delete one of the rows, or give two tracks two labels.\n"
    )


def test_frames_out_of_order_are_sorted_and_said_to_be(desk):
    text = (desk.folder / desk.table("a.csv")).read_text(encoding="utf-8").splitlines()
    desk.sheet("a.csv,wild type,d1,c1,0.5,0.1")
    before = desk.glidefit("run", "assay.csv", "--out", "in order")
    desk.write("a.csv", "\n".join([text[0], *reversed(text[1:21]), *text[21:]]) + "\n")
    said = desk.glidefit("run", "assay.csv", "--out", "out of order")
    assert (said.code, said.err) == (0, "")
    assert problems(said) == problems(before) + 1
    page = (desk.folder / "out of order/conditions/wild-type.html").read_text(encoding="utf-8")
    assert "rows were not in order of frames within a track and were sorted" in page
    one, two = (desk.files(f"{kind} order/tables")["estimates.csv"] for kind in ("in", "out of"))
    assert one == two


def test_missing_columns(desk):
    name = desk.write("a.csv", "particle,frame,x,y\n1,0,0,0\n")
    assert refused(desk, name) == (
        "Error: a.csv: the columns 'track', 'x_um' and 'y_um' are missing; expected columns track, "
        "frame, x_um and y_um (or x_px and y_px). Its columns are 'particle', 'frame', 'x', 'y'. "
        'If they have other names, say so in the settings file under [columns]: track = "…", '
        'x_um = "x", y_um = "y" (x_px and y_px if they are in pixels).\n'
    )


@pytest.mark.parametrize("text", ["", "\n\n"])
def test_empty_file(desk, text):
    assert refused(desk, desk.write("a.csv", text)) == (
        "Error: a.csv: the file is empty; expected a track table. Check that it was saved whole.\n"
    )


def test_header_alone(desk):
    assert refused(desk, desk.write("a.csv", "track,frame,x_um,y_um\n")) == (
        "Error: a.csv: the table has a header but no rows; expected one row for each position. "
        "Check that it was saved whole.\n"
    )


def test_pixels_without_a_pixel_size(desk):
    name = desk.table("a.csv", change={1: "track,frame,x_px,y_px"})
    assert refused(desk, name) == (
        "Error: a.csv: the positions are in pixels, and the pixel size is not known; expected the "
        "pixel size in µm, in the column pixel_um of the assay sheet. Fill in pixel_um for this "
        "recording.\n"
    )


def test_tracks_beyond_the_field(desk):
    desk.sheet(f"{desk.table('a.csv')},wild type,d1,c1,0.5,")
    said = desk.glidefit("run", "assay.csv", "--fit-field-width", "10", "--fit-field-height", "900")
    assert said.code == 3
    assert said.err.startswith("Error: assay.csv, row 2, a.csv: tracks extend over ")
    assert said.err.endswith(
        " µm; expected tracks inside the field of 10 × 900 µm. Correct fit.field_width and "
        "fit.field_height (or field_width_um and field_height_um in the sheet), or the unit of "
        "the positions.\n"
    )


def test_frames_that_are_not_in_the_table(desk):
    header = "recording,condition,day,chamber,frame_s,first_frame,last_frame"
    desk.sheet(f"{desk.table('a.csv')},wild type,d1,c1,0.5,50,60", header=header)
    said = desk.glidefit("run", "assay.csv")
    assert said.code == 3
    assert said.err == (
        "Error: assay.csv, row 2, a.csv: frames 50 to 60 hold no position; the table has frames "
        "0 to 19; expected a range of frames with positions. Correct first_frame and last_frame.\n"
    )


def test_all_that_is_wrong_in_several_recordings_is_listed_at_once(desk):
    desk.table("a.csv", change={6: "1,4,nan,3"})
    desk.table("b.csv", change={6: "1,3,2,3"})
    desk.write("c.csv", "")
    desk.table("d.csv")
    first, *lines = refused(desk, "a.csv", "b.csv", "c.csv", "d.csv").splitlines()
    assert first == "3 errors:"
    assert [line.partition(":")[0] for line in lines] == [
        "- a.csv, row 6, column 'x_um'",
        "- b.csv, row 6",
        "- c.csv",
    ]
