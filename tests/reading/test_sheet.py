"""The assay sheet: what it may say, and every way in which it can be wrong."""

import csv
import dataclasses
import datetime
import io
import os
import zipfile
from pathlib import Path

import openpyxl
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.assay import Recording
from glidefit.errors import InputErrors
from glidefit.reading.sheet import read_sheet, sheet_notes

NEEDED = "recording,condition,day,chamber"


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "day1").mkdir()
    for name in ("a.tif", "b.tif", "c.nd2", "film_01.tif", "notes.txt"):
        (tmp_path / "day1" / name).touch()
    (tmp_path / "t.csv").write_text("track,frame,x_um,y_um\n1,0,0,0\n")
    (tmp_path / "u.parquet").touch()
    return tmp_path


def write(folder, text, name="assay.csv"):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def write_workbook(folder, rows, name="assay.xlsx"):
    book = openpyxl.Workbook()
    for row in rows:
        book.active.append(row)
    book.save(folder / name)
    return folder / name


def problems(path):
    with pytest.raises(InputErrors) as caught:
        read_sheet(path)
    return str(caught.value).splitlines()


def only(folder, text):
    """The recordings of a sheet given as text."""
    return read_sheet(write(folder, text)).recordings


# What a sheet may say


def test_every_column_reaches_its_field(folder):
    text = (
        "recording,condition,day,chamber,shape,pixel_um,frame_s,exposure_s,control,preparation,"
        "field,start_time,minutes,first_frame,last_frame,channel,position,atp_uM,operator\n"
        "day1/a.tif,wild type,2024-05-31,2,Spot,0.107,0.5,0.1,YES,P7,f3,14:05,3.5,10,99,1,0,"
        "250,KB\n"
    )
    assert only(folder, text) == (
        Recording(
            name="day1/a.tif",
            path=folder / "day1/a.tif",
            condition="wild type",
            day="2024-05-31",
            chamber="2",
            shape="spot",
            pixel_um=0.107,
            frame_s=0.5,
            exposure_s=0.1,
            control=True,
            preparation="P7",
            field="f3",
            minutes=3.5,
            start_time="14:05",
            first_frame=10,
            last_frame=99,
            channel=1,
            position=0,
            numbers={"atp_uM": 250.0},
            labels={"operator": "KB"},
            where="assay.csv, row 2",
        ),
    )


def test_a_track_table_needs_four_columns_and_counts_as_filament(folder):
    (recording,) = only(folder, f"{NEEDED}\nt.csv,k,day one,A\n")
    assert recording == Recording(
        name="t.csv",
        path=folder / "t.csv",
        condition="k",
        day="day one",
        chamber="A",
        where="assay.csv, row 2",
    )


def test_name_and_path_of_the_sheet(folder):
    assay = read_sheet(write(folder, f"{NEEDED}\nt.csv,k,1,1\n", "kinesin 3.CSV"))
    assert (assay.name, assay.path) == ("kinesin 3", folder / "kinesin 3.CSV")


@pytest.mark.parametrize(
    "text",
    [
        f"{NEEDED}\nt.csv,k,1,1\n",
        f"\ufeff{NEEDED}\nt.csv,k,1,1\n",
        f"{NEEDED}\r\nt.csv,k,1,1\r\n",
        f"{NEEDED}\n\n,,,\n  ,,,\nt.csv,k,1,1",
        f"{NEEDED},\nt.csv,k,1,1,\n",
        f"{NEEDED}\nt.csv,k,1,1,,,\n",
        ' Recording ,"Condition ",DAY,chamber \n t.csv , k ,1, 1\n',
        '"recording";"condition";"day";"chamber"\n"t.csv";"k";"1";"1"\n',
        "recording;condition;day;chamber\nt.csv;k;1;1\n",
        "recording;condition;day;chamber;a, b, c, d, e\nt.csv;k;1;1;\n",
    ],
)
def test_ways_of_writing_the_same_csv(folder, text):
    (recording,) = only(folder, text)
    assert (recording.name, recording.condition, recording.day, recording.chamber) == (
        "t.csv",
        "k",
        "1",
        "1",
    )


def test_row_numbers_are_those_of_a_spreadsheet(folder):
    text = f'{NEEDED},note\n\nt.csv,k,1,1,"two\nlines"\n\nu.parquet,k,1,1,\n'
    first, second = only(folder, text)
    assert (first.where, second.where) == ("assay.csv, row 3", "assay.csv, row 5")
    assert first.labels == {"note": "two lines"}


def test_a_delimiter_inside_quotes_is_text(folder):
    (recording,) = only(folder, f'{NEEDED}\nt.csv,"kinesin, ""fresh""",1,1\n')
    assert recording.condition == 'kinesin, "fresh"'


def test_absolute_and_windows_paths(folder):
    text = f"{NEEDED},shape\n{folder / 't.csv'},k,1,1,\nday1\\a.tif,k,1,1,spot\n"
    table, video = only(folder, text)
    assert (table.path, video.path) == (folder / "t.csv", folder / "day1/a.tif")
    assert video.name == "day1\\a.tif"


