"""Track tables: what comes back is what was written, and every contradiction is named."""

import builtins
import io
import math
import os

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.errors import InputError, InputErrors
from glidefit.reading.track_columns import require_columns
from glidefit.reading.track_table import read_track_table
from glidefit.settings import ColumnSettings
from glidefit.tracks import Tracks

HEADER = "track,frame,x_um,y_um"
ROWS = f"{HEADER}\n1,0,1.5,2.5\n1,1,1.75,2.5\n2,1,0,-3\n"


def read(path, *, frame_s=0.5, pixel_um=None, where=None, **names):
    columns = ColumnSettings(**names)
    return read_track_table(path, columns=columns, frame_s=frame_s, pixel_um=pixel_um, where=where)


def write(tmp_path, content, name="t.csv"):
    path = tmp_path / name
    if isinstance(content, pd.DataFrame):
        content.to_parquet(path)
    else:
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def problem(tmp_path, content, *, name="t.csv", **choice):
    with pytest.raises((InputError, InputErrors)) as caught:
        read(write(tmp_path, content, name), **choice)
    return str(caught.value)


def same(a, b):
    """All columns of two Tracks are identical, bit for bit."""
    for name in Tracks.__slots__:
        first, second = getattr(a, name), getattr(b, name)
        if first is None or second is None:
            assert first is second, name
        else:
            assert first.dtype.kind == second.dtype.kind, name
            assert_array_equal(first, second, err_msg=name)


# What a table may say


def test_a_table_in_micrometres(tmp_path):
    table = read(write(tmp_path, ROWS))
    same(
        table.tracks,
        Tracks(
            label=np.array(["1", "2"]),
            offsets=np.array([0, 2, 3]),
            frame=np.array([0, 1, 1]),
            time_s=np.array([0.0, 0.5, 0.5]),
            x_um=np.array([1.5, 1.75, 0.0]),
            y_um=np.array([2.5, 2.5, -3.0]),
        ),
    )
    assert (table.frame_s, table.frame_s_source, table.n_frames) == (0.5, "sheet", 2)
    assert math.isnan(table.pixel_um)
    assert table.notes == ()


@pytest.mark.parametrize(
    "text",
    [
        "\ufeff" + ROWS,
        ROWS.replace("\n", "\r\n"),
        ROWS.replace("\n", "\r"),
        ROWS.replace(",", ";"),
        ROWS.replace(",", " , "),
        ROWS.replace("\n", "\n\n"),
        ROWS.replace("\n", ",\n"),
        ROWS.replace(",y_um", ",y_um,") + "\n , ,,,\n",
        ROWS.replace("1,1.75", "1.0,175e-2"),
        '"track","frame","x_um","y_um"\n"1","0","1.5","2.5"\n"1","1","1.75","2.5"\n"2","1","0","-3"',
        ",frame,track,y_um,x_um,note\n0,0,1,2.5,1.5,a\n1,1,1,2.5,1.75,\n2,1,2,-3,0",
    ],
)
def test_ways_of_writing_the_same_table(tmp_path, text):
    same(read(write(tmp_path, text)).tracks, read(write(tmp_path, ROWS)).tracks)


def test_a_table_in_pixels_is_converted_about_the_centre_of_the_first_pixel(tmp_path):
    text = "track,frame,x_px,y_px\na,0,0,10\na,1,4,-2.5\n"
    table = read(write(tmp_path, text), pixel_um=0.25)
    assert_array_equal(table.tracks.x_um, [0, 1])
    assert_array_equal(table.tracks.y_um, [2.5, -0.625])
    assert (table.pixel_um, table.notes) == (0.25, ())


def test_pixel_sizes_no_microscope_has_are_noted(tmp_path):
    text = "track,frame,x_px,y_px\na,0,0,10\na,1,4,-2.5\n"
    assert read(write(tmp_path, text), pixel_um=107).notes == (
        "a pixel of 107 µm is unusual; check pixel_um",
    )


