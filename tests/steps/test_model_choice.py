"""Active or circling: chosen by practical size and at the level of chambers."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.pipeline.simulated import experiment
from glidefit.settings import FitSettings, Settings
from glidefit.steps.fit.model_choice import Turning
from glidefit.steps.simulate import Scenario, ScenarioCondition


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