def test_a_relative_sheet_gives_absolute_paths(folder, monkeypatch):
    write(folder, f"{NEEDED}\nday1/../t.csv,k,1,1\n")
    monkeypatch.chdir(folder / "day1")
    assay = read_sheet(Path("../assay.csv"))
    assert assay.recordings[0].path == folder / "t.csv"
    assert assay.path == folder / "assay.csv"


@pytest.mark.parametrize(
    ("column", "cells", "numbers", "labels"),
    [
        ("atp_uM", ["5", "1e3"], [5.0, 1000.0], ["", ""]),
        ("atp_uM", ["5", ""], [5.0, None], ["", ""]),
        ("atp_uM", ["5", "none"], [None, None], ["5", "none"]),
        ("motor_ug_ml", ["0.5", "1"], [0.5, 1.0], ["", ""]),
        ("temperature_C", ["-2", "37"], [-2.0, 37.0], ["", ""]),
        ("power_mW", ["1", "2"], [1.0, 2.0], ["", ""]),
        ("pH", ["6.8", "7.2"], [6.8, 7.2], ["", ""]),
        ("density_um2", ["6.8", "7.2"], [6.8, 7.2], ["", ""]),
        ("glycerol_percent", ["6.8", "7.2"], [6.8, 7.2], ["", ""]),
        ("operator_id", ["1", "2"], [None, None], ["1", "2"]),
        ("repeat_2", ["1", "2"], [None, None], ["1", "2"]),
        ("slide", ["1", "2"], [None, None], ["1", "2"]),
        ("atp_uM", ["", ""], [None, None], ["", ""]),
    ],
)
def test_other_columns_are_numbers_with_a_unit_or_labels(folder, column, cells, numbers, labels):
    text = f"{NEEDED},{column}\nt.csv,k,1,1,{cells[0]}\nu.parquet,k,1,1,{cells[1]}\n"
    recordings = only(folder, text)
    assert [r.numbers.get(column) for r in recordings] == numbers
    assert [r.labels.get(column, "") for r in recordings] == labels


def test_the_whole_condition_is_the_control(folder):
    (folder / "v.csv").touch()
    text = f"{NEEDED},control\nt.csv,k,1,1,yes\nu.parquet,k,1,2,\nv.csv,l,1,1,no\n"
    assert [r.control for r in only(folder, text)] == [True, True, False]


@pytest.mark.parametrize(
    ("header", "first", "second", "names"),
    [
        ("channel", "0", "1", ["day1/a.tif [channel 0]", "day1/a.tif [channel 1]"]),
        ("channel", "", "1", ["day1/a.tif", "day1/a.tif [channel 1]"]),
        (
            "channel,position",
            "0,3",
            "1,4",
            ["day1/a.tif [channel 0, position 3]", "day1/a.tif [channel 1, position 4]"],
        ),
        (
            "channel,first_frame,last_frame",
            "1,,99",
            "1,100,",
            ["day1/a.tif [frames 0 to 99]", "day1/a.tif [frames 100 to the end]"],
        ),
    ],
)
def test_parts_of_one_file_have_names_of_their_own(folder, header, first, second, names):
    row = "day1/a.tif,k,1,1,spot"
    text = f"{NEEDED},shape,{header}\n{row},{first}\n{row},{second}\nday1/b.tif,k,1,1,spot\n"
    assert [r.name for r in only(folder, text)] == [*names, "day1/b.tif"]


def test_minutes_count_from_the_first_start_in_each_chamber_unless_given(folder):
    for name in "abcde":
        (folder / f"{name}.csv").touch()
    text = (
        f"{NEEDED},start_time,minutes\n"
        "a.csv,k,1,1,10:30,\n"
        "b.csv,k,1,1,10:00:30,\n"
        "c.csv,k,1,2,11:00,\n"
        "d.csv,k,2,1,09:00,7\n"
        "e.csv,k,2,1,,\n"
    )
    minutes = [r.minutes for r in only(folder, text)]
    assert minutes[1:] == [0.0, 0.0, 7.0, None]
    assert_allclose(minutes[0], 29.5, rtol=1e-12)


def test_workbook_cells_become_plain_text(folder):
    rows = [
        [*NEEDED.split(","), "start_time", "pixel_um", "first_frame", "fresh", "atp_uM", "note"],
        [
            "t.csv",
            "k",
            datetime.date(2024, 5, 31),
            3.0,
            datetime.time(14, 5),
            0.107,
            0,
            True,
            2.0,
            0.1,
        ],
        [],
        ["u.parquet", 5, 20240531, "3b", datetime.datetime(2024, 5, 31, 14, 5), None, 2.0],
    ]
    first, second = read_sheet(write_workbook(folder, rows)).recordings
    assert first == Recording(
        name="t.csv",
        path=folder / "t.csv",
        condition="k",
        day="2024-05-31",
        chamber="3",
        pixel_um=0.107,
        first_frame=0,
        start_time="14:05:00",
        minutes=0.0,
        numbers={"atp_uM": 2.0},
        labels={"fresh": "TRUE", "note": "0.1"},
        where="assay.xlsx, row 2",
    )
    assert (second.condition, second.day, second.chamber) == ("5", "2024-05-31", "3b")
    assert (second.start_time, second.where) == ("2024-05-31T14:05:00", "assay.xlsx, row 4")


