"""Tracks in the plane."""

from __future__ import annotations

import dataclasses
import re

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from glidefit.results import DrawnTrack
from glidefit.writing.svg_tracks import MOST_FIELDS, _relative, draw_tracks


def absolute(d):
    """Path data of integer relative steps as points in px."""
    start, steps = d.removeprefix("M").split("l")
    numbers = [int(n) for n in re.findall(r"-?\d+", f"{start} {steps}")]
    return np.cumsum(np.reshape(numbers, (-1, 2)), axis=0) / 10


def drawn(x, y, *, reason="", recording="a.tif"):
    return DrawnTrack(recording=recording, track="7", reason=reason, x_um=x, y_um=y)


@given(arrays(float, st.tuples(st.integers(1, 40), st.just(2)), elements=st.floats(-500, 500)))
def test_path_stays_within_a_px_of_every_position(points):
    d = _relative(points)
    assert re.fullmatch(r"M-?\d+ -?\d+l-?\d+( ?-?\d+)*", d)
    path = absolute(d)
    # A step that is left out is shorter than 0.7 px; rounding to 0.1 px adds at most 0.071 px.
    gaps = np.linalg.norm(points[:, None] - path[None], axis=2).min(axis=1)
    assert gaps.max() < 0.78
    assert np.abs(path[0] - points[0]).max() <= 0.051
    assert np.abs(path[-1] - points[-1]).max() <= 0.051


def test_dense_track_is_thinned():
    x = np.linspace(0, 10, 2000)
    assert len(absolute(_relative(np.column_stack([x, x])))) < 25


def test_every_drawn_track_is_a_path_with_its_reason(study):
    condition = study.conditions[0]
    fields = draw_tracks(condition, study.recordings).fields
    text = "".join(field.svg for field in fields)
    assert text.count("<title>track ") == len(condition.drawn)
    assert text.count(", set aside: ") == sum(bool(t.reason) for t in condition.drawn)
    assert "<title>track 0, set aside: stuck</title>" in text
    assert fields[0].counts == "14 kept, 3 set aside"
    assert fields[0].place == "2026-03-02, chamber A"


def test_scale_is_that_of_the_bar(study):
    condition = study.conditions[0]
    one = dataclasses.replace(condition, drawn=(drawn((10.0, 30.0), (5.0, 5.0), recording="x"),))
    recording = dataclasses.replace(study.recordings[0], recording="x", field_um=(80.0, 40.0))
    svg = draw_tracks(one, [recording]).fields[0].svg
    assert "20 µm</text>" in svg
    bar = int(re.search(r'd="M0 \d+h(\d+)"', svg)[1])
    steps = absolute(re.search(r'd="(M\d+ \d+l[^"]+)"', svg)[1])
    assert steps[1, 0] - steps[0, 0] == pytest.approx(bar / 10, abs=0.1)
    assert 'rect width="2200" height="1100"' in svg


def test_unknown_field_is_the_extent_of_the_tracks_and_dashed(study):
    condition = study.conditions[0]
    one = dataclasses.replace(condition, drawn=(drawn((-10.0, 30.0), (5.0, 25.0)),))
    svg = draw_tracks(one, []).fields[0].svg
    assert 'rect width="2200" height="1100"' in svg
    assert "stroke-dasharray" in svg.split("<rect")[1].split("/>")[0]
    assert 'd="M0 0l' in svg


def test_one_position_and_no_extent_can_be_drawn(study):
    one = dataclasses.replace(study.conditions[0], drawn=(drawn((3.0,), (3.0,), reason="short"),))
    assert 'd="M0 0l0 0"' in draw_tracks(one, []).fields[0].svg


def test_no_track_gives_no_field(study):
    assert draw_tracks(dataclasses.replace(study.conditions[0], drawn=()), []).fields == ()


def test_many_recordings_are_chosen_evenly_and_that_is_said(study):
    tracks = tuple(drawn((1.0, 2.0), (1.0, 2.0), recording=f"r{n:02d}") for n in range(30))
    drawings = draw_tracks(dataclasses.replace(study.conditions[0], drawn=tracks), [])
    assert len(drawings.fields) == MOST_FIELDS
    assert drawings.note == "Drawn: 12 of 30 recordings, evenly chosen."
    assert [f.recording for f in drawings.fields][:3] == ["r00", "r02", "r05"]


def test_set_aside_tracks_are_told_apart_without_colour(study):
    svg = draw_tracks(study.conditions[0], study.recordings).fields[0].svg
    aside = svg.split('class="aside"')[1].split("<path")[0]
    assert "stroke-dasharray" in aside
    assert "marker-start" not in aside
    assert "marker-start" in svg.split('class="kept"')[1].split("<path")[0]
