"""`glidefit plan`: advice on the screen, plan.json and plan.html beside the run."""

from __future__ import annotations

import json
import shutil

import pytest


@pytest.fixture
def run(desk, finished_run):
    shutil.copytree(finished_run, desk.folder / "reports/assay")
    return "reports/assay"


def test_plan_lies_beside_the_run_and_says_what_to_film(desk, run):
    said = desk.glidefit("plan", run)
    assert (said.code, said.err) == (0, "")
    first, *advice, last = said.out.splitlines()
    assert first == "wild type, speed:"
    assert advice[0].startswith("For a half width of 5.0 %, film ")
    assert advice[1].startswith("More filaments will not help: ")
    assert last == "reports/assay-plan/plan.html: all designs, and what this assumes."
    data = json.loads(desk.files("reports/assay-plan")["plan.json"])
    assert data["advice"] == advice
    assert desk.glidefit("plan", f"{run}/results.json").out == said.out


def test_difference_between_conditions(desk, run):
    said = desk.glidefit(
        "plan", run, "--difference", 10, "--power", 0.9, "--condition", "long neck", "--out", "p"
    )
    assert (said.code, said.err) == (0, "")
    assert "a difference of 10 % seen with a power of 90 %" in said.out
    assert "both conditions on the same days" in said.out
    assert sorted(desk.files("p")) == ["plan.html", "plan.json"]


def test_other_quantity(desk, run):
    said = desk.glidefit(
        "plan", run, "--quantity", "rotational-diffusion", "--half-width", 30, "--seed", 3
    )
    assert said.out.startswith("wild type, rotational diffusion:\n")
    data = json.loads(desk.files("reports/assay-plan")["plan.json"])
    assert (data["quantity"], data["seed"]) == ("rotational_diffusion_rad2_s", 3)


@pytest.mark.parametrize(
    ("typed", "told"),
    [
        (("--half-width", 5, "--difference", 5), "Give either --half-width or --difference."),
        (("--power", 0.9), "--power needs --difference."),
        (("--half-width", 0), "0.0 is not in the range 0<x<=1000."),
        (("--difference", 5, "--power", 1), "1.0 is not in the range 0<x<1."),
    ],
)
def test_wrong_usage(desk, run, typed, told):
    said = desk.glidefit("plan", run, *typed)
    assert (said.code, said.out) == (2, "")
    assert told in said.err
    assert sorted(p.name for p in (desk.folder / "reports").iterdir()) == ["assay"]


def test_condition_that_is_not_there(desk, run):
    said = desk.glidefit("plan", run, "--condition", "loop mutants")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: reports/assay/results.json: there is no condition 'loop mutants'; expected one of "
        "'wild type', 'loop mutant', 'long neck', 'wild type, quantum dots'. Did you mean 'loop "
        "mutant'?\n"
    )


def test_run_that_is_not_there(desk):
    said = desk.glidefit("plan", "nowhere")
    assert (said.code, said.out) == (3, "")
    assert said.err.startswith("Error: nowhere/results.json: ")


def test_folder_with_something_else(desk, run):
    desk.write("reports/assay-plan/notes.txt", "mine")
    before = desk.files()
    said = desk.glidefit("plan", run)
    assert (said.code, said.out) == (3, "")
    assert "the folder is not empty" in said.err
    assert desk.files() == before