def test_the_first_sheet_of_a_workbook_counts_whatever_extent_it_claims(folder):
    book = openpyxl.Workbook()
    for row in ([*NEEDED.split(",")], ["t.csv", "k", 1, 1]):
        book.active.append(row)
    book.create_sheet("other").append(["=1"])
    book.save(folder / "assay.xlsx")
    data = (folder / "assay.xlsx").read_bytes()
    write(folder, _with_extent(data, b"A1"), "assay.xlsx")
    assert [r.chamber for r in read_sheet(folder / "assay.xlsx").recordings] == ["1"]


def _with_extent(data, extent):
    """The same workbook whose first sheet claims to cover other cells."""
    out = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(data)) as old, zipfile.ZipFile(out, "w") as new:
        for name in old.namelist():
            content = old.read(name)
            if name == "xl/worksheets/sheet1.xml":
                assert b'ref="A1:D2"' in content
                content = content.replace(b'ref="A1:D2"', b'ref="' + extent + b'"')
            new.writestr(name, content)
    return out.getvalue()


def test_a_pixel_size_no_microscope_has_is_noted(folder):
    text = f"{NEEDED},pixel_um\nt.csv,k,1,1,107\nu.parquet,k,1,1,0.107\n"
    assert sheet_notes(read_sheet(write(folder, text))) == (
        "assay.csv, row 2: a pixel of 107 µm is unusual; "
        "pixel_um is the width of one pixel in the sample, in µm",
    )


# What a label may look like


@pytest.mark.parametrize(
    ("written", "day"),
    [
        ("20260303", "2026-03-03"),
        ("3.3.2026", "2026-03-03"),
        ("03.12.2026", "2026-12-03"),
        ("2026-03-03", "2026-03-03"),
        ("20261303", "20261303"),
        ("30.2.2026", "30.2.2026"),
        ("12345678", "12345678"),
        ("3/4/2026", "3/4/2026"),
        (" day\u00a0 2 ", "day 2"),
    ],
)
def test_days_become_iso_dates_where_only_one_is_meant(folder, written, day):
    [recording] = only(folder, f"{NEEDED}\nt.csv,k,{written},1\n")
    assert recording.day == day


def test_blanks_in_labels_are_made_plain_but_not_those_in_paths(folder):
    (folder / "two  blanks.csv").touch()
    text = f"{NEEDED},field,note\ntwo  blanks.csv,wild \u00a0type\u200b,1,\u202fa\tb,f  1,x  y\n"
    [recording] = only(folder, text)
    assert recording.path == folder / "two  blanks.csv"
    assert (recording.condition, recording.chamber) == ("wild type", "a b")
    assert (recording.field, recording.labels) == ("f 1", {"note": "x y"})


def test_cells_of_no_width_are_empty(folder):
    [recording] = only(folder, f"{NEEDED},pixel_um,atp_uM\nt.csv,k,1,1,\u200b,\u200b2\u200b\n")
    assert (recording.pixel_um, recording.numbers) == (None, {"atp_uM": 2.0})
    assert problems(write(folder, f"{NEEDED}\nt.csv,\u200b,1,1\n")) == [
        "assay.csv, row 2, column 'condition': is empty; expected the name of the condition. "
        "Fill it in; every recording needs it."
    ]


def notes(folder, *rows):
    """Notes on a sheet with these conditions, days and chambers."""
    for i in range(len(rows)):
        (folder / f"t{i}.csv").touch()
    lines = [f"t{i}.csv,{row}" for i, row in enumerate(rows)]
    return sheet_notes(read_sheet(write(folder, "\n".join([NEEDED, *lines]))))


def test_a_plain_sheet_has_no_notes(folder):
    assert notes(folder, "WT,2026-03-03,1", "WT,4.3.2026,1", "mut,20260303,2") == ()


@pytest.mark.parametrize(
    ("rows", "note"),
    [
        (("WT,1,1", "wt,1,2"), "conditions 'WT' and 'wt' differ only by capitals or blanks; "
         "if they are the same, write them alike"),
        (("wild type,1,1", "wildtype,1,2"), "conditions 'wild type' and 'wildtype' differ only by "
         "capitals or blanks; if they are the same, write them alike"),
        (("k,Day 1,1", "k,day1,2"), "days 'Day 1' and 'day1' differ only by capitals or blanks; "
         "if they are the same, write them alike"),
        (("k,3.3.2026,1", "k,Monday,1"), "days are written in different styles, such as "
         "'2026-03-03' and 'Monday'; a day written in two styles counts as two days"),
        (("k,3/3/2026,1", "k,2026-03-03,1"), "days are written in different styles, such as "
         "'3/3/2026' and '2026-03-03'; a day written in two styles counts as two days"),
        (("a,1,A", "b,1,A", "a,2,A"), "chamber 'A' of day '1' holds the conditions 'a' and 'b': a "
         "solution exchange? Then this is right; otherwise give each chamber its own label"),
        (("a,1,A", "b,1,A", "c,1,A", "a,2,A", "b,2,A"), "chamber 'A' of day '1' holds the "
         "conditions 'a', 'b' and 'c' (and 1 more such): a solution exchange? Then this is right; "
         "otherwise give each chamber its own label"),
    ],
)  # fmt: skip
def test_what_looks_odd_in_labels_is_noted(folder, rows, note):
    assert notes(folder, *rows) == (note,)