def test_micrometres_win_over_pixels_with_a_note(tmp_path):
    text = "track,frame,x_px,y_px,x_um,y_um\na,0,1,1,7,8\n"
    table = read(write(tmp_path, text))
    assert (table.tracks.x_um[0], table.tracks.y_um[0]) == (7, 8)
    assert math.isnan(table.pixel_um)
    assert table.notes == ("positions in µm were used, those in pixels were not",)


def test_other_names_of_columns(tmp_path):
    text = "id;n;t;X;Y;angle;size\nA 1;0;0;1;2;0.5;3\nA 1;2;0.2;2;2;;\n"
    table = read(
        write(tmp_path, text),
        frame_s=None,
        track="id",
        frame="n",
        time_s="t",
        x_um="X",
        y_um="Y",
        heading_rad="angle",
        length_um="size",
    )
    assert list(table.tracks.label) == ["A 1"]
    assert_array_equal(table.tracks.heading_rad, [0.5, np.nan])
    assert_array_equal(table.tracks.length_um, [3, np.nan])
    assert_allclose(table.frame_s, 0.1, rtol=1e-12)
    assert table.frame_s_source == "file"


def test_times_of_the_file_are_kept_and_give_the_interval_by_their_median(tmp_path):
    text = "track,frame,time_s,x_um,y_um\na,0,10,0,0\na,1,10.5,0,0\na,2,11.1,0,0\na,4,12,0,0\n"
    table = read(write(tmp_path, text), frame_s=None)
    assert_array_equal(table.tracks.time_s, [10, 10.5, 11.1, 12])
    assert_allclose(table.frame_s, 0.5, rtol=1e-12)  # of 0.5, 0.6 and 0.45 a frame
    assert (table.frame_s_source, table.n_frames) == ("file", 5)


def test_the_sheet_names_the_interval_when_the_times_agree_within_one_percent(tmp_path):
    text = "track,frame,time_s,x_um,y_um\na,0,0,0,0\na,1,0.504,0,0\n"
    table = read(write(tmp_path, text), frame_s=0.5)
    assert (table.frame_s, table.frame_s_source) == (0.5, "sheet")
    assert_array_equal(table.tracks.time_s, [0, 0.504])


def test_tracks_stay_in_their_order_and_interleaved_rows_need_no_note(tmp_path):
    text = f"{HEADER}\nz,0,0,0\na,0,1,0\nz,1,2,0\na,1,3,0\n"
    table = read(write(tmp_path, text))
    assert list(table.tracks.label) == ["z", "a"]
    assert_array_equal(table.tracks.x_um, [0, 2, 1, 3])
    assert table.notes == ()


def test_rows_out_of_order_are_sorted_with_a_note(tmp_path):
    text = "track,frame,time_s,x_um,y_um\na,1,0.5,1,0\na,0,0,0,0\n"
    table = read(write(tmp_path, text))
    assert_array_equal(table.tracks.x_um, [0, 1])
    assert table.notes == ("rows were not in order of frames within a track and were sorted",)


def test_frames_count_from_the_first_with_a_position(tmp_path):
    table = read(write(tmp_path, f"{HEADER}\na,9,0,0\na,10,0,0\nb,7,0,0\n"))
    assert_array_equal(table.tracks.frame, [2, 3, 0])
    assert_array_equal(table.tracks.time_s, [1, 1.5, 0])
    assert (table.first_frame, table.n_frames, table.notes) == (7, 4, ())


def test_times_of_a_table_stay_when_its_frames_are_counted_anew(tmp_path):
    table = read(write(tmp_path, "track,frame,time_s,x_um,y_um\na,1,0.5,0,0\na,3,1.5,0,0\n"))
    assert_array_equal(table.tracks.frame, [0, 2])
    assert_array_equal(table.tracks.time_s, [0.5, 1.5])
    assert (table.first_frame, table.n_frames) == (1, 3)


