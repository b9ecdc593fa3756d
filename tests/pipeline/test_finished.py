from __future__ import annotations

import dataclasses
from pathlib import Path

import pytest

from glidefit.errors import InputError
from glidefit.pipeline.finished import results_file, sibling, used_settings
from glidefit.results import SettingRow
from glidefit.settings import Settings


@pytest.fixture
def with_rows(finished_study):
    return lambda *rows: dataclasses.replace(finished_study, settings=rows)


def row(key, value, source="option"):
    return SettingRow(key=key, value=value, unit="", source=source, help="")


def test_settings_of_a_run_are_read_back(with_rows):
    assert used_settings(with_rows(), "x") == Settings()
    found = used_settings(
        with_rows(
            row("interval.level", "0.9"),
            row("interval.resamples", "500", "file"),
            row("clean.drift", "off"),
            row("fit.longest_lag", "chosen from the data", "default"),
            row("later.setting", "1"),
        ),
        "x",
    )
    assert (found.interval.level, found.interval.resamples) == (0.9, 500)
    assert (found.clean.drift, found.fit.longest_lag) == ("off", None)


@pytest.mark.parametrize("value", ["many", "1.5"])
def test_settings_that_no_run_can_have(with_rows, value):
    with pytest.raises(InputError, match="expected the settings of a run"):
        used_settings(with_rows(row("interval.level", value)), "x")


def test_names_beside_a_run(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "reports/assay").mkdir(parents=True)
    (tmp_path / "reports/assay/results.json").write_text("{}")
    for run in ("reports/assay", "reports/assay/results.json"):
        assert sibling(Path(run), "plan") == Path("reports/assay-plan")
        assert results_file(Path(run)) == Path("reports/assay/results.json")
    assert sibling(tmp_path / "reports/assay", "plan") == tmp_path / "reports/assay-plan"
    monkeypatch.chdir(tmp_path / "reports/assay")
    assert sibling(Path("."), "plan") == Path("../assay-plan")
