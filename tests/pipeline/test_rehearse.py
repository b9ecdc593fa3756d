from __future__ import annotations

import dataclasses
import json
import shutil

import pytest
from scipy import stats

from glidefit.errors import InputError, OutputError
from glidefit.pipeline.rehearse import rehearse
from glidefit.writing.json_files import results_text


@pytest.fixture(scope="module")
def rehearsed(finished_run):
    def call(out, **options):
        given = {"experiments": 3, "conditions": ["wild type"], "workers": 1, "seed": 1}
        return rehearse(finished_run, out=out, **(given | options))

    return call


@pytest.fixture(scope="module")
def once(rehearsed, tmp_path_factory):
    """Eight experiments of the control, and the folder."""
    out = tmp_path_factory.mktemp("rehearsal") / "out"
    return rehearsed(out, experiments=8), out


@pytest.fixture(scope="module")
def few(rehearsed, tmp_path_factory):
    """Two experiments of the same."""
    out = tmp_path_factory.mktemp("few") / "out"
    return rehearsed(out, experiments=2), out


def test_intervals_hold_as_often_as_they_say(once):
    """Held in k of 8: a binomial test of each at 1e-4; with the truth off they hold in none."""
    [condition] = once[0].conditions
    assert len(condition.quantities) == 4
    for q in condition.quantities:
        assert (q.with_value, q.with_interval) == (8, 8)
        assert stats.binomtest(q.held, 8, 0.95).pvalue > 1e-4
        # Four standard errors, widened to Student's t with 7 degrees of freedom.
        assert abs(q.bias) < 7 * q.bias_error


def test_scatter_is_that_of_the_components(once):
    """The standard errors of the levels add up to the scatter of the estimates: χ² with 8."""
    [condition] = once[0].conditions
    for parts in condition.design.components:
        [q] = [q for q in condition.quantities if q.quantity == parts.quantity]
        expected = sum(error**2 for error in parts.errors.values())
        # Edges of the field and the unknown spread of D_r make the filaments' part a rough one.
        ratio = 8 * q.rmse**2 / expected
        assert stats.chi2.ppf(1e-4, 8) / 1.5 < ratio < 1.5 * stats.chi2.ppf(1 - 1e-4, 8)


def test_chambers_scatter_as_the_bound_of_their_tracks_says(once):
    """48 chambers about their own truth: χ², widened for what the bound leaves out (edges)."""
    [condition] = once[0].conditions
    *bounded, motile = condition.quantities
    assert motile.against_bound is None
    for q in bounded:
        b = q.against_bound
        assert b.chambers == 48
        assert 5 < b.tracks < 60
        # The speed is a mean over the filaments present, and has a least error of its own.
        ratio = b.of_present if q.quantity == "speed_um_s" else b.ratio
        square = 48 * ratio**2
        assert stats.chi2.ppf(1e-4, 48) / 1.3 < square < 1.3 * stats.chi2.ppf(1 - 1e-4, 48)
        assert abs(b.bias) < 5 * b.bias_error
        # Most of the error is that of the true values, which both share.
        assert b.tracks_alone < b.chambers_alone
        assert 0.5 < b.of_best < 1.5
    assert "times the Cramér-Rao bound" in condition.said[-2]


def test_files_of_a_rehearsal(once):
    made, out = once
    assert sorted(p.name for p in out.iterdir()) == ["rehearsal.html", "rehearsal.json"]
    data = json.loads((out / "rehearsal.json").read_text(encoding="utf-8"))
    assert next(iter(data)) == "format"
    assert data["format"] == "glidefit-rehearsal/1"
    assert data["conditions"][0]["said"] == list(made.conditions[0].said)
    assert len(data["conditions"][0]["quantities"][0]["shown"]) == 8


def test_bytes_do_not_depend_on_the_number_of_workers(rehearsed, few, tmp_path):
    rehearsed(tmp_path / "two", experiments=2, workers=2)
    for name in ("rehearsal.json", "rehearsal.html"):
        assert (tmp_path / "two" / name).read_bytes() == (few[1] / name).read_bytes()


def test_each_experiment_has_a_stream_of_its_own(rehearsed, once, few, tmp_path):
    """Fewer experiments are the first of more; another seed gives others."""
    many, first = (made.conditions[0].quantities[0].shown for made, _ in (once, few))
    assert first == many[:2]
    other = rehearsed(tmp_path / "other", experiments=2, seed=2)
    assert other.conditions[0].quantities[0].shown[0] not in many


def test_unknown_condition_names_the_nearest(rehearsed, tmp_path):
    with pytest.raises(InputError, match=r"there is no condition 'wild tipe'.*Did you mean 'wild"):
        rehearsed(tmp_path / "out", conditions=["wild tipe"])
    assert not (tmp_path / "out").exists()


def test_folder_of_somebody_else_is_left_alone(rehearsed, tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="not empty"):
        rehearsed(tmp_path)
    assert [p.name for p in tmp_path.iterdir()] == ["notes.txt"]


def test_earlier_rehearsal_with_something_added_is_left_alone(rehearsed, few, tmp_path):
    shutil.copytree(few[1], tmp_path / "out")
    (tmp_path / "out/notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="not empty"):
        rehearsed(tmp_path / "out", experiments=2)


def test_unequal_days_are_rehearsed_as_filmed(finished_study, tmp_path):
    """The second chamber of the first day is missing, and one condition alone is on the sheet."""
    condition = finished_study.conditions[0]
    recordings = [r for r in finished_study.recordings if r.condition == condition.condition]
    gone = recordings[1].day, recordings[1].chamber
    condition = dataclasses.replace(
        condition,
        chambers=tuple(c for c in condition.chambers if (c.day, c.chamber) != gone),
        tracks=tuple(t for t in condition.tracks if (t.day, t.chamber) != gone),
    )
    study = dataclasses.replace(
        finished_study, conditions=(condition,), recordings=(recordings[0], *recordings[2:])
    )
    (tmp_path / "results.json").write_text(results_text(study), encoding="utf-8")
    made = rehearse(
        tmp_path / "results.json",
        out=tmp_path / "out",
        experiments=2,
        conditions=(),
        workers=1,
        seed=1,
    )
    [one] = made.conditions
    assert one.design.filaments == ((16.0,), (16.0, 16.0), (16.0, 16.0))
    assert one.design.components[0].chambers_of_day == (1, 2, 2)
    assert one.quantities[0].with_interval == 2
    assert "3 days of 1 to 2 chambers" in (tmp_path / "out/rehearsal.html").read_text("utf-8")