def test_a_late_beginning_and_many_rows_are_no_wide_range(tmp_path):
    late = read(write(tmp_path, f"{HEADER}\na,2000000000,0,0\na,2000999999,0,0\n"))
    assert (late.first_frame, late.n_frames) == (2_000_000_000, 1_000_000)
    rows = "".join(f"a,{i * 1000},0,0\n" for i in range(1002))
    assert read(write(tmp_path, f"{HEADER}\n{rows}")).n_frames == 1_001_001


def test_a_frame_far_beyond_the_rows(tmp_path):
    rows = "b,0,0,0\na,1000000000,0,0\na,0,0,0\n"
    assert problem(tmp_path, f"{HEADER}\n{rows}") == (
        "t.csv, row 3, column 'frame': frame 1000000000 is 1000000000 frames after the first one, "
        "in a table of 3 rows; expected frame numbers that count images. "
        "Correct it; a time belongs in the column time_s."
    )


def test_positions_beyond_every_stage(tmp_path):
    rows = "a,0,0,-1e6\na,1,0,-1.5e6\n"
    assert problem(tmp_path, f"{HEADER}\n{rows}") == (
        "t.csv, row 3, column 'y_um': holds a position of -1.5e+06 µm, which no stage reaches; "
        "expected a position within ±1000000 µm. "
        "Correct it, or the unit of the column; positions are in µm."
    )
    text = f"{HEADER}\na,0,20000,0\n".replace("_um", "_px")
    assert problem(tmp_path, text, pixel_um=100) == (
        "t.csv, row 2, column 'x_px': holds a position of 2e+06 µm, which no stage reaches; "
        "expected a position within ±1000000 µm. Correct it, or pixel_um in the assay sheet."
    )


@pytest.mark.parametrize("name", ["t.csv", "t.parquet"])
def test_a_column_that_stands_for_two(tmp_path, name):
    table = pd.DataFrame({"track": ["a"], "frame": [0], "y": [1.0]})
    content = table if name == "t.parquet" else table.to_csv(index=False)
    assert problem(tmp_path, content, name=name, x_um="y", y_um="y") == (
        f"{name}: the column 'y' is named for both x_um and y_um; expected a column of its own for "
        "each of them. Correct [columns] in the settings file."
    )


@pytest.mark.parametrize("name", ["t.csv", "t.parquet"])
def test_a_pipe_is_not_waited_for(tmp_path, name):
    os.mkfifo(tmp_path / name)
    with pytest.raises(InputError) as caught:
        read(tmp_path / name)
    assert str(caught.value) == (
        f"{name}: is a pipe or a device, not a file on disk; expected a track table. "
        "Save it as a file first."
    )


@pytest.mark.parametrize("name", ["t.csv", "t.parquet"])
def test_columns_are_found_in_the_header(tmp_path, name):
    table = pd.DataFrame({"track": ["a"], "frame": [0], "x_um": [1.0], "y_um": [None]})

    def look(table):
        content = table if name == "t.parquet" else table.to_csv(index=False)
        require_columns(write(tmp_path, content, name), columns=ColumnSettings(), called=name)

    look(table)
    with pytest.raises(InputError, match="the column 'frame' is missing"):
        look(table.drop(columns="frame"))


def test_cells_of_no_width_are_empty(tmp_path):
    tracks = read(write(tmp_path, f"{HEADER},length_um\n\u200ba,0,1\u200b,0,\u200b\n")).tracks
    assert (list(tracks.label), tracks.x_um[0], tracks.length_um) == (["a"], 1.0, None)
    message = problem(tmp_path, f"{HEADER}\na,0,\u200b,0\n")
    assert message == f"t.csv, row 2, column 'x_um': is empty; expected {UM}. {FILL}"


def test_empty_optional_columns_are_no_columns(tmp_path):
    tracks = read(write(tmp_path, f"{HEADER},heading_rad,length_um\na,0,0,0,,nan\n")).tracks
    assert tracks.heading_rad is None
    assert tracks.length_um is None


