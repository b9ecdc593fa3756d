"""Filaments that pause: their running time, their likelihood, and its fit."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import linalg, stats

from glidefit.kernels import heading_filter as hf
from glidefit.kernels import pausing_clock as pc
from glidefit.kernels import pausing_filter as pf
from glidefit.kernels.active_brownian import pausing_msd_frozen
from glidefit.kernels.gliding_data import GlidingData
from glidefit.kernels.likelihood import filter_tracks
from glidefit.kernels.likelihood_fit import PAUSING, fit_likelihood
from glidefit.kernels.pausing import filter_pausing_tracks, first_clear
from glidefit.kernels.pausing_guess import pausing_guess
from glidefit.steps.simulate import ScenarioCondition, clean_tracks

ACTIN = {
    "speed": 3.0,
    "rotational_diffusion": 0.3,
    "longitudinal_diffusion": 0.05,
    "localization_error": 0.04,
    "stop_rate": 0.5,
    "go_rate": 2.0,
}
FRAME_S = 1 / 15


def simulated(n_tracks, n_frames, *, seed, exposure_s=0.0, motion=ACTIN, **more):
    condition = ScenarioCondition(
        name="simulated",
        speed_um_s=motion["speed"],
        rotational_diffusion_rad2_s=motion["rotational_diffusion"],
        longitudinal_diffusion_um2_s=motion["longitudinal_diffusion"],
        stop_rate_per_s=motion["stop_rate"],
        start_rate_per_s=motion["go_rate"],
    )
    return clean_tracks(
        n_tracks,
        n_frames,
        condition=condition,
        frame_s=FRAME_S,
        exposure_s=exposure_s,
        localization_error_um=motion["localization_error"],
        rng=np.random.default_rng(seed),
        **more,
    )


def columns(tracks):
    return tracks.time_s, tracks.x_um, tracks.y_um, tracks.offsets


def data_of(tracks, **known):
    time_s, x, y, offsets = columns(tracks)
    return GlidingData(time_s=time_s, x=x, y=y, offsets=offsets, **known)


def logs(tracks, **parameters):
    return filter_pausing_tracks(*columns(tracks), **parameters).log_likelihood


# -- how long a filament has run ------------------------------------------------------------------


def branches(h, exposure, stop, go):
    table = np.zeros((pc.N_BRANCHES, pc.N_COLUMNS))
    pc.fill_branches(table, h, exposure, stop, go)
    return table


def drawn_branches(h, exposure, stop, go, *, running, n, rng):
    """Share, mean and covariance of running time and weighted running time, by the last mode."""

    def weighted(t):
        late = np.maximum(t - (h - exposure), 0)
        return t - (late**2 / (2 * exposure) if exposure > 0 else 0)

    mode, t = np.full(n, running), np.zeros(n)
    run, area = np.zeros(n), np.zeros(n)
    while (t < h).any():
        wait = rng.exponential(size=n) / np.where(mode, stop, go)
        after = np.minimum(t + wait, h)
        run += np.where(mode, after - t, 0)
        area += np.where(mode, weighted(after) - weighted(t), 0)
        mode, t = np.where((after < h), ~mode, mode), after
    for last in (True, False):
        these = mode == last
        yield these.mean(), run[these].mean(), area[these].mean(), np.cov(run[these], area[these])


@pytest.mark.parametrize("exposure", [0.0, 0.3])
@pytest.mark.parametrize("running", [True, False])
def test_branches_have_the_moments_of_drawn_switches(exposure, running):
    """Rates of 0.5 and 2 over 0.5 s: up to a third switch more than once."""
    table = branches(0.5, exposure, 0.5, 2.0)
    rng = np.random.default_rng(2)
    drawn = list(drawn_branches(0.5, exposure, 0.5, 2.0, running=running, n=200_000, rng=rng))
    names = (pc.RUNNING, pc.STOPPING) if running else (pc.STARTING, pc.RESTING)
    for row, (share, run, weighted, covariance) in zip(table[list(names)], drawn, strict=True):
        # 4 standard errors of shares and means; running times that switch thrice are taken to
        # lie together, which shows in the exposure alone.
        assert_allclose(row[pc.SHARE], share, atol=4 * np.sqrt(share / 200_000))
        n = 200_000 * share
        assert_allclose(row[pc.RUN], run, atol=4 * np.sqrt(covariance[0, 0] / n))
        assert_allclose(row[pc.WEIGHTED], weighted, atol=0.003)
        found = row[[pc.VAR_RUN, pc.COV_RUN, pc.VAR_WEIGHTED]]
        assert_allclose(found, covariance[[0, 0, 1], [0, 1, 1]], rtol=0.04, atol=1e-5)


@given(st.floats(0.01, 3), st.floats(0.01, 3), st.floats(0.05, 2))
def test_modes_change_as_the_matrix_exponential_says(stop, go, h):
    share = branches(h, 0.0, stop, go)[:, pc.SHARE]
    exact = linalg.expm(h * np.array([[-stop, stop], [go, -go]]))
    assert_allclose(share[[pc.RUNNING, pc.STOPPING]], exact[0], rtol=1e-9)
    assert_allclose(share[[pc.STARTING, pc.RESTING]], exact[1], rtol=1e-9)


@given(st.floats(0.01, 2), st.floats(0.01, 2), st.floats(0.05, 2))
def test_branches_move_straight_filaments_as_the_formula_says(stop, go, h):
    """Mean squared displacement of `pausing_msd_frozen`, which stands in tests/published too."""
    table = branches(h, 0.0, stop, go)
    going = go / (stop + go)
    before = np.array([going, 1 - going, going, 1 - going])
    square = before * table[:, pc.SHARE] * (table[:, pc.RUN] ** 2 + table[:, pc.VAR_RUN])
    expected = pausing_msd_frozen(
        np.array([h]), speed=1.0, rotational_diffusion=0.0, stop_rate=stop, go_rate=go
    )
    assert_allclose(square.sum(), expected[0], rtol=1e-6)


@pytest.mark.parametrize("exposure", [0.0, 0.4, 1.0])
def test_without_pauses_the_heading_enters_as_in_an_exposure(exposure):
    """Mean position over the exposure: integrals as in `kernels.bound`, here by sums."""
    row = branches(1.0, exposure, 1e-12, 1.0)[pc.RUNNING]
    t = (np.arange(100_000) + 0.5) / 100_000
    w = np.ones_like(t) if exposure == 0 else np.minimum((1 - t) / exposure, 1)
    later = np.cumsum(w[::-1])[::-1] / 1e5
    area = w.mean()
    place = (w * t).mean() / area
    expected = {
        pc.WEIGHTED: area,
        pc.PLACE: place,
        pc.RIPPLE: (w * (t - place) ** 2).mean() / area,
        pc.OWN: (later**2).mean() / area**2,
        pc.SHARED: (later * (1 - t)).mean() / area,
        pc.SQUARE: (w**2).mean(),
        pc.AREA: area,
    }
    assert_allclose(row[list(expected)], list(expected.values()), rtol=1e-4)


# -- against slow, obvious versions ---------------------------------------------------------------


# The heading is known to 0.1 rad; with ACTIN to 0.2 rad, where the filter is less exact.
STEADY = ACTIN | {"rotational_diffusion": 0.05, "longitudinal_diffusion": 0.01}


def drawn_log_likelihood(x, y, motion, *, exposure, rng, n=40_000, steps=8):
    """Log likelihood by a particle filter: everything drawn, in short steps; once resampled each.

    The first mode is running or paused with the same probability, the heading anything.
    """
    v, d, along, error, stop, go = motion.values()
    h = FRAME_S / steps
    exposed = round(exposure / h)
    heading, running = rng.uniform(-np.pi, np.pi, n), rng.random(n) < 0.5
    place = np.zeros(n, dtype=complex)
    total, seen = 0.0, x + 1j * y

    def moved(place, heading, running):
        """A short step; a switch falls into its middle."""
        switch = rng.random(n) < -np.expm1(-np.where(running, stop, go) * h)
        run = h * np.where(switch, 0.5, running)
        bend = np.sqrt(2 * d * run) * rng.standard_normal(n)
        ahead = v * run + np.sqrt(2 * along * run) * rng.standard_normal(n)
        return place + ahead * np.exp(1j * (heading + bend / 2)), heading + bend, running ^ switch

    for j, z in enumerate(seen):
        if j > 0:
            for _ in range(steps - exposed):
                place, heading, running = moved(place, heading, running)
        shown = place.copy() if exposed == 0 else np.zeros(n, dtype=complex)
        for _ in range(exposed):
            before = place
            place, heading, running = moved(place, heading, running)
            shown += (before + place) / 2 / exposed
        if j == 0:  # nothing known before of the place
            error_of_first = error * (rng.standard_normal(n) + 1j * rng.standard_normal(n))
            place = place + z + error_of_first - shown
            continue
        weight = np.exp(-(np.abs(z - shown) ** 2) / error**2 / 2)
        total += np.log(weight.mean() / (2 * np.pi * error**2))
        chosen = np.searchsorted(np.cumsum(weight), weight.sum() * (np.arange(n) + 0.5) / n)
        place, heading, running = place[chosen], heading[chosen], running[chosen]
    return total


@pytest.mark.parametrize(
    ("exposure", "motion", "one", "mean"),
    [(0.0, STEADY, 1.0, 0.25), (FRAME_S, STEADY, 1.0, 0.25), (0.0, ACTIN, 2.0, 0.7)],
)
def test_likelihood_is_that_of_drawn_paths(exposure, motion, one, mean):
    tracks = simulated(5, 25, seed=4, exposure_s=exposure, motion=motion)
    rng = np.random.default_rng(3)

    def drawn():
        rows = map(tracks.rows, range(5))
        known = {"exposure": exposure, "rng": rng}
        positions = ((tracks.x_um[own], tracks.y_um[own]) for own in rows)
        return np.array([drawn_log_likelihood(*xy, motion, **known) for xy in positions])

    first, second = drawn(), drawn()
    assert np.abs(first - second).max() < 0.6  # so well is it known
    measured = logs(tracks, exposure_s=exposure, **motion)
    assert_allclose(measured, (first + second) / 2, atol=one)
    assert_allclose(measured.mean(), (first + second).mean() / 2, atol=mean)


@pytest.mark.parametrize("exposure", [0.0, 0.03, FRAME_S])
def test_rare_pauses_leave_the_likelihood_of_gliding(exposure):
    motion = ACTIN | {"stop_rate": 0.0, "go_rate": 2.0}
    tracks = simulated(20, 60, seed=5, exposure_s=exposure, motion=motion)
    rare = logs(tracks, exposure_s=exposure, **ACTIN | {"stop_rate": 1e-9})
    active = {name: value for name, value in ACTIN.items() if not name.endswith("rate")}
    without = filter_tracks(*columns(tracks), exposure_s=exposure, **active).log_likelihood
    # The first mode is anybody's guess: a short first step may end a pause and gain by it. The
    # first positions are looked at in another way, too.
    more = rare - np.log(0.5) - without
    assert more.min() > -0.3
    assert_allclose(np.median(more), 0, atol=0.05)


# -- properties -----------------------------------------------------------------------------------


@settings(max_examples=10, deadline=None)
@given(st.floats(-4, 4), st.floats(-1e3, 1e3), st.sampled_from([0.0, FRAME_S]))
def test_rotated_shifted_and_mirrored_tracks_are_equally_likely(angle, shift, exposure):
    tracks = simulated(4, 40, seed=6, exposure_s=exposure)
    time_s, x, y, offsets = columns(tracks)
    z = (x - 1j * y) * np.exp(1j * angle) + shift
    turned = filter_pausing_tracks(
        time_s + abs(shift), z.real, z.imag, offsets, exposure_s=exposure, **ACTIN
    ).log_likelihood
    assert_allclose(turned, logs(tracks, exposure_s=exposure, **ACTIN), atol=1e-4)


def test_other_units_change_the_densities_alone():
    tracks = simulated(4, 40, seed=6, exposure_s=FRAME_S)
    time_s, x, y, offsets = columns(tracks)
    nm_and_minutes = {
        "speed": 3.0 * 1e3 * 60,
        "rotational_diffusion": 0.3 * 60,
        "longitudinal_diffusion": 0.05 * 1e6 * 60,
        "localization_error": 0.04 * 1e3,
        "stop_rate": 0.5 * 60,
        "go_rate": 2.0 * 60,
    }
    found = filter_pausing_tracks(
        time_s / 60, x * 1e3, y * 1e3, offsets, exposure_s=FRAME_S / 60, **nm_and_minutes
    ).log_likelihood
    assert_allclose(found + 39 * np.log(1e6), logs(tracks, exposure_s=FRAME_S, **ACTIN), atol=1e-5)


def test_tracks_do_not_know_of_each_other():
    tracks = simulated(11, 40, seed=7)
    alone = [logs(tracks.select(np.arange(11) == k), **ACTIN)[0] for k in range(11)]
    # The mean step, from which the start of a track is told, is that of all.
    together = logs(tracks, **ACTIN)
    assert_allclose(together, alone, atol=0.1)
    backwards = np.concatenate([np.arange(40) + 40 * k for k in range(10, -1, -1)])
    time_s, x, y, offsets = columns(tracks)
    found = filter_pausing_tracks(
        time_s[backwards], x[backwards], y[backwards], offsets, **ACTIN
    ).log_likelihood
    assert_allclose(found[::-1], together, rtol=1e-12)


def test_a_gap_is_a_position_that_says_nothing():
    tracks = simulated(40, 60, seed=8)
    time_s, x, y, offsets = columns(tracks)
    lost = np.arange(len(x)) % 60 == 30
    blind = np.where(lost, 1e4, 1.0)
    whole = filter_pausing_tracks(time_s, x, y, offsets, relative_error=blind, **ACTIN)
    kept = ~lost
    gaps = filter_pausing_tracks(time_s[kept], x[kept], y[kept], 59 * np.arange(41), **ACTIN)
    off = gaps.log_density - whole.log_density[kept]
    # Two steps of one frame are a Gaussian in between, one of two frames is not.
    assert_allclose(off.sum() / 40, 0, atol=0.05)
    assert np.abs(off).max() < 1


@pytest.mark.parametrize("exposure", [0.0, FRAME_S])
def test_innovations_are_normal_white_and_of_variance_1(exposure):
    tracks = simulated(60, 150, seed=9, exposure_s=exposure)
    z = filter_pausing_tracks(*columns(tracks), exposure_s=exposure, **ACTIN).innovation
    there = np.isfinite(z).all(axis=1)
    assert there.mean() > 0.9
    z = z[there]
    error = 1 / np.sqrt(z.size)
    assert_allclose(z.mean(), 0, atol=4 * error)
    # The filter is about 2 % too unsure across the heading.
    assert_allclose(np.mean(z**2), 1, atol=0.02 + 4 * np.sqrt(2) * error)
    assert_allclose(np.mean(z**4), 3, atol=0.1 + 4 * np.sqrt(96) * error)
    assert_allclose(np.mean(z[1:] * z[:-1]), 0, atol=0.01 + 4 * error)


def test_normal_scores_are_quantiles():
    z = np.array([-30.0, -8.0, -2.5, -0.3, 0.0, 1e-3, 1.0, 5.0, 36.0])
    found = [pf._score(np.array([stats.norm.cdf(one), stats.norm.sf(one)])) for one in z]
    assert_allclose(found, z, rtol=1e-8, atol=1e-8)
    assert pf._score(np.array([0.0, 1.0])) == -37


def test_the_heading_is_clear_once_a_filament_is_away():
    x = np.concatenate([np.zeros(20), np.arange(20.0), np.arange(10.0), np.zeros(4)])
    first = first_clear(x, np.zeros(54), np.array([0, 40, 50, 54]))
    # Mean step of 28 steps of 1 and the others 0: three of them are two µm or so.
    assert_allclose(first, [20 + 2 + 1, 40 + 5, 54])


@pytest.mark.parametrize(
    ("wrong", "match"),
    [
        ({"speed": 0.0}, "speed"),
        ({"stop_rate": 0.0}, "rates must be > 0"),
        ({"go_rate": -1.0}, "rates must be > 0"),
        ({"rotational_diffusion": -1.0}, "diffusion"),
        ({"exposure_s": 0.1}, "exposure_s"),
        ({"clock": "never"}, "clock must be"),
    ],
)
def test_parameters_out_of_range_are_refused(wrong, match):
    tracks = simulated(1, 10, seed=1)
    with pytest.raises(ValueError, match=match):
        logs(tracks, **ACTIN | wrong)


def test_single_positions_and_no_tracks_say_nothing():
    nothing = np.empty(0)
    found = filter_pausing_tracks(nothing, nothing, nothing, np.array([0]), **ACTIN)
    assert found.log_likelihood.shape == found.speed_mean.shape == (0,)
    one = np.array([1.0])
    found = filter_pausing_tracks(one, one, one, np.array([0, 1]), speed_spread=0.3, **ACTIN)
    assert found.log_likelihood == 0
    assert_allclose([found.speed_mean[0], found.speed_sd[0]], [3.0, 0.3])


def test_the_layout_is_that_of_the_heading_filter():
    assert hf.LANES == 8
    assert hf.N_STATE == 20


# -- fits -----------------------------------------------------------------------------------------

TRUTH = {
    "speed": 3.0,
    "rotational_diffusion": 0.3,
    "longitudinal_diffusion": 0.05,
    "localization_variance": 0.0016,
    "speed_variance": 0.09,
    "stop_rate": 0.5,
    "go_rate": 2.0,
}


@pytest.fixture(scope="module")
def data():
    tracks = simulated(60, 150, seed=12, exposure_s=FRAME_S, speed_spread=0.1)
    return data_of(tracks, exposure_s=FRAME_S)


@pytest.fixture(scope="module")
def fitted(data):
    return fit_likelihood(data, free=PAUSING, start=pausing_guess(data))


def test_fit_finds_the_truth_within_its_errors(fitted):
    assert fitted.problem == ""
    off = (fitted.values - list(TRUTH.values())) / fitted.errors
    # The filter's own bias is half an error here.
    assert np.abs(off).max() < 4


@pytest.mark.parametrize("factor", [0.3, 3.0])
def test_optimum_does_not_depend_on_the_start(data, fitted, factor):
    start = {name: factor * value for name, value in TRUTH.items()}
    again = fit_likelihood(data, free=PAUSING, start=start)
    assert_allclose(again.values, fitted.values, atol=0.05 * fitted.errors.max(), rtol=0.01)


def test_scores_vanish_together_and_scatter_as_the_information_says(fitted):
    assert np.abs(fitted.scores.sum(axis=0) * fitted.errors).max() < 0.1
    ratio = (fitted.scores**2).sum(axis=0) / np.diag(fitted.information)
    assert_allclose(ratio, 1, atol=4 * np.sqrt(2 / 60) + 0.2)


@pytest.mark.parametrize(
    ("stop", "go"),
    [(0.5, 2.0), (2.0, 2.0), (0.1, 2.0), (0.2, 0.3)],
    ids=["usual", "half", "rare", "long"],
)
def test_the_guess_is_of_the_right_size(stop, go):
    motion = ACTIN | {"stop_rate": stop, "go_rate": go}
    guess = pausing_guess(data_of(simulated(40, 150, seed=13, motion=motion)))
    assert 0.8 < guess["speed"] / 3.0 < 1.3
    assert 0.3 < guess["go_rate"] / go < 4
    # Noise passes for short pauses where there are few.
    assert 0.3 < guess["stop_rate"] / stop < 10
