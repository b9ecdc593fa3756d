"""What single tracks say of their rotational diffusion, against simulated truth."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.kernels.gliding_data import GlidingData
from glidefit.pipeline.simulated import analysed
from glidefit.settings import FitSettings, Settings
from glidefit.steps.fit import track_diffusions
from glidefit.steps.simulate import Scenario, ScenarioCondition, Spread

SCENARIO = Scenario(
    name="s",
    conditions=(
        ScenarioCondition(
            name="c",
            speed_um_s=4.0,
            rotational_diffusion_rad2_s=0.2,
            longitudinal_diffusion_um2_s=0.05,
        ),
    ),
    frame_s=0.1,
    exposure_s=0.0,
    localization_error_um=0.04,
    days=1,
    speed_spread=Spread(filament=0.1),
    rotational_diffusion_spread=Spread(filament=0.3),
)
SHORT = replace(SCENARIO, n_frames=12)


def found(scenario, *, seed, settings=None):
    """Truth, positions and what was found, of each kept track; and the cleaned recordings."""
    made = analysed(
        scenario, settings=settings or Settings(), rng=np.random.default_rng([31, seed])
    )
    own = track_diffusions(made.recordings, made.numbers["c"].fitted)
    rows, problems = [], []
    for simulated, recording in zip(made.assay.recordings, made.recordings, strict=True):
        kept, one = recording.clean.kept, own[recording.recording]
        truth = simulated.truth.true_rotational_diffusion_rad2_s[kept]
        n = recording.clean.tracks.n_positions[kept]
        rows.append(np.stack([truth, n, one.value, one.low, one.high], axis=1))
        problems += one.problem.tolist()
    return np.concatenate(rows), np.array(problems), made


@pytest.fixture(scope="module")
def long_tracks():
    parts = [found(SCENARIO, seed=seed) for seed in range(4)]
    return np.concatenate([rows for rows, _, _ in parts]), np.concatenate([p for _, p, _ in parts])


def test_interval_holds_the_truth_in_68_percent_of_tracks(long_tracks):
    """Filaments differ in D_r by 30 %; more than 500 tracks of 8 chambers, a binomial test at 1e-4.

    Open ends count: a track that cannot be told from a straight one has its high end.
    """
    truth, _, _, low, high = long_tracks[0].T
    told = np.isfinite(high)
    held = told & ~(low > truth) & ~(high < truth)
    assert told.sum() > 500
    assert stats.binomtest(int(held.sum()), int(told.sum()), 0.683).pvalue > 1e-4


def test_interval_is_as_wide_as_the_number_of_positions_allows(long_tracks):
    """√(2/n) on the log scale at the least; noise and the unknown heading at the ends add to it."""
    _, n, value, low, high = long_tracks[0].T
    longest = (n > 100) & np.isfinite(value)
    width = np.log(high / low)[longest] / 2
    least = np.sqrt(2 / n[longest])
    assert np.all(width > least)
    assert np.median(width / least) < 2


def test_values_follow_the_truth_of_the_filaments(long_tracks):
    truth, n, value, low, high = long_tracks[0].T
    longest = (n > 100) & np.isfinite(value)
    error = np.log(high / low)[longest] / 2
    off = np.log(value / truth)[longest]
    z = off / error
    # Mean and spread of standard scores of more than 200 tracks, 4 standard errors and the
    # error of the chambers' other parameters.
    assert longest.sum() > 200
    assert_allclose(z.mean(), 0, atol=0.4)
    assert_allclose(z.std(), 1, atol=0.25)
    assert stats.spearmanr(value[longest], truth[longest]).statistic > 0.5


def test_short_tracks_say_less_or_nothing_and_why():
    rows, problems, _ = found(SHORT, seed=1)
    _, n, value, low, high = rows.T
    without = problems != ""
    assert 0 < without.sum() < len(problems)
    assert np.all(np.isnan(value) == without)
    assert np.all(np.isnan(low) == without)
    straight = problems == "it cannot be told from a straight path"
    assert np.all(np.isnan(high) == (without & ~straight))
    assert np.median(np.log(high / low)[~without]) / 2 > 0.5
    assert np.all(without[n <= 3])


def test_one_recording_is_filtered_21_times(monkeypatch):
    _, _, made = found(SHORT, seed=2)
    counted, filtered = [], GlidingData.log_likelihood
    monkeypatch.setattr(
        GlidingData, "log_likelihood", lambda data, v: counted.append(1) or filtered(data, v)
    )
    track_diffusions(made.recordings[:1], made.numbers["c"].fitted)
    assert len(counted) == 21


def test_posterior_is_that_of_a_finer_sum():
    """A second version: 401 values of D_r, each filtered, summed by the trapezoidal rule."""
    scenario = replace(SCENARIO, n_frames=60, chambers_per_day=1, filaments_in_field=6.0)
    rows, problems, made = found(scenario, seed=3)
    recording, fitted = made.recordings[0], made.numbers["c"].fitted
    tracks = recording.clean.tracks.select(recording.clean.kept)
    chamber = dict(zip(fitted.columns, fitted.chambers[0].values, strict=False))
    data = GlidingData(time_s=tracks.time_s, x=tracks.x_um, y=tracks.y_um, offsets=tracks.offsets)
    logs = np.linspace(math.log(1e-3), math.log(1e2), 401)
    fixed = {
        name: chamber[name] for name in ("speed", "longitudinal_diffusion", "localization_variance")
    } | {"speed_variance": (0.5 * chamber["speed"]) ** 2}
    centre = chamber["rotational_diffusion"]
    posterior = np.array(
        [
            data.filtered(fixed | {"rotational_diffusion": centre * math.exp(x)}).log_likelihood
            - (x / math.log(10)) ** 2 / 2
            for x in logs
        ]
    )
    weight = np.exp(posterior - posterior.max(axis=0))
    below = np.cumsum((weight[1:] + weight[:-1]) / 2, axis=0)
    below = np.concatenate([np.zeros((1, below.shape[1])), below]) / below[-1]
    for k in np.flatnonzero(problems == ""):
        expected = centre * np.exp(np.interp([0.5, 0.1587, 0.8413], below[:, k], logs))
        # Steps of 2.3 % in the quick version, of 2.9 % here, each with its share inside.
        assert_allclose(rows[k, 2:], expected, rtol=0.02)


def test_without_a_likelihood_there_is_none_and_the_reason_is_said():
    rows, problems, _ = found(SHORT, seed=4, settings=Settings(fit=FitSettings(method="msd")))
    assert set(problems) == {"not fitted by likelihood"}
    assert np.all(np.isnan(rows[:, 2:]))


def test_chamber_without_rotational_diffusion_and_tracks_left_out_say_so():
    _, _, made = found(SHORT, seed=5)
    numbers, recording = made.numbers["c"], made.recordings[0]
    fitted = numbers.fitted
    speeds, error = fitted.track_speeds[recording.recording]
    speeds = speeds.copy()
    speeds[0] = np.nan
    one = track_diffusions(
        [recording], replace(fitted, track_speeds={recording.recording: (speeds, error)})
    )[recording.recording]
    assert one.problem[0] == "too short, or too unlike the other tracks"
    straight = []
    for chamber in fitted.chambers:
        values = chamber.values.copy()
        values[fitted.columns["rotational_diffusion"]] = 0.0
        straight.append(replace(chamber, values=values))
    one = track_diffusions([recording], replace(fitted, chambers=tuple(straight)))
    problem = one[recording.recording].problem
    assert set(problem) == {"the rotational diffusion of its chamber is not resolved"}