def test_parquet(tmp_path):
    table = pd.DataFrame(
        {
            "track": [7, 7, 12],
            "frame": np.array([0, 1, 0], dtype=np.int32),
            "x_um": np.array([0.1, 0.2, 0.3]),
            "y_um": np.array([1, 2, 3], dtype=np.float32),
            "heading_rad": [0.5, None, 1.0],
            "note": ["", "x", None],
        }
    )
    tracks = read(write(tmp_path, table, "t.parquet")).tracks
    assert list(tracks.label) == ["7", "12"]
    assert_array_equal(tracks.frame, [0, 1, 0])
    assert_array_equal(tracks.x_um, [0.1, 0.2, 0.3])
    assert_array_equal(tracks.y_um, [1, 2, 3])
    assert_array_equal(tracks.heading_rad, [0.5, np.nan, 1.0])


# What can be wrong with the file as a whole

TABLE = "expected a track table."
COLUMNS = "expected columns track, frame, x_um and y_um (or x_px and y_px)."


@pytest.mark.parametrize(
    ("content", "name", "message"),
    [
        (b"", "t.csv", f"the file is empty; {TABLE} Check that it was saved whole."),
        (b"", "t.parquet", f"the file is empty; {TABLE} Check that it was saved whole."),
        (f"{HEADER}\n", "t.csv", "the table has a header but no rows; expected one row for each "
         "position. Check that it was saved whole."),
        (pd.DataFrame({name: [] for name in HEADER.split(",")}), "t.parquet", "the table has a "
         "header but no rows; expected one row for each position. Check that it was saved whole."),
        (b"PAR1 and so on PAR1", "t.parquet", "the file is not a readable Parquet file; "
         f"{TABLE} Write it anew, or save the table as CSV."),
        (ROWS.replace(",", "\t"), "t.csv", "the columns are separated by tabs; expected commas or "
         "semicolons between the columns. In the spreadsheet program, save it as 'CSV UTF-8'."),
        (ROWS.encode("utf-16"), "t.csv", "the file is written in UTF-16; expected text in UTF-8. "
         "In the spreadsheet program, save it as 'CSV UTF-8'."),
        (f"{HEADER},x_um\n1,0,0,0,0\n", "t.csv", "2 columns are called 'x_um'; expected every "
         "column once. Delete or rename all but one."),
        ("particle,frame,x,y\n1,0,0,0\n", "t.csv",
         f"the columns 'track', 'x_um' and 'y_um' are missing; {COLUMNS} "
         "Its columns are 'particle', 'frame', 'x', 'y'. If they have other names, say so in the "
         'settings file under [columns]: track = "…", x_um = "x", y_um = "y" '
         "(x_px and y_px if they are in pixels)."),
        ("Track,frame,x_um,y_um\n1,0,0,0\n", "t.csv", f"the column 'track' is missing; {COLUMNS} "
         "Its columns are 'Track', 'frame', 'x_um', 'y_um'. If they have other names, say so in "
         'the settings file under [columns]: track = "Track".'),
        ("track,frame,x_um,y_px\n1,0,0,0\n", "t.csv", f"the column 'y_um' is missing; {COLUMNS} "
         "Its columns are 'track', 'frame', 'x_um', 'y_px'. If they have other names, say so in "
         'the settings file under [columns]: y_um = "…".'),
        ("1,0,0,0\n1,1,0,0\n", "t.csv",
         f"the columns 'track', 'frame', 'x_um' and 'y_um' are missing; {COLUMNS} "
         "Its columns are '1', '0', '0', '0'. If they have other names, say so in the settings "
         'file under [columns]: track = "…", frame = "…", x_um = "…", y_um = "…" '
         "(x_px and y_px if they are in pixels)."),
    ],
)  # fmt: skip
def test_a_file_that_is_no_track_table(tmp_path, content, name, message):
    assert problem(tmp_path, content, name=name) == f"{name}: {message}"


def test_a_missing_column_is_called_as_the_settings_call_it(tmp_path):
    assert problem(tmp_path, ROWS, track="id") == (
        "t.csv: the column 'id' is missing; expected columns id, frame, x_um and y_um (or x_px and "
        "y_px). Its columns are 'track', 'frame', 'x_um', 'y_um'. If they have other names, say so "
        'in the settings file under [columns]: track = "track".'
    )


