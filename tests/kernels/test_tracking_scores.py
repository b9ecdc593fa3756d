"""Scores of tracks: published examples, cases worked out by hand, and a slow second version."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.optimize import linear_sum_assignment

from glidefit.kernels.tracking_scores import (
    FoundPositions,
    TrackingScores,
    TruePositions,
    identity_matches,
    pairing,
    score_tracks,
)

NOWHERE = dict.fromkeys(("blank_x", "blank_y"), np.empty(0)) | {
    "blank_frame": np.empty(0, dtype=np.int64)
}


def columns(rows):
    """Rows (frame, track, x) or (frame, track, x, y) as columns."""
    table = np.array([(*row, 0.0)[:4] for row in rows], dtype=float).reshape(-1, 4)
    frame, track = table[:, :2].astype(np.int64).T
    return {"frame": frame, "track": track, "x": table[:, 2], "y": table[:, 3]}


def truth_of(rows, **changes):
    ones = np.ones(len(rows), dtype=bool)
    return TruePositions(
        **columns(rows), **{"counted": ones, "overlapped": ~ones, **NOWHERE} | changes
    )


def found_of(rows):
    return FoundPositions(**columns(rows))


def test_published_example_of_positions():
    # Truth of 10 positions, 8 found, 1 invented: G3 of Chenouard et al. (2014), worked out anew.
    truth = truth_of([(f, 0, 0.0) for f in range(10)])
    found = found_of([*((f, 0, 0.0) for f in range(8)), (8, 1, 50.0)])
    scores = score_tracks(truth, found, gate=0.5)
    assert_allclose(scores.jaccard, 0.727273, rtol=1e-6)
    assert_allclose(scores.precision, 0.888889, rtol=1e-6)
    assert scores.recall == 0.8


def test_formulas_of_mota_and_idf1():
    # GT 10, FN 2, FP 1, one switch: 0.6. IDTP 6, IDFP 3, IDFN 4: 12/19.
    scores = TrackingScores(
        n_true=10,
        n_found=9,
        n_matched=8,
        n_true_overlapped=0,
        n_matched_overlapped=0,
        switches=1,
        n_identity=6,
        rmse=0.0,
    )
    assert_allclose(scores.mota, 0.6, rtol=1e-12)
    assert_allclose(scores.idf1, 12 / 19, rtol=1e-12)
    assert np.isnan(scores.recall_overlapped)


def test_track_that_breaks_and_one_that_is_lost():
    # Object 0 has track 5 in frames 0 to 3 and track 6 in 4 to 9; object 1 is seen in 0 to 5.
    truth = truth_of([(f, t, 10.0 * t) for f in range(10) for t in (0, 1)])
    found = found_of(
        [(f, 5 if f < 4 else 6, 0.1) for f in range(10)] + [(f, 7, 10.0) for f in range(6)]
    )
    scores = score_tracks(truth, found, gate=0.5)
    assert (scores.n_true, scores.n_found, scores.n_matched, scores.switches) == (20, 16, 16, 1)
    assert_allclose(scores.mota, 1 - (4 + 0 + 1) / 20)
    assert_allclose(scores.idf1, 2 * (6 + 6) / (20 + 16))
    assert_allclose(scores.rmse, np.sqrt(10 * 0.01 / 16))


def test_two_that_exchange_their_identities():
    truth = truth_of([(f, t, 10.0 * t) for f in range(10) for t in (0, 1)])
    found = found_of([(f, (t + (f >= 7)) % 2, 10.0 * t) for f in range(10) for t in (0, 1)])
    scores = score_tracks(truth, found, gate=0.5)
    assert scores.switches == 2
    assert_allclose(scores.mota, 0.9)
    assert_allclose(scores.idf1, 0.7)


def test_an_old_pair_is_kept_while_it_is_within_the_gate():
    # In frame 1 track 1 is nearer, but track 0 is still within reach; then it no longer is.
    truth = truth_of([(f, 0, 0.0) for f in range(3)])
    found = found_of([(0, 0, 0.0), (1, 0, 0.4), (1, 1, 0.1), (2, 0, 0.6), (2, 1, 0.1)])
    pairs = pairing(truth, found, gate=0.5)
    assert_array_equal(found.track[pairs.found], [0, 0, 1])
    scores = score_tracks(truth, found, gate=0.5)
    assert (scores.switches, scores.n_found, scores.n_matched) == (1, 5, 3)
    assert scores.mota == pytest.approx(1 - 3 / 3)


def test_as_many_pairs_as_possible_before_the_nearest():
    truth = truth_of([(0, 0, 0.0), (0, 1, 0.4)])
    found = found_of([(0, 0, 0.35), (0, 1, 0.85)])
    # Nearest first would pair object 1 with track 0 and leave track 1 and object 0 alone.
    pairs = pairing(truth, found, gate=0.5)
    assert sorted(zip(pairs.true.tolist(), pairs.found.tolist(), strict=True)) == [(0, 0), (1, 1)]


def test_what_does_not_count_is_neither_missed_nor_wrongly_found():
    counted = np.array([True, False, True, False])
    truth = truth_of(
        [(0, 0, 0.0), (0, 1, 10.0), (1, 0, 0.0), (1, 1, 10.0)],
        counted=counted,
        overlapped=np.array([True, True, False, False]),
        blank_frame=np.array([0, 1]),
        blank_x=np.array([12.0, 12.0]),
        blank_y=np.zeros(2),
    )
    found = found_of([(0, 3, 0.0), (0, 4, 12.3), (1, 4, 12.6), (1, 5, 20.0)])
    scores = score_tracks(truth, found, gate=0.5)
    # Track 4 is on the body in frame 0, off it in frame 1; its midpoint alone is no body.
    assert (scores.n_true, scores.n_found, scores.n_matched) == (2, 3, 1)
    assert scores.recall_overlapped == 1.0
    assert scores.idf1 == pytest.approx(2 / 5)


def test_a_found_position_on_a_counted_object_counts_even_beside_a_body_that_does_not():
    truth = truth_of(
        [(0, 0, 0.0)],
        blank_frame=np.array([0]),
        blank_x=np.array([0.1]),
        blank_y=np.array([0.0]),
    )
    scores = score_tracks(truth, found_of([(0, 3, 0.1)]), gate=0.5)
    assert (scores.n_found, scores.n_matched, scores.n_identity) == (1, 1, 1)


def test_nothing_found_and_nothing_there():
    empty = score_tracks(truth_of([(0, 0, 1.0)]), found_of([]), gate=0.5)
    assert (empty.recall, empty.mota, empty.idf1) == (0.0, 0.0, 0.0)
    assert np.isnan(empty.precision)
    assert np.isnan(empty.rmse)
    assert score_tracks(truth_of([]), found_of([(0, 0, 1.0)]), gate=0.5).precision == 0.0


@pytest.mark.parametrize("kind", [truth_of, found_of])
def test_a_track_is_once_in_a_frame(kind):
    with pytest.raises(ValueError, match="two positions in a frame"):
        kind([(0, 0, 1.0), (0, 0, 2.0)])


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10_000))
def test_pairs_of_a_frame_against_all_ways_of_pairing(seed):
    """Most pairs within the gate, then the smallest sum of distances, by trying every way."""
    rng = np.random.default_rng(seed)
    n, m = rng.integers(1, 5, 2)
    truth = truth_of([(0, t, *rng.uniform(0, 2, 2)) for t in range(n)])
    found = found_of([(0, t, *rng.uniform(0, 2, 2)) for t in range(m)])
    pairs = pairing(truth, found, gate=0.7)
    distance = np.hypot(
        truth.x[pairs.true] - found.x[pairs.found], truth.y[pairs.true] - found.y[pairs.found]
    )
    best = (0, 0.0)
    for order in itertools.permutations(range(max(n, m)), int(n)):
        lengths = [
            d
            for i, j in enumerate(order)
            if j < m and (d := np.hypot(truth.x[i] - found.x[j], truth.y[i] - found.y[j])) <= 0.7
        ]
        best = min(best, (-len(lengths), sum(lengths)))
    assert len(distance) == -best[0]
    assert_allclose(distance.sum(), best[1], atol=1e-12)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10_000))
def test_identities_against_the_published_graph(seed):
    """IDF1 as a matching of all true and found tracks with a stand-in of its own for each.

    Pairing costs what the two miss in each other (Ristani et al. 2016, from memory).
    """
    rng = np.random.default_rng(seed)
    n, m, frames = *rng.integers(1, 5, 2), 6
    here = rng.random((n, frames)) < 0.8
    there = rng.random((m, frames)) < 0.8
    near = rng.random((n, m, frames)) < 0.4
    near &= here[:, None] & there[None]
    a, b, _ = np.nonzero(near)
    ours = identity_matches(a, b)
    size, far = n + m, 10**6
    cost = np.full((size, size), far)
    cost[:n, :m] = here.sum(1)[:, None] + there.sum(1)[None] - 2 * near.sum(2)
    cost[np.arange(n), m + np.arange(n)] = here.sum(1)
    cost[n + np.arange(m), np.arange(m)] = there.sum(1)
    cost[n:, m:] = 0
    wrong = cost[linear_sum_assignment(cost)].sum()
    total = here.sum() + there.sum()
    assert 2 * ours == total - wrong
