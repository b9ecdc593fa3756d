"""Rows of the tables of a page."""

from __future__ import annotations

import dataclasses
import math

import pytest

from glidefit.quantities import QUANTITIES
from glidefit.results import Estimate, LevelSpread
from glidefit.writing import page_rows
from glidefit.writing.set_aside_rules import outcomes

NAN = math.nan


@pytest.fixture
def recording(study):
    return study.recordings[0]


def row_of(recording, study):
    return page_rows.recording_rows([recording], study.settings)[0]


def test_every_quantity_is_shown_once(study):
    condition = study.conditions[0]
    shown = page_rows.main_estimates(condition) + page_rows.other_estimates(condition)
    assert sorted(row.quantity.key for row in shown) == sorted(QUANTITIES)


def test_interval_names_its_level_and_what_it_covers(study):
    rows = {r.quantity.key: r for r in page_rows.main_estimates(study.conditions[0])}
    assert rows["speed_um_s"].interval == "95 % interval: 0.771 to 0.836, over days"
    others = {r.quantity.key: r for r in page_rows.other_estimates(study.conditions[0])}
    assert others["translational_diffusion_um2_s"].interval == "95 % interval: at most 9.4 × 10⁻⁴"
    assert others["smallest_speed_um_s"].interval == "no interval"
    assert others["go_rate_per_s"].absent
    assert not others["translational_diffusion_um2_s"].absent


def test_unknown_exposure_says_what_was_assumed(study, recording):
    assert "exposure unknown, assumed 0.2 s" in row_of(recording, study).calibration
    known = dataclasses.replace(recording, exposure_s=0.05, exposure_source="sheet")
    assert "exposure 0.05 s (sheet)" in row_of(known, study).calibration
    assert "exposure unknown" in page_rows.recording_rows([recording], ())[0].calibration


def test_calibration_has_its_source(study, recording):
    assert row_of(recording, study).calibration == (
        "pixel 0.1083 µm (sheet)",
        "frame interval 0.2 s (file)",
        "exposure unknown, assumed 0.2 s",
    )
    table = dataclasses.replace(recording, pixel_um=NAN, field_um=(NAN, NAN))
    assert row_of(table, study).calibration[0] == "positions in µm"
    assert row_of(recording, study).kind == "video of filaments, 80 frames, 80.0 × 80.0 µm"
    assert row_of(table, study).kind == "video of filaments, 80 frames"


def test_calibration_is_said_once_if_it_is_the_same(study, recording):
    other = dataclasses.replace(recording, exposure_s=0.1)
    same = page_rows.recording_rows([recording, recording], study.settings)
    mixed = page_rows.recording_rows([recording, other], study.settings)
    assert page_rows.shared_calibration(same) == same[0].calibration
    assert page_rows.shared_calibration(mixed) == ()
    assert page_rows.shared_calibration(same[:1]) == ()


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({}, "0.0021 µm/s, up to 0.034 µm, from 4 stuck objects; subtracted"),
        (
            {"subtracted": False, "note": "not subtracted: within the noise"},
            "0.0021 µm/s, up to 0.034 µm, from 4 stuck objects; not subtracted: within the noise",
        ),
        ({"measured": False, "note": "not measured: switched off"}, "not measured: switched off"),
        ({"measured": False, "note": "switched off"}, "not measured: switched off"),
        ({"measured": False, "note": ""}, "not measured"),
    ],
)
def test_drift_is_told_in_words(study, recording, changes, text):
    drift = dataclasses.replace(recording.drift, **changes)
    assert row_of(dataclasses.replace(recording, drift=drift), study).drift == text


def test_spread_names_the_level_that_brings_most():
    spread = [
        LevelSpread(quantity="speed_um_s", level="days", units=3, relative_error=0.02),
        LevelSpread(quantity="speed_um_s", level="tracks", units=90, relative_error=0.04),
        LevelSpread(quantity="motile_fraction", level="days", units=3, relative_error=NAN),
        LevelSpread(quantity="made up", level="days", units=3, relative_error=0.0),
    ]
    tables = page_rows.spread_tables(spread)
    assert [(label, advice) for label, _, advice in tables] == [
        ("speed", "Most comes from tracks."),
        ("made up", ""),
    ]
    assert [(row.error, row.bar) for row in tables[0][1]] == [("2.0 %", 50), ("4.0 %", 100)]


