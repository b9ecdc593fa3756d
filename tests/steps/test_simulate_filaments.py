"""Filaments of a scenario: their numbers, their motion, their kinds."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.kernels.filament_population import FilamentLaw
from glidefit.steps.simulate import Scenario, ScenarioCondition, Spread
from glidefit.steps.simulate.filaments import simulate_filaments

WILD = ScenarioCondition(name="wild type", speed_um_s=0.8, rotational_diffusion_rad2_s=0.02)
SCENARIO = Scenario(
    name="one",
    conditions=(WILD,),
    n_frames=11,
    frame_s=1.0,
    turning="per_path",
    rotational_diffusion_spread=Spread(),
    speed_spread=Spread(filament=0.1),
)


def filaments(*, seed=1, condition=WILD, law=None, expected=None, scenario=SCENARIO):
    return simulate_filaments(
        scenario,
        condition,
        expected_in_field=expected or {"gliding": 60.0, "stuck": 20.0},
        chamber_truth=condition.truth,
        law=law or FilamentLaw(),
        rng=np.random.default_rng(seed),
    )[0]


def test_speeds_and_turning_are_those_of_the_chamber():
    drawn = filaments()
    speed = drawn.motion.speed
    assert abs(speed.mean() - 0.8) < 4 * 0.08 / np.sqrt(len(speed))
    assert_allclose(speed.std(), 0.08, rtol=4 / np.sqrt(2 * len(speed)))
    assert_allclose(drawn.motion.rotational_diffusion / speed, 0.02 / 0.8, rtol=1e-9)
    advance = drawn.tail_um[:, -1, 0] - drawn.tail_um[:, 0, 0]
    assert_allclose(advance, np.where(drawn.stuck, 0, 10 * speed), atol=1e-9)


def test_lengths_are_log_normal_about_their_mean():
    length = np.concatenate([filaments(seed=seed).length_um for seed in range(10)])
    logs = np.log(length)
    # Long ones come in from farther and are a little more; 4 standard errors beside that.
    assert abs(logs.mean() - (np.log(8.0) - 0.125)) < 0.05 + 4 * 0.5 / np.sqrt(len(length))
    assert logs.std() == pytest.approx(0.5, abs=4 * 0.5 / np.sqrt(2 * len(length)))


def test_bundles_are_pairs_on_one_path():
    drawn = filaments(law=FilamentLaw(bundled_share=0.5), expected={"gliding": 200.0, "stuck": 0})
    _, counts = np.unique(drawn.bundle[drawn.bundle >= 0], return_counts=True)
    assert set(counts) == {2}
    n = len(drawn.bundle)
    share = (drawn.bundle >= 0).mean()
    assert abs(share - 0.5) < 4 * np.sqrt(0.25 / n) * np.sqrt(2)  # pairs are drawn as one
    for number in np.unique(drawn.bundle[drawn.bundle >= 0])[:5]:
        one, two = np.flatnonzero(drawn.bundle == number)
        paths = [drawn.path_x[slice(*drawn.path_offset[k : k + 2])] for k in (one, two)]
        assert_allclose(paths[0], paths[1])
        assert drawn.motion.speed[one] == drawn.motion.speed[two]
        assert 0 < abs(drawn.aside_um[two]) < 0.2


def test_kinds_come_in_their_numbers():
    counts = []
    for seed in range(30):
        drawn = filaments(seed=seed, expected={"gliding": 0.0, "stuck": 30.0})
        assert drawn.stuck.all()
        counts.append(len(drawn.stuck))
    # Also those whose midpoint is outside but whose body may be seen.
    assert np.mean(counts) > 30
    nothing = filaments(expected={"gliding": 0.0, "stuck": 0.0})
    assert len(nothing.length_um) == 0


def test_pauses_are_kept_on_the_path():
    pausing = ScenarioCondition(
        name="p",
        speed_um_s=0.8,
        rotational_diffusion_rad2_s=0.02,
        stop_rate_per_s=0.2,
        start_rate_per_s=0.2,
    )
    drawn = filaments(condition=pausing, expected={"gliding": 200.0, "stuck": 0.0})
    relative = (drawn.tail_um[:, -1, 0] - drawn.tail_um[:, 0, 0]) / (10 * drawn.motion.speed)
    assert abs(relative.mean() - 0.5) < 4 * relative.std() / np.sqrt(len(relative))
