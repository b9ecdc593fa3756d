"""Sheets joined into one assay, errors of all recordings, problems counted."""

from __future__ import annotations

from pathlib import Path

import pytest

from glidefit.assay import Recording
from glidefit.errors import GlidefitError, InputError, InputErrors, NothingLeft
from glidefit.pipeline.prepare import Task
from glidefit.pipeline.run import collect, read_assay
from glidefit.settings import Settings

HEAD = "recording,condition,day,chamber,frame_s,control"


@pytest.fixture
def folder(tmp_path):
    for name in ("mon/assay.csv", "tue/assay.csv", "tue/second.csv"):
        path = tmp_path / name
        path.parent.mkdir(exist_ok=True)
        path.with_suffix(".tracks.csv").write_text("track,frame,x_um,y_um\n")
        row = f"{path.stem}.tracks.csv,wild type,{path.parent.name},c1,0.5,yes"
        path.write_text(f"{HEAD}\n{row}\n")
    return tmp_path


def test_one_sheet_is_read_as_it_is(folder):
    assay = read_assay([folder / "mon/assay.csv"])
    assert assay.name == "assay"
    assert [(r.name, r.where) for r in assay.recordings] == [
        ("assay.tracks.csv", "assay.csv, row 2")
    ]


def test_sheets_of_one_name_are_told_apart_by_their_folders(folder):
    assay = read_assay([folder / "mon/assay.csv", folder / "tue/assay.csv"])
    assert assay.name == "assay-and-1-more"
    assert [(r.name, r.where) for r in assay.recordings] == [
        ("mon/assay/assay.tracks.csv", "mon/assay.csv, row 2"),
        ("tue/assay/assay.tracks.csv", "tue/assay.csv, row 2"),
    ]
    assert assay.conditions == ("wild type",)


def test_sheets_of_several_names_need_no_folder(folder):
    assay = read_assay([folder / "mon/assay.csv", folder / "tue/second.csv"])
    assert [r.name for r in assay.recordings] == [
        "assay/assay.tracks.csv",
        "second/second.tracks.csv",
    ]


def test_same_control_in_every_sheet_is_one_control(folder):
    assay = read_assay([folder / "mon/assay.csv", folder / "tue/second.csv"])
    assert all(r.control for r in assay.recordings)


def recordings(*names):
    return [
        Task(
            recording=Recording(name=name, path=Path(name), condition="a", day="d1", chamber="c1"),
            settings=Settings(),
        )
        for name in names
    ]


ERROR = InputError("a.csv", "1", expected="2", remedy="3")


def test_results_of_all_recordings():
    tasks = recordings("a.csv", "b.csv")
    names = collect(lambda task: task.recording.name, tasks, workers=1, title="x")
    assert names == ["a.csv", "b.csv"]


def test_errors_of_all_recordings_are_collected():
    def work(task):
        if task.recording.name == "b.csv":
            return 1
        raise ERROR if task.recording.name == "a.csv" else InputErrors([ERROR, ERROR])

    with pytest.raises(InputErrors) as told:
        collect(work, recordings("a.csv", "b.csv", "c.csv"), workers=1, title="x")
    assert told.value.errors == (ERROR, ERROR, ERROR)


@pytest.mark.parametrize("kind", [GlidefitError, NothingLeft])
def test_other_errors_are_raised_as_they_are(kind):
    def work(task):
        raise kind("no memory")

    with pytest.raises(kind, match=r"^no memory$"):
        collect(work, recordings("a.csv"), workers=1, title="x")


def test_tables_are_read_in_this_process():
    def not_sendable(task):  # a function inside a function cannot go to another process
        return 1

    assert collect(not_sendable, recordings("a.csv", "b.csv"), workers=2, title="x") == [1, 1]