def test_outcomes_sum_to_what_was_seen(study):
    counts = study.conditions[0].counts
    rows = outcomes(counts, study.settings)
    assert rows[0].name == "kept"
    assert sum(row.tracks for row in rows) == counts.tracks_seen == 204
    assert sum(row.frames for row in rows) == counts.frames_seen
    assert [row.tracks for row in rows[1:]] == sorted(counts.set_aside.values(), reverse=True)
    assert {row.limit for row in rows if row.name == "stuck"} == {"2.0 × noise"}
    assert all(row.rule for row in rows)


def test_reason_without_a_known_rule_is_counted_all_the_same(study):
    counts = dataclasses.replace(
        study.conditions[0].counts, set_aside={"odd": 2}, frames_set_aside={}
    )
    row = outcomes(counts, ())[1]
    assert (row.name, row.rule, row.tracks, row.frames) == ("odd", "", 2, 0)


def test_problems_of_a_condition_and_its_recordings_are_counted(study):
    first = dataclasses.replace(study.conditions[0], problems=("one", "two"))
    noisy = dataclasses.replace(study.recordings[0], problems=("three",))
    assert page_rows.problem_count(first, (noisy, *study.recordings[1:])) == 3
    assert page_rows.problem_count(study.conditions[1], (noisy, *study.recordings[1:])) == 0


def test_own_values_of_tracks_say_how_well_a_track_knows_them(study):
    tracks = study.conditions[0].tracks
    assert page_rows.own_values(tracks) == ""
    kept = [t for t in tracks if t.kept]
    own = [
        dataclasses.replace(
            t,
            speed_error_um_s=0.02 * t.speed_um_s,
            rotational_diffusion_rad2_s=0.02,
            rotational_diffusion_low_rad2_s=0.015,
            rotational_diffusion_high_rad2_s=0.015 * 1.3**2,
        )
        for t in kept[1:]
    ]
    text = page_rows.own_values([*own, *(t for t in tracks if not t.kept)])
    assert "standard error (± 2.0 % in the median)" in text
    assert "(a factor of 1.3 either way in the median)" in text
    assert "cannot tell" not in text
    assert page_rows.own_values([*own, kept[0]]).endswith(" 1 kept track cannot tell it.")


def test_variation_has_a_row_a_level_with_its_interval(study):
    ((label, level, rows),) = page_rows.variation_tables(study.conditions[0].variation)
    assert (label, level) == ("speed", "95 %")
    assert [row.level for row in rows] == [
        "days",
        "of which in this condition's own way",
        "chambers of a day",
        "filaments, on a chamber's mean",
    ]
    assert (rows[0].sd, rows[0].interval, rows[0].share) == ("7.1 %", "0 to 45 %", "72 %")


def test_a_one_sided_limit_is_called_one(study):
    condition = study.conditions[0]
    limit = Estimate(low=120.0, covers="days", method="one-sided limit: Student's t")
    estimates = {**condition.estimates, "persistence_length_um": limit}
    rows = page_rows.main_estimates(dataclasses.replace(condition, estimates=estimates))
    row = next(r for r in rows if r.quantity.key == "persistence_length_um")
    assert row.interval == "95 % limit: at least 120 µm, over days"
    assert (row.shown.value, str(row.shown), row.method) == (
        "–",
        "at least 120",
        "One-sided limit: Student's t.",
    )


def test_evidence_says_what_it_speaks_for(study):
    (row,) = page_rows.evidence_rows(study.conditions[0].model_evidence)
    assert (row.model, row.value, row.needed, row.speaks) == (
        "pausing",
        "0.0152",
        "above 0.02",
        "against",
    )
    unknown = dataclasses.replace(study.conditions[0].model_evidence[0], value=math.nan)
    assert page_rows.evidence_rows([unknown])[0].value == "–"
