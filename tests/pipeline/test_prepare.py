"""One recording from file to clean tracks."""

from __future__ import annotations

import hashlib
import math
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.assay import Recording
from glidefit.errors import InputError
from glidefit.pipeline.prepare import Task, _frame_range, detect, open_video, prepare, track
from glidefit.settings import FitSettings, Settings
from glidefit.tracks import Tracks
from glidefit.writing.recordings import write_video

PIXEL_UM, FRAME_S, EXPOSURE_S = 0.16, 0.5, 0.1


@pytest.fixture
def table(tmp_path):
    """Four gliders and two resting spots, 20 frames, as a table with times."""
    rng = np.random.default_rng(3)
    rows = ["track,frame,time_s,x_um,y_um"]
    for k in range(6):
        velocity = 0.4 if k < 4 else 0.0
        x = 5 * k + velocity * np.arange(20) + rng.normal(0, 0.03, 20)
        y = 3 + rng.normal(0, 0.03, 20)
        rows += [f"{k},{f},{f * FRAME_S:g},{x[f]:.4f},{y[f]:.4f}" for f in range(20)]
    path = tmp_path / "a.csv"
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")
    return path


@pytest.fixture
def video(tmp_path):
    """Six frames in which one spot moves a pixel a frame to the right."""
    rows, columns = np.mgrid[:40, :40]
    rng = np.random.default_rng(1)

    def frame(k):
        spot = 400 * np.exp(-((columns - 10 - k) ** 2 + (rows - 20) ** 2) / 2)
        return (100 + spot + rng.normal(0, 3, (40, 40))).astype(np.uint16)

    path = tmp_path / "a.ome.tif"
    write_video(
        path,
        map(frame, range(6)),
        n_frames=6,
        pixel_um=PIXEL_UM,
        frame_s=FRAME_S,
        exposure_s=EXPOSURE_S,
    )
    return path


def task(path, *, settings=None, **known):
    recording = Recording(
        name=path.name,
        path=path,
        condition="wild type",
        day="d1",
        chamber="c1",
        where="assay.csv, row 2",
        **known,
    )
    return Task(recording=recording, settings=settings or Settings())


def test_table_with_times_needs_no_interval(table):
    tracked = track(task(table))
    assert (tracked.kind, tracked.n_frames) == ("track table", 20)
    assert (tracked.frame_s, tracked.frame_s_source) == (FRAME_S, "file")
    assert math.isnan(tracked.pixel_um)
    assert math.isnan(tracked.exposure_s)
    assert tracked.exposure_source == "unknown"


def test_calibration_of_the_sheet_comes_first(table):
    tracked = track(task(table, frame_s=FRAME_S * 1.001, exposure_s=0.2))
    assert (tracked.frame_s, tracked.frame_s_source) == (FRAME_S * 1.001, "sheet")
    assert (tracked.exposure_s, tracked.exposure_source) == (0.2, "sheet")


def test_range_of_frames_counts_from_its_first(table):
    whole, part = track(task(table)), track(task(table, first_frame=5, last_frame=14))
    assert part.n_frames == 10
    assert part.tracks.n_tracks == whole.tracks.n_tracks
    inside = (whole.tracks.frame >= 5) & (whole.tracks.frame <= 14)
    np.testing.assert_array_equal(part.tracks.frame, whole.tracks.frame[inside] - 5)
    np.testing.assert_array_equal(part.tracks.x_um, whole.tracks.x_um[inside])


def test_range_that_is_the_whole_changes_nothing(table):
    whole, same = track(task(table)), track(task(table, first_frame=0, last_frame=19))
    np.testing.assert_array_equal(whole.tracks.frame, same.tracks.frame)


def test_field_from_settings_sheet_or_tracks(table):
    width = FitSettings(field_width=80.0)
    sheet = {"field_width_um": 60.0, "field_height_um": 50.0}
    [box, told, set_] = [
        track(task(table, numbers=numbers, settings=Settings(fit=fit))).field_um
        for numbers, fit in (({}, FitSettings()), (sheet, FitSettings()), (sheet, width))
    ]
    x = track(task(table)).tracks.x_um
    assert_allclose(box[0], 1.02 * np.ptp(x), rtol=1e-12)
    assert told == (60.0, 50.0)
    assert set_ == (80.0, 50.0)


