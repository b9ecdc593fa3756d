from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.designs import WITH_COMPONENTS, ChamberOutcome, Outcome
from glidefit.evidence import ChamberEvidence
from glidefit.kernels.bound import least_standard_errors, track_information
from glidefit.pipeline.rehearse import _scenario
from glidefit.results import Estimate
from glidefit.steps.rehearse import (
    REHEARSED,
    SimulatedChamber,
    chamber_outcomes,
    filmed_design,
    has_components,
    judge,
)

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


def test_pauses_are_simulated_where_they_were_fitted(wild):
    condition, recordings = wild
    assert design_of(condition, recordings).stop_rate_per_s == 0
    rates = {"stop_rate_per_s": Estimate(value=0.5), "go_rate_per_s": Estimate(value=2.0)}
    design = design_of(condition, recordings, estimates=condition.estimates | rates)
    assert (design.stop_rate_per_s, design.go_rate_per_s) == (0.5, 2.0)
    assert any("pause" in note for note in design.notes)
    (simulated,) = _scenario(design).conditions
    assert simulated.running_fraction == 0.8


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


BOUNDED = REHEARSED[:3]


def chamber(day, *, truth=0.0, off=0.0, bound=0.02, present=0.02):
    return ChamberOutcome(
        day=day,
        tracks=30,
        truth=dict.fromkeys(BOUNDED, truth),
        off=dict.fromkeys(BOUNDED, off),
        bound=dict.fromkeys(BOUNDED, bound),
        present=present,
    )


def four_chambers(sign, off, **changes):
    """Two days of one and of three chambers, true values 4 % apart between days."""
    days = ("d1", "d2", "d2", "d2")
    return [
        chamber(d, truth=sign * (0.06 if d == "d1" else 0.02), off=sign * off, **changes)
        for d in days
    ]


def test_scatter_is_set_beside_the_bound_in_chambers_and_in_the_whole_design(known):
    """Days count alike, so the truths bring (6 + 2) / 2 = 4 %; the bound 2 % √(1/4 + 1/12)."""
    chambers = [four_chambers(+1, 0.03), four_chambers(-1, 0.03)]
    made = judge(known, outcomes([1.05, 0.95], 0.2), level=0.95, chambers=chambers)
    *bounded, motile = made.quantities
    assert motile.against_bound is None
    for q in bounded:
        b = q.against_bound
        assert (b.chambers, b.tracks) == (8, 30)
        assert_allclose((b.bias, b.rmse, b.bound, b.ratio), (0, 0.03, 0.02, 1.5), atol=1e-6)
        assert_allclose(b.ratio_error, 0, atol=1e-9)  # the squares do not scatter
        tracks = 0.02 * (1 / 4 + 1 / 12) ** 0.5
        assert_allclose((b.chambers_alone, b.tracks_alone), (0.04, tracks), rtol=1e-5)
        assert_allclose(b.best, np.hypot(0.04, tracks), rtol=1e-5)
        assert_allclose(b.of_best, 0.05 / np.hypot(0.04, tracks), rtol=1e-5)
    assert_allclose(bounded[0].against_bound.of_present, 1.5, rtol=1e-5)
    assert math.isnan(bounded[1].against_bound.of_present)


def test_monte_carlo_error_of_the_ratio_is_its_scatter(known):
    """Normal errors, 200 repeats of 60 chambers: the error against the spread of the ratios."""
    rng = np.random.default_rng(3)
    found = []
    for _ in range(200):
        chambers = [[chamber("d", off=0.02 * rng.standard_normal())] for _ in range(60)]
        q = judge(known, outcomes([1.0] * 60, 0.1), level=0.95, chambers=chambers).quantities[1]
        found.append((q.against_bound.ratio, q.against_bound.ratio_error))
    ratio, error = np.array(found).T
    # The spread of 200 is known to 5 %; the mean of the ratio is 1 - 1/240.
    assert_allclose(error.mean(), ratio.std(), rtol=0.2)
    assert_allclose(ratio.mean(), 1, atol=4 * ratio.std() / 200**0.5 + 1 / 240)


@pytest.mark.parametrize(
    ("off", "changes", "within"),
    [
        (0.021, {}, "hardly more can be got out of these tracks."),
        (0.03, {}, "the tracks know the speed and the rotational diffusion and the persistence"),
        (
            0.03,
            {"present": 0.03},
            "the tracks know the rotational diffusion and the persistence length better than the "
            "fit tells and the speed pays for being the mean over the filaments present",
        ),
    ],
)
def test_sentence_on_the_bound(known, off, changes, within):
    chambers = [four_chambers(sign, off, **changes) for sign in (1, -1)]
    made = judge(known, outcomes([1.04, 0.96], 0.2), level=0.95, chambers=chambers)
    assert f"speed {off / 0.02:.2f} ± 0.00, rotational diffusion" in made.said[-2]
    assert within in made.said[-2]
    assert made.said[-1].endswith(
        "more chambers or more days would sharpen it, a better analysis hardly."
    )


