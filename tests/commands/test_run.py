"""`glidefit run`: what it writes, and that the same input gives the same bytes."""

from __future__ import annotations

import json
import re
from html.parser import HTMLParser

import numpy as np
import pytest
from numpy.testing import assert_allclose

TABLES = ("tracks.csv", "set_aside.csv", "per_track.csv", "estimates.csv", "comparisons.csv")
TABLES += ("response.csv",)


def results(desk, folder="reports/tables"):
    return json.loads((desk.folder / folder / "results.json").read_text(encoding="utf-8"))


def numbers(results):
    """Estimates by condition and quantity, as (value, low, high), NaN for none."""
    return {
        (c["condition"], key): np.array([e["value"], e["low"], e["high"]], dtype=float)
        for c in results["conditions"]
        for key, e in c["estimates"].items()
    }


def without_time(files):
    provenance = json.loads(files["provenance.json"])
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\+00:00", provenance.pop("finished"))
    return files | {"provenance.json": provenance}


@pytest.fixture(scope="module")
def once(simulated, tmp_path_factory):
    """Place for the files of one run of the tables, made by the first test that needs them."""
    return {"folder": tmp_path_factory.mktemp("once")}


@pytest.fixture
def first_run(desk, study, once):
    """What a run of study/tables.csv said and wrote."""
    if "said" not in once:
        once["said"] = desk.glidefit("run", "study/tables.csv")
        once["files"] = desk.files("reports/tables")
        once["all"] = desk.files().keys() - {f"study/{name}" for name in desk.files("study")}
    return once


def test_files_of_a_run(first_run):
    assert first_run["files"].keys() == {
        "index.html",
        "comparison.html",
        "conditions/control.html",
        "conditions/mutant.html",
        *(f"tables/{name}" for name in TABLES),
        "results.json",
        "provenance.json",
    }
    assert first_run["all"] == {f"reports/tables/{name}" for name in first_run["files"]}


def test_last_line_of_a_run(first_run):
    said = first_run["said"]
    data = json.loads(first_run["files"]["results.json"])
    seen = sum(r["tracks_seen"] for r in data["recordings"])
    kept = sum(r["tracks_kept"] for r in data["recordings"])
    assert (said.code, said.err) == (0, "")
    assert re.fullmatch(
        rf"reports/tables/index\.html: {kept} tracks kept, {seen - kept} set aside; "
        r"(no problems\.|1 problem waits to be read\.|\d+ problems wait to be read\.)\n",
        said.out,
    )
    assert 0 < kept < seen


def test_last_line_counts_the_problems_that_the_index_page_links_to(first_run):
    page = first_run["files"]["index.html"].decode()
    data = json.loads(first_run["files"]["results.json"])
    linked = re.findall(r"#problems\">(\d+) problems?<", page)
    counted = re.search(r"; (no|\d+) problem", first_run["said"].out)[1]
    expected = sum(map(int, linked)) + len(data["problems"])
    assert expected == (0 if counted == "no" else int(counted))


def test_folders_and_tables_agree_with_the_results(first_run):
    files = first_run["files"]
    data = json.loads(files["results.json"])
    rows = {name: files[f"tables/{name}"].decode().splitlines() for name in TABLES}
    seen = sum(r["tracks_seen"] for r in data["recordings"])
    kept = sum(r["tracks_kept"] for r in data["recordings"])
    assert len(rows["per_track.csv"]) == seen + 1
    assert len(rows["set_aside.csv"]) == seen - kept + 1
    assert len(rows["estimates.csv"]) == len(numbers(data)) + 1


def test_same_seed_same_bytes(desk, study, first_run, monkeypatch):
    assert desk.glidefit("run", f"{study}/tables.csv") == first_run["said"]
    again = desk.files("reports/tables")
    assert without_time(again) == without_time(first_run["files"])


def test_another_seed_gives_other_intervals_of_the_same_values(desk, study, first_run):
    desk.glidefit("fit", f"{study}/tables.csv", "--seed", "2")
    one, two = numbers(json.loads(first_run["files"]["results.json"])), numbers(results(desk))
    different = 0
    for key, estimate in one.items():
        assert_allclose(two[key][0], estimate[0], rtol=1e-12)
        different += not np.array_equal(estimate, two[key], equal_nan=True)
    assert different > 0