def test_prepared_recording_and_its_row_agree(table):
    prepared = prepare(task(table, minutes=4.0, field="f1"))
    clean, result = prepared.clean, prepared.result
    assert result.sha256 == hashlib.sha256(table.read_bytes()).hexdigest()
    assert result.tracks_seen == 6
    assert result.tracks_kept == clean.clean.kept.sum() == 4
    none = dict.fromkeys(("pivoting", "detached", "jump", "short", "unclear"), 0)
    assert result.set_aside == {"stuck": 2, **none}
    assert (clean.minutes, clean.field, clean.day, clean.chamber) == (4.0, "f1", "d1", "c1")
    assert clean.field_um == result.field_um
    # SD of 0.03 µm from 6 tracks of 20 positions, two coordinates each.
    assert_allclose(result.localization_error_um, 0.03, rtol=0.3)


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_unknown_exposure_is_assumed_as_the_settings_say(table, share):
    settings = Settings(fit=FitSettings(unknown_exposure=share))
    prepared = prepare(task(table, settings=settings))
    assert prepared.clean.exposure_s == share * FRAME_S
    assert math.isnan(prepared.result.exposure_s)


def test_minutes_that_nobody_tells(table):
    assert math.isnan(prepare(task(table)).clean.minutes)


def test_calibration_of_a_video_from_its_file(video):
    opened = open_video(task(video, shape="spot").recording)
    assert (opened.pixel_um, opened.pixel_source) == (PIXEL_UM, "file")
    assert (opened.frame_s, opened.frame_source) == (FRAME_S, "file")
    assert (opened.exposure_s, opened.exposure_source) == (EXPOSURE_S, "file")
    assert (opened.first, opened.last) == (0, 5)
    assert_allclose(opened.times(6), FRAME_S * np.arange(6))


@pytest.mark.parametrize(("pixel", "fits"), [(0.161, True), (0.159, True), (0.163, False)])
def test_sheet_and_file_agree_within_a_hundredth(video, pixel, fits):
    recording = task(video, shape="spot", pixel_um=pixel).recording
    if fits:
        opened = open_video(recording)
        assert (opened.pixel_um, opened.pixel_source) == (pixel, "sheet")
    else:
        with pytest.raises(InputError, match=r"pixel_um = 0\.163, the file says 0\.16 "):
            open_video(recording)


def test_exposure_of_the_whole_interval_is_allowed(video):
    recording = task(video, shape="spot", exposure_s=FRAME_S).recording
    assert open_video(recording).exposure_s == FRAME_S


def test_spots_of_the_first_frames_of_a_range(video):
    one = task(video, shape="spot", first_frame=2).recording
    spots = detect(one, open_video(one), settings=Settings(), most_frames=3)
    assert spots.n_frames == 3
    np.testing.assert_array_equal(spots.frame, [0, 1, 2])
    # The centre of the first pixel is 0; the spot is at pixel 10 in the first frame of the file.
    # Light of 2500 counts against noise of 3 locates it to 0.01 pixels; 5 times that.
    assert_allclose(spots.x_um, PIXEL_UM * np.array([12, 13, 14]), atol=0.05 * PIXEL_UM)
    assert_allclose(spots.y_um, PIXEL_UM * 20, atol=0.05 * PIXEL_UM)


def test_video_becomes_a_track(video):
    tracked = track(task(video, shape="spot"))
    assert (tracked.kind, tracked.n_frames, tracked.tracks.n_tracks) == ("video", 6, 1)
    assert_allclose(tracked.field_um, (40 * PIXEL_UM, 40 * PIXEL_UM))
    assert_allclose(np.diff(tracked.tracks.x_um), PIXEL_UM, atol=0.1 * PIXEL_UM)
    assert_allclose(tracked.tracks.time_s, FRAME_S * np.arange(6))


@pytest.mark.parametrize(("first", "last"), [(4, None), (2, 3), (0, 6)])
def test_fewer_than_three_frames_are_no_video(video, first, last):
    with pytest.raises(InputError, match="at least three frames inside the video"):
        open_video(task(video, shape="spot", first_frame=first, last_frame=last).recording)


@pytest.mark.parametrize(
    ("start", "first", "last", "kept"),
    [(0, 5, 14, 10), (7, 12, 21, 10), (7, None, 10, 4), (7, 3, 8, 2), (7, None, None, 20)],
)
def test_frames_of_the_sheet_are_those_of_the_table(start, first, last, kept):
    frame = np.arange(20)
    tracks = Tracks(
        label=np.array(["1"]),
        offsets=np.array([0, 20]),
        frame=frame,
        time_s=frame * 0.5,
        x_um=frame * 0.4,
        y_um=frame * 0.0,
    )
    recording = Recording(
        name="r",
        path=Path("r.csv"),
        condition="c",
        day="d",
        chamber="1",
        first_frame=first,
        last_frame=last,
    )
    assert len(_frame_range(tracks, recording, offset=start).frame) == kept
