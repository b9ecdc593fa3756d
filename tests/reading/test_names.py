"""The draft of an assay sheet: which files it lists and what it reads from their names."""

import csv
import os

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from glidefit.errors import InputError
from glidefit.reading.names import draft_sheet
from glidefit.reading.sheet import read_sheet

COLUMNS = [
    "recording",
    "condition",
    "day",
    "chamber",
    "shape",
    "pixel_um",
    "frame_s",
    "exposure_s",
    "control",
]


def touch(folder, *names):
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text("track,frame,x_um,y_um\n")


def problem(folder, *, names=None):
    with pytest.raises(InputError) as caught:
        draft_sheet(folder, names=names)
    return str(caught.value)


def told(folder, names, *columns):
    return [tuple(row[column] for column in columns) for row in draft_sheet(folder, names=names)]


def test_files_are_listed_in_natural_order(tmp_path):
    touch(tmp_path, "day10/a.tif", "day9/f10.csv", "day9/F9.nd2", "z.parquet", "day9/f1.btf")
    rows = draft_sheet(tmp_path, names=None)
    assert [row["recording"] for row in rows] == [
        "day9/f1.btf",
        "day9/F9.nd2",
        "day9/f10.csv",
        "day10/a.tif",
        "z.parquet",
    ]
    assert list(rows[0]) == COLUMNS
    assert all(row[column] == "" for row in rows for column in COLUMNS[1:])


def test_files_that_are_no_recordings_are_passed_over(tmp_path):
    touch(
        tmp_path,
        "a.tif",
        ".hidden/b.tif",
        ".c.tif",
        "~$d.csv",
        "reports/run/results.json",
        "reports/run/tables/tracks.csv",
        "notes.txt",
        "sheet.xlsx",
    )
    (tmp_path / "assay.csv").write_text('\ufeffRecording;"Condition";day;chamber\n')
    (tmp_path / "empty.csv").write_bytes(b"")
    rows = draft_sheet(tmp_path, names=None)
    assert [row["recording"] for row in rows] == ["a.tif", "empty.csv"]


def test_pipes_are_not_waited_for_and_a_link_to_itself_is_listed(tmp_path):
    touch(tmp_path, "a.csv")
    os.mkfifo(tmp_path / "pipe.csv")
    os.mkfifo(tmp_path / "pipe.tif")
    os.symlink(tmp_path / "round.csv", tmp_path / "round.csv")
    rows = draft_sheet(tmp_path, names=None)
    assert [row["recording"] for row in rows] == ["a.csv", "round.csv"]


def test_a_link_back_up_does_not_go_round_in_circles(tmp_path):
    touch(tmp_path, "day1/a.tif")
    os.symlink(tmp_path, tmp_path / "day1/up")
    (tmp_path / "elsewhere").mkdir()
    touch(tmp_path / "elsewhere", "b.tif")
    os.symlink(tmp_path / "elsewhere", tmp_path / "day2")
    rows = draft_sheet(tmp_path, names=None)
    assert [r["recording"] for r in rows] == ["day1/a.tif", "day2/b.tif", "elsewhere/b.tif"]


@pytest.mark.parametrize(
    ("file", "names", "columns"),
    [
        (
            "2024-05-31/wild_type_ch2_f_1.ome.tif",
            "{day}/{condition}_ch{chamber}_{field}",
            {"day": "2024-05-31", "condition": "wild_type", "chamber": "2", "field": "f_1"},
        ),
        (
            "a_chimera_ch2_f.tif",
            "{condition}_ch{chamber}_{field}",
            {"condition": "a_chimera", "chamber": "2", "field": "f"},
        ),
        ("kin_wt_2.csv", "{condition}_{chamber}", {"condition": "kin_wt", "chamber": "2"}),
        (
            "2024-05-31-kin-2.csv",
            "{day}-{condition}-{chamber}",
            {"day": "2024-05-31", "condition": "kin", "chamber": "2"},
        ),
        ("20240531_kin.csv", "{day}_{condition}", {"day": "2024-05-31", "condition": "kin"}),
        ("31.5.2024.kin.csv", "{day}.{condition}", {"day": "2024-05-31", "condition": "kin"}),
        ("99999999_kin  a.csv", "{day}_{condition}", {"day": "99999999", "condition": "kin a"}),
        ("Monday-kin.csv", "{day}-{condition}", {"day": "Monday", "condition": "kin"}),
        ("x/y/kin.csv", "*/{condition}", {"condition": "kin"}),
        ("kin (1) 50 uM.csv", "{condition} (1) {atp_uM} uM", {"condition": "kin", "atp_uM": "50"}),
        ("d1/d1_kin.csv", "{day}/{day}_{condition}", {"day": "d1", "condition": "kin"}),
        ("a.b/k.1.csv", "{day}/{condition}.{chamber}", {"condition": "k", "chamber": "1"}),
        ("spot/k.csv", "{ shape }/{condition}", {"shape": "spot", "condition": "k"}),
    ],
)
def test_names_fill_columns(tmp_path, file, names, columns):
    touch(tmp_path, file)
    assert told(tmp_path, names, *columns) == [tuple(columns.values())]


