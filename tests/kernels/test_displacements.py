"""Sums over pairs of positions against loops over pairs, and what must not change them."""

import math
from functools import partial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.kernels import displacements
from glidefit.kernels.displacements import (
    dense_grid,
    frame_spans,
    grid_groups,
    heading_sums,
    lag_sums,
    lag_times,
    track_sums,
)

patient = settings(deadline=None)
LAGS = np.array([1, 2, 5, 11, 40])
FIELD = (30.0, 20.0)


@st.composite
def tables(draw):
    """Tracks of a few frames with gaps: frame, offsets, x, y, time."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    n_tracks = draw(st.integers(1, 8))
    frames = []
    for _ in range(n_tracks):
        span = rng.integers(1, 25)
        present = np.flatnonzero(rng.random(span) < 0.8)
        frames.append(rng.integers(0, 100) + (present if present.size else np.array([0])))
    frame = np.concatenate(frames)
    offsets = np.cumsum([0] + [len(one) for one in frames])
    x, y = rng.uniform(0, FIELD[0], len(frame)), rng.uniform(0, FIELD[1], len(frame))
    return frame, offsets, x, y, 0.1 * frame + 0.003 * rng.random(len(frame))


def looped(table, term):
    """Sums and counts of ``term(i, j, lag)`` -> (value, weight) or None over all pairs of rows."""
    frame, offsets = table[:2]
    sums, counts = np.zeros((2, len(offsets) - 1, len(LAGS)))
    for k in range(len(offsets) - 1):
        row_of = {int(frame[i]): i for i in range(offsets[k], offsets[k + 1])}
        for first in row_of:
            for column, lag in enumerate(LAGS.tolist()):
                found = term(row_of, first, lag) if first + lag in row_of else None
                if found is not None:
                    value, weight = found
                    sums[k, column] += weight * value
                    counts[k, column] += weight
    return sums, counts


def agree(found, expected):
    for one, other in zip(found, expected, strict=True):
        assert_allclose(one, other, rtol=1e-11, atol=1e-11)


@patient
@given(table=tables())
def test_lag_sums_are_those_of_a_loop_over_pairs(table):
    frame, offsets, x, y, _ = table

    def squared(row_of, first, lag):
        i, j = row_of[first], row_of[first + lag]
        return (x[j] - x[i]) ** 2 + (y[j] - y[i]) ** 2, 1

    found = track_sums(frame, offsets, [x, y], lags=LAGS, of_grids=lag_sums)
    agree(found, looped(table, squared))


@patient
@given(table=tables())
def test_lag_sums_in_a_field_are_those_of_a_loop_over_weighted_pairs(table):
    frame, offsets, x, y, _ = table

    def squared(row_of, first, lag):
        i, j = row_of[first], row_of[first + lag]
        dx, dy = x[j] - x[i], y[j] - y[i]
        seen = (1 - abs(dx) / FIELD[0]) * (1 - abs(dy) / FIELD[1])
        return dx**2 + dy**2, 1 / seen

    in_field = partial(lag_sums, field=FIELD)
    found = track_sums(frame, offsets, [x, y], lags=LAGS, of_grids=in_field)
    for one, other in zip(found, looped(table, squared), strict=True):
        # Pairs from edge to edge have weights of thousands.
        assert_allclose(one, other, rtol=1e-9)


@patient
@given(table=tables())
def test_lag_times_are_those_of_a_loop_over_pairs(table):
    frame, offsets, _, _, time = table

    def elapsed(row_of, first, lag):
        return time[row_of[first + lag]] - time[row_of[first]], 1

    found = track_sums(frame, offsets, [time], lags=LAGS, of_grids=lag_times)
    agree(found, looped(table, elapsed))


@patient
@given(table=tables())
def test_heading_sums_are_those_of_a_loop_over_pairs_of_steps(table):
    frame, offsets, x, y, _ = table

    def direction(row_of, first):
        if first + 1 not in row_of:
            return None
        i, j = row_of[first], row_of[first + 1]
        return math.atan2(y[j] - y[i], x[j] - x[i])

    def cosine(row_of, first, lag):
        start, end = direction(row_of, first), direction(row_of, first + lag)
        return None if start is None or end is None else (math.cos(end - start), 1)

    found = track_sums(frame, offsets, [x, y], lags=LAGS, of_grids=heading_sums)
    agree(found, looped(table, cosine))


@patient
@given(table=tables(), angle=st.floats(-4, 4), scale=st.floats(0.01, 100))
def test_turned_mirrored_and_scaled_tracks_have_the_same_sums(table, angle, scale):
    frame, offsets, x, y, _ = table
    x2 = scale * (x * math.cos(angle) - y * math.sin(angle)) + 7
    y2 = -scale * (x * math.sin(angle) + y * math.cos(angle)) - 3
    for of_grids, unit in ((lag_sums, scale**2), (heading_sums, 1)):
        before = track_sums(frame, offsets, [x, y], lags=LAGS, of_grids=of_grids)
        after = track_sums(frame, offsets, [x2, y2], lags=LAGS, of_grids=of_grids)
        assert_allclose(after[0], unit * before[0], rtol=1e-9, atol=1e-7)
        assert_array_equal(after[1], before[1])


@patient
@given(table=tables())
def test_reversed_tracks_have_the_same_sums(table):
    frame, offsets, x, y, _ = table
    grids = [dense_grid(frame, offsets, one) for one in (x, y)]
    for of_grids in (lag_sums, partial(lag_sums, field=FIELD), heading_sums):
        before = of_grids(*grids, lags=LAGS)
        after = of_grids(*[one[:, ::-1] for one in grids], lags=LAGS)
        for one, other in zip(before, after, strict=True):
            assert_allclose(one, other, rtol=1e-9, atol=1e-12)


@patient
@given(table=tables(), seed=st.integers(0, 1000))
def test_a_gap_only_takes_its_own_pairs_away(table, seed):
    frame, offsets, x, y, _ = table
    grids = [dense_grid(frame, offsets, one) for one in (x, y)]
    rng = np.random.default_rng(seed)
    row, column = rng.integers(0, grids[0].shape[0]), rng.integers(0, grids[0].shape[1])
    whole = lag_sums(*grids, lags=LAGS)
    for one in grids:
        one[row, column] = np.nan
    less = lag_sums(*grids, lags=LAGS)
    others = np.arange(len(grids[0])) != row
    assert_array_equal(less[0][others], whole[0][others])
    # A position takes part in at most two pairs of each lag.
    assert np.all((whole[1] - less[1] >= 0) & (whole[1] - less[1] <= 2))


def test_a_straight_track_has_its_squared_path_and_no_turns():
    time = np.arange(30.0)[np.newaxis]
    sums, counts = lag_sums(0.6 * time, 0.8 * time, lags=LAGS)
    assert_array_equal(counts[0], [29, 28, 25, 19, 0])
    assert_allclose(sums, counts * LAGS**2, rtol=1e-12)
    turns, pairs = heading_sums(0.6 * time, 0.8 * time, lags=LAGS)
    assert_array_equal(pairs[0], [28, 27, 24, 18, 0])
    assert_allclose(turns, pairs, rtol=1e-12)


def test_a_circle_turns_by_its_rate():
    angle = 0.2 * np.arange(60)[np.newaxis]
    turns, pairs = heading_sums(3 * np.cos(angle), 3 * np.sin(angle), lags=LAGS)
    assert_allclose(turns / pairs, np.cos(0.2 * LAGS)[np.newaxis], rtol=1e-9)


def test_a_stop_has_no_direction():
    x = np.array([[0.0, 1.0, 1.0, 2.0, 3.0]])
    turns, pairs = heading_sums(x, np.zeros_like(x), lags=np.array([1, 2]))
    assert_array_equal(turns, [[1, 1]])
    assert_array_equal(pairs, [[1, 1]])


def test_edge_weights_undo_what_the_field_hides():
    # Straight tracks across a field, seen only while inside: far ends are missed, and a mixture
    # of slow and fast ones looks slow at long lags unless pairs are weighted.
    rng = np.random.default_rng(9)
    n, frames, lag = 20_000, 24, np.array([12])
    speed = np.where(rng.random(n) < 0.5, 0.2, 0.8)[:, np.newaxis]
    heading = rng.uniform(-np.pi, np.pi, (n, 1))
    along = speed * np.arange(frames)
    x = rng.uniform(-20, 50, (n, 1)) + along * np.cos(heading)
    y = rng.uniform(-20, 40, (n, 1)) + along * np.sin(heading)
    outside = (x < 0) | (x > 30) | (y < 0) | (y > 20)
    x[outside], y[outside] = np.nan, np.nan
    truth = 12**2 * (0.2**2 + 0.8**2) / 2

    def measured(field):
        sums, counts = lag_sums(x, y, lags=lag, field=field)
        # Of tracks, not of pairs, whose scatter gives the standard error.
        ratio = sums.sum() / counts.sum()
        return ratio, np.sqrt(np.sum((sums - ratio * counts) ** 2)) / counts.sum()

    plain, plain_error = measured(None)
    weighted, error = measured((30.0, 20.0))
    assert plain < truth - 5 * plain_error
    assert abs(weighted - truth) < 4 * error
    assert error < 0.02 * truth


def test_a_displacement_that_does_not_fit_in_the_field_is_refused():
    x = np.array([[0.0, 31.0]])
    with pytest.raises(ValueError, match="does not fit in a field of 30 × 20 µm"):
        lag_sums(x, np.zeros_like(x), lags=np.array([1]), field=FIELD)


@pytest.mark.parametrize("of_grids", [lag_sums, heading_sums])
def test_a_lag_of_no_frame_is_refused(of_grids):
    with pytest.raises(ValueError, match="lags must be >= 1 frame"):
        of_grids(np.zeros((1, 3)), np.zeros((1, 3)), lags=np.array([1, 0]))


@patient
@given(table=tables())
def test_a_grid_holds_every_position_at_its_frame_and_nothing_else(table):
    frame, offsets, x, _, _ = table
    tracks = np.arange(len(offsets) - 1)[::-2]
    grid = dense_grid(frame, offsets, x, tracks=tracks)
    assert grid.shape == (len(tracks), frame_spans(frame, offsets)[tracks].max())
    for row, k in zip(grid, tracks, strict=True):
        rows = slice(offsets[k], offsets[k + 1])
        assert_array_equal(row[frame[rows] - frame[offsets[k]]], x[rows])
        assert np.isfinite(row).sum() == offsets[k + 1] - offsets[k]


@pytest.mark.parametrize("cells", [1, 50, 10_000])
def test_groups_hold_each_track_once_and_little_else(monkeypatch, cells):
    monkeypatch.setattr(displacements, "_CELLS_OF_A_GRID", cells)
    spans = np.r_[np.random.default_rng(0).integers(1, 40, 300), 5000]
    offsets = np.r_[0, np.cumsum(spans)]
    frame = np.concatenate([np.arange(one) for one in spans])
    groups = grid_groups(frame, offsets)
    assert_array_equal(np.sort(np.concatenate(groups)), np.arange(301))
    for tracks in groups:
        assert spans[tracks].max() <= 2 * spans[tracks].min()
        assert len(tracks) == 1 or len(tracks) * spans[tracks].max() <= cells


def test_no_tracks_have_no_sums():
    frame, offsets, x = np.zeros(0, dtype=int), np.zeros(1, dtype=int), np.zeros(0)
    sums, counts = track_sums(frame, offsets, [x, x], lags=LAGS, of_grids=lag_sums)
    assert sums.shape == counts.shape == (0, 5)
    assert dense_grid(frame, offsets, x).shape == (0, 0)
