"""`glidefit rehearse`: how often the intervals hold, on the screen and beside the run."""

from __future__ import annotations

import json
import re
import shutil

import pytest


@pytest.fixture
def run(desk, finished_run):
    shutil.copytree(finished_run, desk.folder / "reports/assay")
    return "reports/assay"


def test_rehearsal_lies_beside_the_run_and_says_how_often_the_intervals_hold(desk, run):
    said = desk.glidefit("rehearse", run, "--experiments", 2, "--workers", 1)
    assert (said.code, said.err) == (0, "")
    lines = said.out.splitlines()
    assert lines[0] == "wild type:"
    assert re.fullmatch(
        r"- In 2 simulated experiments of this very design the 95 % interval for the speed "
        r"held the truth in [\d.]+ % \(± [\d.]+ %\): .+\.",
        lines[1],
    )
    assert "wild type, quantum dots:" in lines
    assert lines[-1] == "reports/assay-rehearsal/rehearsal.html: 4 conditions rehearsed."
    files = desk.files("reports/assay-rehearsal")
    assert sorted(files) == ["rehearsal.html", "rehearsal.json"]
    assert files["rehearsal.html"].startswith(b"<!DOCTYPE html>")


def test_one_condition_into_a_folder_of_its_own(desk, run):
    typed = ("--experiments", 2, "--workers", 1, "--seed", 4)
    typed += ("--condition", "loop mutant", "--out", "r")
    said = desk.glidefit("rehearse", run, *typed)
    assert (said.code, said.err) == (0, "")
    data = json.loads(desk.files("r")["rehearsal.json"])
    assert [c["design"]["condition"] for c in data["conditions"]] == ["loop mutant"]
    assert (data["seed"], data["experiments"], data["level"]) == (4, 2, 0.95)


def test_too_few_experiments(desk, run):
    said = desk.glidefit("rehearse", run, "--experiments", 1)
    assert (said.code, said.out) == (2, "")
    assert "1 is not in the range x>=2." in said.err


def test_folder_of_a_run_is_not_replaced(desk, run):
    said = desk.glidefit("rehearse", run, "--experiments", 2, "--out", run)
    assert (said.code, said.out) == (3, "")
    assert "nothing was changed" in said.err
    assert sorted(desk.files(run)) == ["results.json"]


def test_run_that_is_not_there(desk):
    said = desk.glidefit("rehearse", "nowhere")
    assert (said.code, said.out) == (3, "")
    assert said.err.startswith("Error: nowhere/results.json: ")