def test_order_of_rows_does_not_matter(desk, study, first_run):
    path = desk.folder / study / "tables.csv"
    head, *rows = path.read_text(encoding="utf-8").splitlines()
    path.write_text("\n".join([head, *reversed(rows)]) + "\n", encoding="utf-8")
    desk.glidefit("fit", f"{study}/tables.csv")
    one, two = numbers(json.loads(first_run["files"]["results.json"])), numbers(results(desk))
    assert one.keys() == two.keys()
    for key, estimate in one.items():
        # Sums in another order move the point where the least squares stop, by some 1e-8; the
        # resamples are drawn from days in another order.
        assert_allclose(two[key][0], estimate[0], rtol=1e-6, err_msg=str(key))
        assert_allclose(two[key], estimate, rtol=1e-2, err_msg=str(key))


def test_other_conditions_of_the_sheet_do_not_matter(desk, study, first_run):
    path = desk.folder / study / "tables.csv"
    rows = path.read_text(encoding="utf-8").splitlines()
    path.write_text(
        "\n".join(r for r in rows if "control," not in r or r is rows[0]) + "\n", "utf-8"
    )
    desk.glidefit("fit", f"{study}/tables.csv")
    one, two = numbers(json.loads(first_run["files"]["results.json"])), numbers(results(desk))
    assert {condition for condition, _ in two} == {"mutant"}
    for key, estimate in two.items():
        assert_allclose(estimate, one[key], rtol=1e-12, err_msg=str(key))


def test_number_of_workers_does_not_matter(desk, study):
    files = []
    for workers in (1, 2):
        said = desk.glidefit("run", f"{study}/videos.csv", "--workers", workers)
        assert (said.code, said.err) == (0, "")
        files.append(without_time(desk.files("reports/videos")))
    one, two = (f["provenance.json"].pop("command") for f in files)
    assert (one[:-1], two[:-1]) == ("glidefit run study/videos.csv --workers ",) * 2
    assert files[0] == files[1]
    [condition] = results(desk, "reports/videos")["conditions"]
    assert condition["counts"]["tracks_kept"] >= 10
    # 12 frames in 2 chambers: within 25 % of 0.8 µm/s, 4 standard errors between chambers.
    assert_allclose(condition["estimates"]["speed_um_s"]["value"], 0.8, rtol=0.25)


def test_several_sheets_are_one_study(desk, study, first_run):
    path = desk.folder / study / "tables.csv"
    head, *rows = path.read_text(encoding="utf-8").splitlines()
    for day in ("2026-03-02", "2026-03-03"):
        text = "\n".join([head, *(row for row in rows if f",{day}," in row)]) + "\n"
        desk.write(f"{study}/{day}/assay.csv", text.replace("tracks/", "../tracks/"))
    said = desk.glidefit("fit", f"{study}/2026-03-02/assay.csv", f"{study}/2026-03-03/assay.csv")
    assert (said.code, said.err) == (0, "")
    assert said.out.startswith("reports/assay-and-1-more/results.json: ")
    together = results(desk, "reports/assay-and-1-more")
    names = [r["recording"] for r in together["recordings"]]
    assert names[0] == "2026-03-02/assay/../tracks/control-2026-03-02-c1-f1.csv"
    assert len(set(names)) == 4
    one, two = numbers(json.loads(first_run["files"]["results.json"])), numbers(together)
    for key, estimate in one.items():
        assert_allclose(two[key], estimate, rtol=1e-12, err_msg=str(key))


def test_wrong_sheets_are_told_apart(desk):
    desk.table("a.csv")
    for folder in ("mon", "tue"):
        desk.sheet("../a.csv,wild type,d1,c1,half,0.1", name=f"{folder}/assay.csv")
    said = desk.glidefit("run", "mon/assay.csv", "tue/assay.csv")
    assert said.code == 3
    assert [line.partition(": ")[0] for line in said.err.splitlines()[1:]] == [
        "- mon/assay.csv, row 2, column 'frame_s'",
        "- tue/assay.csv, row 2, column 'frame_s'",
    ]