def test_a_table_that_is_not_there(tmp_path):
    write(tmp_path, ROWS, "tracks_1.csv")
    with pytest.raises(InputError) as caught:
        read(tmp_path / "track_1.csv", where="day1/t.csv")
    assert str(caught.value) == (
        f"day1/t.csv: there is no such file in {tmp_path}; {TABLE} Did you mean 'tracks_1.csv'?"
    )


def test_parquet_without_its_library(tmp_path, monkeypatch):
    path = write(tmp_path, pd.DataFrame({"track": [1]}), "t.parquet")
    whole = builtins.__import__

    def without(name, *args, **kwargs):
        if name.startswith("pyarrow"):
            raise ImportError(name)
        return whole(name, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(InputError) as caught:
        read(path)
    assert str(caught.value) == (
        "t.parquet: reading Parquet needs the library pyarrow, which is not installed; expected "
        "pyarrow, or the table as CSV. Install it: pip install 'glidefit[parquet]'"
    )


# What can be wrong with rows and cells

UM = "a position in µm"
FRAME = "a frame as a whole number from 0"
FILL = "Fill it in, or delete the row: a missing frame is a gap."
GAP = "Delete the row: a missing frame is a gap."
ALONE = "Write the number alone, without a unit."


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ("1,0,0,0\n\n1,1,,0", f"row 4, column 'x_um': is empty; expected {UM}. {FILL}"),
        ("1,0,0,0\n1,1,0", f"row 3, column 'y_um': is empty; expected {UM}. {FILL}"),
        ("1,0,nan,0\n1,1,NaN,0\n1,2,inf,0", "row 2, column 'x_um': holds 'nan', which is not a "
         f"number (and 2 more cells of this column); expected {UM}. {GAP}"),
        ("1,0,0,-inf", f"row 2, column 'y_um': holds '-inf', which is not a number; expected {UM}. "
         f"{GAP}"),
        ("1,0,0,0\n1,1,lost,0\n1,2,,0", "row 3, column 'x_um': holds 'lost', which is not a number "
         f"(and 1 more cell of this column); expected {UM}. {ALONE}"),
        ("1,0,1_0,0", f"row 2, column 'x_um': holds '1_0', which is not a number; expected {UM}. "
         f"{ALONE}"),
        ('1,0,"1,5",0', "row 2, column 'x_um': holds '1,5' with a decimal comma; expected "
         f"{UM}, with a decimal point. Write 1.5."),
        ("1,0,1,5,0", "row 2: has 5 cells, the header has 4; expected no more cells than columns. "
         "Numbers take a decimal point, not a comma."),
        (",0,0,0\n ,1,0,0", "row 2, column 'track': is empty (and 1 more cell of this column); "
         "expected the label of a track. Fill it in, or delete the row."),
        ("1,0.5,0,0", f"row 2, column 'frame': holds 0.5; expected {FRAME}. "
         "Number the frames from 0, whatever their times."),
        ("1,0,0,0\n1,-1,0,0", f"row 3, column 'frame': holds -1; expected {FRAME}. "
         "Number the frames from 0, whatever their times."),
        ("1,,0,0", f"row 2, column 'frame': is empty; expected {FRAME}. {FILL}"),
        ("7,0,0,0\n7,3,0,0\n8,3,0,0\n7,3,1,1", "row 5: frame 3 of track '7' was already in row 3; "
         "expected each frame once in a track. "
         "Delete one of the rows, or give two tracks two labels."),
        ("7,0,0,0\n7,0,0,0\n7,0,0,0", "row 3: frame 0 of track '7' was already in row 2 (2 "
         "such rows in all); expected each frame once in a track. "
         "Delete one of the rows, or give two tracks two labels."),
    ],
)  # fmt: skip
def test_a_row_that_is_wrong(tmp_path, rows, message):
    assert problem(tmp_path, f"{HEADER}\n{rows}\n") == f"t.csv, {message}"


