"""Paths that filaments lay: how they bend, how bodies follow them."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.kernels.filament_contours import body_places
from glidefit.kernels.laid_paths import (
    STEP_UM,
    Filaments,
    advances,
    filaments_on_paths,
    laid_path,
)
from glidefit.kernels.simulation import FrameTiming, Motion, PathState


def path(*, seed=1, **changes):
    values = {
        "x": 3.0,
        "y": -2.0,
        "heading": 0.7,
        "behind_um": 4.0,
        "ahead_um": 6.0,
        "curvature": 0.0,
        "curvature_noise": 0.0,
    }
    return laid_path(**(values | changes), rng=np.random.default_rng(seed))


def state_of(x, y, heading):
    return PathState(
        x=np.array(x), y=np.array(y), heading=np.array(heading), running=np.ones(len(x), dtype=bool)
    )


def straight(*, n_frames=6, length=4.0, speed=1.0, field=None, stuck=False):
    """Two filaments that glide to the right and downwards."""
    timing = FrameTiming(frame_s=0.5, n_frames=n_frames)
    motion = Motion.of(2, speed=speed)
    state = state_of([5.0, 40.0], [7.0, 9.0], [0.0, np.pi / 2])
    rng = np.random.default_rng(1)
    gone = advances(motion, state.running, timing=timing, rng=rng)
    return filaments_on_paths(
        state,
        motion,
        length_um=np.array([length, 2 * length]),
        gone_um=gone * (not stuck),
        field_um=field,
        rng=rng,
    )


def places(filaments, frame):
    f = filaments
    return body_places(
        f.path_offset,
        f.path_x,
        f.path_y,
        STEP_UM,
        f.tail_um[:, frame],
        f.length_um,
        f.aside_um,
        np.arange(len(f.length_um)),
    )


# ---- paths ----


def test_a_straight_path_goes_through_its_point():
    x, y = path()
    assert_allclose([x[40], y[40]], [3.0, -2.0], atol=1e-12)
    assert_allclose(np.hypot(np.diff(x), np.diff(y)), STEP_UM, rtol=1e-9)
    assert_allclose(np.arctan2(np.diff(y), np.diff(x)), 0.7, rtol=1e-9)
    assert len(x) == 101


def test_a_steadily_turning_path_is_a_circle():
    x, y = path(curvature=0.5, ahead_um=4 * np.pi)
    # Vertices of chords that turn by 0.05 rad lie on a circle of this radius.
    radius = STEP_UM / 2 / np.sin(0.5 * STEP_UM / 2)
    centre_x = x[40] + radius * np.cos(0.7 + 0.5 * STEP_UM / 2 + np.pi / 2)
    centre_y = y[40] + radius * np.sin(0.7 + 0.5 * STEP_UM / 2 + np.pi / 2)
    assert_allclose(np.hypot(x - centre_x, y - centre_y), radius, rtol=1e-9)


@pytest.mark.parametrize("side", [-1, 1])
def test_headings_of_a_path_forget_as_its_noise_says(side):
    # <cos of the turn over a path s> = exp(-noise s), both ways from the given heading.
    s, noise = 4.0, 0.1
    cosines = []
    for seed in range(2_000):
        x, y = path(seed=seed, behind_um=5.0, ahead_um=5.0, curvature_noise=noise)
        at = 49 + side * 40
        cosines.append(np.cos(np.arctan2(y[at + 1] - y[at], x[at + 1] - x[at]) - 0.7))
    error = np.std(cosines) / np.sqrt(2_000)
    assert abs(np.mean(cosines) - np.exp(-noise * s)) < 4 * error


# ---- advances ----


def test_advance_is_that_of_the_middle_of_each_exposed_part():
    timing = FrameTiming(frame_s=1.0, n_frames=3, exposure_s=0.4, exposed_steps=2)
    gone = advances(
        Motion.of(1, speed=2.0), np.array([True]), timing=timing, rng=np.random.default_rng(1)
    )
    assert_allclose(gone[0], 2.0 * np.array([[0.1, 0.3], [1.1, 1.3], [2.1, 2.3]]))


def test_advances_scatter_with_the_longitudinal_diffusion():
    n = 4_000
    motion = Motion.of(n, speed=1.0, longitudinal_diffusion=0.02)
    timing = FrameTiming(frame_s=0.5, n_frames=9)
    gone = advances(motion, np.ones(n, dtype=bool), timing=timing, rng=np.random.default_rng(2))
    last = gone[:, -1, 0]
    assert abs(last.mean() - 4.0) < 4 * last.std() / np.sqrt(n)
    assert_allclose(last.var(), 2 * 0.02 * 4.0, rtol=4 * np.sqrt(2 / n))


def test_pauses_take_their_share():
    n = 2_000
    motion = Motion.of(n, speed=1.0, stop_rate=0.5, start_rate=1.5)
    running = np.random.default_rng(3).random(n) < 0.75
    timing = FrameTiming(frame_s=0.2, n_frames=51)
    gone = advances(motion, running, timing=timing, rng=np.random.default_rng(4))[:, -1, 0]
    assert abs(gone.mean() - 0.75 * 10) < 4 * gone.std() / np.sqrt(n)
    assert gone.std() > 0.5


# ---- bodies ----


def test_bodies_begin_at_their_state_and_follow_the_path_of_their_tip():
    filaments = straight()
    first = places(filaments, 0)
    assert_allclose(first[:, 0:2], [[5, 7], [40, 9]], atol=1e-9)
    assert_allclose(first[:, 2:4], [[7, 7], [40, 13]], atol=1e-9)
    assert_allclose(first[:, 4:6], [[3, 7], [40, 5]], atol=1e-9)
    assert_allclose(first[:, 6], [0, np.pi / 2], atol=1e-9)
    # After 2 s the midpoint is where the head was.
    assert_allclose(places(filaments, 4)[0, 0:2], first[0, 2:4], atol=1e-9)


def test_the_midpoint_of_a_bent_body_comes_where_its_head_was():
    timing = FrameTiming(frame_s=1.0, n_frames=5)
    motion = Motion.of(1, speed=1.0, rotational_diffusion=0.2)
    state = state_of([0.0], [0.0], [0.3])
    rng = np.random.default_rng(8)
    gone = advances(motion, state.running, timing=timing, rng=rng)
    bent = filaments_on_paths(state, motion, length_um=np.array([6.0]), gone_um=gone, rng=rng)
    assert_allclose(places(bent, 3)[0, 0:2], places(bent, 0)[0, 2:4], atol=1e-9)
    assert_allclose(places(bent, 3)[0, 4:6], places(bent, 0)[0, 0:2], atol=1e-9)
    straightness = np.hypot(*(places(bent, 0)[0, 2:4] - places(bent, 0)[0, 4:6])) / 6.0
    assert straightness < 0.99


def test_filaments_that_never_come_near_are_left_out():
    near = straight(field=(20.0, 20.0))
    assert_array_equal(near.length_um, [4.0])
    assert len(near.motion.speed) == 1
    assert len(near.path_x) == near.path_offset[-1]


def test_stuck_filaments_are_told():
    assert straight(stuck=True).stuck.all()
    assert not straight().stuck.any()


def test_joined_filaments_keep_their_paths_and_bundles():
    one, two = straight(), straight(length=3.0)
    two.bundle[:] = [1, -1]
    both = Filaments.join([one, two])
    assert_allclose(places(both, 2)[2:], places(two, 2), atol=1e-12)
    assert_array_equal(both.bundle, [-1, -1, 1, -1])
    assert len(both.motion.speed) == 4