def test_recording_in_two_sheets(desk):
    desk.table("a.csv")
    for folder in ("mon", "tue"):
        desk.sheet("../a.csv,wild type,d1,c1,0.5,0.1", name=f"{folder}/assay.csv")
    said = desk.glidefit("run", "mon/assay.csv", "tue/assay.csv")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: tue/assay.csv, row 2: a.csv is already the recording of mon/assay.csv, row 2; "
        "expected every recording once. Delete one of the two rows.\n"
    )


def test_sheet_given_twice(desk):
    said = desk.glidefit("run", desk.two_conditions(), f"../{desk.folder.name}/assay.csv")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        f"Error: ../{desk.folder.name}/assay.csv: given twice; expected each sheet once. Name it "
        "once.\n"
    )


def test_two_controls_in_two_sheets(desk):
    header = "recording,condition,day,chamber,frame_s,control"
    for n, name in enumerate(("wild type", "mutant")):
        desk.table(f"{n}.csv", seed=n)
        desk.sheet(f"{n}.csv,{name},d1,c{n},0.5,yes", name=f"s{n}.csv", header=header)
    said = desk.glidefit("run", "s0.csv", "s1.csv")
    assert (said.code, said.out) == (3, "")
    assert said.err == (
        "Error: s0.csv and s1.csv: 2 conditions are marked as control: mutant, wild type; expected "
        "one control. Mark the same condition in every sheet.\n"
    )


class Page(HTMLParser):
    """Elements of a page, and its text outside of scripts and styles."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.text, self._open = [], "", []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, tuple(attributes)))
        self._open.append(tag)

    def handle_endtag(self, tag):
        self._open.append("/")

    def handle_data(self, data):
        if self._open[-1:] not in (["script"], ["style"]):
            self.text += data


SCRIPT, UP, FORMULA = "<script>alert(1)</script>", "../../x", "@SUM(1+1)*cmd|' /C calc'!A0"


def test_hostile_names_stay_text_inside_the_folder(desk):
    outside = desk.files("..").keys()
    header = "recording,condition,day,chamber,frame_s,exposure_s,control,field,preparation,note"
    names = [SCRIPT, UP, FORMULA]
    rows = []
    for n, name in enumerate(names):
        desk.table(f"{n}.csv", seed=n, change={2: "=1+1,0,5,5", 3: "=1+1,1,5,5.4"})
        text = f'"{name}"'
        rows.append(f"{n}.csv,{text},{text},{text},0.5,0.1,,{text},{text},{text}")
    # The track named by a formula is too short, so it is set aside and listed by name.
    said = desk.glidefit(
        "run", desk.sheet(*rows, header=header, name="x<blink>y.csv"), "--out", "out"
    )
    assert (said.code, said.err) == (0, "")
    files = desk.files("out")
    made = desk.files("..").keys() - outside
    root = f"{desk.folder.name}/"
    assert made == {root + "x<blink>y.csv"} | {f"{root}{n}.csv" for n in range(3)} | {
        f"{root}out/{name}" for name in files
    }
    pages = {name: Page(text.decode()) for name, text in files.items() if name.endswith(".html")}
    assert pages.keys() == {
        "index.html",
        "conditions/script-alert-1-script.html",
        "conditions/x.html",
        "conditions/sum-1-1-cmd-c-calc-a0.html",
    }
    for name, page in pages.items():
        assert sum(tag == "script" for tag, _ in page.elements) <= 1, name
        assert "blink" not in {tag for tag, _ in page.elements}, name
        for _, attributes in page.elements:
            for key, value in attributes:
                assert not key.startswith("on")
                assert key not in ("href", "src") or re.match(r"#|conditions/|\.\./index", value)
    assert all(name in pages["index.html"].text for name in names)
    for name, text in files.items():
        if not name.endswith(".csv"):
            continue
        for cell in re.split(r'[,\r\n]|(?<=,)"|"(?=,)', text.decode()):
            number = re.fullmatch(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", cell)
            assert number or not cell.startswith(("=", "+", "-", "@")), f"{name}: {cell}"
    assert "'=1+1" in files["tables/set_aside.csv"].decode()
    assert json.loads(files["results.json"])["conditions"][1]["condition"] == UP