def test_the_first_fault_of_every_column_is_said_at_once(tmp_path):
    rows = "1,0,a,0,x\n,0.5,0,b,4\n"
    lines = problem(tmp_path, f"{HEADER},heading_rad\n{rows}").splitlines()
    assert [line.split(": ")[0] for line in lines] == [
        "t.csv, row 3, column 'track'",
        "t.csv, row 3, column 'frame'",
        "t.csv, row 2, column 'x_um'",
        "t.csv, row 3, column 'y_um'",
        "t.csv, row 2, column 'heading_rad'",
    ]


def test_a_fault_in_parquet_names_its_row(tmp_path):
    table = {"track": ["a", "a"], "frame": [0, 1], "x_um": [0.0, None], "y_um": [0, np.inf]}
    assert problem(tmp_path, pd.DataFrame(table), name="t.parquet").splitlines() == [
        f"t.parquet, row 2, column 'x_um': is empty; expected {UM}. {FILL}",
        "t.parquet, row 2, column 'y_um': holds 'inf', which is not a number; expected "
        f"{UM}. {GAP}",
    ]
    table["x_um"] = ["left", "right"]
    assert problem(tmp_path, pd.DataFrame(table), name="t.parquet").splitlines()[0] == (
        "t.parquet, row 1, column 'x_um': holds 'left', which is not a number (and 1 more cell of "
        f"this column); expected {UM}. {ALONE}"
    )


def test_a_heading_in_degrees(tmp_path):
    assert problem(tmp_path, f"{HEADER},heading_rad\na,0,0,0,3\na,1,0,0,\na,2,0,0,-90\n") == (
        "t.csv, row 4, column 'heading_rad': holds -90, more than a full turn: it looks like "
        "degrees; expected a heading in rad, or an empty cell. Multiply the column by π/180."
    )
    full_turn = f"{HEADER},heading_rad\na,0,0,0,-6.28\n"
    assert read(write(tmp_path, full_turn)).tracks.heading_rad[0] == -6.28


@pytest.mark.parametrize(("cell", "found"), [("?", "'?'"), ("inf", "'inf'")])
def test_an_optional_number_that_is_none(tmp_path, cell, found):
    assert problem(tmp_path, f"{HEADER},length_um\na,0,0,0,{cell}\n") == (
        f"t.csv, row 2, column 'length_um': holds {found}, which is not a number; "
        f"expected a length in µm, or an empty cell. {ALONE}"
    )


# What can be wrong between columns, and with the sheet


def test_pixels_without_a_pixel_size(tmp_path):
    text = "track,frame,x_px,y_px\n1,0,0,0\n"
    assert problem(tmp_path, text, where="day1/t.csv") == (
        "day1/t.csv: the positions are in pixels, and the pixel size is not known; "
        "expected the pixel size in µm, in the column pixel_um of the assay sheet. "
        "Fill in pixel_um for this recording."
    )


def test_no_frame_interval(tmp_path):
    end = "Fill in frame_s (in s) for this recording."
    source = "expected frame_s in the assay sheet, or a column time_s in the table."
    assert problem(tmp_path, ROWS, frame_s=None) == (
        f"t.csv: the frame interval is not known; {source} {end}"
    )
    text = "track,frame,time_s,x_um,y_um\na,0,0,0,0\nb,1,0.5,0,0\n"
    assert problem(tmp_path, text, frame_s=None) == (
        "t.csv: the frame interval is not known: no track has two positions, so the times do not "
        f"tell it; {source} {end}"
    )
    assert read(write(tmp_path, text), frame_s=0.5).frame_s_source == "sheet"


def test_times_that_contradict_the_sheet(tmp_path):
    text = "track,frame,time_s,x_um,y_um\na,0,0,0,0\na,1,0.506,0,0\n"
    assert problem(tmp_path, text, frame_s=0.5, where="day1/t.csv") == (
        "day1/t.csv: its times advance by 0.506 s per frame (median), but frame_s in "
        "the assay sheet is 0.5 s; expected the same frame interval from both, within 1 %. "
        "Correct frame_s, or leave it empty to use the times of the table."
    )


