from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.designs import WITH_COMPONENTS, Outcome
from glidefit.steps.rehearse import REHEARSED, filmed_design, has_components, judge

NAN = math.nan


@pytest.fixture(scope="module")
def wild(finished_study):
    condition = finished_study.conditions[0]
    own = tuple(r for r in finished_study.recordings if r.condition == condition.condition)
    return condition, own


def design_of(condition, recordings, **changes):
    condition = dataclasses.replace(condition, **changes)
    return filmed_design(condition, recordings, (), unknown_exposure=1.0)


def test_design_is_as_filmed(wild):
    condition, own = wild
    found = design_of(condition, own)
    assert (found.frame_s, found.exposure_s, found.n_frames) == (0.5, 0.1, 60)
    assert found.field_um == (60, 60)
    assert found.filaments == ((16, 16),) * 3  # filament-frames over frames
    assert (found.recordings_per_chamber, found.notes) == (1, ())
    assert_allclose((found.stuck, found.pivoting, found.filament_spread), (2 / 16, 0, 0.08))
    truth = {key: found.truth[key] for key in WITH_COMPONENTS}
    assert truth == {key: condition.estimates[key].value for key in WITH_COMPONENTS}
    assert found.truth["persistence_length_um"] == pytest.approx(
        found.speed_um_s / found.rotational_diffusion_rad2_s
    )


def test_chambers_may_be_unequal(wild):
    """The second chamber of the first day is missing, and the first has half the positions."""
    condition, own = wild
    gone = own[1].day, own[1].chamber
    tracks = [t for t in condition.tracks if (t.day, t.chamber) != gone]
    tracks = [
        dataclasses.replace(t, n_positions=30) if t.recording == own[0].recording else t
        for t in tracks
    ]
    found = design_of(condition, (own[0], *own[2:]), tracks=tuple(tracks))
    assert found.filaments == ((8,), (16, 16), (16, 16))


def test_unknown_exposure_is_the_one_that_the_fit_assumed(wild):
    condition, own = wild
    unknown = [dataclasses.replace(r, exposure_s=NAN) for r in own]
    assert design_of(condition, unknown).exposure_s == 0.5


def test_what_is_not_resolved_is_replaced_and_said(wild):
    condition, own = wild
    estimates = condition.estimates | {
        key: dataclasses.replace(condition.estimates[key], value=NAN, low=NAN, high=NAN)
        for key in ("rotational_diffusion_rad2_s", "localization_error_um", "speed_spread_um_s")
    }
    found = design_of(condition, own, estimates=estimates)
    assert (found.rotational_diffusion_rad2_s, found.filament_spread) == (0, 0)
    assert found.localization_error_um == np.median([r.localization_error_um for r in own])
    assert len(found.notes) == 3
    assert math.isnan(found.truth["persistence_length_um"])


def test_recordings_that_differ_are_said(wild):
    condition, own = wild
    other = dataclasses.replace(own[0], frame_s=2.0, field_um=(90.0, 90.0))
    notes = design_of(condition, (other, *own[1:])).notes
    assert notes[0] == "Recordings differ in frame interval; the commonest is simulated: 0.5 s."
    assert notes[1].startswith("Recordings differ in their fields; ")


def outcomes(values, half):
    """Experiments in which every quantity comes out at the same multiple of its truth."""
    truth = {"speed_um_s": 0.8, "rotational_diffusion_rad2_s": 0.01}
    truth |= {"persistence_length_um": 80.0, "motile_fraction": 0.9}
    return [
        {
            key: Outcome(value=t * v, low=t * (v - half), high=t * (v + half))
            for key, t in truth.items()
        }
        for v in values
    ]


@pytest.fixture
def known(wild):
    return dataclasses.replace(
        design_of(*wild), speed_um_s=0.8, rotational_diffusion_rad2_s=0.01, motile_fraction=0.9
    )


def test_bias_scatter_and_coverage(known):
    values = [0.9, 1.0, 1.1, 1.2]
    found = judge(known, outcomes(values, 0.15), level=0.95).quantities
    assert [q.quantity for q in found] == list(REHEARSED)
    for q in found:
        assert_allclose(q.bias, 0.05, rtol=1e-5)
        assert_allclose(q.bias_error, np.std(values, ddof=1) / 2, rtol=1e-5)
        assert_allclose(q.rmse, np.sqrt(np.mean((np.array(values) - 1) ** 2)), rtol=1e-5)
        assert (q.held, q.with_interval, q.coverage) == (3, 4, 0.75)
        assert_allclose(q.coverage_error, (0.75 * 0.25 / 4) ** 0.5, rtol=1e-5)
        assert_allclose(q.half_width, 0.15, rtol=1e-5)


@pytest.mark.parametrize(
    ("held", "verdict", "words"),
    [
        (188, "consistent", "in 94 % (± 1.7 %): consistent with 95 %."),
        (170, "too low", "in 85 % (± 2.5 %): less than 95 %, so the interval is too narrow"),
        (200, "too high", "in 100 % (± 1.5 %): more than 95 %, so the interval is wider"),
    ],
)
def test_verdict_on_the_level(known, held, verdict, words):
    """200 at 95 %: the exact binomial test at 5 % takes 184 to 196 as consistent."""
    made = judge(known, outcomes([1.0] * held + [2.0] * (200 - held), 0.1), level=0.95)
    assert made.quantities[0].verdict == verdict
    start = "In 200 simulated experiments of this very design the 95 % interval for the speed held"
    assert made.said[0].startswith(start)
    assert words in made.said[0]
    assert made.said[1].startswith("That for the rotational diffusion held it in ")


def test_open_ends_miss_nothing_and_make_the_width_open(known):
    one = outcomes([1.0], 0.1)[0]
    open_end = {key: dataclasses.replace(o, high=NAN) for key, o in one.items()}
    above = {key: dataclasses.replace(o, low=2 * o.value, high=NAN) for key, o in one.items()}
    found = judge(known, [open_end, open_end, above], level=0.95).quantities[0]
    assert (found.with_interval, found.held) == (3, 2)
    assert math.isnan(found.half_width)


def test_without_intervals_or_values(known):
    nothing = Outcome(value=NAN, low=NAN, high=NAN)
    made = judge(known, [dict.fromkeys(REHEARSED, nothing)] * 3, level=0.95)
    q = made.quantities[0]
    assert (q.with_value, q.with_interval, q.verdict) == (0, 0, "no interval")
    assert math.isnan(q.bias)
    assert "had no interval" in made.said[0]


def test_straight_paths_have_no_persistence_length_to_rehearse(known):
    straight = dataclasses.replace(known, rotational_diffusion_rad2_s=0.0)
    found = judge(straight, outcomes([1.0, 1.1], 0.2), level=0.95).quantities
    assert [q.quantity for q in found] == [
        "speed_um_s",
        "rotational_diffusion_rad2_s",
        "motile_fraction",
    ]
    assert math.isnan(found[1].bias)


def test_components_are_told_of_quantities_with_values(wild):
    condition, _ = wild
    assert len(has_components(condition)) == 3
    none = dataclasses.replace(condition.estimates["motile_fraction"], value=NAN, low=NAN, high=NAN)
    without = condition.estimates | {"motile_fraction": none}
    assert "motile_fraction" not in has_components(
        dataclasses.replace(condition, estimates=without)
    )
