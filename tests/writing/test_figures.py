"""Figures of conditions: what they show, what they say, what they do without data."""

from __future__ import annotations

import dataclasses
import math
import re

import pytest

from glidefit.writing.figures import condition_figures, overview, overview_caption
from glidefit.writing.lag_figures import heading_correlation, mean_squared_displacement
from glidefit.writing.level_figures import (
    MOST_DOTS,
    rotational_diffusion_by_chamber,
    speeds_by_chamber,
)
from glidefit.writing.time_figures import course_within_chambers, course_within_recordings

NAN = math.nan


@pytest.fixture(scope="module")
def condition(study):
    return study.conditions[0]


@pytest.fixture(scope="module")
def drawings(study, condition):
    figures = condition_figures(condition, study.recordings)
    return [*figures.levels, *figures.times, *figures.lags, *overview(study.conditions)]


def replaced(condition, key, **changes):
    estimates = dict(condition.estimates)
    estimates[key] = dataclasses.replace(estimates[key], **changes)
    return dataclasses.replace(condition, estimates=estimates)


def test_all_figures_are_there(drawings):
    assert [drawing.heading for drawing in drawings] == [
        "Speed by day and chamber",
        "Rotational diffusion by day and chamber",
        "Within recordings",
        "Within chambers",
        "Mean squared displacement",
        "Heading correlation",
        "Speed",
        "Rotational diffusion",
        "Persistence length, v / D_r",
        "Motile fraction",
    ]


@pytest.mark.parametrize(
    "axis",
    [
        "speed (µm/s)",
        "rotational diffusion (rad²/s)",
        "time in the recording (s)",
        "time in the chamber (min)",
        "lag (s)",
        "MSD (µm²)",
        "MSD / model",
        "⟨cos Δθ⟩",
        "motile fraction",
        "persistence length (µm)",
    ],
)
def test_every_axis_has_its_unit(drawings, axis):
    assert any(f">{axis}</text>" in drawing.svg for drawing in drawings)


def test_alternative_text_states_the_key_numbers(drawings):
    said = [re.search(r"<desc[^>]*>(.*?)</desc>", d.svg)[1] for d in drawings]
    assert all(re.search(r"\d", text) for text in said)
    assert "6 chambers of 3 days" in said[0]
    assert "0.803 (0.771 to 0.836) µm/s" in said[0]
    assert "kinesin, R203A: 0.803 (0.771 to 0.836) µm/s" in said[6]


def test_every_kept_track_with_a_speed_is_a_dot(condition):
    svg = speeds_by_chamber(condition).svg
    kept = [t for t in condition.tracks if t.kept and math.isfinite(t.speed_um_s)]
    assert svg.count("h0") == len(kept) == 168


def test_many_tracks_are_thinned_and_that_is_said(condition):
    many = dataclasses.replace(condition, tracks=condition.tracks * 20)
    drawing = speeds_by_chamber(many)
    assert MOST_DOTS / 2 < drawing.svg.count("h0") <= MOST_DOTS
    assert "of 3,360 drawn" in drawing.caption


def test_chambers_of_two_days_with_one_label_stay_apart(condition):
    svg = speeds_by_chamber(condition).svg
    assert svg.count(">A</text>") == 3
    assert svg.count(">2026-03-03</text>") == 1


def test_missing_interval_is_said(condition):
    bare = replaced(condition, "speed_um_s", low=NAN, high=NAN)
    assert "which has no interval" in speeds_by_chamber(bare).caption
    assert "0.803, no interval" in speeds_by_chamber(bare).svg


def test_huge_and_open_intervals_do_not_squeeze_the_marks(condition):
    for low, high in ((-50, 60), (NAN, 0.9), (0.7, NAN)):
        wide = replaced(condition, "speed_um_s", low=low, high=high)
        ticks = re.findall(r">([\d.]+)</text>", speeds_by_chamber(wide).svg)
        assert all(0.4 < float(tick) < 1.2 for tick in ticks)


def test_chamber_without_value_says_so(condition):
    first = dataclasses.replace(condition.chambers[0], rotational_diffusion_rad2_s=NAN)
    some = dataclasses.replace(condition, chambers=(first, *condition.chambers[1:]))
    assert rotational_diffusion_by_chamber(some).svg.count("no value") == 1


