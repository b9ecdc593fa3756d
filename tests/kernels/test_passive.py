"""Tracers without propulsion: their likelihood, and what tells them from those that move on."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels import simulation
from glidefit.kernels.bound import exposed_wiener
from glidefit.kernels.gliding_data import GlidingData, first_guess
from glidefit.kernels.likelihood_fit import PASSIVE, fit_likelihood
from glidefit.kernels.passive import directedness, squared_speed
from glidefit.steps.simulate import tracks_seen

TRUTH = {"diffusion": 0.05, "localization_variance": 0.05**2}


def simulated(n_tracks, n_frames, *, seed, exposure_s=0.0, lost=0.0, **motion):
    rng = np.random.default_rng(seed)
    motion = {"longitudinal_diffusion": 0.05, "sideways_diffusion": 0.05} | motion
    moving = simulation.Motion.of(n_tracks, **motion)
    timing = simulation.FrameTiming(frame_s=0.1, n_frames=n_frames, exposure_s=exposure_s)
    state = simulation.PathState.stationary(*rng.uniform(0, 80, (2, n_tracks)), moving, rng=rng)
    view = simulation.View(timing=timing)
    return tracks_seen(
        simulation.tracks_of(
            simulation.seen_active(state, moving, view=view, rng=rng),
            kind=np.repeat("gliding", n_tracks),
            motion=moving,
            frame_s=0.1,
            localization_error=0.05,
            lost_probability=lost,
            rng=rng,
        )
    )


def data_of(tracks, **known):
    columns = {"time_s": tracks.time_s, "x": tracks.x_um, "y": tracks.y_um}
    return GlidingData(**columns, offsets=tracks.offsets, **known)


@pytest.mark.parametrize("exposure", [0.0, 0.06, 0.1])
def test_likelihood_is_that_of_a_dense_gaussian(exposure):
    """With gaps, and errors that differ; `exposed_wiener` is checked by itself."""
    tracks = simulated(3, 20, seed=1, exposure_s=exposure, lost=0.2)
    relative = np.random.default_rng(2).uniform(0.5, 2, len(tracks.x_um))
    data = data_of(tracks, exposure_s=exposure, relative_error=relative)
    found = data.log_likelihood(TRUTH)
    for k in range(tracks.n_tracks):
        rows = tracks.rows(k)
        time_s = tracks.time_s[rows]
        covariance = 2 * 0.05 * exposed_wiener(time_s - time_s[0], exposure)
        covariance += np.diag((0.05 * relative[rows]) ** 2)
        contrast = np.diff(np.eye(len(time_s)), axis=0)  # free of the place
        law = stats.multivariate_normal(cov=contrast @ covariance @ contrast.T)
        expected = sum(law.logpdf(np.diff(x[rows])) for x in (tracks.x_um, tracks.y_um))
        assert_allclose(found[k], expected, rtol=1e-9)


def test_innovations_are_independent_of_mean_0_and_variance_1():
    tracks = simulated(40, 60, seed=3, exposure_s=0.1)
    z = data_of(tracks, exposure_s=0.1).filtered(TRUTH).innovation
    first = np.isnan(z).all(axis=1)
    assert first.sum() == 40
    z = z[~first]
    error = 1 / np.sqrt(z.size)
    assert_allclose(z.mean(), 0, atol=4 * error)
    assert_allclose(np.mean(z**2), 1, atol=4 * np.sqrt(2) * error)
    assert_allclose(np.mean(z[1:] * z[:-1]), 0, atol=4 * error)


def test_fit_finds_the_truth_within_its_errors():
    data = data_of(simulated(40, 80, seed=4, exposure_s=0.1, lost=0.05), exposure_s=0.1)
    guess = first_guess(data)
    for factor in (0.2, 1.0, 5.0):
        start = {name: factor * guess[name] for name in PASSIVE}
        fit = fit_likelihood(data, free=PASSIVE, start=start)
        assert fit.problem == ""
        assert np.abs((fit.values - list(TRUTH.values())) / fit.errors).max() < 4


def test_diffusion_has_neither_direction_nor_speed():
    t = simulated(200, 80, seed=5, exposure_s=0.1)
    share, pairs = directedness(t.frame, t.offsets, t.x_um, t.y_um, noise=0.05)
    # Pairs that overlap say a little more than they count for.
    assert_allclose(np.median(pairs), 80 / 4, rtol=0.25)
    assert 0.5 < share.std() * np.sqrt(2 * np.median(pairs)) < 1
    assert np.mean(share > 0.5) < 0.01
    products, squares = squared_speed(t.frame, t.time_s, t.offsets, t.x_um, t.y_um)
    each = products / squares
    assert_allclose(each.mean(), 0, atol=4 * each.std() / np.sqrt(200))


def test_motion_has_direction_and_speed():
    slow = {"longitudinal_diffusion": 0.01, "sideways_diffusion": 0.0}
    t = simulated(200, 80, seed=6, exposure_s=0.1, speed=2.0, rotational_diffusion=0.01, **slow)
    share, _ = directedness(t.frame, t.offsets, t.x_um, t.y_um, noise=0.05)
    assert share.min() > 0.5
    products, squares = squared_speed(t.frame, t.time_s, t.offsets, t.x_um, t.y_um)
    # Displacements 2 s long with a frame between turn by 2 % of their squares.
    assert_allclose(products.sum() / squares.sum(), 4.0, rtol=0.05)


@settings(max_examples=20, deadline=None)
@given(st.integers(2, 40), st.floats(0, 0.5))
def test_what_is_too_short_says_nothing(n_frames, lost):
    t = simulated(3, n_frames, seed=7, lost=lost)
    share, pairs = directedness(t.frame, t.offsets, t.x_um, t.y_um, noise=0.05)
    assert_allclose(np.isnan(share), pairs == 0)
    products, squares = squared_speed(t.frame, t.time_s, t.offsets, t.x_um, t.y_um)
    assert np.all(squares[np.diff(t.offsets) < 4] == 0)
    assert np.all(np.isfinite(products))
