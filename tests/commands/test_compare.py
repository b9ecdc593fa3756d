"""`glidefit run` on conditions compared, along a curve, and day by day."""

from __future__ import annotations

import csv
import io
import json

import pytest

HEAD = "recording,condition,day,chamber,frame_s,exposure_s,control,atp_uM,start_time"
SPEEDS = {"full": (1000, 0.80), "half": (50, 0.41), "low": (10, 0.14)}
DAYS = 6


@pytest.fixture
def sheet(desk):
    """The control on six days, on the fourth far too slow; two conditions on the first two."""
    rows = []
    for d in range(DAYS):
        for n, (name, (atp, speed)) in enumerate(SPEEDS.items()):
            if d >= 2 and name != "full":
                continue
            file = f"{name}{d}.csv"
            shift = (1.0, 1.03, 0.98, 0.55, 1.01, 0.99)[d]
            desk.table(file, speed=speed * shift, seed=10 * d + n, n_tracks=8, n_frames=30)
            control = "yes" if name == "full" else ""
            rows.append(f"{file},{name},day {d + 1},c{n},0.5,0.1,{control},{atp},1{n}:00")
    return desk.sheet(*rows, header=HEAD)


def rows_of(path):
    return list(csv.DictReader(io.StringIO(path.read_text(encoding="utf-8"))))


def test_comparison_curve_and_day_chart_in_one_run(desk, sheet):
    said = desk.glidefit("run", sheet)
    assert said.code == 0
    out = desk.folder / "reports/assay"
    data = json.loads((out / "results.json").read_text(encoding="utf-8"))

    ratios = {
        c["condition"]: c["ratio"]["value"]
        for c in data["comparisons"]
        if c["quantity"] == "speed_um_s"
    }
    assert ratios == pytest.approx({"half": 0.51, "low": 0.175}, rel=0.05)
    for c in data["comparisons"]:
        if c["p_value"] is not None:
            low, high = c["ratio"]["low"], c["ratio"]["high"]
            assert (c["p_value"] < 0.05) == (not low <= 1 <= high)
    table = rows_of(out / "tables/comparisons.csv")
    assert len(table) == len(data["comparisons"]) == 8
    assert {r["p_permutation"] for r in table} == {""}

    (curve,) = data["responses"]
    assert (curve["column"], curve["unit"]) == ("atp_uM", "µM")
    assert any(r["parameter"] == "criterion" for r in rows_of(out / "tables/response.csv"))

    (chart,) = data["day_charts"]
    assert [d["day"] for d in chart["days"] if d["signals"]] == ["day 4"]
    pages = {name: text.decode() for name, text in desk.files(out).items() if ".html" in name}
    assert "day 4 is out of control" in pages["index.html"]
    assert "On day 4 the control was out of control" in pages["conditions/full.html"]
    assert "out of control" not in pages["conditions/half.html"]
    assert "full was always filmed before half (2 of 2 times)" in pages["comparison.html"]
    assert "Speed against ATP" in pages["response.html"]


def test_all_pairs_and_another_primary_quantity(desk, sheet):
    options = ("--compare-reference", "all", "--compare-primary", "motile_fraction")
    assert desk.glidefit("run", sheet, *options).code == 0
    data = json.loads((desk.folder / "reports/assay/results.json").read_text(encoding="utf-8"))
    pairs = {(c["condition"], c["reference"]) for c in data["comparisons"]}
    assert pairs == {("half", "full"), ("low", "full"), ("low", "half")}
    assert {c["quantity"] for c in data["comparisons"] if c["primary"]} == {"motile_fraction"}


def test_without_a_control_nothing_is_compared_unless_asked(desk):
    sheet = desk.two_conditions()
    assert desk.glidefit("run", sheet).code == 0
    out = desk.folder / "reports/assay"
    assert json.loads((out / "results.json").read_text(encoding="utf-8"))["comparisons"] == []
    assert not (out / "comparison.html").exists()
    assert desk.glidefit("run", sheet, "--compare-reference", "wild type").code == 0
    assert (out / "comparison.html").exists()
    assert desk.glidefit("report", "reports/assay").code == 0


def test_names_that_the_sheet_does_not_have_are_refused_before_any_work(desk, sheet):
    said = desk.glidefit("run", sheet, "--compare-reference", "ful", "--response-column", "adp_uM")
    assert said.code == 3
    assert "the sheet has no 'ful'" in said.err
    assert "Did you mean 'full'?" in said.err
    assert "the sheet has no 'adp_uM'" in said.err
    assert not (desk.folder / "reports").exists()


def test_several_sheets_are_one_study(desk, sheet):
    head, *rows = (desk.folder / sheet).read_text(encoding="utf-8").splitlines()
    for n in range(2):
        desk.sheet(*rows[n::2], name=f"part{n}.csv", header=head)
    assert desk.glidefit("run", "part0.csv", "part1.csv", "--out", "both").code == 0
    assert desk.glidefit("run", sheet, "--out", "one").code == 0
    both, one = (
        json.loads((desk.folder / name / "results.json").read_text(encoding="utf-8"))
        for name in ("both", "one")
    )

    def ratios(data):
        return {(c["condition"], c["quantity"]): c["ratio"]["value"] for c in data["comparisons"]}

    assert ratios(both) == pytest.approx(ratios(one), nan_ok=True)
    assert len(both["day_charts"][0]["days"]) == DAYS