def test_course_in_minutes_needs_minutes(condition):
    points = tuple(dataclasses.replace(p, minutes=NAN) for p in condition.time_points)
    unknown = dataclasses.replace(condition, time_points=points)
    assert course_within_chambers(unknown) is None
    assert course_within_recordings(unknown) is not None


def test_course_compares_early_with_late(condition):
    points = tuple(
        dataclasses.replace(p, speed_um_s=1 - 0.05 * p.time_s) for p in condition.time_points
    )
    falling = dataclasses.replace(condition, time_points=points)
    # Five stretches at 1.6, 4.8, ... 14.4 s: 0.92, 0.76, 0.60, 0.44, 0.28; thirds hold all of the
    # first and part of the second, weighted by frames.
    text = course_within_recordings(falling).svg
    early, late = re.search(r"mean speed ([\d.]+) µm/s .* and ([\d.]+) µm/s", text).groups()
    assert 0.76 < float(early) < 0.92
    assert 0.28 < float(late) < 0.44


def test_course_with_holes_is_drawn(condition):
    points = tuple(
        dataclasses.replace(p, speed_um_s=NAN if n % 2 else 0.8, motile_fraction=NAN)
        for n, p in enumerate(condition.time_points)
    )
    assert course_within_recordings(dataclasses.replace(condition, time_points=points)) is not None


def test_fitted_points_are_filled_and_the_others_hollow(condition):
    svg = mean_squared_displacement(condition).svg
    assert "fill:var(--paper)" in svg
    assert (
        "the lags at which the fit is judged, up to 4 s"
        in mean_squared_displacement(condition).caption
    )


def test_curves_of_two_frame_intervals_have_a_legend(condition):
    two = dataclasses.replace(condition, msd=condition.msd * 2)
    assert [key.marker for key in mean_squared_displacement(two).legend] == ["o", "s"]
    assert mean_squared_displacement(condition).legend == ()


def test_heading_correlation_names_its_own_diffusion(condition):
    assert "D_r read off this curve alone: 0.0498 rad²/s" in heading_correlation(condition).caption
    unknown = dataclasses.replace(condition, heading_diffusion_rad2_s=NAN)
    assert "alone" not in heading_correlation(unknown).caption


def test_curve_without_model_or_band_is_drawn(condition):
    none = (NAN,) * len(condition.msd[0].lag_s)
    bare = dataclasses.replace(
        condition.msd[0],
        low=none,
        high=none,
        model=none,
        model_low=none,
        model_high=none,
        fitted=(False,) * len(none),
    )
    unfitted = dataclasses.replace(condition, msd=(bare,), heading_correlation=(bare,))
    assert mean_squared_displacement(unfitted) is not None
    assert heading_correlation(unfitted) is not None


def test_nothing_left_draws_nothing(study, emptied):
    nothing = emptied(study.conditions[0])
    figures = condition_figures(nothing, study.recordings)
    assert (figures.levels, figures.times, figures.lags) == ((), (), ())
    assert figures.tracks.fields == ()
    assert overview([nothing]) == ()


def test_condition_without_value_keeps_its_row_in_the_overview(study, emptied):
    drawings = overview([study.conditions[0], emptied(study.conditions[1])])
    assert len(drawings) == 4
    assert all(drawing.svg.count("no value") == 1 for drawing in drawings)
    assert all("2  kinesin, R203A</text>" in drawing.svg for drawing in drawings)


def test_interval_that_goes_on_ends_in_an_arrow_head(study):
    def heads(condition):
        return overview([condition])[0].svg.count("</defs>")

    closed = study.conditions[0]
    assert heads(replaced(closed, "speed_um_s", high=NAN)) == heads(closed) + 1
    assert heads(replaced(closed, "speed_um_s", low=-100.0, high=100.0)) == heads(closed) + 2
    bare = overview([replaced(closed, "speed_um_s", low=NAN, high=NAN)])[0].svg
    assert bare.count("</defs>") == heads(closed)


def test_overview_says_what_its_marks_are(study):
    text = overview_caption(study.conditions)
    assert "its 95 % interval" in text
    assert "the control" in text
    lone = dataclasses.replace(study.conditions[0], control=False)
    assert "control" not in overview_caption([lone])