# What can be wrong with the file as a whole

SHEET = "expected an assay sheet as CSV or XLSX."


@pytest.mark.parametrize(
    ("content", "name", "message"),
    [
        (b"", "assay.csv", f"the file is empty; {SHEET} Check that it was saved whole."),
        (b"\xef\xbb\xbf\n \n", "assay.csv", f"the file is empty; {SHEET} "
         "Check that it was saved whole."),
        (b"", "assay.xlsx", f"the file is empty; {SHEET} Check that it was saved whole."),
        (b"x", "assay.xls", f"'.xls' is no type of an assay sheet; {SHEET} "
         "In the spreadsheet program, save it as XLSX or as 'CSV UTF-8'."),
        (b"x", "assay", f"the file has no type; {SHEET} "
         "In the spreadsheet program, save it as XLSX or as 'CSV UTF-8'."),
        (b"recording", "assay.xlsx", "the file is not a readable XLSX workbook (damaged, or "
         f"locked with a password); {SHEET} Open it in the spreadsheet program and save it anew "
         "as XLSX."),
        (f"{NEEDED}\n".encode("utf-16"), "assay.csv", "the file is written in UTF-16; expected "
         "text in UTF-8. In the spreadsheet program, save it as 'CSV UTF-8'."),
        (f"{NEEDED}\n".encode("utf-16-le"), "assay.csv", "the file holds zero bytes, so it is "
         "written in UTF-16 or is not text at all; expected text in UTF-8. In the spreadsheet "
         "program, save it as 'CSV UTF-8'."),
        (f"{NEEDED},µ\n".encode("latin-1"), "assay.csv", "line 1 holds the byte 0xB5, which is not "
         "UTF-8 (in Latin-1 it is 'µ'); expected text in UTF-8. In the spreadsheet program, save "
         "it as 'CSV UTF-8'."),
        (b"PK\x03\x04 and so on", "assay.csv", "the file is a workbook (XLSX) or a ZIP archive, "
         "not text; expected text in UTF-8. In the spreadsheet program, save it as 'CSV UTF-8'."),
        (b"recording\tcondition\tday\tchamber\n", "assay.csv", "the columns are separated by "
         "tabs; expected commas or semicolons between the columns. In the spreadsheet program, "
         "save it as 'CSV UTF-8'."),
        (f"{NEEDED}\n".encode(), "assay.csv", "there is no row below the header; expected one row "
         "for each recording. Add the recordings."),
        (f"{NEEDED}\n,,,\n".encode(), "assay.csv", "there is no row below the header; expected "
         "one row for each recording. Add the recordings."),
    ],
)  # fmt: skip
def test_a_file_that_is_no_sheet(tmp_path, content, name, message):
    assert problems(write(tmp_path, content, name)) == [f"{name}: {message}"]


def test_an_empty_workbook(tmp_path):
    assert problems(write_workbook(tmp_path, [])) == [
        "assay.xlsx: the first sheet is empty; expected an assay sheet as CSV or XLSX. "
        "The table must be on the first sheet of the workbook."
    ]


@pytest.mark.parametrize("text", ['t.csv,"k,1,1\n', 't.csv,"k" x,1,1\n', '"t.csv,k,1,1'])
def test_quotation_marks_that_do_not_match(folder, text):
    assert problems(write(folder, f"{NEEDED}\nu.parquet,k,1,1\n{text}")) == [
        'assay.csv, row 3: the quotation marks do not match; expected a quoted cell as "…", with '
        "every quotation mark inside it doubled. Check the quotation marks of this row."
    ]


def test_a_sheet_that_is_not_there(folder):
    write(folder, "", "assay 2024.csv")
    assert problems(folder / "asay 2024.csv") == [
        f"asay 2024.csv: there is no such file in {folder}; {SHEET} Did you mean 'assay 2024.csv'?"
    ]
    assert problems(folder / "Assay 2024.CSV") == [
        f"Assay 2024.CSV: there is no such file in {folder}; {SHEET} Did you mean 'assay 2024.csv'?"
    ]
    assert problems(folder / "quite_different.xlsx") == [
        f"quite_different.xlsx: there is no such file in {folder}; {SHEET} "
        "Check the path; nothing in that folder has a name like it."
    ]
    assert problems(folder / "none/x.csv") == [
        f"x.csv: there is no such file in {folder}/none; {SHEET} "
        f"There is no folder {folder}/none either; check the path."
    ]
    assert problems(folder / "day1") == [
        f"day1: is a folder; {SHEET} Give the path of the file itself."
    ]


