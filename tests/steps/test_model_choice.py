"""Active, circling, pausing: chosen by practical size and at the level of chambers."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.pipeline.simulated import experiment
from glidefit.settings import FitSettings, Settings
from glidefit.steps import summarise
from glidefit.steps.fit.model_choice import Turning, compare_pauses
from glidefit.steps.simulate import Scenario, ScenarioCondition, Spread


def analysed(settings=None, *, seed=1, **turning):
    condition = ScenarioCondition(
        name="c",
        speed_um_s=0.8,
        rotational_diffusion_rad2_s=0.008,
        longitudinal_diffusion_um2_s=0.003,
        **turning,
    )
    scenario = Scenario(
        name="s",
        conditions=(condition,),
        frame_s=0.5,
        exposure_s=0.0,
        n_frames=120,
        chambers_per_day=1,
    )
    rng = np.random.default_rng(seed)
    return experiment(scenario, settings=settings or Settings(), rng=rng)["c"]


def test_circling_is_found_and_its_numbers_are_true():
    """0.05 rad/s for three days of 33 filaments."""
    found = analysed(turning_rate_rad_s=0.05)
    assert found.fitted.model == "circling"
    rate = found.estimates["turning_rate_rad_s"]
    assert_allclose(rate.value, 0.05, rtol=0.1)  # known to 2 % here
    assert rate.low < 0.05 < rate.high
    assert_allclose(found.estimates["speed_um_s"].value, 0.8, rtol=0.2)  # days differ by 7 %
    # Days differ by 15 % in D_r, three of them and the tracks: 12 % in all.
    assert_allclose(found.estimates["rotational_diffusion_rad2_s"].value, 0.008, rtol=4 * 0.12)


def test_filaments_that_circle_either_way_are_circling_too():
    found = analysed(turning_rate_sd_rad_s=0.05)
    assert found.fitted.model == "circling"
    assert_allclose(found.estimates["rotational_diffusion_rad2_s"].value, 0.008, rtol=4 * 0.12)
    assert abs(found.estimates["turning_rate_rad_s"].value) < 0.02


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_straight_paths_are_active_and_have_no_turning_rate(seed):
    found = analysed(seed=seed)
    assert found.fitted.model == "active"
    assert "turning_rate_rad_s" not in found.estimates


def test_a_forced_model_stands():
    circling = analysed(Settings(fit=FitSettings(model="circling")))
    assert circling.fitted.model == "circling"
    active = analysed(Settings(fit=FitSettings(model="active")), turning_rate_rad_s=0.05)
    assert active.fitted.model == "active"
    # Circles pass for diffusion: the reason why the choice matters.
    chosen = analysed(turning_rate_rad_s=0.05).estimates["rotational_diffusion_rad2_s"].value
    assert active.estimates["rotational_diffusion_rad2_s"].value > 1.1 * chosen


@pytest.mark.parametrize(
    ("seen", "share", "model"),
    [(True, 0.5, "circling"), (True, 0.05, "active"), (False, 0.5, "active")],
)
def test_both_size_and_evidence_are_needed(seen, share, model):
    assert Turning(rate=0.01, variance=0.0, share=share, seen=seen).model == model


# -- pauses ---------------------------------------------------------------------------------------

ACTIN = {
    "speed_um_s": 3.0,
    "rotational_diffusion_rad2_s": 0.3,
    "longitudinal_diffusion_um2_s": 0.05,
}
RATES = {"stop_rate_per_s": 0.5, "start_rate_per_s": 2.0}


def analysed_actin(settings=None, *, seed=1, exposure_s=1 / 15, **motion):
    scenario = Scenario(
        name="s",
        conditions=(ScenarioCondition(name="c", **ACTIN, **motion),),
        frame_s=1 / 15,
        exposure_s=exposure_s,
        n_frames=150,
        localization_error_um=0.04,
        chambers_per_day=1,
        speed_spread=Spread(filament=0.1),
        rotational_diffusion_spread=Spread(filament=0.15),
    )
    rng = np.random.default_rng(seed)
    return experiment(scenario, settings=settings or Settings(), rng=rng)["c"]


@pytest.fixture(scope="module")
def paused():
    return analysed_actin(**RATES)


def test_pauses_are_found_and_their_numbers_are_true(paused):
    """80 % running, three chambers; twice the bias and four errors of what 200 tracks allow."""
    found = {key: estimate.value for key, estimate in paused.estimates.items()}
    assert paused.fitted.model == "pausing"
    assert paused.fitted.problems == ()
    assert_allclose(found["speed_um_s"], 3.0, rtol=0.03)
    assert_allclose(found["rotational_diffusion_rad2_s"], 0.3, rtol=0.1)
    assert_allclose(found["running_fraction"], 0.8, atol=0.04)
    assert_allclose(found["mean_speed_um_s"], 2.4, rtol=0.06)
    assert_allclose(found["stop_rate_per_s"], 0.5, rtol=0.3)
    assert_allclose(found["go_rate_per_s"], 2.0, rtol=0.3)
    assert_allclose(
        found["running_fraction"],
        found["go_rate_per_s"] / (found["stop_rate_per_s"] + found["go_rate_per_s"]),
        rtol=0.01,  # means of chambers here, of each chamber's fraction there
    )


def test_pauses_leave_their_evidence(paused):
    evidence = {one.name: one for one in paused.fitted.evidence if one.model == "pausing"}
    assert all(one.speaks_for for one in evidence.values())
    assert_allclose(evidence["share of time paused"].value, 0.2, atol=0.04)
    assert evidence["chambers with pauses"].value == 1
    circling = [one for one in paused.fitted.evidence if one.model == "circling"]
    assert not all(one.speaks_for for one in circling)


def test_the_pausing_model_holds_where_filaments_pause(paused):
    """Innovations are white and normal, and the predicted MSD passes through its points."""
    fitted, combined = paused.fitted, paused.combined
    checks = summarise.model_checks(fitted.innovation, combined, fitted.columns, model=fitted.model)
    assert len(checks) == 3
    assert all(check.holds for check in checks)
    (curve,) = fitted.curves
    measured, predicted = combined.value[curve.msd], combined.value[curve.model]
    # At longer lags few paths are seen, and each for long.
    assert_allclose(measured[curve.fitted], predicted[curve.fitted], rtol=0.03)
    as_if = summarise.model_checks(fitted.innovation, combined, fitted.columns)
    speed = next(check for check in as_if if check.name == "speed from the MSD")
    assert speed.value < 0.9  # the reason why pauses matter
    assert not speed.holds


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("turning", [{}, {"turning_rate_rad_s": 0.5}], ids=["straight", "circling"])
def test_no_pauses_are_found_where_there_are_none(seed, turning):
    found = analysed_actin(seed=seed, **turning)
    assert "pausing" not in found.fitted.model
    (promise,) = [one for one in found.fitted.evidence if one.model == "pausing"]
    assert promise.value < 0
    assert not promise.speaks_for
    assert "stop_rate_per_s" not in found.estimates
    assert found.estimates["mean_speed_um_s"] == found.estimates["speed_um_s"]
    assert found.estimates["running_fraction"].value == 1


def test_filaments_may_circle_and_pause():
    found = analysed(turning_rate_rad_s=0.05, stop_rate_per_s=0.1, start_rate_per_s=0.4)
    assert found.fitted.model == "circling and pausing"
    assert_allclose(found.estimates["turning_rate_rad_s"].value, 0.05, rtol=0.15)
    assert_allclose(found.estimates["running_fraction"].value, 0.8, atol=0.05)


def test_a_forced_model_stands_with_pauses_too(paused):
    active = analysed_actin(Settings(fit=FitSettings(model="active")), **RATES)
    assert active.fitted.model == "active"
    # Too slow by the share of the time that is paused.
    assert active.estimates["speed_um_s"].value < 0.9 * paused.estimates["speed_um_s"].value
    forced = analysed_actin(Settings(fit=FitSettings(model="pausing")))
    assert forced.fitted.model == "pausing"
    assert forced.estimates["running_fraction"].value > 0.97


def test_rare_pauses_are_found_though_they_are_unlike_the_other_tracks():
    """In 5 % of the time; tracks that pause do not fit among those that glide."""
    found = analysed(stop_rate_per_s=0.01, start_rate_per_s=0.2)
    assert found.fitted.model == "pausing"
    assert found.fitted.left_out <= 2
    assert_allclose(found.estimates["running_fraction"].value, 0.952, atol=0.03)


def likely(*tracks):
    return np.array(tracks, dtype=float)


@pytest.mark.parametrize(
    ("shares", "gains", "seen"),
    [
        ([0.1, 0.1, 0.1], [50, 50, 50], True),
        ([0.1, 0.1, 0.1], [50, 50, 5], True),
        ([0.1, 0.1, 0.1], [50, 5, 5], False),  # at the level of chambers
        ([0.01, 0.01, 0.01], [50, 50, 50], False),  # of no practical size
        ([0.1, np.nan, np.nan], [50, 50, 50], False),  # not fitted in two of three
    ],
)
def test_pauses_need_size_and_chambers(shares, gains, seen):
    without = [likely(10.0, 20.0, np.nan)] * 3
    paused = [likely(10.0 + gain, 20.0, np.nan) for gain in gains]
    found = compare_pauses(1.0, without, paused, np.array(shares))
    assert found.seen == seen


def test_where_only_pauses_can_be_fitted_they_are():
    nothing = likely(np.nan, np.nan)
    assert compare_pauses(np.nan, [nothing], [likely(1.0, 2.0)], np.array([0.1])).seen
    assert not compare_pauses(np.nan, [nothing], [nothing], np.array([np.nan])).seen


# -- without propulsion ---------------------------------------------------------------------------


def analysed_floating(settings=None, *, seed=1, **scenario):
    condition = ScenarioCondition(
        name="c", speed_um_s=0.8, rotational_diffusion_rad2_s=0.008, control=True
    )
    them = Scenario(
        name="s",
        conditions=(condition,),
        frame_s=0.5,
        exposure_s=0.1,
        n_frames=120,
        chambers_per_day=1,
        **{"detached_fraction": 1.0} | scenario,
    )
    rng = np.random.default_rng(seed)
    return experiment(them, settings=settings or Settings(), rng=rng)["c"]


@pytest.mark.parametrize("diffusion", [0.5, 0.01])
def test_floating_filaments_are_passive_and_diffuse_as_they_do(diffusion):
    found = analysed_floating(detached_diffusion_um2_s=diffusion)
    assert found.fitted.model == "passive"
    assert found.fitted.problems == ()
    known = found.estimates
    assert_allclose(known["diffusion_um2_s"].value, diffusion, rtol=0.1)
    # Compatible with nothing, and far below that of gliding filaments.
    assert known["speed_um_s"].low == 0
    assert known["speed_um_s"].value < 0.15
    assert known["motile_fraction"].value == 0
    for key in ("rotational_diffusion_rad2_s", "persistence_length_um", "mean_speed_um_s"):
        assert known[key].problem == "not fitted: the tracks show no directed motion"
    checks = summarise.model_checks(
        found.fitted.innovation, found.combined, found.fitted.columns, model="passive"
    )
    assert all(check.holds for check in checks)
    (curve,) = found.fitted.curves
    measured, predicted = found.combined.value[curve.msd], found.combined.value[curve.model]
    assert_allclose(measured[curve.fitted][:10], predicted[curve.fitted][:10], rtol=0.1)


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("floating", [0.0, 0.5])
def test_gliding_filaments_are_not_passive_though_others_float(seed, floating):
    found = analysed_floating(seed=seed, detached_fraction=floating)
    assert found.fitted.model == "active"
    (direction,) = [one for one in found.fitted.evidence if one.model == "passive"]
    assert direction.value == 0
    assert_allclose(found.estimates["speed_um_s"].value, 0.8, rtol=0.2)


def test_passive_may_be_forced_and_its_problems_show():
    found = analysed_floating(Settings(fit=FitSettings(model="passive")), detached_fraction=0.0)
    assert found.fitted.model == "passive"
    assert found.estimates["speed_um_s"].low > 0.4
    checks = summarise.model_checks(
        found.fitted.innovation, found.combined, found.fitted.columns, model="passive"
    )
    assert not all(check.holds for check in checks)
    active = analysed_floating(Settings(fit=FitSettings(model="active")))
    assert active.fitted.model == "active"
