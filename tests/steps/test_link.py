"""Tracks of films and of made-up detections whose truth is known."""

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.errors import InputError
from glidefit.kernels.synthetic_frames import least_localization_error
from glidefit.settings import LinkSettings
from glidefit.steps.link import link
from glidefit.tracks import Detections


def load_benchmark():
    path = Path(__file__).parents[1] / "benchmarks" / "spots.py"
    spec = importlib.util.spec_from_file_location("spots_benchmark", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # dataclasses look themselves up there
    spec.loader.exec_module(module)
    return module


benchmark = load_benchmark()


def detections(frame, x, y, *, n_frames=None, precision=0.02):
    frame, x, y = np.asarray(frame), np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    order = np.argsort(frame, kind="stable")
    n = len(frame)
    n_frames = int(frame.max(initial=-1)) + 1 if n_frames is None else n_frames
    return Detections(
        frame=frame[order].astype(np.int64),
        x_um=x[order],
        y_um=y[order],
        brightness=np.ones(n),
        precision_um=np.full(n, precision),
        n_frames=n_frames,
        noise=np.ones(n_frames),
        background=np.zeros(n_frames),
    )


def linked(found, *, frame_s=0.5, times_s=None, **values):
    times_s = np.arange(found.n_frames) * frame_s if times_s is None else times_s
    return link(found, times_s=times_s, settings=LinkSettings(**values), where="film.tif")


def one_path(x, y, *, frames=None, **more):
    frames = np.arange(len(x)) if frames is None else frames
    return detections(frames, x, y, **more)


@pytest.mark.parametrize(
    "motion",
    [
        {},
        {"speed_um_s": 4.0, "rotational_diffusion": 0.25, "frame_s": 0.1, "exposure_s": 0.01},
    ],
    ids=["as kinesin", "as actin"],
)
def test_identities_are_kept(motion):
    case = benchmark.Case(n_frames=20, seed=5, **motion)
    assert case.signal_to_noise == 4
    assert case.spots == 60
    frames = benchmark.film(case)
    result = benchmark.score(frames, benchmark.ours(frames, case))
    # 1 200 positions; measured 0.99, 1.00, 1.1, 1 or 2, 0.98.
    assert result.recall >= 0.95
    assert result.precision >= 0.98
    assert result.rmse_um <= 1.5 * least_localization_error(case.optics)
    assert result.switches_per_1000 <= 10
    assert result.idf1 >= 0.9


# Bernardin & Stiefelhagen (2008), IDF1 after Ristani et al. (2016), from memory, both by hand:
# a spot of 10 frames that is found in 8 and changes its track once (5 and 3 frames), and one
# found elsewhere: recall 0.8, precision 8/9, 1 switch in 10 frames, IDF1 2·5/(10 + 9).
def test_the_score_of_a_small_case_is_that_by_hand():
    truth = [
        benchmark.SpotFrame(
            frame=f,
            image=np.zeros((2, 2), dtype=np.uint16),
            track=np.array([7]),
            x_um=np.array([1.0 + f]),
            y_um=np.array([2.0]),
            photons=np.array([10.0]),
        )
        for f in range(10)
    ]
    none = np.empty(0)
    found = [(np.array([1.1 + f]), np.array([2.0]), np.array([int(f > 4)])) for f in range(8)]
    found += [(none, none, none), (np.array([30.0]), np.array([2.0]), np.array([9]))]
    result = benchmark.score(truth, found)
    assert result.recall == 0.8
    assert_allclose(result.precision, 8 / 9)
    assert_allclose(result.rmse_um, np.sqrt(0.1**2 / 2))
    assert result.switches_per_1000 == 100
    assert_allclose(result.idf1, 10 / 19)


def test_every_position_is_in_one_track_and_the_times_are_those_given():
    rng = np.random.default_rng(1)
    frame = np.sort(rng.integers(0, 30, 400))
    found = detections(frame, *rng.uniform(0, 30, (2, 400)), n_frames=30)
    times = np.cumsum(rng.uniform(0.2, 0.4, 30))
    tracks, _ = linked(found, times_s=times)
    made = sorted(zip(found.frame, found.x_um, found.y_um, strict=True))
    assert sorted(zip(tracks.frame, tracks.x_um, tracks.y_um, strict=True)) == made
    assert_array_equal(tracks.time_s, times[tracks.frame])
    assert tracks.label[0] == "1"
    assert np.all(np.diff(tracks.frame[tracks.offsets[:-1]]) >= 0)
    assert tracks.n_positions.min() == 1  # the shortest tracks stay


@settings(max_examples=25)
@given(
    seed=st.integers(0, 10_000),
    max_speed=st.floats(0.5, 20),
    max_gap=st.integers(0, 4),
)
def test_no_link_is_faster_than_the_largest_speed_or_longer_than_the_largest_gap(
    seed, max_speed, max_gap
):
    rng = np.random.default_rng(seed)
    n, precision = 150, 0.05
    frame = np.sort(rng.integers(0, 12, n))
    found = detections(frame, *rng.uniform(0, 8, (2, n)), n_frames=12, precision=precision)
    times = np.cumsum(rng.uniform(0.1, 0.6, 12))
    tracks, _ = linked(found, times_s=times, max_speed=max_speed, max_gap=max_gap)
    inside = np.diff(tracks.index) == 0
    step = np.hypot(np.diff(tracks.x_um), np.diff(tracks.y_um))[inside]
    noise = 3 * np.hypot(precision, precision)
    assert np.all(step <= max_speed * np.diff(tracks.time_s)[inside] + noise + 1e-9)
    assert np.all(np.diff(tracks.frame)[inside] <= max_gap + 1)


def test_the_largest_speed_grows_over_real_missed_time():
    frames = np.array([0, 1, 2, 3, 6, 7])
    times = np.array([0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 3.5])
    found = one_path(1.0 * times[frames], 0 * frames, frames=frames)
    assert linked(found, times_s=times, max_gap=2)[0].n_tracks == 1
    assert linked(found, times_s=times, max_gap=1)[0].n_tracks == 2
    slow, _ = linked(found, times_s=times, max_gap=2, max_speed=0.5)
    assert slow.n_tracks == 6


@pytest.mark.parametrize("missing", [1, 2])
def test_a_gap_is_bridged_on_the_way_the_track_was_going(missing):
    # A fast spot is hidden while it passes a resting one.
    times = np.arange(20)
    x = np.concatenate([0.8 * times, np.full(20, 8.2)])
    y = np.concatenate([0 * times + 0.3, np.zeros(20)])
    frame = np.concatenate([times, times])
    gone = np.zeros(40, dtype=bool)
    gone[10 : 10 + missing] = True
    tracks, _ = linked(detections(frame[~gone], x[~gone], y[~gone]))
    assert_array_equal(tracks.n_positions, [20 - missing, 20])
    assert_allclose(tracks.y_um[tracks.rows(0)], 0.3)


def test_crossing_spots_keep_their_ways():
    times = np.arange(21)
    along = 0.5 * (times - 10)
    rng = np.random.default_rng(2)
    noise = 0.02 * rng.standard_normal((2, 42))
    found = detections(
        np.concatenate([times, times]),
        np.concatenate([along, along]) + noise[0],
        np.concatenate([along, -along]) + noise[1],
    )
    tracks, _ = linked(found)
    assert tracks.n_tracks == 2
    for k in range(2):
        product = tracks.x_um[tracks.rows(k)] * tracks.y_um[tracks.rows(k)]
        assert np.sign(product[0]) == np.sign(product[-1])


@pytest.mark.parametrize("gap_s", [2.0, 60.0])
def test_a_pause_of_the_camera_ends_tracks_if_it_is_long(gap_s):
    times = np.arange(20) * 1.0
    times[10:] += gap_s - 1
    rest = one_path(np.full(20, 3.0), np.full(20, 4.0))
    tracks, _ = linked(rest, times_s=times, max_gap=2)
    assert tracks.n_tracks == (1 if gap_s < 4.5 else 2)


@pytest.mark.parametrize("precision", [0.001, 0.02])
def test_resting_spots_that_tremble_stay_whole(precision):
    rng = np.random.default_rng(3)
    x, y = np.meshgrid(np.arange(6) * 2.0, np.arange(5) * 2.0)
    shake = 0.03 * rng.standard_normal((2, 40, 30))
    frame = np.repeat(np.arange(40), 30)
    found = detections(
        frame, (x.ravel() + shake[0]).ravel(), (y.ravel() + shake[1]).ravel(), precision=precision
    )
    tracks, notes = linked(found)
    assert_array_equal(tracks.n_positions, np.full(30, 40))
    assert notes == ()


def test_positions_in_another_order_give_the_same_tracks_and_so_does_every_run():
    rng = np.random.default_rng(4)
    n, f = 25, 15
    start, way = rng.uniform(0, 20, (2, n)), rng.normal(0, 0.3, (2, n))
    x, y = start[:, None] + np.arange(f)[:, None] * way[:, None]
    frame = np.repeat(np.arange(f), n)
    shuffled = np.concatenate([k * n + rng.permutation(n) for k in range(f)])
    plain = linked(detections(frame, x.ravel(), y.ravel()))[0]
    again = linked(detections(frame, x.ravel(), y.ravel()))[0]
    other = linked(detections(frame, x.ravel()[shuffled], y.ravel()[shuffled]))[0]

    def paths(tracks):
        return sorted(tuple(tracks.x_um[tracks.rows(k)]) for k in range(tracks.n_tracks))

    for name in ("label", "offsets", "frame", "x_um", "y_um"):
        assert_array_equal(getattr(plain, name), getattr(again, name))
    assert paths(other) == paths(plain)


def test_a_crowd_is_linked_and_noted():
    rng = np.random.default_rng(5)
    n = 3000
    frame = np.repeat(np.arange(3), n)
    tracks, notes = linked(detections(frame, *rng.uniform(0, 50, (2, 3 * n))), max_speed=12.0)
    assert tracks.n_positions.sum() == 3 * n
    crowd = next(note for note in notes if "compete" in note)
    assert crowd.startswith("In frame ")
    assert "detect.threshold" in crowd
    assert "link.max_speed" in crowd


def test_steps_as_long_as_the_way_to_the_neighbour_are_noted():
    rng = np.random.default_rng(6)
    n, field = 300, 15.0
    start, angle = rng.uniform(-10, 25, (2, n)), rng.uniform(0, 2 * np.pi, n)
    way = 0.9 * np.stack([np.cos(angle), np.sin(angle)])
    frame = np.repeat(np.arange(12), n)
    x, y = (start[:, None] + np.arange(12)[:, None] * way[:, None]).reshape(2, -1)
    seen = (np.abs(x - field / 2) < field / 2) & (np.abs(y - field / 2) < field / 2)
    _, notes = linked(detections(frame[seen], x[seen], y[seen]))
    assert any("may have been exchanged" in note for note in notes)


def test_a_largest_speed_that_cuts_tracks_is_noted():
    rng = np.random.default_rng(7)
    start, speed = rng.uniform(0, 60, (2, 40)), rng.normal(2.0, 0.3, 40)
    x = start[0] + np.arange(20)[:, None] * 0.5 * speed
    found = detections(np.repeat(np.arange(20), 40), x.ravel(), np.tile(start[1], 20))
    assert not any("cut" in note for note in linked(found, max_speed=6.0)[1])
    assert any("link.max_speed, 2 µm/s" in note for note in linked(found, max_speed=2.0)[1])


def test_no_positions_one_position_and_one_frame():
    empty, notes = linked(detections([], [], [], n_frames=4))
    assert empty.n_tracks == 0
    assert notes == ()
    assert linked(detections([], [], [], n_frames=0))[0].n_tracks == 0
    assert_array_equal(linked(detections([2], [1.0], [1.0], n_frames=4))[0].frame, [2])
    assert linked(detections([0, 0, 0], [1.0, 2.0, 3.0], [0.0, 0.0, 0.0]))[0].n_tracks == 3


def test_a_film_that_is_empty_for_long_is_linked_like_another():
    rng = np.random.default_rng(8)
    start, speed = rng.uniform(0, 60, (2, 40)), rng.normal(1.0, 0.1, 40)
    x = start[0] + np.arange(20)[:, None] * 0.5 * speed
    frame, y = np.repeat(np.arange(20), 40), np.tile(start[1], 20)
    early, late = (linked(detections(frame + k, x.ravel(), y))[0] for k in (0, 500))
    assert_array_equal(late.x_um, early.x_um)
    assert_array_equal(late.n_positions, np.full(40, 20))


def test_nothing_is_written(capfd):
    linked(one_path(np.arange(5.0), np.zeros(5)))
    assert capfd.readouterr() == ("", "")


def test_times_that_stand_still_are_an_error_that_names_the_frame():
    found = one_path(np.zeros(3), np.zeros(3))
    with pytest.raises(InputError, match=r"film.tif, frame 2: its time is 1 s, after 1 s"):
        linked(found, times_s=np.array([0.0, 1.0, 1.0]))
    with pytest.raises(InputError, match="frame 1: its time is nan s"):
        linked(found, times_s=np.array([0.0, np.nan, 1.0]))
    with pytest.raises(ValueError, match="2 times for 3 frames"):
        linked(found, times_s=np.array([0.0, 1.0]))