def test_a_pipe_is_not_waited_for(folder):
    os.mkfifo(folder / "assay.csv")
    os.mkfifo(folder / "video.tif")
    assert problems(folder / "assay.csv") == [
        f"assay.csv: is a pipe or a device, not a file on disk; {SHEET} Save it as a file first."
    ]
    assert problems(write(folder, f"{NEEDED},shape\nvideo.tif,k,1,1,spot\n", "b.csv")) == [
        "b.csv, row 2, column 'recording': 'video.tif' is a pipe or a device; expected a video "
        "(TIFF or ND2) or a track table (CSV or Parquet). Save it as a file first."
    ]


def test_a_sheet_that_may_not_be_read(folder, monkeypatch):
    path = write(folder, f"{NEEDED}\n")

    def refuse(self):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", refuse)
    assert problems(path) == [
        f"assay.csv: the file cannot be read (Permission denied); {SHEET} Check its rights."
    ]


# What can be wrong with columns


@pytest.mark.parametrize(
    ("header", "messages"),
    [
        (
            "recording,condition,day",
            ["the column 'chamber' is missing; expected in it the label of the flow chamber. "
             "Add the column."],
        ),
        (
            "file,sample,day,chamber",
            ["the column 'recording' is missing; expected in it the path of a video or a track "
             "table. If 'file' is that column, rename it to 'recording'.",
             "the column 'condition' is missing; expected in it the name of the condition. "
             "If 'sample' is that column, rename it to 'condition'."],
        ),
        (
            "recording,conditon,day,chamber",
            ["the column 'conditon' is nearly 'condition'; expected exactly 'condition', or a name "
             "that is less like it. Did you mean 'condition'? Then rename it."],
        ),
        (
            f"{NEEDED},note,Note",
            ["columns 5 and 6 are both called 'Note'; expected every column once. "
             "Delete or rename one of them."],
        ),
        (
            f"{NEEDED},day ",
            ["columns 3 and 5 are both called 'day'; expected every column once. "
             "Delete or rename one of them."],
        ),
    ],
)  # fmt: skip
def test_a_header_that_is_wrong(folder, header, messages):
    text = f"{header}\nt.csv" + ",t.csv" * header.count(",") + "\n"
    assert problems(write(folder, text)) == [f"assay.csv: {message}" for message in messages]


@pytest.mark.parametrize(
    ("written", "meant"),
    [
        ("pixel_µm", "pixel_um"),
        ("pixel um", "pixel_um"),
        ("pixelsize_um", "pixel_um"),
        ("frames_s", "frame_s"),
        ("frame_ms", "frame_s"),
        ("exposure_ms", "exposure_s"),
        ("start time", "start_time"),
        ("controls", "control"),
    ],
)
def test_a_column_that_is_nearly_a_known_one(folder, written, meant):
    assert problems(write(folder, f"{NEEDED},{written}\nt.csv,k,1,1,1\n")) == [
        f"assay.csv: the column {written!r} is nearly {meant!r}; expected exactly {meant!r}, or a "
        f"name that is less like it. Did you mean {meant!r}? Then rename it."
    ]


@pytest.mark.parametrize("column", ["pixel_um_old", "operator", "motor", "data", "Pixel_um"])
def test_columns_that_may_stand_beside_the_known_ones(folder, column):
    text = f"{NEEDED},{column}\nt.csv,k,1,1,1\n"
    if column == "pixel_um_old":
        text = f"{NEEDED},pixel_um,{column}\nt.csv,k,1,1,1,1\n"
    assert len(only(folder, text)) == 1


def test_a_column_without_a_name(folder):
    assert problems(write(folder, f"{NEEDED},,x\nt.csv,k,1,1\nu.parquet,k,1,1,why,\n")) == [
        "assay.csv, row 3, column 5: holds 'why', but its column has no name; expected a name at "
        "the head of every column. Name the column in the first row, or empty it."
    ]


# What can be wrong with cells


def row_problems(folder, column, cell, start="t.csv,k,1,1"):
    return problems(write(folder, f"{NEEDED},{column}\n{start},{cell}\n"))


NOT_NUMBER = "which is not a number; expected"
ALONE = "Write the number alone, without a unit."
CORRECT = "Correct it, or leave the cell empty if it is not known."
FRAME = "a frame as a whole number from 0"
TIME = "expected HH:MM, HH:MM:SS or an ISO 8601 date and time. For example 14:05 or"


