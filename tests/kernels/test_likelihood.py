"""The likelihood of gliding tracks: against slow versions of itself, symmetries, and its fit."""

import lmfit
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.bound import exposed_wiener
from glidefit.kernels.gliding_data import GlidingData
from glidefit.kernels.likelihood import filter_tracks, heading_uncertainty
from glidefit.kernels.likelihood_fit import CIRCLING, STRAIGHT, fit_likelihood, fit_parameters
from glidefit.steps.simulate import ScenarioCondition, clean_tracks

KINESIN = {
    "speed": 0.8,
    "rotational_diffusion": 0.008,
    "localization_error": 0.03,
    "longitudinal_diffusion": 0.003,
}


def simulated(n_tracks, n_frames, *, seed, frame_s=1 / 3, exposure_s=0.0, motion=KINESIN, **more):
    names = ("turning_rate_rad_s", "turning_rate_sd_rad_s")
    condition = ScenarioCondition(
        name="simulated",
        speed_um_s=motion["speed"],
        rotational_diffusion_rad2_s=motion["rotational_diffusion"],
        longitudinal_diffusion_um2_s=motion["longitudinal_diffusion"],
        **{name: more.pop(name) for name in names if name in more},
    )
    return clean_tracks(
        n_tracks,
        n_frames,
        condition=condition,
        frame_s=frame_s,
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
    return filter_tracks(*columns(tracks), **parameters).log_likelihood


# -- against slow, obvious versions ---------------------------------------------------------------


def straight_log_likelihood(time_s, x, y, *, speed, diffusion, error, exposure, spread, further=0):
    """Dense Gaussian along and across a straight path, averaged over 2000 headings."""
    middle = time_s + exposure / 2
    contrasts = np.diff(np.eye(len(x)), axis=0)  # free of the place
    noise = error**2 * np.eye(len(x))
    wiener = exposed_wiener(time_s - time_s[0], exposure)
    along = (
        noise
        + further * np.eye(len(x))
        + 2 * diffusion * wiener
        + spread**2 * np.outer(middle, middle)
    )
    heading = np.arange(2000)[:, None] * 2 * np.pi / 2000
    cos, sin = np.cos(heading), np.sin(heading)
    density = gaussian((x * cos + y * sin - speed * middle) @ contrasts.T, along, contrasts)
    density = density + gaussian((y * cos - x * sin) @ contrasts.T, noise, contrasts)
    return np.logaddexp.reduce(density) - np.log(2000)


def gaussian(z, covariance, contrasts):
    return stats.multivariate_normal.logpdf(z, cov=contrasts @ covariance @ contrasts.T)


@pytest.mark.parametrize(
    ("exposure", "spread", "further"),
    [(0.0, 0.0, 0.0), (0.25, 0.0, 0.0), (0.25, 0.1, 0.0), (0.0, 0.1, 0.004), (0.25, 0.1, 0.004)],
)
def test_straight_paths_have_the_likelihood_of_a_dense_gaussian(exposure, spread, further):
    straight = KINESIN | {"rotational_diffusion": 1e-12}
    tracks = simulated(6, 15, seed=3, exposure_s=exposure, motion=straight, speed_spread=spread / 8)
    expected = [
        straight_log_likelihood(
            tracks.time_s[rows],
            tracks.x_um[rows],
            tracks.y_um[rows],
            speed=0.8,
            diffusion=0.003,
            error=0.03,
            exposure=exposure,
            spread=spread,
            further=further,
        )
        for rows in map(tracks.rows, range(6))
    ]
    more = {"speed_spread": spread, "error_variance_along": further}
    measured = logs(tracks, exposure_s=exposure, **more, **straight)
    # The only approximation left is that of Gaussian headings in the first steps; what lies along
    # the heading is off with it.
    assert_allclose(measured, expected, atol=0.2 if further else 0.1)
    assert_allclose(measured.mean(), np.mean(expected), atol=0.05)


def drawn_log_likelihoods(x, y, *, exposure, rng):
    """Log mean density over drawn paths for D_r = 0.008 and 0.016, and its standard error.

    Speed 0.8, frames of 1/3 s, localization error 0.03; the same noise for both.
    """
    n, steps, error, reach = 80_000, 8, 0.03, 0.5
    h = 1 / 3 / steps
    shown = np.arange(max(1, round(exposure / h)))
    chord = np.arctan2(y[-1] - y[0], x[-1] - x[0])
    # Elsewhere on the circle the density is nothing.
    first = chord + rng.uniform(-reach, reach, (n, 1))
    noise = rng.standard_normal((n, (len(x) - 1) * steps + len(shown)))
    logs, scatter = [], []
    for diffusion in (0.008, 0.016):
        turned = first + np.cumsum(np.sqrt(2 * diffusion * h) * noise, axis=1)
        place = np.cumsum(0.8 * h * np.exp(1j * turned), axis=1)
        frames = np.arange(len(x))[:, None] * steps + shown
        away = place[:, frames].mean(axis=2) - (x + 1j * y)
        square = (np.abs(away - away.mean(axis=1, keepdims=True)) ** 2).sum(axis=1) / error**2
        density = np.exp(-square / 2)
        constant = -(len(x) - 1) * np.log(2 * np.pi * error**2) - np.log(len(x))
        logs.append(constant + np.log(density.mean() * reach / np.pi))
        scatter.append(density.std() / density.mean() / np.sqrt(n))
    return logs, max(scatter)


@pytest.mark.parametrize("exposure", [0.0, 1 / 12])
def test_curved_paths_have_the_likelihood_of_drawn_paths(exposure):
    motion = KINESIN | {"longitudinal_diffusion": 0.0}
    tracks = simulated(6, 6, seed=8, exposure_s=exposure, motion=motion)
    rng = np.random.default_rng(4)
    drawn = np.empty((6, 2))
    for k in range(6):
        rows = tracks.rows(k)
        drawn[k], scatter = drawn_log_likelihoods(
            tracks.x_um[rows], tracks.y_um[rows], exposure=exposure, rng=rng
        )
        assert scatter < 0.05
    measured = np.stack(
        [
            logs(tracks, **motion | {"rotational_diffusion": d}, exposure_s=exposure)
            for d in (0.008, 0.016)
        ],
        axis=1,
    )
    # A Gaussian heading is off by about 0.1 for a single track, either way; the drawing by 0.05.
    assert_allclose(measured, drawn, atol=0.4)
    assert_allclose(measured.mean(axis=0), drawn.mean(axis=0), atol=0.12)


# -- symmetries -----------------------------------------------------------------------------------

CIRCLE = KINESIN | {"turning_rate": 0.05, "speed_spread": 0.08, "turning_rate_spread": 0.02}
TRACKS = simulated(5, 30, seed=11, exposure_s=0.2)
CLOCKS = ("per_time", "per_path")


@given(angle=st.floats(-3, 3), shift=st.floats(-100, 100), clock=st.sampled_from(CLOCKS))
@settings(max_examples=10, deadline=None)
def test_rotated_shifted_and_later_tracks_are_equally_likely(angle, shift, clock):
    time_s, x, y, offsets = columns(TRACKS)
    z = (x + 1j * y) * np.exp(1j * angle) + shift - 2j * shift
    parameters = CIRCLE | {"exposure_s": 0.2, "clock": clock}
    moved = filter_tracks(time_s + shift, z.real, z.imag, offsets, **parameters)
    # Times and places lose their last digits by the shift.
    assert_allclose(moved.log_likelihood, logs(TRACKS, **parameters), atol=1e-5)


def test_mirrored_tracks_are_equally_likely_with_the_opposite_turning_rate():
    time_s, x, y, offsets = columns(TRACKS)
    mirrored = filter_tracks(
        time_s, x, -y, offsets, exposure_s=0.2, **CIRCLE | {"turning_rate": -0.05}
    )
    expected = logs(TRACKS, exposure_s=0.2, **CIRCLE)
    assert_allclose(mirrored.log_likelihood, expected, rtol=1e-7)


@pytest.mark.parametrize("clock", CLOCKS)
def test_other_units_change_the_densities_alone(clock):
    time_s, x, y, offsets = columns(TRACKS)
    scaled = filter_tracks(
        time_s * 60,
        x * 1000,
        y * 1000,
        offsets,
        speed=0.8 * 1000 / 60,
        rotational_diffusion=0.008 / 60,
        localization_error=30.0,
        longitudinal_diffusion=0.003 * 1e6 / 60,
        turning_rate=0.05 / 60,
        turning_rate_spread=0.02 / 60,
        speed_spread=0.08 * 1000 / 60,
        exposure_s=0.2 * 60,
        clock=clock,
    )
    expected = logs(TRACKS, exposure_s=0.2, clock=clock, **CIRCLE) - 29 * np.log(1e6)
    assert_allclose(scaled.log_likelihood, expected, rtol=1e-7)


def test_a_gap_is_a_position_that_says_nothing():
    time_s, x, y, offsets = columns(simulated(1, 25, seed=5))
    lost = np.isin(np.arange(25), [9, 15, 16])
    gaps = filter_tracks(
        time_s[~lost], x[~lost], y[~lost], np.array([0, 22]), **KINESIN
    ).log_likelihood
    vague = np.where(lost, 1e5, 1.0)
    whole = filter_tracks(time_s, x, y, offsets, relative_error=vague, **KINESIN).log_likelihood
    silent = 3 * -np.log(2 * np.pi * (0.03 * 1e5) ** 2)
    # Two steps and one twice as long differ at second order in the turning.
    assert_allclose(gaps, whole - silent, atol=2e-3)


def test_tracks_do_not_know_of_each_other():
    together = logs(TRACKS, exposure_s=0.2, **CIRCLE)
    for k in range(5):
        chosen = TRACKS.select(np.arange(5) == k)
        assert_allclose(logs(chosen, exposure_s=0.2, **CIRCLE), together[k], rtol=1e-12)


def test_the_clocks_agree_where_all_tracks_are_equally_fast():
    alike = CIRCLE | {"speed_spread": 0.0, "exposure_s": 0.2}
    assert_allclose(
        logs(TRACKS, clock="per_path", **alike), logs(TRACKS, clock="per_time", **alike), rtol=1e-12
    )


def test_precisions_of_positions_multiply_the_localization_error():
    twice = filter_tracks(
        *columns(TRACKS), relative_error=np.full(len(TRACKS.x_um), 2.0), **KINESIN
    )
    expected = logs(TRACKS, **KINESIN | {"localization_error": 0.06})
    assert_allclose(twice.log_likelihood, expected, rtol=1e-12)


def test_a_single_position_says_nothing():
    one = filter_tracks(np.zeros(1), np.ones(1), np.ones(1), np.array([0, 1]), **KINESIN)
    assert one.log_likelihood == [0.0]
    assert_allclose(one.speed_mean, 0.8)


# -- what tracks say ------------------------------------------------------------------------------


def test_innovations_are_independent_of_mean_0_and_variance_1():
    tracks = simulated(100, 60, seed=6, exposure_s=0.3)
    innovation = filter_tracks(*columns(tracks), exposure_s=0.3, **KINESIN).innovation
    first = np.isnan(innovation[:, 0])
    assert first.sum() == 8 * 100
    z = innovation.reshape(100, 60, 2)[:, 8:]
    n = z.size
    assert abs(z.mean()) < 4 / np.sqrt(n)
    assert abs((z**2).mean() - 1) < 4 * np.sqrt(2 / n)
    assert abs((z[:, 1:] * z[:, :-1]).mean()) < 4 / np.sqrt(n)
    assert abs((z[..., 0] * z[..., 1]).mean()) < 4 / np.sqrt(n / 2)


def test_speeds_and_turning_rates_of_tracks_lie_within_their_errors():
    rng = np.random.default_rng(12)
    speeds = rng.normal(0.8, 0.1, 300)
    rates = rng.normal(0.0, 0.1, 300)
    parts = [
        simulated(1, 40, seed=k, motion=KINESIN | {"speed": speeds[k]}, turning_rate_rad_s=rates[k])
        for k in range(300)
    ]
    offsets = np.arange(301) * 40
    filtered = filter_tracks(
        *(np.concatenate([getattr(t, name) for t in parts]) for name in ("time_s", "x_um", "y_um")),
        offsets,
        speed_spread=0.1,
        turning_rate_spread=0.1,
        **KINESIN,
    )
    for truth, mean, sd in (
        (speeds, filtered.speed_mean, filtered.speed_sd),
        (rates, filtered.turning_rate_mean, filtered.turning_rate_sd),
    ):
        pull = (truth - mean) / sd
        assert abs(pull.mean()) < 4 / np.sqrt(300)
        assert abs(pull.std() - 1) < 4 / np.sqrt(600)


@pytest.mark.parametrize("error", [0.03, 0.13])
def test_steady_heading_is_known_as_a_filter_in_continuous_time_knows_it(error):
    motion = KINESIN | {"localization_error": error, "longitudinal_diffusion": 0.0}
    tracks = simulated(20, 100, seed=2, motion=motion)
    measured = np.median(filter_tracks(*columns(tracks), **motion).heading_sd)
    known = {k: v for k, v in motion.items() if k != "longitudinal_diffusion"}
    expected = heading_uncertainty(frame_s=1 / 3, **known)
    # Frames are not continuous time: up to a fifth less, as the formula says.
    assert 0.8 * expected < measured < 1.02 * expected


# -- the fit --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def fitted():
    tracks = simulated(60, 100, seed=21, speed_spread=0.1)
    return tracks, fit_likelihood(data_of(tracks))


def test_fit_finds_the_truth_within_its_errors(fitted):
    _, fit = fitted
    truth = np.array([0.8, 0.008, 0.003, 0.03**2, 0.08**2])
    assert fit.problem == ""
    assert not fit.at_limit.any()
    assert np.all(np.abs(fit.values - truth) < 4 * fit.errors)


@pytest.mark.parametrize("factor", [0.2, 4.0])
def test_optimum_does_not_depend_on_the_start(fitted, factor):
    tracks, fit = fitted
    start = {
        name: value * (factor if name != "speed" else factor**0.2)
        for name, value in zip(fit.names, fit.values, strict=True)
    }
    other = fit_likelihood(data_of(tracks), start=start)
    # The climb ends within 0.02 standard errors of the optimum.
    assert np.all(np.abs(other.values - fit.values) < 0.04 * fit.errors)


def test_optimum_from_a_start_at_the_limits(fitted):
    tracks, fit = fitted
    start = dict(zip(fit.names, fit.values, strict=True))
    start |= {"longitudinal_diffusion": 0.0, "speed_variance": 0.0}
    other = fit_likelihood(data_of(tracks), start=start)
    assert np.all(np.abs(other.values - fit.values) < 0.04 * fit.errors)


def test_scores_vanish_together_and_scatter_as_the_information_says(fitted):
    _, fit = fitted
    size = np.sqrt(np.diag(fit.information))
    assert_allclose(fit.scores.sum(axis=0) / size, 0, atol=0.05)
    # Squares of 60 scores: 4 standard errors of a variance of heavy tails.
    assert_allclose((fit.scores**2).sum(axis=0) / size**2, 1, atol=4 * np.sqrt(3 / 60))


def test_a_resample_is_one_weighted_step(fitted):
    tracks, fit = fitted
    rng = np.random.default_rng(2)
    weights = np.bincount(rng.integers(60, size=60), minlength=60)
    twice = np.repeat(np.arange(60), weights)
    rows = np.concatenate([np.arange(100) + 100 * k for k in twice])
    again = fit_likelihood(
        GlidingData(
            time_s=tracks.time_s[rows],
            x=tracks.x_um[rows],
            y=tracks.y_um[rows],
            offsets=np.arange(61) * 100,
        )
    )
    step = fit.values + weights @ fit.influence
    # What the second order leaves of a resample that is itself about one standard error away.
    assert np.all(np.abs(step - again.values) < 0.35 * fit.errors)


def test_alike_tracks_have_no_spread_and_a_limit_is_said():
    fits = [fit_likelihood(data_of(simulated(30, 60, seed=seed))) for seed in (4, 5, 6, 7)]
    limited = [fit for fit in fits if fit.at_limit[4]]
    assert limited
    for fit in limited:
        assert fit.problem == ""
        assert fit.values[4] == 0
        assert np.all(fit.influence[:, 4] == 0)
        assert np.isnan(fit.errors[4])


def test_very_precise_positions_have_an_optimum_like_others():
    # Errors of the speed of 1e-4: slopes by differences must be finer than that.
    precise = KINESIN | {"localization_error": 0.003, "longitudinal_diffusion": 0.0}
    fit = fit_likelihood(data_of(simulated(40, 100, seed=1, motion=precise)))
    assert fit.problem == ""
    assert abs(fit.values[0] - 0.8) < 5e-4
    assert abs(fit.values[1] - 0.008) < 4 * fit.errors[1]


def test_circling_either_way_is_not_taken_for_rotational_diffusion():
    tracks = simulated(40, 100, seed=9, turning_rate_sd_rad_s=0.1)
    fit = fit_likelihood(data_of(tracks), free=CIRCLING)
    truth = np.array([0.8, 0.008, 0.003, 0.03**2, 0.0, 0.0, 0.1**2])
    assert fit.problem == ""
    some = ~fit.at_limit
    assert np.all(np.abs(fit.values - truth)[some] < 4 * fit.errors[some])
    blind = fit_likelihood(data_of(tracks), free=STRAIGHT)
    assert blind.values[1] > 2 * 0.008


def test_heading_that_turns_with_the_path_turns_more_where_the_speed_is_higher():
    motion = KINESIN | {"rotational_diffusion": 0.02}
    tracks = simulated(100, 50, seed=31, motion=motion, speed_spread=0.4, turning="per_path")
    by_path = fit_likelihood(data_of(tracks, clock="per_path"))
    by_time = fit_likelihood(data_of(tracks))
    assert by_path.log_likelihood.sum() > by_time.log_likelihood.sum() + 5
    assert abs(by_path.values[1] - 0.02) < 4 * by_path.errors[1]


def test_small_simulated_experiments_are_unbiased():
    # 150 tracks of 100 frames filmed with a long exposure; errors as the fit gives them.
    motion = {
        "speed": 4.0,
        "rotational_diffusion": 0.2,
        "localization_error": 0.04,
        "longitudinal_diffusion": 0.05,
    }
    tracks = simulated(150, 100, seed=14, frame_s=0.1, exposure_s=0.09, motion=motion)
    fit = fit_likelihood(data_of(tracks, exposure_s=0.09))
    relative = fit.errors[:2] / fit.values[:2]
    assert abs(fit.values[0] / 4.0 - 1) < 0.002 + 3 * relative[0]
    assert abs(fit.values[1] / 0.2 - 1) < 0.02 + 3 * relative[1]


def lmfit_parameters(start, **given):
    parameters = lmfit.Parameters()
    for name, value in start.items():
        parameters.add(name, value=value)
    for name, more in given.items():
        parameters[name].set(**more)
    return parameters


def test_parameters_of_lmfit_are_fitted_and_get_their_errors(fitted):
    tracks, fit = fitted
    start = dict(zip(fit.names, 0.9 * fit.values, strict=True))
    parameters = lmfit_parameters(start)
    other = fit_parameters(data_of(tracks), parameters)
    found = np.array([p.value for p in parameters.values()])
    assert np.all(np.abs(found - fit.values) < 0.04 * fit.errors)
    assert_allclose([p.stderr for p in parameters.values()], other.errors)


def test_a_parameter_that_is_held_stays_and_the_others_follow(fitted):
    tracks, fit = fitted
    start = dict(zip(fit.names, fit.values, strict=True))
    held = {"longitudinal_diffusion": {"value": 0.006, "vary": False}}
    other = fit_parameters(data_of(tracks), lmfit_parameters(start, **held))
    assert "longitudinal_diffusion" not in other.names
    # Twice the diffusion leaves less for the localization error.
    assert dict(zip(other.names, other.values, strict=True))["localization_variance"] < (
        start["localization_variance"] - 2 * fit.errors[3]
    )
    assert other.log_likelihood.sum() < fit.log_likelihood.sum()


@pytest.mark.parametrize(("limit", "side"), [("max", 0.9), ("min", 1.1)])
def test_a_bound_is_kept_and_said(fitted, limit, side):
    tracks, fit = fitted
    start = dict(zip(fit.names, fit.values, strict=True))
    bound = side * start["rotational_diffusion"]
    bounded = {"rotational_diffusion": {"value": bound * side, limit: bound}}
    other = fit_parameters(data_of(tracks), lmfit_parameters(start, **bounded))
    assert other.problem == ""
    assert other.values[1] == bound
    assert other.at_limit[1]
    assert np.all(other.influence[:, 1] == 0)


def test_all_parameters_held():
    tracks = simulated(5, 20, seed=3)
    known = {"speed": 0.8, "rotational_diffusion": 0.008, "localization_variance": 0.0009}
    parameters = lmfit_parameters(known)
    for p in parameters.values():
        p.vary = False
    fit = fit_parameters(data_of(tracks), parameters)
    assert (fit.problem, fit.names, len(fit.values)) == ("", (), 0)
    assert np.isfinite(fit.log_likelihood).all()


def test_expressions_are_refused(fitted):
    parameters = lmfit_parameters({"speed": 0.8, "rotational_diffusion": 0.01})
    parameters["rotational_diffusion"].expr = "speed / 80"
    with pytest.raises(ValueError, match="rotational_diffusion"):
        fit_parameters(data_of(fitted[0]), parameters)


def test_sideways_diffusion_and_a_further_error_along_are_found():
    motion = KINESIN | {"longitudinal_diffusion": 0.0}
    tracks = simulated(40, 100, seed=5, motion=motion)
    rng = np.random.default_rng(6)
    # Along the chords of the next steps, which are nearly the headings.
    x, y = tracks.x_um.copy(), tracks.y_um.copy()
    for rows in map(tracks.rows, range(40)):
        heading = np.unwrap(np.angle(np.gradient(x[rows] + 1j * y[rows])))
        heading = np.convolve(np.pad(heading, 2, mode="edge"), np.ones(5) / 5, mode="valid")
        further = 0.08 * rng.standard_normal(len(heading))
        x[rows] += further * np.cos(heading)
        y[rows] += further * np.sin(heading)
    data = GlidingData(time_s=tracks.time_s, x=x, y=y, offsets=tracks.offsets)
    fit = fit_likelihood(data, free=(*STRAIGHT, "error_variance_along"))
    assert fit.problem == ""
    assert abs(fit.values[5] - 0.08**2) < 4 * fit.errors[5]
    assert abs(fit.values[1] - 0.008) < 4 * fit.errors[1]


# -- what cannot be fitted, and mistakes ----------------------------------------------------------


def test_two_positions_a_track_are_too_few():
    fit = fit_likelihood(data_of(simulated(20, 2, seed=1)))
    assert "three positions" in fit.problem
    assert np.isnan(fit.values).all()


def test_positions_that_never_move_have_no_optimum():
    still = GlidingData(
        time_s=np.arange(20.0), x=np.zeros(20), y=np.zeros(20), offsets=np.array([0, 20])
    )
    assert "do not move" in fit_likelihood(still).problem


@pytest.mark.parametrize(
    ("wrong", "match"),
    [
        ({"speed": 0.0}, "speed"),
        ({"localization_error": 0.0}, "localization_error"),
        ({"rotational_diffusion": -1.0}, "diffusion"),
        ({"exposure_s": 0.5}, "exposure_s must be 0 to 0.333"),
        ({"clock": "per_day"}, "clock"),
    ],
)
def test_parameters_out_of_range_are_refused(wrong, match):
    with pytest.raises(ValueError, match=match):
        logs(TRACKS, **KINESIN | wrong)


def test_unknown_parameters_are_refused():
    with pytest.raises(ValueError, match="no such parameter: colour"):
        fit_likelihood(data_of(TRACKS), free=("speed", "colour"))