def test_design_that_errs_more_than_its_chambers_must_is_said(known):
    chambers = [four_chambers(sign, 0.03) for sign in (1, -1)]
    made = judge(known, outcomes([1.08, 0.92], 0.2), level=0.95, chambers=chambers)
    assert "a better analysis of the same chambers would still sharpen the speed" in made.said[-1]


def test_chambers_without_a_value_are_not_compared(known):
    there = [four_chambers(1, 0.02)] * 2
    nothing = [*four_chambers(1, 0.02)[:1], chamber("d2", off=NAN), chamber("d3", bound=NAN)]
    made = judge(known, outcomes([1.0] * 3, 0.1), level=0.95, chambers=[*there, nothing])
    assert made.quantities[0].against_bound.chambers == 9
    none = judge(known, outcomes([1.0] * 2, 0.1), level=0.95, chambers=[[], []])
    assert none.quantities[0].against_bound is None
    assert len(none.said) == len(REHEARSED)


def test_chamber_is_compared_with_its_own_truth_and_the_bound_of_its_own_tracks(known):
    design = dataclasses.replace(
        known, longitudinal_diffusion_um2_s=0.0, filament_spread=0.1, exposure_s=0.1, frame_s=0.5
    )
    lengths = np.repeat([5, 60], 20)
    simulated = [
        SimulatedChamber(
            day="d1",
            chamber=name,
            speed_um_s=0.88,
            rotational_diffusion_rad2_s=0.012,
            n_positions=lengths,
        )
        for name in ("c1", "c2")
    ]
    fitted = ChamberEvidence(
        day="d1",
        chamber="c1",
        values=np.array([0.924, 0.006]),
        influence=np.zeros((1, 2)),
        recording_of_track=np.zeros(1, dtype=int),
    )
    columns = {"speed": 0, "rotational_diffusion": 1}
    one, lost = chamber_outcomes(design, simulated, [fitted], columns)
    assert_allclose([one.truth[key] for key in BOUNDED], [0.1, 0.2, 1.1 / 1.2 - 1], rtol=1e-9)
    assert_allclose([one.off[key] for key in BOUNDED], [0.05, -0.5, 1.1], rtol=1e-9)
    assert all(math.isnan(lost.off[key]) for key in BOUNDED)
    information = sum(
        20
        * track_information(
            np.arange(n) * 0.5,
            speed=0.88,
            rotational_diffusion=0.012,
            localization_error=design.localization_error_um,
            speed_spread=0.088,
            exposure_s=0.1,
        )
        for n in (5, 60)
    )
    unknown = ["speed", "rotational_diffusion", "localization_variance", "speed_variance"]
    least = least_standard_errors(information, unknown=unknown)
    # Lengths between those of the grid are read off to 2 % in variance.
    assert_allclose(one.bound["speed_um_s"], least["speed"] / 0.88, rtol=0.01)
    least_turning = least["rotational_diffusion"] / 0.012
    assert_allclose(one.bound["rotational_diffusion_rad2_s"], least_turning, rtol=0.01)
    # The bound lies between that of 40 and of 20 tracks whose speeds differ by 10 %.
    assert 0.1 / 40**0.5 < one.bound["speed_um_s"] < 0.1 / 20**0.5
    weight = lengths / lengths.sum()
    spread = 0.1 * np.sum(weight**2) ** 0.5
    assert spread < one.present < 1.02 * spread


def test_straight_paths_have_a_bound_for_the_speed_alone(known):
    straight = dataclasses.replace(
        known, rotational_diffusion_rad2_s=0.0, longitudinal_diffusion_um2_s=0.0, filament_spread=0
    )
    simulated = SimulatedChamber(
        day="d1",
        chamber="c1",
        speed_um_s=0.8,
        rotational_diffusion_rad2_s=0.0,
        n_positions=np.array([50, 60]),
    )
    [one] = chamber_outcomes(straight, [simulated], [], {"speed": 0, "rotational_diffusion": 1})
    assert one.bound["speed_um_s"] > 0
    assert math.isnan(one.bound["rotational_diffusion_rad2_s"])
    empty = dataclasses.replace(simulated, n_positions=np.array([2, 1]))
    [one] = chamber_outcomes(straight, [empty], [], {"speed": 0, "rotational_diffusion": 1})
    assert math.isnan(one.bound["speed_um_s"])
    assert math.isnan(one.present)
