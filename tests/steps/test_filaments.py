"""Filaments followed in simulated films whose truth is known, and in films that are none."""

import dataclasses

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.errors import InputError
from glidefit.kernels.filament_optics import FilamentOptics
from glidefit.kernels.filament_population import FilamentLaw, make_filament_video
from glidefit.kernels.filament_truth import film_truth
from glidefit.kernels.simulation import FrameTiming
from glidefit.kernels.tracking_scores import FoundPositions, pairing, scores_of
from glidefit.settings import DetectSettings, LinkSettings
from glidefit.steps.filaments import track_filaments

PIXEL, FRAME_S = 0.13, 0.5


def follow(frames, *, detect=None, link=None, pixel_um=PIXEL):
    frames = list(frames)
    return track_filaments(
        frames,
        pixel_um=pixel_um,
        times_s=np.arange(len(frames)) * FRAME_S,
        detect=detect or DetectSettings(),
        link=link or LinkSettings(),
        where="film.tif",
    )


def film(*, in_field, ratio=4.0, n_frames=24, side=384, seed=1, **law):
    video = make_filament_video(
        seed=seed,
        shape_px=(side, side),
        timing=FrameTiming(frame_s=FRAME_S, n_frames=n_frames, exposure_s=0.05),
        law=FilamentLaw(in_field=in_field, length_spread=0.4, **law),
        optics=FilamentOptics.with_signal_to_noise(ratio, pixel_um=PIXEL),
        speed_um_s=0.8,
        rotational_diffusion=0.001,
    )
    return list(video.frames())


@pytest.fixture(scope="module")
def usual():
    frames = film(in_field=7, seed=2)
    return frames, follow(f.image for f in frames)


def scores(frames, found):
    truth, t = film_truth([f.truth for f in frames]), found.tracks
    positions = FoundPositions(track=t.index, frame=t.frame, x=t.x_um, y=t.y_um)
    pairs = pairing(truth.positions, positions, gate=0.5)
    return truth, pairs, scores_of(truth.positions, positions, pairs)


def straight(x, y, angle, length, *, peak=80.0, shape=(200, 240), level=100.0, noise=4.0, seed=0):
    """A frame with one straight filament about (x, y), in pixels."""
    v, u = np.mgrid[: shape[0], : shape[1]].astype(float)
    along = (u - x) * np.cos(angle) + (v - y) * np.sin(angle)
    across = (v - y) * np.cos(angle) - (u - x) * np.sin(angle)
    from scipy.special import erf

    ends = 0.5 * (erf((along + length / 2) / 2**0.5) - erf((along - length / 2) / 2**0.5))
    image = level + peak * np.exp(-(across**2) / 2) * ends
    return image + np.random.default_rng(seed).normal(0, noise, shape)


def test_filaments_are_found_and_keep_their_names(usual):
    frames, found = usual
    truth, pairs, s = scores(frames, found)
    assert s.n_true > 100
    # Measured 1.00, 0.99 and 0.99.
    assert s.precision >= 0.97
    assert s.recall >= 0.95
    assert s.idf1 >= 0.95
    assert s.rmse <= 0.08
    t = found.tracks
    ratio = t.length_um[pairs.found] / truth.length_um[pairs.true]
    assert_allclose(np.median(ratio), 1, atol=0.015)
    turn = t.heading_rad[pairs.found] - truth.heading_rad[pairs.true]
    assert np.median(np.abs(np.angle(np.exp(1j * turn)))) < 0.05


def test_contours_run_from_tail_to_head(usual):
    frames, found = usual
    truth, pairs, _ = scores(frames, found)
    heads = found.contour_um[found.contour_offsets[1:] - 1][pairs.found]
    off = np.hypot(
        heads[:, 0] - truth.head_x_um[pairs.true], heads[:, 1] - truth.head_y_um[pairs.true]
    )
    assert np.median(off) < 0.1
    assert len(found.contour_offsets) == len(found.tracks.frame) + 1
    assert found.n_frames == len(frames) == len(found.noise) == len(found.background)


