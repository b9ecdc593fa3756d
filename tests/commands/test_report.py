"""`glidefit report`: the pages of a run anew, from its results alone."""

from __future__ import annotations

import json
import shutil

import pytest


@pytest.fixture
def run(desk, report):
    (desk.folder / report).rename(desk.folder / "run")
    return "run"


def test_pages_come_out_byte_for_byte(desk, run):
    before = desk.files(run)
    for name in ("a.csv", "b.csv", "assay.csv"):
        (desk.folder / name).unlink()  # no recording is needed
    pages = [name for name in before if name.endswith(".html")]
    assert len(pages) == 3
    for name in pages:
        desk.write(f"{run}/{name}", "spoiled")
    said = desk.glidefit("report", run)
    assert (said.code, said.err) == (0, "")
    assert said.out == "run/index.html: pages of 2 conditions.\n"
    assert desk.files(run) == before


def test_results_file_alone(desk, run):
    before = desk.files(run)
    desk.write("alone/results.json", before["results.json"].decode())
    said = desk.glidefit("report", "alone/results.json")
    assert said.out == "alone/index.html: pages of 2 conditions.\n"
    pages = {name: text for name, text in before.items() if name.endswith(".html")}
    assert desk.files("alone") == pages | {"results.json": before["results.json"]}


def test_folder_without_results(desk):
    desk.write("notes/a.txt", "")
    said = desk.glidefit("report", "notes")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        f"Error: notes/results.json: there is no such file in {desk.folder}/notes; expected "
        "results.json of a run of glidefit. Check the path; nothing in that folder has a name like "
        "it.\n"
    )


@pytest.mark.parametrize("slug", ["../../x", "/x", "A", "", 5])
def test_results_that_name_a_page_outside_the_folder(desk, run, slug):
    data = json.loads(desk.files(run)["results.json"])
    data["conditions"][0]["slug"] = slug
    desk.write("evil/deep/results.json", json.dumps(data))
    before = desk.files()
    said = desk.glidefit("report", "evil/deep")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        f"Error: evil/deep/results.json: the slug of condition 'wild type' is {slug!r}; expected a "
        "name of a-z, 0-9 and hyphens, as a run writes it. Take the results.json of a finished "
        "run, or run the analysis again.\n"
    )
    assert desk.files() == before


@pytest.mark.parametrize(
    ("edit", "found"),
    [
        (lambda c: [c[0], c[0]], "two conditions have the same slug"),
        (lambda c: [], "it has no conditions"),
    ],
)
def test_results_whose_pages_would_overwrite_each_other(desk, run, edit, found):
    data = json.loads(desk.files(run)["results.json"])
    data["conditions"] = edit(data["conditions"])
    desk.write("odd/results.json", json.dumps(data))
    said = desk.glidefit("report", "odd")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        f"Error: odd/results.json: {found}; expected conditions, each with a slug of its own. Take "
        "the results.json of a finished run, or run the analysis again.\n"
    )


def test_page_that_cannot_be_written(desk, run):
    (desk.folder / "run/index.html").unlink()
    (desk.folder / "run/index.html/x").mkdir(parents=True)
    said = desk.glidefit("report", run)
    assert (said.code, said.out) == (3, "")
    assert said.err.startswith("Error: run/index.html: cannot be written (")
    assert not list((desk.folder / run).glob(".*"))


def test_a_linked_folder_of_pages_is_not_written_to(desk, run):
    shutil.rmtree(desk.folder / run / "conditions")
    precious = desk.folder / "precious"
    precious.mkdir()
    (desk.folder / run / "conditions").symlink_to(precious)
    said = desk.glidefit("report", run)
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: run/conditions: this is a link to another folder, which is not written to. Delete "
        "the link.\n"
    )
    assert list(precious.iterdir()) == []
