"""Clock of a video: usual interval, dropped frames, times that cannot be, exposure."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.reading.calibration import (
    clock,
    interval_of_times,
    length_in_um,
    time_in_s,
    usable_times,
    usual_exposure,
)

NONE = np.full(5, np.nan)


def test_millisecond_rounding_does_not_bias_the_interval():
    times = np.round(np.arange(301) / 30, 3)  # 33 and 34 ms in turn: their median is 1 % too short
    interval, notes = interval_of_times(times)
    assert_allclose(interval, 1 / 30, rtol=1e-5)  # half a ms at each end over 10 s is 1e-4 at most
    assert notes == ("frame times vary by 1.4 %",)


def test_dropped_frames_do_not_lengthen_the_interval_and_are_told():
    kept = np.delete(np.arange(100), [40, 41, 70])
    interval, notes = interval_of_times(0.2 * kept)
    assert_allclose(interval, 0.2, rtol=1e-12)
    assert notes == ("frame times have 2 gaps, the first after frame 39",)


def test_a_single_gap_is_told_as_one():
    assert interval_of_times(np.array([0, 1, 2, 4, 5.0]))[1] == (
        "frame times have 1 gap, the first after frame 2",
    )


def test_uneven_times_are_told():
    rng = np.random.default_rng(1)
    times = np.cumsum(rng.normal(1, 0.03, 5000))
    interval, notes = interval_of_times(times)
    assert_allclose(interval, 1, atol=4 * 0.03 / np.sqrt(5000))  # 4 standard errors
    assert notes == ("frame times vary by 3 %",)


@given(
    start=st.floats(-1e4, 1e4),
    interval=st.floats(1e-3, 1e3),
    n=st.integers(3, 50),
)
def test_even_times_give_their_interval_wherever_they_start(start, interval, n):
    times, notes = usable_times(start + interval * np.arange(n))
    assert notes == ()
    assert times[0] == 0
    # The start is subtracted from numbers of its size.
    error = 4 * np.finfo(float).eps * (abs(start) + n * interval)
    assert_allclose(interval_of_times(times)[0], interval, rtol=0, atol=error)


@pytest.mark.parametrize(
    ("times", "note"),
    [
        ([0, 1, np.nan, 3], "frame times are given for 3 of 4 frames only, not used"),
        ([0, 1, np.inf, 3], "frame times are given for 3 of 4 frames only, not used"),
        ([0, 1, 1, 2], "frame times do not increase at frame 2, they are not used"),
        ([0, 0, 0, 0], "frame times do not increase at frame 1, they are not used"),
        ([0, 2, 1, 3], "frame times do not increase at frame 2, they are not used"),
    ],
)
def test_times_that_cannot_be_are_not_used(times, note):
    assert usable_times(np.array(times, dtype=float)) == (None, (note,))


@pytest.mark.parametrize("time", [1e300, -1e300, 1e12])
def test_a_time_beyond_all_reason_is_none(time):
    assert usable_times(np.array([0, 1, time, 3.0]))[0] is None


def test_a_single_frame_has_no_times():
    assert usable_times(np.array([3.0])) == (None, ())


def test_no_times_are_no_reason_to_speak():
    assert usable_times(NONE) == (None, ())


def test_the_stated_interval_is_taken_where_there_are_no_times():
    found = clock(NONE, NONE, stated_s=0.2)
    assert (found.frame_s, found.times_s, found.exposure_s, found.notes) == (0.2, None, None, ())


def test_times_within_one_per_cent_of_the_stated_interval_agree_with_it():
    found = clock(0.2009 * np.arange(5), NONE, stated_s=0.2)
    assert_allclose(found.frame_s, 0.2009, rtol=1e-12)
    assert found.notes == ()


def test_a_camera_that_exposes_all_the_time_exposes_one_interval():
    assert usual_exposure(np.full(5, 0.2001), frame_s=0.2) == (0.2, ())


def test_an_exposure_longer_than_the_interval_is_not_used():
    assert usual_exposure(np.full(5, 0.3), frame_s=0.2) == (
        None,
        (
            "the file gives an exposure of 0.3 s, longer than its frame interval of 0.2 s, and it"
            " is not used",
        ),
    )


def test_exposures_that_vary_are_told():
    assert usual_exposure(np.array([0.1, 0.1, 0.2, np.nan, 0]), frame_s=1.0) == (
        0.1,
        ("exposures go from 0.1 to 0.2 s; the median, 0.1 s, is used",),
    )


def test_an_exposure_without_an_interval_is_kept():
    assert usual_exposure(np.full(3, 0.3), frame_s=None) == (0.3, ())


@pytest.mark.parametrize("exposure", [0.0, -1.0, np.nan, np.inf])
def test_an_exposure_that_cannot_be_is_none(exposure):
    assert usual_exposure(np.full(3, exposure), frame_s=1.0) == (None, ())


@pytest.mark.parametrize("unit", ["", "pixel", "reference frame", "s", "µ", "Mm"])
def test_what_is_no_length(unit):
    assert length_in_um(unit) is None


@pytest.mark.parametrize("unit", ["", "m", "frame", "µm", "Ms"])
def test_what_is_no_time(unit):
    assert time_in_s(unit) is None


def test_spellings_of_one_second():
    for unit in ("s", "sec", "secs", "second", "Seconds", " s "):
        assert time_in_s(unit) == 1
    assert [time_in_s(unit) for unit in ("min", "mins", "h", "hours", "d")] == [
        60, 60, 3600, 3600, 86_400,
    ]  # fmt: skip