@pytest.mark.parametrize("frame_s", [None, 0.5])
@pytest.mark.parametrize("later", ["0.25", "0.5"])
def test_times_that_do_not_increase_with_the_frames(tmp_path, frame_s, later):
    text = f"track,frame,time_s,x_um,y_um\nb,0,3,0,0\na,0,0.5,0,0\na,1,{later},0,0\n"
    assert problem(tmp_path, text, frame_s=frame_s) == (
        f"t.csv, row 4: in track 'a' the time goes from 0.5 s in frame 0 to {later} s in frame 1; "
        "expected times that increase with the frames. "
        "Correct the columns for frame and time, or delete the column for time."
    )


def test_rows_out_of_order_whose_times_disagree(tmp_path):
    text = "track,frame,time_s,x_um,y_um\na,1,0,0,0\na,0,0.5,0,0\n"
    assert problem(tmp_path, text) == (
        "t.csv, row 2: in track 'a' the time goes from 0.5 s in frame 0 to 0 s in frame 1; "
        "expected times that increase with the frames. "
        "Correct the columns for frame and time, or delete the column for time."
    )


# What was written comes back

LABELS = st.text(st.characters(codec="utf-8", exclude_categories=("C", "Z")), min_size=1)
COORDINATES = st.floats(-1e6, 1e6, width=64)


@st.composite
def tracks(draw):
    labels = draw(st.lists(LABELS, min_size=1, max_size=4, unique=True))
    frames = [sorted(draw(st.sets(st.integers(0, 50), min_size=1, max_size=6))) for _ in labels]
    n = sum(map(len, frames))
    interval = draw(st.floats(1e-3, 100))

    def column(elements):
        return np.array(draw(st.lists(elements, min_size=n, max_size=n)), dtype=float)

    frame = np.concatenate(frames).astype(np.int64)
    frame -= frame.min()
    heading = column(st.floats(-math.pi, math.pi) | st.just(math.nan))
    return interval, Tracks(
        label=np.array(labels),
        offsets=np.cumsum([0, *map(len, frames)]),
        frame=frame,
        time_s=frame * interval,
        x_um=column(COORDINATES),
        y_um=column(COORDINATES),
        heading_rad=None if np.all(np.isnan(heading)) else heading,
        length_um=draw(st.none() | st.just(np.linspace(1, 2, n))),
    )


def in_memory(table, delimiter):
    text = io.StringIO(newline="")
    table.to_csv(text, index=False, sep=delimiter)
    return text.getvalue()


@settings(
    max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(written=tracks(), random=st.randoms(use_true_random=False))
def test_tracks_come_back_identical_from_every_form(tmp_path, written, random):
    interval, expected = written
    table = expected.to_frame()
    for delimiter in ",;":
        path = write(tmp_path, in_memory(table, delimiter))
        same(read(path, frame_s=interval).tracks, expected)
    same(read(write(tmp_path, table, "t.parquet"), frame_s=interval).tracks, expected)
    # Without times they follow from the frames.
    path = write(tmp_path, in_memory(table.drop(columns="time_s"), ","))
    same(read(path, frame_s=interval).tracks, expected)
    # The order of rows is no information, but for the order of tracks.
    order = sorted(range(len(table)), key=lambda i: (expected.index[i], random.random()))
    path = write(tmp_path, in_memory(table.iloc[order], ","))
    same(read(path, frame_s=interval).tracks, expected)


def test_flags_say_which_positions_are_not_trusted(tmp_path):
    text = "track,frame,x_um,y_um,flag\na,1,2,3,cut by the edge\na,0,1,3,\nb,0,5,5,\n"
    tracks = read(write(tmp_path, text)).tracks
    assert tracks.flag.tolist() == ["", "cut by the edge", ""]
    bare = read(write(tmp_path, text.replace("cut by the edge", ""))).tracks
    assert bare.flag is None
