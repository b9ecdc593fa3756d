"""What a user reads when the assay sheet is wrong: the whole text, and exit code 3."""

from __future__ import annotations

import openpyxl
import pytest


def refused(desk, *rows, name="assay.csv", **kwargs):
    before = desk.files()
    desk.sheet(*rows, name=name, **kwargs)
    said = desk.glidefit("run", name)
    assert (said.code, said.out) == (3, "")
    assert desk.files().keys() - before.keys() == {name}, "nothing is written"
    return said.err


@pytest.fixture(autouse=True)
def _table(desk):
    desk.table("a.csv")


def test_missing_column(desk):
    said = refused(desk, "a.csv,wild type,c1,0.5", header="recording,condition,chamber,frame_s")
    assert said == (
        "Error: assay.csv: the column 'day' is missing; expected in it the day of the experiment, "
        "an ISO 8601 date or any label. Add the column.\n"
    )


def test_column_spelled_nearly_like_a_known_one(desk):
    header = "recording,conditon,day,chamber,frame_s"
    assert refused(desk, "a.csv,wild type,d1,c1,0.5", header=header) == (
        "Error: assay.csv: the column 'conditon' is nearly 'condition'; expected exactly "
        "'condition', or a name that is less like it. Did you mean 'condition'? Then rename it.\n"
    )


def test_recording_listed_twice(desk):
    assert refused(desk, "a.csv,wild type,d1,c1,0.5,", "a.csv,wild type,d1,c2,0.5,") == (
        "Error: assay.csv, row 3: 'a.csv' is already the recording of row 2; expected each "
        "recording once, or other frames, channel or position of it. Delete one of the two rows, "
        "or say in what they differ.\n"
    )


@pytest.mark.parametrize("pixel", ["0", "-0.16"])
def test_pixel_size_that_is_no_size(desk, pixel):
    header = "recording,condition,day,chamber,frame_s,pixel_um"
    assert refused(desk, f"a.csv,wild type,d1,c1,0.5,{pixel}", header=header) == (
        f"Error: assay.csv, row 2, column 'pixel_um': holds {pixel}; expected the pixel size in "
        "µm, above 0. Correct it, or leave the cell empty if it is not known.\n"
    )


def test_exposure_longer_than_the_frame_interval(desk):
    assert refused(desk, "a.csv,wild type,d1,c1,0.5,0.7") == (
        "Error: assay.csv, row 2: exposure_s is 0.7 s, but frame_s is only 0.5 s; expected an "
        "exposure no longer than the frame interval. Correct one of them; both are in s.\n"
    )


def test_text_in_a_column_of_numbers(desk):
    assert refused(desk, "a.csv,wild type,d1,c1,half,") == (
        "Error: assay.csv, row 2, column 'frame_s': holds 'half', which is not a number; expected "
        "the frame interval in s, above 0. Write the number alone, without a unit.\n"
    )


def test_formula_in_a_cell(desk):
    assert refused(desk, "a.csv,wild type,d1,c1,=1/2,") == (
        "Error: assay.csv, row 2, column 'frame_s': holds the formula \"=1/2\"; expected a plain "
        "value. Write the value itself; no cell may begin with an equals sign.\n"
    )


def test_formula_in_a_workbook(desk):
    book = openpyxl.Workbook()
    book.active.append(["recording", "condition", "day", "chamber", "frame_s"])
    book.active.append(["a.csv", "wild type", "d1", "c1", "=1/2"])
    book.save(desk.folder / "assay.xlsx")
    said = desk.glidefit("run", "assay.xlsx")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        'Error: assay.xlsx, cell E2: holds the formula "=1/2"; expected a plain value. Write the '
        "value itself; no cell may begin with an equals sign.\n"
    )


def test_empty_sheet(desk):
    desk.write("assay.csv", "")
    said = desk.glidefit("run", "assay.csv")
    assert said.code == 3
    assert said.err == (
        "Error: assay.csv: the file is empty; expected an assay sheet as CSV or XLSX. Check that "
        "it was saved whole.\n"
    )


def test_sheet_that_is_not_there(desk):
    desk.write("assay.csv", "recording\n")
    said = desk.glidefit("run", "asay.csv")
    assert said.code == 3
    assert said.err == (
        f"Error: asay.csv: there is no such file in {desk.folder}; expected an assay sheet as CSV "
        "or XLSX. Did you mean 'assay.csv' or 'a.csv'?\n"
    )


def test_two_controls(desk):
    desk.table("b.csv")
    header = "recording,condition,day,chamber,frame_s,control"
    rows = ["a.csv,wild type,d1,c1,0.5,yes", "b.csv,mutant,d1,c2,0.5,yes"]
    assert refused(desk, *rows, header=header) == (
        "Error: assay.csv: 2 conditions are marked as control: 'wild type' (row 2) and 'mutant' "
        "(row 3); expected one condition with which all others are compared. Leave 'control' empty "
        "for the others.\n"
    )


def test_all_that_is_wrong_in_a_sheet_is_listed_at_once(desk):
    assert refused(desk, "a.csv,wild type,d1,c1,-1,", "aa.csv,,d1,c2,0.5,") == (
        "3 errors:\n"
        "- assay.csv, row 2, column 'frame_s': holds -1; expected the frame interval in s, above "
        "0. Correct it, or leave the cell empty if it is not known.\n"
        "- assay.csv, row 3, column 'recording': there is no file 'aa.csv'; expected a video (TIFF "
        "or ND2) or a track table (CSV or Parquet). Did you mean 'a.csv' or 'assay.csv'?\n"
        "- assay.csv, row 3, column 'condition': is empty; expected the name of the condition. "
        "Fill it in; every recording needs it.\n"
    )


def test_text_of_a_file_does_not_command_the_terminal(desk):
    said = refused(desk, "a.csv,wild type,d1,c1,\x1b[2J\x07,")
    assert said.startswith("Error: assay.csv, row 2, column 'frame_s': holds '")
    assert "\x1b" not in said
    assert "\x07" not in said