def test_a_file_that_does_not_fit_stays_empty(tmp_path):
    touch(tmp_path, "d1/kin.csv", "other.csv", "d1/sub/kin.csv", "d2/d1_kin.csv")
    columns = ("recording", "day", "condition")
    assert told(tmp_path, "{day}/{condition}", *columns) == [
        ("d1/kin.csv", "d1", "kin"),
        ("d1/sub/kin.csv", "", ""),
        ("d2/d1_kin.csv", "d2", "d1_kin"),
        ("other.csv", "", ""),
    ]


def test_facts_are_asked_of_every_file_and_names_come_before_them(tmp_path):
    touch(tmp_path, "0.5/a.tif", "0.5/b.csv")
    asked = []

    def facts(path):
        asked.append(path)
        if path.suffix == ".csv":
            return {}
        return {"pixel_um": "0.107", "frame_s": "1", "remark": "frame times vary"}

    rows = draft_sheet(tmp_path, names="{frame_s}/{field}", facts=facts)
    assert asked == [tmp_path / "0.5/a.tif", tmp_path / "0.5/b.csv"]
    assert list(rows[0]) == [*COLUMNS, "field", "remark"]
    wanted = ("frame_s", "field", "pixel_um", "remark")
    assert [tuple(row[column] for column in wanted) for row in rows] == [
        ("0.5", "a", "0.107", "frame times vary"),
        ("0.5", "b", "", ""),
    ]


PATTERN = (
    "expected a pattern with columns of the assay sheet in braces. "
    'For example "{day}/{condition}_ch{chamber}_{field}".'
)
NO_COLUMN = (
    "is no column of the assay sheet that a name can fill; expected columns of the sheet in "
    "braces, or a quantity with its unit, as {atp_uM}."
)
ALL = (
    "The columns are condition, day, chamber, shape, pixel_um, frame_s, exposure_s, control, "
    "preparation, field, start_time, minutes, first_frame, last_frame, channel, position."
)


@pytest.mark.parametrize(
    ("names", "message"),
    [
        ("{day}/{conditon}", f"{{conditon}} {NO_COLUMN} Did you mean {{condition}}?"),
        ("{day}/{Condition}", f"{{Condition}} {NO_COLUMN} Did you mean {{condition}}?"),
        ("{day}/{}", f"{{}} {NO_COLUMN} {ALL}"),
        ("{recording}", f"{{recording}} {NO_COLUMN} {ALL}"),
        ("{day/{condition}", f"a brace in '{{day/{{condition}}' has no partner; {PATTERN}"),
        ("{day}}", f"a brace in '{{day}}}}' has no partner; {PATTERN}"),
        ("day1/*", f"'day1/*' names no column; {PATTERN}"),
        ("", f"'' names no column; {PATTERN}"),
        (
            "{day}-{condition}",
            "'{day}-{condition}' fits none of the 2 files; expected a pattern for the whole path "
            "below the folder, without its type. The first one is 'd1/kin_1'; '*' stands for any "
            "text.",
        ),
    ],
)
def test_a_pattern_that_cannot_be_used(tmp_path, names, message):
    touch(tmp_path, "d1/kin_1.ome.tif", "d1/kin_2.tif")
    assert problem(tmp_path, names=names) == f"--names: {message}"


def test_a_folder_that_cannot_be_used(tmp_path):
    touch(tmp_path, "data/notes.txt")
    assert problem(tmp_path / "data") == (
        f"{tmp_path}/data: neither videos nor track tables are in it; expected a folder with "
        "videos or track tables. The types read are .btf, .nd2, .tf8, .tif, .tiff, .csv, "
        ".parquet, .pq."
    )
    expected = "expected a folder with videos or track tables."
    assert problem(tmp_path / "dat") == (
        f"{tmp_path}/dat: there is no such folder; {expected} Did you mean 'data'?"
    )
    assert problem(tmp_path / "data/notes.txt") == (
        f"{tmp_path}/data/notes.txt: this is a file; {expected} Give the folder it is in."
    )


def test_a_folder_that_may_not_be_read(tmp_path, monkeypatch):
    touch(tmp_path, "closed/a.tif")
    whole = type(tmp_path).iterdir

    def iterdir(self):
        if self.name == "closed":
            raise PermissionError(13, "Permission denied")
        return whole(self)

    monkeypatch.setattr(type(tmp_path), "iterdir", iterdir)
    assert problem(tmp_path) == (
        f"{tmp_path}/closed: the folder cannot be read (Permission denied); expected a folder with "
        "videos or track tables. Check its rights."
    )


PARTS = st.text(st.sampled_from("ab1-+ ."), min_size=1, max_size=5).filter(
    lambda text: text == text.strip(" .") and text and "  " not in text
)


@settings(
    max_examples=50, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(parts=st.lists(st.tuples(PARTS, PARTS, PARTS), min_size=1, max_size=4, unique=True))
def test_a_filled_draft_is_a_sheet(tmp_path_factory, parts):
    """Names made from days, conditions and chambers give these back through the sheet."""
    folder = tmp_path_factory.mktemp("names")
    for day, condition, chamber in parts:
        touch(folder, f"{day}/{condition}_{chamber}.csv")
    rows = draft_sheet(folder, names="{day}/{condition}_{chamber}")
    with (folder / "sheet.csv").open("w", newline="") as file:
        writer = csv.DictWriter(file, list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)
    recordings = read_sheet(folder / "sheet.csv").recordings
    assert sorted((r.day, r.condition, r.chamber) for r in recordings) == sorted(parts)