@pytest.mark.parametrize(
    ("column", "cell", "message"),
    [
        ("pixel_um", "107 nm", f"holds '107 nm', {NOT_NUMBER} the pixel size in µm, above 0. "
         f"{ALONE}"),
        ("pixel_um", "nan", f"holds 'nan', {NOT_NUMBER} the pixel size in µm, above 0. {ALONE}"),
        ("pixel_um", "1e999", f"holds '1e999', {NOT_NUMBER} the pixel size in µm, above 0. "
         f"{ALONE}"),
        ("pixel_um", "1_0", f"holds '1_0', {NOT_NUMBER} the pixel size in µm, above 0. {ALONE}"),
        ("pixel_um", "0", f"holds 0; expected the pixel size in µm, above 0. {CORRECT}"),
        ("pixel_um", "-0.1", f"holds -0.1; expected the pixel size in µm, above 0. {CORRECT}"),
        ("pixel_um", '"0,107"', "holds '0,107' with a decimal comma; expected the pixel size in "
         "µm, above 0, with a decimal point. Write 0.107."),
        ("frame_s", "0", f"holds 0; expected the frame interval in s, above 0. {CORRECT}"),
        *(("frame_s", cell, f"holds {cell}, which no film has; expected the frame interval in "
           "seconds, 1e-06 to 100000. Check the unit, or leave the cell empty if it is not known.")
          for cell in ("9e-7", "100001")),
        ("exposure_s", "-1", f"holds -1; expected the exposure in s, 0 or more. {CORRECT}"),
        ("minutes", "-1", "holds -1; expected minutes after the start in the chamber, 0 or more. "
         f"{CORRECT}"),
        ("minutes", "soon", f"holds 'soon', {NOT_NUMBER} minutes after the start in the chamber, "
         f"0 or more. {ALONE}"),
        ("first_frame", "-1", f"holds -1; expected {FRAME}. {CORRECT}"),
        ("last_frame", "1.5", f"holds 1.5; expected {FRAME}. {CORRECT}"),
        ("channel", "GFP", f"holds 'GFP', {NOT_NUMBER} a channel as a whole number from 0. "
         f"{ALONE}"),
        ("position", "-3", f"holds -3; expected a position as a whole number from 0. {CORRECT}"),
        ("shape", "bead", "holds 'bead'; expected 'filament' or 'spot'. Write one of these words."),
        ("shape", "filaments", "holds 'filaments'; expected 'filament' or 'spot'. "
         "Did you mean 'filament'?"),
        ("control", "true", "holds 'true'; expected 'yes', 'no' or an empty cell. "
         "Write one of these words."),
        ("atp_uM", '"0,5"', "holds '0,5' with a decimal comma; expected a number, with a decimal "
         "point. Write 0.5."),
        ("note", "=1+1", 'holds the formula "=1+1"; expected a plain value. Write the value '
         "itself; no cell may begin with an equals sign."),
        ("pixel_um", "=A1", 'holds the formula "=A1"; expected a plain value. Write the value '
         "itself; no cell may begin with an equals sign."),
        ("note", "#N/A", "holds #N/A, the error of a formula; expected a plain value. Write the "
         "value itself; no cell may begin with an equals sign."),
    ],
)  # fmt: skip
def test_a_cell_that_is_wrong(folder, column, cell, message):
    where = f"assay.csv, row 2, column {column!r}"
    assert row_problems(folder, column, cell) == [f"{where}: {message}"]


@pytest.mark.parametrize("cell", ["noon", "25:00", "12:60", "12", "2024-05-31", "12:00:61"])
def test_a_start_time_that_is_none(folder, cell):
    assert row_problems(folder, "start_time", cell) == [
        f"assay.csv, row 2: the start_time {cell!r} is not a time; {TIME} 2024-05-31T14:05."
    ]


@pytest.mark.parametrize(
    ("row", "column", "expected"),
    [
        (",k,1,1", "recording", "the path of a video or a track table"),
        ("t.csv,,1,1", "condition", "the name of the condition"),
        ("t.csv,k, ,1", "day", "the day of the experiment, an ISO 8601 date or any label"),
        ("t.csv,k,1", "chamber", "the label of the flow chamber"),
    ],
)
def test_a_needed_cell_that_is_empty(folder, row, column, expected):
    assert problems(write(folder, f"{NEEDED}\n{row}\n")) == [
        f"assay.csv, row 2, column {column!r}: is empty; expected {expected}. "
        "Fill it in; every recording needs it."
    ]


FILE = "expected a video (TIFF or ND2) or a track table (CSV or Parquet)."


@pytest.mark.parametrize(
    ("recording", "message"),
    [
        ("day1/flm_01.tif", f"there is no file 'day1/flm_01.tif'; {FILE} "
         "Did you mean 'film_01.tif'?"),
        ("day1/FILM_01.TIF", f"there is no file 'day1/FILM_01.TIF'; {FILE} "
         "Did you mean 'film_01.tif'?"),
        ("zzz.tif", f"there is no file 'zzz.tif'; {FILE} Check the path; nothing in that folder "
         "has a name like it."),
        ("day1", f"'day1' is a folder; {FILE} Give one row for each file."),
        ("day1/notes.txt", f"'day1/notes.txt' is of an unknown type; {FILE} "
         "Save it as one of these."),
    ],
)  # fmt: skip
def test_a_recording_that_cannot_be_used(folder, recording, message):
    assert row_problems(folder, "shape", "", start=f"{recording},k,1,1") == [
        f"assay.csv, row 2, column 'recording': {message}"
    ]


