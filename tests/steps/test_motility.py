from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.evidence import CleanRecording, CleanTracks
from glidefit.results import Drift
from glidefit.steps.fields import same_fields
from glidefit.steps.motility import COLUMNS, motility, time_course
from glidefit.tracks import Tracks

NAN = float("nan")
STILL = Drift(
    measured=False, subtracted=False, n_objects=0, speed_um_s=NAN, largest_um=NAN, note=""
)


def recording(lengths, reasons, *, name="r", day="d", chamber="1", decided=None, speed=0.0, **more):
    """Tracks of given lengths and verdicts, moving along x with a speed per frame."""
    frame = np.concatenate([np.arange(n) for n in lengths])
    owner = np.repeat(np.arange(len(lengths)), lengths)
    tracks = Tracks(
        label=np.array([f"t{k}" for k in range(len(lengths))]),
        offsets=np.concatenate([[0], np.cumsum(lengths)]),
        frame=frame,
        time_s=frame * 0.5,
        x_um=owner * 3.0 + speed * frame,
        y_um=owner * 5.0 % 17,
    )
    clean = CleanTracks(
        tracks=tracks,
        reason=np.array(reasons),
        decided=np.ones(len(lengths), dtype=bool) if decided is None else np.array(decided),
        gliding_probability=np.full(len(lengths), 0.99),
        noise_um=0.03,
        typical_speed_um_s=0.8,
        smallest_speed_um_s=0.01,
        drift=STILL,
        drift_x_um=np.zeros(max(lengths)),
        drift_y_um=np.zeros(max(lengths)),
    )
    return CleanRecording(
        recording=name,
        condition="c",
        day=day,
        chamber=chamber,
        clean=clean,
        frame_s=0.5,
        exposure_s=0.0,
        field_um=(80.0, 80.0),
        **({"minutes": 2.0, "field": ""} | more),
    )


def test_motile_fraction_counts_filament_frames_and_ever_moved_counts_tracks():
    one = recording([10, 10, 60, 20], ["", "", "stuck", "detached"])
    values = motility([one])[0].values
    assert_allclose(values[COLUMNS["motile_fraction"]], 20 / 100)
    assert_allclose(values[COLUMNS["ever_moved_fraction"]], 3 / 4)


def test_what_cannot_be_judged_counts_on_neither_side():
    one = recording(
        [10, 2, 30, 30, 4], ["", "short", "stuck", "jump", ""], decided=[True] * 4 + [False]
    )
    values = motility([one])[0].values
    assert_allclose(values, [10 / 40, 1 / 2])


def test_recordings_of_a_chamber_are_one_sum_and_influence_adds_up_to_nothing():
    same = [
        recording([10, 30], ["", "stuck"], name="a"),
        recording([50, 10], ["", "stuck"], name="b"),
        recording([10], [""], name="c", chamber="2"),
    ]
    first, second = motility(same)
    assert_allclose(first.values[0], 60 / 100)
    assert_allclose(first.influence.sum(axis=0), 0, atol=1e-12)
    assert first.recording_of_track.tolist() == [0, 0, 1, 1]
    assert second.values[0] == 1.0


def test_influence_is_the_change_on_drawing_a_track_once_more():
    lengths, reasons = [10, 25, 60, 20, 33], ["", "", "stuck", "detached", ""]
    evidence = motility([recording(lengths, reasons)])[0]
    twice = motility([recording([*lengths, 10], [*reasons, ""])])[0]
    moved = twice.values - evidence.values
    # Second order: the drawn track is 6 % of the filament-frames, one of five tracks.
    assert_allclose(moved[0], evidence.influence[0, 0], rtol=0.08)
    assert_allclose(moved[1], evidence.influence[0, 1], rtol=0.25)


def test_course_has_the_speed_and_fraction_of_each_stretch():
    one = recording([60, 60, 30], ["", "stuck", "stuck"], speed=0.4)
    course = time_course([one], longest_lag_s=4.0, pooled=np.array([0.8, 0.0, 0.0, 0.0]))
    assert len(course) == 6
    assert_allclose([p.speed_um_s for p in course], 0.8, rtol=1e-9)
    assert_allclose([p.motile_fraction for p in course], [1 / 3] * 3 + [1 / 2] * 3)
    assert_allclose([p.time_s for p in course], 0.5 * np.arange(5, 60, 10))
    assert_allclose([p.minutes for p in course], 2 + np.arange(5, 60, 10) * 0.5 / 60)


def test_course_without_kept_tracks_has_no_speed():
    course = time_course(
        [recording([30], ["stuck"])], longest_lag_s=4.0, pooled=np.array([0.8, 0, 0, 0])
    )
    assert np.isnan([p.speed_um_s for p in course]).all()
    assert [p.motile_fraction for p in course] == [0.0] * 3


@pytest.mark.parametrize(
    ("change", "noticed"),
    [({}, True), ({"chamber": "2"}, False), ({"day": "e"}, False), ({"field": "f"}, None)],
)
def test_one_field_filmed_twice_is_noticed_by_its_stuck_objects(change, noticed):
    stuck = [20] * 6, ["stuck"] * 6
    one = recording(*stuck, name="a", field="f" if noticed is None else "")
    two = recording(*stuck, name="b", **change)
    found = same_fields([one, two])
    if noticed:
        assert found == [
            "a and b show 6 stuck objects in the same places: the same field filmed twice is one "
            "sample. Give both rows the same `field` in the assay sheet."
        ]
    else:
        assert found == []
