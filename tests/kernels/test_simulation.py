"""Simulated paths against closed forms, slow second versions and the physics of a field of view.

Every closed form is re-derived (own mathematics); the papers named beside them were the source
of the formula from memory. Where a check is statistical it allows 4 standard errors.
"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import quad

from glidefit.kernels.simulation import (
    FrameTiming,
    Motion,
    PathState,
    SeenPositions,
    View,
    active_paths,
    detached_motion,
    pivoting_paths,
    positions_around,
    seen,
    seen_active,
    stage_drift,
    standing_paths,
    step_lengths,
    tracks_of,
    turning_scale,
)

FIELD = (80.0, 80.0)


def paths_of(n, *, timing, seed=1, **motion):
    """Paths (n, n_frames, exposed_steps) that start at the origin."""
    rng = np.random.default_rng(seed)
    movers = Motion.of(n, **motion)
    state = PathState.stationary(np.zeros(n), np.zeros(n), movers, rng=rng)
    return active_paths(state, movers, timing=timing, rng=rng)[0]


def timing_of(frame_s, n_frames, exposure_s=0.0, exposed_steps=1):
    return FrameTiming(
        frame_s=frame_s, n_frames=n_frames, exposure_s=exposure_s, exposed_steps=exposed_steps
    )


def squared_displacement(paths, lag):
    x, y = paths.x.mean(axis=2), paths.y.mean(axis=2)
    return (x[:, lag] - x[:, 0]) ** 2 + (y[:, lag] - y[:, 0]) ** 2


def assert_mean(values, expected):
    """The mean of independent values is the expected one within 4 standard errors."""
    error = values.std(ddof=1) / np.sqrt(len(values))
    assert abs(values.mean() - expected) < 4 * error, (values.mean(), expected, error)


def active_msd(t, *, v, D_r):
    """Howse et al., Phys. Rev. Lett. 99, 048102 (2007), 2D form; re-derived."""
    return 2 * (v / D_r) ** 2 * (D_r * t - 1 + np.exp(-D_r * t))


def headings_of_steps(paths):
    dx, dy = (np.diff(a.mean(axis=2), axis=1) for a in (paths.x, paths.y))
    return np.unwrap(np.arctan2(dy, dx), axis=1)


# ---- the path ----


@pytest.mark.parametrize(
    ("v", "D_r", "D_par", "frame_s"),
    [
        (0.8, 0.004, 0.001, 1.0),
        (0.8, 0.05, 0.01, 1 / 3),
        (5.0, 0.25, 0.01, 0.1),
        (1.0, 1.0, 0.1, 1.0),
    ],
)
def test_mean_squared_displacement_with_diffusion_along_the_heading(v, D_r, D_par, frame_s):
    paths = paths_of(
        10_000,
        timing=timing_of(frame_s, 8),
        speed=v,
        rotational_diffusion=D_r,
        longitudinal_diffusion=D_par,
    )
    for lag in (1, 2, 7):
        t = lag * frame_s
        assert_mean(squared_displacement(paths, lag), 2 * D_par * t + active_msd(t, v=v, D_r=D_r))


# From v, D_r, D_t, t by the closed form with 4 D_t t, calculated to 15 digits.
@pytest.mark.parametrize(
    ("v", "D_r", "D_t", "t", "expected"),
    [
        (0.8, 0.004, 0.001, 10.0, 63.1951321858568),
        (5.0, 0.25, 0.01, 1.0, 23.0806264571239),
        (1.0, 1.0, 0.0, 1.0, 0.735758882342885),  # 2/e
    ],
)
def test_mean_squared_displacement_with_diffusion_in_all_directions(v, D_r, D_t, t, expected):
    paths = paths_of(
        40_000,
        timing=timing_of(t, 2),
        speed=v,
        rotational_diffusion=D_r,
        longitudinal_diffusion=D_t,
        sideways_diffusion=D_t,
    )
    assert_mean(squared_displacement(paths, 1), expected)


def test_localization_error_adds_four_variances_to_the_mean_squared_displacement():
    paths = paths_of(20_000, timing=timing_of(0.5, 2), speed=0.8, rotational_diffusion=0.05)
    tracks = tracks_of(
        seen(paths, view=View(timing=timing_of(0.5, 2))),
        kind=np.repeat("gliding", 20_000),
        motion=Motion.of(20_000),
        frame_s=0.5,
        localization_error=0.2,
        rng=np.random.default_rng(2),
    )
    square = np.diff(tracks.x_um.reshape(-1, 2))[:, 0] ** 2
    square += np.diff(tracks.y_um.reshape(-1, 2))[:, 0] ** 2
    assert_mean(square, active_msd(0.5, v=0.8, D_r=0.05) + 4 * 0.2**2)


# M_blur(t) = E[M(|t + w|)] - E[M(|w|)], w triangular on [-T, T]: own derivation; at v = T = t = 1,
# D_r = 0.02 it is 0.990732941673617.
@pytest.mark.parametrize(("v", "D_r", "T"), [(1.0, 0.02, 1.0), (5.0, 0.25, 0.1), (1.0, 0.5, 1.0)])
def test_mean_squared_displacement_blurred_by_full_exposure(v, D_r, T):
    def spread(around):
        def density(w):
            return (T - abs(w)) / T**2 * active_msd(abs(around + w), v=v, D_r=D_r)

        return quad(density, -T, 0)[0] + quad(density, 0, T)[0]

    expected = spread(T) - spread(0.0)
    if D_r == 0.02:
        assert_allclose(expected, 0.990732941673617, rtol=1e-8)
    paths = paths_of(60_000, timing=timing_of(T, 2, T), speed=v, rotational_diffusion=D_r)
    assert_mean(squared_displacement(paths, 1), expected)


# Michalet, Phys. Rev. E 82, 041914 (2010): 4 D (t - T/3) in 2D, here without localization error.
@pytest.mark.parametrize(("exposure", "expected"), [(0.0, 0.02), (0.05, 1 / 60), (0.1, 2 / 150)])
def test_diffusion_is_blurred_by_a_third_of_the_exposure(exposure, expected):
    paths = paths_of(
        20_000,
        timing=timing_of(0.1, 2, exposure),
        longitudinal_diffusion=0.05,
        sideways_diffusion=0.05,
    )
    assert_mean(squared_displacement(paths, 1), expected)


# Var of the turn between frame-to-frame displacements k apart, own derivation to first order in
# D_r t (so 2 %): 2 D_r t (k - 1/3) for instantaneous frames; at full exposure 33/60 at k = 1,
# (k - 7/15) above.
@pytest.mark.parametrize(
    ("exposure", "lag", "expected"),
    [
        (0.0, 1, 0.0266666667),
        (0.0, 2, 0.0666666667),
        (0.0, 3, 0.1066666667),
        (1.0, 1, 0.022),
        (1.0, 2, 0.0613333333),
    ],
)
def test_variance_of_the_turn_between_displacements(exposure, lag, expected):
    paths = paths_of(
        60_000, timing=timing_of(1.0, 5, exposure), speed=1.0, rotational_diffusion=0.02
    )
    angle = headings_of_steps(paths)
    square = (angle[:, lag] - angle[:, 0]) ** 2  # relative error of its mean: sqrt(2 / 60 000)
    assert_allclose(square.mean(), expected, rtol=0.02 + 4 * np.sqrt(2 / 60_000))


def test_full_exposure_takes_the_turn_of_successive_displacements_to_33_40():
    squares = []
    for exposure in (0.0, 1.0):
        paths = paths_of(
            60_000, timing=timing_of(1.0, 3, exposure), speed=1.0, rotational_diffusion=0.004
        )
        squares.append((np.diff(headings_of_steps(paths), axis=1) ** 2).mean())
    # Two independent-like means of 60 000 squares each: 4 standard errors of the ratio.
    assert_allclose(squares[1] / squares[0], 33 / 40, rtol=4 * np.sqrt(4 / 60_000))


def test_the_heading_diffuses_and_turns_with_its_rate():
    paths = paths_of(20_000, timing=timing_of(0.5, 5), rotational_diffusion=0.05, turning_rate=0.3)
    turn = paths.heading[:, 4] - paths.heading[:, 0]
    assert_mean(turn, 0.6)
    assert_mean((turn - 0.6) ** 2, 2 * 0.05 * 2.0)


@pytest.mark.parametrize("frame_s", [0.2, 1.0, 3.0])
def test_a_circling_path_has_the_chord_of_its_circle(frame_s):
    paths = paths_of(3, timing=timing_of(frame_s, 6), speed=1.0, turning_rate=2.0)
    for lag in (1, 5):
        chord = 4 * (1.0 / 2.0) ** 2 * np.sin(2.0 * lag * frame_s / 2) ** 2
        assert_allclose(squared_displacement(paths, lag), chord, rtol=1e-10)


# 4 (v/ω)² sin²(ωt/2) at v = 1, ω = 2, t = 1; and the circling MSD with D_r = 0.5, own integral.
def test_circling_paths_have_the_published_mean_squared_displacement():
    circle = paths_of(3, timing=timing_of(1.0, 2), speed=1.0, turning_rate=2.0)
    assert_allclose(squared_displacement(circle, 1), 0.708073418273571, rtol=1e-10)
    chiral = paths_of(
        40_000, timing=timing_of(1.0, 2), speed=1.0, turning_rate=2.0, rotational_diffusion=0.5
    )
    assert_mean(squared_displacement(chiral, 1), 0.633189012713725)


def test_the_exposure_averages_a_circle():
    v, turn, T = 1.3, -0.4, 0.7
    paths = paths_of(4, timing=timing_of(1.0, 5, T), speed=v, turning_rate=turn)
    t = np.arange(5) * 1.0
    start = paths.heading[:, :1]
    # Mean over the exposure of (v / iω) (exp(iωt) - 1) exp(iθ0).
    mean = (np.exp(1j * turn * (t + T)) - np.exp(1j * turn * t)) / (1j * turn * T)
    exact = v / (1j * turn) * (mean - 1) * np.exp(1j * start)
    # Steps of up to 0.2 rad; the exposure's mean is exact to the 4th order of that, times v T.
    assert_allclose(paths.x[:, :, 0], exact.real, atol=1e-4 * v * T)
    assert_allclose(paths.y[:, :, 0], exact.imag, atol=1e-4 * v * T)


def test_a_straight_path_shows_the_middle_of_each_part_of_the_exposure():
    timing = timing_of(0.5, 3, 0.2, exposed_steps=4)
    paths = paths_of(5, timing=timing, speed=2.0)
    t = np.arange(3)[:, None] * 0.5 + (np.arange(4) + 0.5) * 0.05
    assert_allclose(paths.x, 2.0 * np.cos(paths.heading)[:, :, None] * t, atol=1e-12)
    assert_allclose(paths.y, 2.0 * np.sin(paths.heading)[:, :, None] * t, atol=1e-12)


def test_steps_make_up_the_frame_and_the_parts_of_the_exposure():
    timing = timing_of(1.0, 1, 0.4, exposed_steps=3)
    for motion in (Motion.of(2), Motion.of(2, rotational_diffusion=3.0, turning_rate=-9.0)):
        lengths, n_exposed = step_lengths(motion, timing=timing)
        assert_allclose(lengths.sum(), 1.0, rtol=1e-12)
        assert_allclose(lengths[:n_exposed].sum(), 0.4, rtol=1e-12)
        assert n_exposed % 3 == 0
    assert len(lengths) > 100  # 2 D_r t / 0.05 = 120


def test_the_law_of_blurred_paths_does_not_depend_on_the_steps():
    one, many = (
        paths_of(
            15_000,
            timing=timing_of(1.0, 3, 1.0, exposed_steps=steps),
            speed=1.0,
            rotational_diffusion=0.02,
            longitudinal_diffusion=0.01,
            sideways_diffusion=0.02,
            seed=steps,
        )
        for steps in (1, 40)
    )
    for lag in (1, 2):
        a, b = squared_displacement(one, lag), squared_displacement(many, lag)
        error = np.hypot(a.std(), b.std()) / np.sqrt(15_000)
        assert abs(a.mean() - b.mean()) < 4 * error
    a, b = (np.diff(headings_of_steps(p), axis=1)[:, 0] ** 2 for p in (one, many))
    assert abs(a.mean() - b.mean()) < 4 * np.hypot(a.std(), b.std()) / np.sqrt(15_000)


def test_paths_go_on_where_they_were():
    motion = Motion.of(6, speed=1.0, turning_rate=0.2)
    state = PathState.stationary(np.zeros(6), np.zeros(6), motion, rng=np.random.default_rng(3))
    whole, _ = active_paths(
        state, motion, timing=timing_of(0.5, 10, 0.5), rng=np.random.default_rng(4)
    )
    _, middle = active_paths(
        state, motion, timing=timing_of(0.5, 4, 0.5), rng=np.random.default_rng(5)
    )
    rest, _ = active_paths(
        middle, motion, timing=timing_of(0.5, 6, 0.5), rng=np.random.default_rng(6)
    )
    assert_allclose(rest.x, whole.x[:, 4:], atol=1e-12)
    assert_allclose(rest.heading, whole.heading[:, 4:], atol=1e-12)


@settings(max_examples=25, deadline=None)
@given(
    scale=st.floats(0.01, 100),
    exposure=st.floats(0, 0.5),
    D_r=st.floats(0, 1),
    stop_rate=st.floats(0, 2),
)
def test_another_unit_of_length_scales_the_path(scale, exposure, D_r, stop_rate):
    plain, scaled = (
        paths_of(
            4,
            timing=timing_of(0.5, 6, exposure),
            speed=0.8 * factor,
            rotational_diffusion=D_r,
            longitudinal_diffusion=0.01 * factor**2,
            sideways_diffusion=0.02 * factor**2,
            stop_rate=stop_rate,
            start_rate=1.0,
        )
        for factor in (1.0, scale)
    )
    assert_allclose(scaled.x, scale * plain.x, atol=1e-9 * scale)
    assert_array_equal(scaled.heading, plain.heading)


@settings(max_examples=25, deadline=None)
@given(angle=st.floats(-3, 3), exposure=st.floats(0, 0.5))
def test_another_first_heading_rotates_the_path(angle, exposure):
    motion = Motion.of(4, speed=0.8, rotational_diffusion=0.1, longitudinal_diffusion=0.01)
    plain, turned = (
        active_paths(
            PathState(x=np.zeros(4), y=np.zeros(4), heading=first, running=np.ones(4, bool)),
            motion,
            timing=timing_of(0.5, 6, exposure),
            rng=np.random.default_rng(7),
        )[0]
        for first in (np.arange(4.0), np.arange(4.0) + angle)
    )
    rotated = (plain.x + 1j * plain.y) * np.exp(1j * angle)
    assert_allclose(turned.x, rotated.real, atol=1e-12)
    assert_allclose(turned.y, rotated.imag, atol=1e-12)


def test_turning_per_path_scales_with_the_speed_and_per_time_does_not():
    speed = np.array([0.4, 0.8, 1.6])
    assert_allclose(turning_scale(speed, mean_speed=0.8, turning="per_path"), [0.5, 1, 2])
    assert_allclose(turning_scale(speed, mean_speed=0.8, turning="per_time"), [1, 1, 1])


# ---- pauses ----


# Own calculation by matrix exponential: v = 0.8, D_r = 0.05, stop rate 0.1, start rate 0.4,
# heading frozen in the pauses, t = 10 s. If the heading went on diffusing: 37.957.
@pytest.mark.parametrize(("frame_s", "lag"), [(10.0, 1), (0.5, 20)])
def test_mean_squared_displacement_with_pauses_that_freeze_the_heading(frame_s, lag):
    paths = paths_of(
        50_000,
        timing=timing_of(frame_s, lag + 1),
        speed=0.8,
        rotational_diffusion=0.05,
        stop_rate=0.1,
        start_rate=0.4,
    )
    assert_mean(squared_displacement(paths, lag), 38.3140892)


def test_the_mean_speed_is_the_running_share_of_the_speed():
    paths = paths_of(20_000, timing=timing_of(1.0, 8), speed=0.8, stop_rate=0.3, start_rate=0.2)
    for frame in (1, 7):  # stationary from the first frame on
        step = np.hypot(
            *(np.diff(a[:, frame - 1 : frame + 1, 0])[:, 0] for a in (paths.x, paths.y))
        )
        assert_mean(step, 0.8 * 0.4)


def test_pauses_have_exact_times_whatever_the_steps():
    fine, coarse = (
        paths_of(
            300,
            timing=timing_of(1.0, 20, 0.6, exposed_steps=steps),
            speed=1.0,
            stop_rate=1.0,
            start_rate=2.0,
        )
        for steps in (1, 60)
    )
    # Straight paths draw nothing but the pauses, so both have the same.
    assert_allclose(fine.x.mean(axis=2), coarse.x.mean(axis=2), atol=1e-9)


def test_a_pausing_filament_stands_still_and_keeps_its_heading():
    paths = paths_of(
        200,
        timing=timing_of(0.1, 50, 0.1),
        speed=1.0,
        rotational_diffusion=0.1,
        longitudinal_diffusion=0.01,
        stop_rate=0.5,
        start_rate=0.5,
    )
    still = np.diff(paths.heading, axis=1) == 0
    assert 0.35 < still.mean() < 0.55  # half of the time less the frames that hold a change
    between = still[:, 1:] & still[:, :-1]
    assert_allclose(np.diff(paths.x[:, :, 0], axis=1)[:, :-1][between], 0.0, atol=1e-12)


def test_pauses_last_as_long_as_their_rates_say():
    # A slow second version: the times of every pause drawn one by one.
    rng = np.random.default_rng(8)

    def run_in_a_second():
        t, ran, running = 0.0, 0.0, rng.random() < 2 / 5
        while t < 1:
            wait = rng.exponential(1 / 3 if running else 1 / 2)
            ran += min(wait, 1 - t) * running
            t, running = t + wait, not running
        return ran

    slow = np.array([run_in_a_second() for _ in range(5_000)])
    paths = paths_of(20_000, timing=timing_of(1.0, 2), speed=1.0, stop_rate=3.0, start_rate=2.0)
    ran = np.sqrt(squared_displacement(paths, 1))
    for power in (1, 2, 4):
        a, b = slow**power, ran**power
        error = np.hypot(a.std() / np.sqrt(5_000), b.std() / np.sqrt(20_000))
        assert abs(a.mean() - b.mean()) < 4 * error
    assert_mean((ran == 0).astype(float), 3 / 5 * np.exp(-2.0))


# ---- the field ----


def gliding_in_field(rng, *, expected=33.0, n_frames=100, drift=None, spread=0.0, **motion):
    """Tracks of a field and the number of filaments simulated."""
    timing = timing_of(1 / 3, n_frames)
    view = View(timing=timing, field_um=FIELD, drift_um=drift)
    most = 0.8 * (1 + 3 * spread)
    reach = float(Motion.of(1, **{"speed": most, **motion}).reach(n_frames / 3)[0])
    x, y = positions_around(expected, field_um=FIELD, reach_um=reach + view.margin_um, rng=rng)
    speed = np.clip(0.8 * (1 + spread * rng.standard_normal(len(x))), 0.0, most)
    movers = Motion.of(len(x), **{"speed": speed, **motion})
    state = PathState.stationary(x, y, movers, rng=rng)
    return tracks_of(
        seen_active(state, movers, view=view, rng=rng),
        kind=np.repeat("gliding", len(x)),
        motion=movers,
        frame_s=1 / 3,
        rng=rng,
    )


@pytest.mark.parametrize(
    "motion",
    [
        {"rotational_diffusion": 0.05},
        {"rotational_diffusion": 0.05, "stop_rate": 0.1, "start_rate": 0.4},
        {"turning_rate": 0.2, "longitudinal_diffusion": 0.05},
    ],
)
def test_the_field_holds_the_expected_number_in_every_frame(motion):
    drift = np.linspace(0, 1, 100)[:, None] * [4.0, -2.0]
    counts = np.array(
        [
            np.bincount(gliding_in_field(rng, drift=drift, **motion).frame, minlength=100)
            for rng in np.random.default_rng(9).spawn(120)
        ]
    )
    for frame in (0, 20, 50, 99):
        # A Poisson number in each of 120 recordings.
        assert abs(counts[:, frame].mean() - 33) < 4 * np.sqrt(33 / 120)
        assert_allclose(counts[:, frame].var(ddof=1), 33, rtol=4 * np.sqrt(2 / 119))
    assert_mean(counts.mean(axis=1), 33.0)


def test_filament_frames_weigh_speeds_as_the_population_does():
    mean_speed, fast_share, by_track = [], [], []
    for rng in np.random.default_rng(10).spawn(120):
        tracks = gliding_in_field(rng, spread=0.3, rotational_diffusion=0.02)
        speed = tracks.true_speed_um_s[tracks.track]
        mean_speed.append((speed - 0.8).sum() / (33 * 100))
        fast_share.append(((speed > 0.8) - 0.5).sum() / (33 * 100))
        by_track.append(tracks.true_speed_um_s.mean())
    assert_mean(np.array(mean_speed), 0.0)
    assert_mean(np.array(fast_share), 0.0)
    # Fast filaments come in more often, so counting tracks overrates them.
    assert np.mean(by_track) - 0.8 > 4 * np.std(by_track) / np.sqrt(120)


def entries(tracks):
    """First positions of the tracks that begin after the first frame."""
    first = np.flatnonzero(np.diff(tracks.track, prepend=-1))
    first = first[tracks.frame[first] > 0]
    return tracks.x_um[first], tracks.y_um[first]


def test_filaments_enter_through_all_edges_evenly():
    x, y = np.concatenate(
        [
            entries(gliding_in_field(rng, rotational_diffusion=0.02))
            for rng in np.random.default_rng(11).spawn(120)
        ],
        axis=1,
    )
    # A uniform population crosses each length of edge v × density / π times a second.
    expected = 120 * 0.8 * (33 / 80**2) / np.pi * 320 * 99 / 3
    # A corner can be cut between two frames, by about v t / side.
    assert abs(len(x) - expected) < 4 * np.sqrt(expected) + 0.005 * expected
    gap = np.stack([x, 80 - x, y, 80 - y])
    assert gap.min(axis=0).max() < 0.8 / 3 * 1.001
    edge, along = gap.argmin(axis=0), np.where(gap.argmin(axis=0) < 2, y, x)
    for number in range(4):
        n = (edge == number).sum()
        assert abs(n - len(x) / 4) < 4 * np.sqrt(len(x) * 3 / 16)
        quarters = np.histogram(along[edge == number], bins=4, range=(0, 80))[0]
        assert np.all(np.abs(quarters - n / 4) < 4 * np.sqrt(n * 3 / 16))


def test_a_filament_that_comes_back_is_a_new_track():
    n = 40
    rng = np.random.default_rng(12)
    motion = Motion.of(n, speed=1.0, turning_rate=0.5)  # circles of 2 µm
    state = PathState.stationary(np.zeros(n), rng.uniform(5, 75, n), motion, rng=rng)
    view = View(timing=timing_of(0.5, 120), field_um=FIELD)
    tracks = tracks_of(
        seen_active(state, motion, view=view, rng=rng),
        kind=np.repeat("gliding", n),
        motion=motion,
        frame_s=0.5,
        rng=rng,
    )
    visits = np.bincount(tracks.filament, minlength=n)
    assert visits.max() >= 4  # 60 s are 4.8 turns
    steps = np.diff(tracks.frame)[np.diff(tracks.track) == 0]
    assert_array_equal(steps, 1)
    assert_array_equal(tracks.true_speed_um_s, 1.0)


def test_nothing_is_seen_outside_the_field():
    rng = np.random.default_rng(13)
    drift = np.linspace(0, 1, 100)[:, None] * [6.0, 3.0]
    tracks = gliding_in_field(rng, drift=drift, rotational_diffusion=0.1)
    for values in (tracks.x_um, tracks.y_um):
        assert values.min() >= 0
        assert values.max() <= 80


@settings(max_examples=20, deadline=None)
@given(
    speed=st.floats(0, 5),
    D_par=st.floats(0, 0.5),
    D_perp=st.floats(0, 0.5),
    D_r=st.floats(0, 1),
)
def test_nothing_goes_farther_than_its_reach(speed, D_par, D_perp, D_r):
    motion = {
        "speed": speed,
        "longitudinal_diffusion": D_par,
        "sideways_diffusion": D_perp,
        "rotational_diffusion": D_r,
    }
    paths = paths_of(200, timing=timing_of(0.5, 21), **motion)
    for frame in (1, 20):
        reach = Motion.of(200, **motion).reach(0.5 * frame)
        assert np.all(np.hypot(paths.x[:, frame, 0], paths.y[:, frame, 0]) <= reach + 1e-9)


def test_dropping_the_far_ones_changes_nothing_in_the_field():
    # Straight paths draw no noise, so the field must see the same of the same filaments.
    rng = np.random.default_rng(14)
    n = 3_000
    motion = Motion.of(n, speed=rng.uniform(0.2, 1.0, n))
    x, y = rng.uniform(-150, 230, (2, n))
    state = PathState.stationary(x, y, motion, rng=rng)
    view = View(timing=timing_of(0.5, 150, 0.5), field_um=FIELD)
    blocks = seen_active(state, motion, view=view, rng=rng)
    whole = seen(active_paths(state, motion, timing=view.timing, rng=rng)[0], view=view)
    assert_array_equal(blocks.filament, whole.filament)
    assert_array_equal(blocks.frame, whole.frame)
    assert_allclose(blocks.x, whole.x, atol=1e-9)


# ---- what does not glide ----


def test_a_standing_filament_shows_only_localization_error():
    timing = timing_of(0.5, 200)
    rng = np.random.default_rng(15)
    paths = standing_paths(np.full(50, 3.0), np.full(50, 4.0), timing=timing, rng=rng)
    tracks = tracks_of(
        seen(paths, view=View(timing=timing)),
        kind=np.repeat("stuck", 50),
        motion=Motion.of(50),
        frame_s=0.5,
        localization_error=0.03,
        rng=rng,
    )
    assert len(tracks.frame) == 50 * 200
    for values, place in ((tracks.x_um, 3.0), (tracks.y_um, 4.0)):
        assert_mean(values, place)
        assert_mean((values - place) ** 2, 0.03**2)
    assert_array_equal(np.unique(tracks.kind), ["stuck"])
    assert_array_equal(tracks.true_speed_um_s, 0.0)


@pytest.mark.parametrize(("exposure", "shorter"), [(0.0, 0.0), (0.5, 0.2)])
def test_a_pivoting_filament_stays_on_its_arc(exposure, shorter):
    n = 300
    radius, sweep = np.linspace(0.5, 2.0, n), np.where(np.arange(n) % 2, np.inf, 0.7)
    paths = pivoting_paths(
        np.full(n, 10.0),
        np.full(n, 20.0),
        radius=radius,
        sweep=sweep,
        angular_diffusion=0.2,
        timing=timing_of(0.5, 100, exposure, exposed_steps=3),
        rng=np.random.default_rng(16),
    )
    dx, dy = paths.x - 10, paths.y - 20
    distance = np.hypot(dx, dy) / radius[:, None, None]
    assert distance.max() <= 1 + 1e-12
    assert distance.mean() >= 1 - shorter - 1e-12
    if exposure == 0:
        assert_allclose(distance, 1.0, rtol=1e-12)
    turned = np.ptp(np.unwrap(np.arctan2(dy, dx)[:, :, 0], axis=1), axis=1)
    assert turned[sweep == 0.7].max() <= 1.4 + 1e-9
    assert turned[sweep == 0.7].min() > 0.7
    assert np.median(turned[np.isinf(sweep)]) > 3.0


def test_a_free_pivot_diffuses_and_a_bounded_one_is_uniform_between_its_bounds():
    n = 10_000
    free, bounded = (
        pivoting_paths(
            np.zeros(n),
            np.zeros(n),
            radius=np.ones(n),
            sweep=np.full(n, sweep),
            angular_diffusion=0.2,
            timing=timing_of(0.5, 5),
            rng=np.random.default_rng(17),
        )
        for sweep in (np.inf, 0.9)
    )
    assert_mean((free.heading[:, 4] - free.heading[:, 0]) ** 2, 2 * 0.2 * 2.0)
    # Two places uniform in ± 0.9 that forget each other: mean square 2 × 0.9² / 3 × (1 - c);
    # the correlation of a reflected Brownian path is a sum over its odd modes.
    modes = np.pi * np.arange(1, 40, 2) / 1.8
    c = np.sum(6 / (0.9 * modes) ** 4 * np.exp(-0.2 * modes**2 * 2.0)) / np.sum(
        6 / (0.9 * modes) ** 4
    )
    turn = bounded.heading[:, 4] - bounded.heading[:, 0]
    assert_mean(turn**2, 2 * 0.9**2 / 3 * (1 - c))


# Tirado & García de la Torre (1979, 1980), coefficients as in many simulation codes; 5 µm × 25 nm,
# 25 °C, 0.8900 mPa s: D along 0.750284, across 0.451848 µm²/s, about the axis 0.163980 rad²/s.
def test_a_detached_rod_has_the_published_ratios():
    kT, eta, L, p = 4.11640e-21, 0.8900e-3, 5e-6, 200.0
    log = np.log(p)
    along = kT * (log - 0.207 + 0.980 / p - 0.133 / p**2) / (2 * np.pi * eta * L) * 1e12
    across = kT * (log + 0.839 + 0.185 / p + 0.233 / p**2) / (4 * np.pi * eta * L) * 1e12
    turn = 3 * kT * (log - 0.662 + 0.917 / p - 0.050 / p**2) / (np.pi * eta * L**3)
    motion = detached_motion(3, mean_diffusion=(along + across) / 2)
    assert_allclose(motion.longitudinal_diffusion, along, rtol=1e-4)
    assert_allclose(motion.sideways_diffusion, across, rtol=1e-4)
    assert_allclose(motion.rotational_diffusion, turn, rtol=1e-4)
    assert_array_equal(motion.speed, 0.0)


def test_a_detached_rod_diffuses_on_the_whole_by_its_mean_diffusion():
    n = 20_000
    motion = detached_motion(n, mean_diffusion=0.5)
    rng = np.random.default_rng(18)
    state = PathState.stationary(np.zeros(n), np.zeros(n), motion, rng=rng)
    paths, _ = active_paths(state, motion, timing=timing_of(0.5, 5), rng=rng)
    for lag in (1, 4):
        assert_mean(squared_displacement(paths, lag), 4 * 0.5 * 0.5 * lag)
        assert_mean(paths.x[:, lag, 0], 0.0)


def test_the_stage_drifts_steadily_and_wanders():
    timing = timing_of(0.5, 400)
    rng = np.random.default_rng(19)
    steady = stage_drift(timing, velocity=(0.02, -0.01), wander=0.0, wander_time=30.0, rng=rng)
    assert_allclose(steady, np.arange(400)[:, None] * 0.5 * np.array([0.02, -0.01]), atol=1e-12)
    wandering = [
        stage_drift(timing, velocity=(0, 0), wander=0.01, wander_time=5.0, rng=rng)
        for _ in range(400)
    ]
    velocity = np.diff(np.array(wandering), axis=1) / 0.5
    for frame in (0, 398):
        assert_mean(velocity[:, frame].ravel() ** 2, 0.01**2)
    ahead = (velocity[:, 100] * velocity[:, 110]).ravel()  # 5 s, one correlation time
    assert_mean(ahead, 0.01**2 * np.exp(-1))


# ---- what a tracker makes of it ----


def straight_positions(n, n_frames):
    timing = timing_of(0.5, n_frames)
    rng = np.random.default_rng(20)
    paths = standing_paths(np.arange(n) * 1.0, np.zeros(n), timing=timing, rng=rng)
    return seen(paths, view=View(timing=timing))


def tracked(positions, n, **faults):
    return tracks_of(
        positions,
        kind=np.repeat("stuck", n),
        motion=Motion.of(n),
        frame_s=0.5,
        rng=np.random.default_rng(21),
        **faults,
    )


def test_lost_positions_leave_gaps_inside_the_tracks():
    tracks = tracked(straight_positions(100, 200), 100, lost_probability=0.1)
    n = 100 * 200
    assert abs(len(tracks.frame) - 0.9 * n) < 4 * np.sqrt(n * 0.09)
    assert len(tracks.kind) == 100
    steps = np.diff(tracks.frame)[np.diff(tracks.track) == 0]
    assert steps.min() == 1
    assert (steps == 2).mean() == pytest.approx(0.09, abs=4 * np.sqrt(0.09 / n))


def test_broken_tracks_go_on_under_another_number():
    tracks = tracked(straight_positions(100, 200), 100, break_probability=0.02)
    assert len(tracks.frame) == 100 * 200
    extra = len(tracks.kind) - 100
    expected = 100 * 199 * 0.02
    assert abs(extra - expected) < 4 * np.sqrt(expected)
    assert_array_equal(np.diff(tracks.frame)[np.diff(tracks.track) == 0], 1)
    assert_array_equal(tracks.x_um, tracks.filament[tracks.track])


def test_tracks_are_numbered_by_their_first_frame_and_sorted():
    rng = np.random.default_rng(22)
    tracks = gliding_in_field(rng, rotational_diffusion=0.1)
    change = np.diff(tracks.track)
    assert set(change) == {0, 1}
    assert tracks.track[0] == 0
    assert np.all(np.diff(tracks.frame)[change == 0] > 0)
    first = tracks.frame[np.flatnonzero(np.diff(tracks.track, prepend=-1))]
    assert np.all(np.diff(first) >= 0)
    assert_allclose(tracks.time_s, tracks.frame / 3)


def test_all_positions_lost_is_no_track():
    tracks = tracked(straight_positions(3, 4), 3, lost_probability=1.0)
    assert len(tracks.frame) == len(tracks.kind) == 0


def test_parts_are_joined_in_the_order_of_their_filaments():
    a, b = straight_positions(2, 3), straight_positions(1, 2)
    joined = SeenPositions.join([b, a], shifts=[2, 0])
    assert_array_equal(joined.filament, [0, 0, 0, 1, 1, 1, 2, 2])
    assert_array_equal(joined.frame, [0, 1, 2, 0, 1, 2, 0, 1])


def test_the_same_seed_gives_the_same_bytes():
    runs = [
        gliding_in_field(
            np.random.default_rng(seed), rotational_diffusion=0.1, stop_rate=0.1, start_rate=0.4
        )
        for seed in (23, 23, 24)
    ]
    columns = [(r.track, r.frame, r.x_um, r.y_um, r.true_heading_rad) for r in runs]
    assert all(a.tobytes() == b.tobytes() for a, b in zip(*columns[:2], strict=True))
    assert columns[0][2].tobytes() != columns[2][2].tobytes()


# ---- limits ----


def test_no_filament_is_no_track():
    rng = np.random.default_rng(25)
    assert len(gliding_in_field(rng, expected=0.0).frame) == 0
    empty = Motion.of(0, stop_rate=0.1, start_rate=0.1)
    state = PathState.stationary(np.zeros(0), np.zeros(0), empty, rng=rng)
    paths, _ = active_paths(state, empty, timing=timing_of(0.5, 3, 0.5), rng=rng)
    assert paths.x.shape == (0, 3, 1)
    none = np.zeros(0)
    pivots = pivoting_paths(
        none,
        none,
        radius=none,
        sweep=none,
        angular_diffusion=0.2,
        timing=timing_of(0.5, 3, 0.5),
        rng=rng,
    )
    assert pivots.x.shape == (0, 3, 1)


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"speed": -1.0}, "speed must be >= 0"),
        ({"rotational_diffusion": -0.1}, "rotational_diffusion must be >= 0"),
        ({"stop_rate": 0.1}, "start_rate > 0"),
        ({"spede": 1.0}, "no such motion: spede"),
    ],
)
def test_an_impossible_motion_is_refused(wrong, message):
    with pytest.raises(ValueError, match=message):
        Motion.of(3, **wrong)


@pytest.mark.parametrize(
    ("frame_s", "n_frames", "exposure"), [(0.5, 5, 0.6), (0.5, 5, -0.1), (0.0, 5, 0.0), (0.5, 0, 0)]
)
def test_impossible_times_are_refused(frame_s, n_frames, exposure):
    with pytest.raises(ValueError, match="must be"):
        timing_of(frame_s, n_frames, exposure)