def test_a_folder_that_is_not_there_and_a_path_that_is_too_long(folder):
    where = "assay.csv, row 2, column 'recording'"
    assert row_problems(folder, "shape", "", start="day9/a.tif,k,1,1") == [
        f"{where}: there is no file 'day9/a.tif'; {FILE} "
        f"There is no folder {folder}/day9 either; check the path."
    ]
    name = "x" * 5000
    assert row_problems(folder, "shape", "", start=f"{name}/a.tif,k,1,1") == [
        f"{where}: there is no file '{name}/a.tif'; {FILE} "
        f"There is no folder {folder}/{name} either; check the path."
    ]


def test_cells_of_a_workbook_are_named_by_letter_and_number(folder):
    rows = [
        [*NEEDED.split(","), "pixel_um"],
        ["t.csv", "k", 1, "=A1+1", "0,5"],
        ["u.parquet", None, 1, 1],
        *[[]] * 6,
        [*[None] * 27, "beyond"],
    ]
    assert problems(write_workbook(folder, rows)) == [
        'assay.xlsx, cell D2: holds the formula "=A1+1"; expected a plain value. '
        "Write the value itself; no cell may begin with an equals sign.",
        "assay.xlsx, cell E2: holds '0,5' with a decimal comma; expected the pixel size in µm, "
        "above 0, with a decimal point. Write 0.5.",
        "assay.xlsx, cell B3: is empty; expected the name of the condition. "
        "Fill it in; every recording needs it.",
        "assay.xlsx, row 10: has 28 cells, the header has 5; expected no more cells than columns. "
        "Name the column, or empty the cell.",
    ]


# What can be wrong between cells


def test_a_video_needs_a_shape(folder):
    expected = (
        "the shape is not given for the video 'day1/a.tif'; expected in the column 'shape' the "
        "word 'filament' or 'spot'. Write 'spot' for a bead or quantum dot that rides on a "
        "filament."
    )
    for text in (f"{NEEDED}\nday1/a.tif,k,1,1\n", f"{NEEDED},shape\nday1/a.tif,k,1,1,\n"):
        assert problems(write(folder, text)) == [f"assay.csv, row 2: {expected}"]


def test_a_row_with_more_cells_than_the_header(folder):
    header = f"{NEEDED},shape,pixel_um"
    assert problems(write(folder, f"{header}\nday1/a.tif,k,1,1,spot,0,107\n")) == [
        "assay.csv, row 2: has 7 cells, the header has 6; expected no more cells than columns. "
        "Put text that holds a ',' in quotation marks: \"…\". Numbers take a decimal point, not a "
        "comma."
    ]
    text = f"{header}\nday1/a.tif,k,1,1,spot,0.1,x\n".replace(",", ";")
    assert problems(write(folder, text)) == [
        "assay.csv, row 2: has 7 cells, the header has 6; expected no more cells than columns. "
        "Put text that holds a ';' in quotation marks: \"…\"."
    ]


def test_first_frame_after_last_frame(folder):
    assert row_problems(folder, "first_frame,last_frame", "10,9") == [
        "assay.csv, row 2: first_frame 10 comes after last_frame 9; expected the first frame "
        "before the last. Exchange them, or leave both empty to use the whole file."
    ]
    assert only(folder, f"{NEEDED},first_frame,last_frame\nt.csv,k,1,1,9,9\n")[0].last_frame == 9


def test_exposure_longer_than_the_frame_interval(folder):
    assert row_problems(folder, "exposure_s,frame_s", "0.6,0.5") == [
        "assay.csv, row 2: exposure_s is 0.6 s, but frame_s is only 0.5 s; expected an exposure no "
        "longer than the frame interval. Correct one of them; both are in s."
    ]
    text = f"{NEEDED},exposure_s,frame_s\nt.csv,k,1,1,0.5,0.5\nu.parquet,k,1,1,0,\n"
    assert [r.exposure_s for r in only(folder, text)] == [0.5, 0.0]


@pytest.mark.parametrize("same", ["t.csv", "day1/../t.csv", "link.csv"])
def test_a_recording_that_is_there_twice(folder, same):
    os.symlink(folder / "t.csv", folder / "link.csv")
    text = f"{NEEDED},first_frame\nt.csv,k,1,1,\nu.parquet,k,1,1,\n{same},l,2,1,0\n"
    assert problems(write(folder, text)) == [
        f"assay.csv, row 4: {same!r} is already the recording of row 2; expected each recording "
        "once, or other frames, channel or position of it. Delete one of the two rows, or say in "
        "what they differ."
    ]


def test_a_control_that_is_contradicted(folder):
    text = f"{NEEDED},control\nt.csv,k,1,1,yes\nu.parquet,k,1,1,no\n"
    assert problems(write(folder, text)) == [
        "assay.csv, row 3: control is 'no' for 'k', but 'yes' in row 2; expected one answer for "
        "all rows of a condition. Write 'yes' in all of them, or in none."
    ]