def test_filaments_cut_by_the_edge_are_flagged(usual):
    _, found = usual
    t, side = found.tracks, 384 * PIXEL
    for position in range(len(t.frame)):
        a, b = found.contour_offsets[position : position + 2]
        ends = found.contour_um[[a, b - 1]]
        outside = bool(np.any((ends < 0) | (ends > side)))
        if outside:
            assert t.flag[position] == "cut by the edge"
    assert np.count_nonzero(t.flag == "cut by the edge") > 10


def test_the_same_film_gives_the_same_tracks(usual):
    frames, found = usual
    again = follow(f.image for f in frames)
    assert_array_equal(again.tracks.x_um, found.tracks.x_um)
    assert_array_equal(again.tracks.label, found.tracks.label)


def test_identity_goes_through_a_crossing():
    frames = []
    for f in range(30):
        one = straight(60 + 3 * f, 100, 0.0, 50, seed=f)
        other = straight(120, 40 + 3.5 * f, np.pi / 2, 50, level=0, noise=0)
        frames.append(np.clip(one + other, 0, None).astype(np.uint16))
    found = follow(frames)
    assert found.tracks.n_tracks == 2
    assert_array_equal(found.tracks.n_positions, [30, 30])
    for k in range(2):
        rows = found.tracks.rows(k)
        heading = found.tracks.heading_rad[rows]
        assert np.ptp(heading) < 0.2
        clear = found.tracks.flag[rows] == ""
        assert clear.sum() > 20
        x, y = found.tracks.x_um[rows] / PIXEL, found.tracks.y_um[rows] / PIXEL
        step = 3.0 if abs(np.cos(heading[0])) > 0.5 else 3.5
        way = x if step == 3.0 else y
        assert_allclose(np.diff(way).mean(), step, atol=0.05)


@pytest.mark.parametrize("length", [0.0, 1.0, 4.0, 12.0])
def test_short_filaments_go_over_into_spots(length):
    frames = [
        straight(40 + 2.5 * f, 90.4, 0.0, max(length, 0.2), peak=400, seed=f) for f in range(25)
    ]
    found = follow(frames)
    assert found.tracks.n_tracks == 1
    assert found.tracks.n_positions[0] >= 24
    at = found.tracks.frame
    assert_allclose(found.tracks.x_um / PIXEL, 40 + 2.5 * at, atol=0.4)
    assert_allclose(found.tracks.y_um / PIXEL, 90.4, atol=0.3)


def test_pure_noise_gives_nothing():
    rng = np.random.default_rng(8)
    found = follow(rng.poisson(20, (384, 384)).astype(np.uint16) for _ in range(12))
    assert found.tracks.n_tracks == 0
    assert found.contour_um.shape == (0, 2)


def test_hot_pixels_give_nothing():
    rng = np.random.default_rng(9)
    hot = np.zeros((256, 256))
    hot[rng.integers(0, 256, 30), rng.integers(0, 256, 30)] = rng.uniform(50, 3000, 30)
    found = follow(rng.poisson(20 + hot).astype(np.uint16) for _ in range(10))
    assert found.tracks.n_tracks == 0


def test_equal_frames_say_so():
    frame = straight(100, 90, 0.3, 60).astype(np.uint16)
    found = follow([frame] * 6)
    assert found.tracks.n_tracks == 1
    assert any("All frames are equal" in note for note in found.notes)


def test_a_constant_film_gives_nothing():
    assert follow([np.full((64, 64), 255, dtype=np.uint8)] * 4).tracks.n_tracks == 0


@pytest.mark.parametrize("kind", [np.uint8, np.float32, np.int32])
def test_kinds_of_numbers(kind):
    scale = 0.5 if kind is np.uint8 else 1.0
    frames = [(scale * straight(50 + 3 * f, 90, 0.2, 60, seed=f)).astype(kind) for f in range(8)]
    found = follow(frames)
    assert found.tracks.n_tracks == 1
    assert_allclose(np.median(found.tracks.length_um) / PIXEL, 60, atol=1.5)


def test_saturated_frames_say_so():
    frames = []
    for f in range(8):
        image = straight(60 + 3 * f, 90, 0.2, 60, seed=f)
        if f in (3, 4):
            image = image * 3
        frames.append(np.clip(image, 0, 255).astype(np.uint8))
    notes = follow(frames).notes
    assert any("2 of 8 frames are saturated, the first is frame 3" in note for note in notes)


