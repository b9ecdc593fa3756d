"""`glidefit sheet`: drafts an assay sheet and never overwrites one."""

from __future__ import annotations

import csv

import numpy as np
import pytest
import tifffile


@pytest.fixture
def folder(desk, simulated):
    for day in ("2026-03-02", "2026-03-03"):
        desk.table(f"films/{day}/wild type_ch2_f1.csv")
    [video, _] = sorted((simulated / "videos").iterdir())
    (desk.folder / "films/2026-03-03/dots_ch10_f1.ome.tif").write_bytes(video.read_bytes())
    return "films"


def rows(desk, path="films/assay.csv"):
    with (desk.folder / path).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


PATTERN = "{day}/{condition}_ch{chamber}_{field}"


def test_draft_from_names_and_files(desk, folder):
    said = desk.glidefit("sheet", folder, "--names", PATTERN)
    assert (said.code, said.err) == (0, "")
    assert said.out == (
        "films/assay.csv: 3 recordings. Fill in shape of the videos. Then run `glidefit check "
        "films/assay.csv`.\n"
    )
    drafted = rows(desk)
    told = [tuple(row[k] for k in ("day", "condition", "chamber", "field")) for row in drafted]
    assert told == [
        ("2026-03-02", "wild type", "2", "f1"),
        ("2026-03-03", "dots", "10", "f1"),
        ("2026-03-03", "wild type", "2", "f1"),
    ]
    assert [row["pixel_um"] for row in drafted] == ["", "0.16", ""]
    assert [row["frame_s"] for row in drafted] == ["", "0.5", ""]
    assert [row["exposure_s"] for row in drafted] == ["", "0.1", ""]


def test_draft_without_names_says_what_to_fill_in(desk, folder):
    said = desk.glidefit("sheet", folder)
    assert said.out == (
        "films/assay.csv: 3 recordings. Fill in chamber, condition, day; shape of the videos. "
        "Then run `glidefit check films/assay.csv`.\n"
    )


def test_path_with_a_blank_can_be_pasted(desk, folder):
    said = desk.glidefit("sheet", folder, "--names", PATTERN, "--out", "my sheet.csv")
    assert said.out.endswith("Then run `glidefit check 'my sheet.csv'`.\n")


def test_draft_is_a_sheet_that_check_can_read(desk, folder):
    desk.glidefit("sheet", folder, "--names", PATTERN, "--out", "elsewhere.csv")
    path = desk.folder / "elsewhere.csv"
    text = path.read_text(encoding="utf-8").splitlines()
    head = text[0].split(",")
    filled = [dict(zip(head, line.split(","), strict=True)) for line in text[1:]]
    assert all(row["recording"].startswith(f"{desk.folder}/films/") for row in filled)
    for row in filled:
        row["frame_s"], row["shape"] = "0.5", "spot" if row["recording"].endswith("tif") else ""
    path.write_text("\n".join([text[0], *(",".join(row.values()) for row in filled)]), "utf-8")
    said = desk.glidefit("check", "elsewhere.csv", "--workers", "1")
    assert (said.code, said.err) == (0, "")
    assert said.out.endswith("3 recordings of 2 conditions can be run.\n")


@pytest.mark.parametrize("out", [[], ["--out", "films/assay.csv"]])
def test_existing_file_is_not_overwritten(desk, folder, out):
    desk.write("films/assay.csv", "of somebody")
    said = desk.glidefit("sheet", folder, *out)
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: films/assay.csv: it exists already and was not changed. Move it away, or choose "
        "another --out.\n"
    )
    assert (desk.folder / "films/assay.csv").read_text() == "of somebody"


@pytest.mark.parametrize("out", ["a.xlsx", "assay"])
def test_sheet_is_written_as_csv_only(desk, folder, out):
    said = desk.glidefit("sheet", folder, "--out", out)
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        f"Error: {out}: the sheet is written as CSV. Give --out a name that ends in .csv; a "
        "spreadsheet program opens it and can save it as XLSX.\n"
    )
    assert not (desk.folder / out).exists()


def test_tables_need_nothing_of_the_videos(desk):
    desk.table("films/a.csv")
    said = desk.glidefit("sheet", "films", "--names", "{field}")
    assert "Fill in chamber, condition, day. Then" in said.out


def test_video_without_calibration_and_table_without_columns(desk):
    desk.write("films/notes.csv", "a,b\n1,2\n")
    tifffile.imwrite(desk.folder / "films/bare.tif", np.zeros((5, 32, 32), "u2"))
    said = desk.glidefit("sheet", "films")
    assert "day; shape, pixel_um, frame_s of the videos. Then" in said.out
    [_, table] = rows(desk)
    assert table["remark"].startswith(
        "the columns 'track', 'frame', 'x_um' and 'y_um' are missing. Its columns are 'a', 'b'."
    )


def test_place_that_cannot_be_written(desk, folder):
    said = desk.glidefit("sheet", folder, "--out", "nowhere/assay.csv")
    assert said.code == 3
    assert said.err == "Error: nowhere/assay.csv: cannot be written (No such file or directory).\n"


def test_folder_without_recordings(desk):
    desk.write("notes/a.txt", "")
    said = desk.glidefit("sheet", "notes")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: notes: neither videos nor track tables are in it; expected a folder with videos or "
        "track tables. The types read are .btf, .nd2, .tf8, .tif, .tiff, .csv, .parquet, .pq.\n"
    )
    assert not (desk.folder / "notes/assay.csv").exists()


def test_pattern_that_fits_nothing(desk, folder):
    said = desk.glidefit("sheet", folder, "--names", "{day}")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: --names: '{day}' fits none of the 3 files; expected a pattern for the whole path "
        "below the folder, without its type. The first one is '2026-03-02/wild type_ch2_f1'; '*' "
        "stands for any text.\n"
    )


def test_broken_video_gets_a_remark(desk):
    (desk.folder / "films").mkdir()
    tifffile.imwrite(desk.folder / "films/one.tif", np.zeros((32, 32), "u2"))
    assert desk.glidefit("sheet", "films").code == 0
    [row] = rows(desk)
    assert row["remark"] == (
        "1 frame. Give the whole recording, or take the row out of the assay sheet."
    )
