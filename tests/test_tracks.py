"""Tracks and detections: valid from birth, and the same after every way through a table."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from glidefit.tracks import Detections, Tracks


def make(**changes):
    """Track a in frames 0, 1, 3 and track b in frame 2."""
    fields = {
        "label": np.array(["a", "b"]),
        "offsets": np.array([0, 3, 4]),
        "frame": np.array([0, 1, 3, 2]),
        "time_s": np.array([0.0, 0.5, 1.5, 1.0]),
        "x_um": np.array([0.0, 1.0, 2.0, 3.0]),
        "y_um": np.array([4.0, 5.0, 6.0, 7.0]),
    }
    return Tracks(**(fields | changes))


def same(a, b):
    for name in Tracks.__slots__:
        first, second = getattr(a, name), getattr(b, name)
        if first is None or second is None:
            assert first is second, name
        else:
            assert_array_equal(first, second, err_msg=name)


@st.composite
def tracks(draw):
    # numpy drops trailing zero characters of texts
    names = st.text(st.characters(codec="utf-8", exclude_characters="\0"), max_size=3)
    labels = draw(st.lists(names, max_size=4, unique=True))
    sets = st.sets(st.integers(0, 99), min_size=1, max_size=5)
    frames = [sorted(draw(sets)) for _ in labels]
    n = sum(map(len, frames))

    def column(elements):
        return np.array(draw(st.lists(elements, min_size=n, max_size=n)), dtype=float)

    frame = np.concatenate([np.empty(0, dtype=np.int64), *frames]).astype(np.int64)
    numbers = st.floats(-1e9, 1e9)
    return Tracks(
        label=np.array(labels, dtype=np.str_),
        offsets=np.cumsum([0, *map(len, frames)]),
        frame=frame,
        time_s=frame * 0.1,
        x_um=column(numbers),
        y_um=column(numbers),
        heading_rad=draw(st.none() | st.just(column(st.just(np.nan) | numbers))),
        length_um=draw(st.none() | st.just(np.arange(n) * 0.5)),
    )


def test_what_a_track_owns():
    found = make()
    assert (found.n_tracks, list(found.n_positions), list(found.index)) == (2, [3, 1], [0, 0, 0, 1])
    assert (found.rows(0), found.rows(1)) == (slice(0, 3), slice(3, 4))


def test_no_tracks_at_all_are_tracks():
    nothing = np.empty(0)
    empty = make(
        label=np.empty(0, dtype=np.str_),
        offsets=np.array([0]),
        **dict.fromkeys(("frame", "time_s", "x_um", "y_um"), nothing),
    )
    assert (empty.n_tracks, len(empty.n_positions), len(empty.index)) == (0, 0, 0)
    same(empty.select(np.empty(0, dtype=bool)), empty)
    assert list(empty.to_frame()) == ["track", "frame", "time_s", "x_um", "y_um"]


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"offsets": np.array([0, 4])}, "offsets do not cut 4 rows into 2 tracks"),
        ({"offsets": np.array([1, 3, 4])}, "offsets do not cut 4 rows into 2 tracks"),
        ({"offsets": np.array([0, 3, 3])}, "offsets do not cut 4 rows into 2 tracks"),
        ({"offsets": np.array([0, 4, 4])}, "a track without a position"),
        ({"offsets": np.array([0, 5, 4])}, "a track without a position"),
        ({"x_um": np.zeros(3)}, "x_um has 3 rows, frame has 4"),
        ({"time_s": np.zeros(5)}, "time_s has 5 rows, frame has 4"),
        ({"y_um": np.array([0, np.nan, 0, 0])}, "y_um holds a value that is not finite"),
        ({"x_um": np.array([0, 0, np.inf, 0])}, "x_um holds a value that is not finite"),
        ({"frame": np.array([0, 1, 1, 2])}, "frame does not increase within a track"),
        ({"frame": np.array([1, 0, 3, 2])}, "frame does not increase within a track"),
        ({"time_s": np.array([0, 2.0, 1, 0])}, "time_s does not increase within a track"),
    ],
)
def test_tracks_that_cannot_be(changes, message):
    with pytest.raises(ValueError, match=f"^{message}$"):
        make(**changes)


def test_frames_start_again_with_each_track():
    assert list(make(frame=np.array([5, 6, 7, 0])).frame) == [5, 6, 7, 0]


@settings(deadline=None)
@given(expected=tracks())
def test_a_table_and_back_is_the_same(expected):
    same(Tracks.from_frame(expected.to_frame()), expected)


@settings(deadline=None)
@given(expected=tracks(), random=st.randoms(use_true_random=False))
def test_the_order_of_rows_is_no_information_but_for_the_first_of_each_track(expected, random):
    table = expected.to_frame()
    order = sorted(range(len(table)), key=lambda i: (expected.index[i], random.random()))
    same(Tracks.from_frame(table.iloc[order]), expected)


def test_a_table_names_what_it_lacks_and_what_is_repeated():
    table = make().to_frame()
    assert list(table) == ["track", "frame", "time_s", "x_um", "y_um"]
    with pytest.raises(ValueError, match=r"^frame does not increase within a track$"):
        Tracks.from_frame(pd.concat([table, table]))
    with pytest.raises(KeyError, match="x_um"):
        Tracks.from_frame(table.drop(columns="x_um"))


@settings(deadline=None)
@given(found=tracks(), data=st.data())
def test_a_selection_is_the_table_without_the_other_tracks(found, data):
    booleans = st.lists(st.booleans(), min_size=found.n_tracks, max_size=found.n_tracks)
    chosen = np.array(data.draw(booleans), dtype=bool)
    selected = found.select(chosen)
    assert list(selected.label) == list(found.label[chosen])
    table = found.to_frame()
    rows = [chosen[k] for k in found.index]
    expected = table[np.array(rows, dtype=bool)].reset_index(drop=True)
    pd.testing.assert_frame_equal(selected.to_frame(), expected)
    same(found.select(np.ones(found.n_tracks, dtype=bool)), found)


def test_moved_tracks_keep_all_but_their_positions():
    found = make(heading_rad=np.arange(4.0), length_um=np.arange(4.0) + 1)
    moved = found.moved(found.x_um + 1, found.y_um - 1)
    assert_array_equal(moved.x_um, [1, 2, 3, 4])
    assert_array_equal(moved.y_um, [3, 4, 5, 6])
    same(moved.moved(found.x_um, found.y_um), found)


# Detections


def detections(**changes):
    """Two spots in frame 0, none in frame 1, one in frame 2 of four frames."""
    fields = {
        "frame": np.array([0, 0, 2]),
        "x_um": np.array([1.0, 2.0, 3.0]),
        "y_um": np.array([1.0, 2.0, 3.0]),
        "brightness": np.array([100.0, 80.0, 90.0]),
        "precision_um": np.array([0.01, 0.02, 0.01]),
        "n_frames": 4,
        "noise": np.ones(4),
        "background": np.full(4, 100.0),
    }
    return Detections(**(fields | changes))


def test_what_a_frame_owns():
    assert list(detections().offsets) == [0, 2, 2, 3, 3]


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"x_um": np.zeros(2)}, "x_um has 2 rows, frame has 3"),
        ({"brightness": np.array([1, np.nan, 1])}, "brightness holds a value that is not finite"),
        ({"precision_um": np.array([0.01, 0, 0.01])}, "precision_um must be > 0"),
        ({"frame": np.array([0, 2, 1])}, "frame decreases"),
        ({"frame": np.array([0, 2, 4])}, "frame is outside 0 to 3"),
        ({"frame": np.array([-1, 2, 3])}, "frame is outside 0 to 3"),
        ({"noise": np.ones(3)}, "noise needs one value for each of 4 frames"),
        ({"background": np.ones(5)}, "background needs one value for each of 4 frames"),
    ],
)
def test_detections_that_cannot_be(changes, message):
    with pytest.raises(ValueError, match=f"^{message}$"):
        detections(**changes)