def test_two_controls(folder):
    text = f"{NEEDED},control\nt.csv,k,1,1,yes\nu.parquet,l,1,1,yes\n"
    assert problems(write(folder, text)) == [
        "assay.csv: 2 conditions are marked as control: 'k' (row 2) and 'l' (row 3); expected one "
        "condition with which all others are compared. Leave 'control' empty for the others."
    ]


def test_start_times_that_cannot_be_compared(folder):
    def start(first, second):
        return f"{NEEDED},start_time\nt.csv,k,1,A,{first}\nu.parquet,k,1,A,{second}\n"

    form = (
        "in the same chamber 'A'; expected times of one chamber in one form. Write all with the "
        "date or all without, all with the time zone or all without."
    )
    assert problems(write(folder, start("12:00", "2024-05-31T12:00"))) == [
        "assay.csv, row 3: the start_time '2024-05-31T12:00' cannot be compared with '12:00' "
        + form
    ]
    assert problems(write(folder, start("2024-05-31T12:00Z", "2024-05-31T12:00"))) == [
        "assay.csv, row 2: the start_time '2024-05-31T12:00Z' cannot be compared with "
        f"'2024-05-31T12:00' {form}"
    ]
    assert problems(write(folder, start("23:50", "00:10"))) == [
        "assay.csv, row 2: the start_time '23:50' is more than 12 hours after '00:10' in the same "
        "chamber 'A'; expected times of one chamber on one day. If the chamber was filmed past "
        "midnight, write all its times with their dates."
    ]


def test_everything_wrong_is_said_at_once_in_the_order_of_rows(folder):
    text = (
        f"{NEEDED},shape,pixel_um\n"
        "t.csv,k,1,1,,0\n"
        "day1/a.tif,,1,1,rod,x\n"
        "t.csv,k,1,1,,\n"
        "day1/b.tif,k,1,1,spot,1,1\n"
    )
    wheres = [line.split(": ")[0] for line in problems(write(folder, text))]
    assert wheres == [
        "assay.csv, row 2, column 'pixel_um'",
        "assay.csv, row 3, column 'condition'",
        "assay.csv, row 3, column 'shape'",
        "assay.csv, row 3, column 'pixel_um'",
        "assay.csv, row 4",
        "assay.csv, row 5",
    ]


# The same sheet in any form

TEXTS = st.text(
    st.characters(codec="utf-8", exclude_categories=("C", "Z"), exclude_characters="="),
    min_size=1,
    max_size=8,
).filter(lambda text: not text.startswith("#"))
NUMBERS = st.none() | st.floats(1e-4, 1e3).map(lambda v: float(f"{v:.6g}"))


@st.composite
def sheets(draw):
    """Rows of a valid sheet: known columns, one of numbers and one of labels."""
    rows = []
    for i in range(draw(st.integers(1, 6))):
        frame_s = draw(NUMBERS)
        rows.append(
            {
                "recording": f"file{i}.csv",
                "condition": draw(TEXTS),
                "day": draw(TEXTS),
                "chamber": draw(TEXTS),
                "shape": draw(st.sampled_from(["", "spot", "filament"])),
                "pixel_um": draw(NUMBERS),
                "frame_s": frame_s,
                "exposure_s": None if frame_s is None else draw(st.sampled_from([None, frame_s])),
                "minutes": draw(NUMBERS),
                "first_frame": draw(st.none() | st.integers(0, 9)),
                "last_frame": draw(st.none() | st.integers(9, 99)),
                "atp_uM": draw(NUMBERS),
                "note": draw(st.just("") | TEXTS),
            }
        )
    return rows


def as_csv(rows, delimiter):
    text = io.StringIO(newline="")
    writer = csv.DictWriter(text, list(rows[0]), delimiter=delimiter)
    writer.writeheader()
    writer.writerows({k: "" if v is None else v for k, v in row.items()} for row in rows)
    return text.getvalue()


@settings(
    max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(rows=sheets())
def test_a_sheet_says_the_same_in_every_form(tmp_path, rows):
    for i in range(6):
        (tmp_path / f"file{i}.csv").touch()
    expected = tuple(
        Recording(
            name=row["recording"],
            path=tmp_path / row["recording"],
            shape=row["shape"] or "filament",
            numbers={} if row["atp_uM"] is None else {"atp_uM": row["atp_uM"]},
            labels={"note": row["note"]} if row["note"] else {},
            where=f"row {i}",
            **{key: row[key] for key in row if key not in ("recording", "shape", "atp_uM", "note")},
        )
        for i, row in enumerate(rows, 2)
    )
    write(tmp_path, as_csv(rows, ","), "comma.csv")
    write(tmp_path, as_csv(rows, ";"), "semicolon.csv")
    write_workbook(tmp_path, [list(rows[0]), *[list(row.values()) for row in rows]], "book.xlsx")
    for name in ("comma.csv", "semicolon.csv", "book.xlsx"):
        recordings = read_sheet(tmp_path / name).recordings
        for recording, wanted in zip(recordings, expected, strict=True):
            assert recording == dataclasses.replace(wanted, where=f"{name}, {wanted.where}")