def test_dark_filaments_give_a_hint():
    frames = [300 - straight(60 + 3 * f, 90, 0.2, 60, seed=f) for f in range(8)]
    found = follow(frames)
    assert any("detect.contrast" in note for note in found.notes)
    assert not follow([-frame for frame in frames]).notes


def test_lost_focus_is_noticed():
    frames = []
    for f in range(24):
        peak = 25.0 if f in (12, 13) else 80.0
        frames.append(straight(40 + 3 * f, 90, 0.2, 60, peak=peak, seed=f))
    notes = follow(frames).notes
    assert any("In 2 frames, the first is frame 12" in note for note in notes)


def test_resting_specks_are_no_filaments():
    frames = []
    for f in range(10):
        speck = straight(150, 150, 0.0, 0.3, peak=600, level=0, noise=0)
        frames.append(straight(50 + 3 * f, 60, 0.1, 50, seed=f) + speck)
    found = follow(frames)
    assert found.tracks.n_tracks == 1
    assert any(note.startswith("1 resting speck") for note in found.notes)


def test_a_filament_that_detaches_ends():
    frames = [straight(50 + 3 * f, 90, 0.2, 60, peak=80 if f < 9 else 0, seed=f) for f in range(20)]
    found = follow(frames)
    assert_array_equal(found.tracks.n_positions, [9])


def test_a_gap_is_bridged():
    frames = [
        straight(50 + 3 * f, 90, 0.2, 60, peak=0 if f in (7, 8) else 80, seed=f) for f in range(16)
    ]
    found = follow(frames)
    assert_array_equal(found.tracks.n_positions, [14])
    short = follow(frames, link=LinkSettings(max_gap=0))
    assert short.tracks.n_tracks == 2


def test_a_break_is_an_end_and_two_beginnings():
    frames = []
    for f in range(24):
        if f < 8:
            image = straight(60 + 3 * f, 90, 0.0, 60, seed=f)
        else:
            gap = 2.0 * (f - 7)
            image = straight(45 + 3 * f - gap, 90, 0.0, 29, seed=f)
            image += straight(75 + 3 * f + 0.2 * gap, 90, 0.0, 29, level=0, noise=0)
        frames.append(image)
    found = follow(frames)
    t = found.tracks
    assert t.n_tracks == 3
    first, last = t.frame[t.offsets[:-1]], t.frame[t.offsets[1:] - 1]
    assert first[0] == 0
    assert last[0] < 20
    assert_array_equal(last[1:], [23, 23])
    assert np.all(first[1:] >= 8)


@pytest.mark.parametrize(
    ("frames", "found"),
    [
        ([np.ones((40, 40)), np.zeros((40, 41))], "shape (40, 41)"),
        ([np.zeros((40, 40, 3))], "shape (40, 40, 3)"),
        ([np.full((40, 40), np.nan)], "without a finite value"),
    ],
)
def test_frames_that_are_none(frames, found):
    with pytest.raises(InputError, match=r"film\.tif, frame") as raised:
        follow(frames)
    assert found in str(raised.value)


def test_pixels_of_another_scale():
    with pytest.raises(InputError, match="pixels wide"):
        follow([np.zeros((40, 40))], pixel_um=1.0)


def test_times_that_go_back():
    with pytest.raises(InputError, match="after 1 s"):
        track_filaments(
            [np.zeros((40, 40))] * 3,
            pixel_um=PIXEL,
            times_s=np.array([0.0, 1.0, 0.5]),
            detect=DetectSettings(),
            link=LinkSettings(),
            where="film.tif",
        )


def test_a_field_full_of_filaments_ends_with_a_message(monkeypatch):
    from glidefit.steps.filaments import following

    frames = film(in_field=150, n_frames=5, side=256)
    monkeypatch.setattr(following, "_MOST_CURVES", 20)
    found = follow(f.image for f in frames)
    assert any("so full of filaments" in note for note in found.notes)
    assert dataclasses.is_dataclass(found)
