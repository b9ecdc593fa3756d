"""The filaments of one field of view, as bodies on the paths that they lay."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from glidefit.kernels.filament_population import FilamentLaw, draw_filaments
from glidefit.kernels.laid_paths import Filaments
from glidefit.kernels.simulation import Motion, View
from glidefit.steps.simulate.recording import (
    LARGEST_EFFECT,
    drift_of,
    effects,
    gliding_motion,
)
from glidefit.steps.simulate.scenario import LevelTruth, Scenario, ScenarioCondition

FILMED_KINDS = ("gliding", "stuck")


def simulate_filaments(
    scenario: Scenario,
    condition: ScenarioCondition,
    *,
    expected_in_field: Mapping[str, float],
    chamber_truth: LevelTruth,
    law: FilamentLaw,
    rng: np.random.Generator,
) -> tuple[Filaments, View]:
    """Gliding and stuck filaments of one field of view in a chamber whose means are known.

    Parameters
    ----------
    scenario, condition
        Their pauses, turning and spreads; their numbers are not used.
    expected_in_field : mapping
        Filaments of each kind at a moment.
    chamber_truth : LevelTruth
    law : FilamentLaw
        Lengths, bundles, landing; its numbers and share of stuck ones are not used.
    """
    total = sum(expected_in_field[kind] for kind in FILMED_KINDS)
    law = replace(
        law,
        in_field=total,
        stuck_share=expected_in_field["stuck"] / total if total > 0 else 0.0,
    )

    def motions(n: int) -> Motion:
        return gliding_motion(
            effects(scenario.speed_spread.filament, n, rng=rng),
            condition,
            truth=chamber_truth,
            turn_effects=effects(scenario.rotational_diffusion_spread.filament, n, rng=rng),
            curl=rng.standard_normal(n),
            turning=scenario.turning,
        )

    fastest = gliding_motion(np.array([LARGEST_EFFECT]), condition, truth=chamber_truth)
    view = View(
        timing=scenario.timing,
        field_um=scenario.field_um,
        drift_um=drift_of(scenario, rng=rng),
    )
    filaments = draw_filaments(
        law,
        motions=motions,
        reach_um=float(fastest.reach(scenario.n_frames * scenario.frame_s)[0]),
        view=view,
        rng=rng,
    )
    return filaments, view
