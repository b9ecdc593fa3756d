"""Simulated assays against the truth they declare; random checks allow 4 standard errors."""

import dataclasses
from datetime import date

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from glidefit.steps.simulate import (
    KINDS,
    LevelTruth,
    Scenario,
    ScenarioCondition,
    Spread,
    clean_tracks,
    simulate_assay,
    simulate_recording,
    tracks_seen,
)

WILD = ScenarioCondition(
    name="wild type", speed_um_s=0.8, rotational_diffusion_rad2_s=0.02, control=True
)
SLOW = ScenarioCondition(name="slow", speed_um_s=0.5, rotational_diffusion_rad2_s=0.05)
NONE = Spread()
BASE = Scenario(name="two", conditions=(WILD, SLOW), frame_s=1 / 3, n_frames=60, exposure_s=1 / 3)


def with_(scenario=BASE, **changes):
    return dataclasses.replace(scenario, **changes)


def assay_of(scenario, seed=1):
    return simulate_assay(scenario, np.random.default_rng(seed))


def recordings_of(scenario, condition, *, n, seed=2):
    return [
        simulate_recording(scenario, condition, chamber_truth=condition.truth, rng=rng)
        for rng in np.random.default_rng(seed).spawn(n)
    ]


def assert_mean(values, expected):
    values = np.asarray(values)
    error = values.std(ddof=1) / np.sqrt(len(values))
    assert abs(values.mean() - expected) < 4 * error, (values.mean(), expected, error)


def bytes_of(recording):
    tracks = recording.tracks
    return b"".join(
        column.tobytes()
        for column in (tracks.label, tracks.frame, tracks.time_s, tracks.x_um, tracks.y_um)
    )


# ---- the shape of an assay ----


def test_every_condition_is_filmed_on_every_day_in_its_own_chambers():
    assay = assay_of(with_(days=2, chambers_per_day=3, recordings_per_chamber=2, n_frames=5))
    assert len(assay.recordings) == 2 * 2 * 3 * 2
    assert len({r.name for r in assay.recordings}) == 24
    days = sorted({date.fromisoformat(r.day) for r in assay.recordings})
    assert len(days) == 2
    for day in days:
        of_day = [r for r in assay.recordings if r.day == day.isoformat()]
        owners = {(r.chamber, r.condition) for r in of_day}
        assert len({chamber for chamber, _ in owners}) == len(owners) == 6
        # Solution by solution in turn, so that no condition has all the early chambers.
        assert [r.condition for r in of_day[:4]] == ["wild type"] * 2 + ["slow"] * 2
    assert [r.minutes for r in assay.recordings[:2]] == [2.0, 7.0]
    assert {r.control for r in assay.recordings if r.condition == "wild type"} == {True}
    assert {r.control for r in assay.recordings if r.condition == "slow"} == {False}


def test_tracks_are_those_of_the_truth_and_know_nothing_of_it():
    recording = assay_of(with_(days=1, lost_probability=0.05)).recordings[0]
    tracks, truth = recording.tracks, recording.truth
    assert tracks.n_tracks == len(truth.kind)
    assert_array_equal(tracks.index, truth.track)
    assert_array_equal(tracks.x_um, truth.x_um)
    assert_array_equal(tracks.frame, truth.frame)
    assert tracks.heading_rad is None
    assert tracks.length_um is None


def test_the_truth_table_has_a_row_a_recording():
    assay = assay_of(with_(days=2, n_frames=5))
    rows = assay.truth_table()
    assert [row["recording"] for row in rows] == [r.name for r in assay.recordings]
    assert rows[0]["speed_um_s"] == 0.8
    assert rows[0]["chamber_speed_um_s"] == assay.recordings[0].chamber_truth.speed_um_s
    assert {row["motile_fraction"] for row in rows} == {1.0}


def test_an_assay_without_filaments_has_recordings_without_tracks():
    assay = assay_of(with_(days=1, chambers_per_day=1, filaments_in_field=0.0))
    assert [r.tracks.n_tracks for r in assay.recordings] == [0, 0]
    assert np.isnan(assay.recordings[0].motile_fraction)


# ---- levels ----


def levels(**changes):
    """Recordings of many days, without filaments: the levels alone."""
    return assay_of(
        with_(filaments_in_field=0.0, n_frames=1, days=100, **changes), seed=3
    ).recordings


def ratios(recordings, condition, quantity="speed_um_s", level="chamber_truth"):
    nominal = {c.name: c.truth for c in BASE.conditions}[condition]
    return np.array(
        [
            getattr(getattr(r, level), quantity) / getattr(nominal, quantity)
            for r in recordings
            if r.condition == condition
        ]
    )


def assert_spread(values, sd):
    assert_mean(values, 1.0)
    assert_allclose(values.std(ddof=1), sd, rtol=4 / np.sqrt(2 * (len(values) - 1)))


def test_a_day_is_shared_by_its_conditions_and_chambers():
    recordings = levels(speed_spread=Spread(day=0.07), rotational_diffusion_spread=Spread(day=0.15))
    for quantity, sd in (("speed_um_s", 0.07), ("rotational_diffusion_rad2_s", 0.15)):
        wild = ratios(recordings, "wild type", quantity)
        assert_allclose(ratios(recordings, "slow", quantity), wild, rtol=1e-12)
        assert_allclose(wild[::2], wild[1::2], rtol=1e-12)  # two chambers a day
        assert_spread(wild[::2], sd)


def test_a_condition_has_good_and_bad_days_of_its_own():
    recordings = levels(speed_spread=Spread(day_condition=0.05), rotational_diffusion_spread=NONE)
    wild, slow = (ratios(recordings, name)[::2] for name in ("wild type", "slow"))
    assert_spread(wild, 0.05)
    assert_spread(slow, 0.05)
    assert abs(np.corrcoef(wild, slow)[0, 1]) < 4 / np.sqrt(100)
    assert_allclose(ratios(recordings, "wild type", level="day_truth")[::2], wild, rtol=1e-12)
    assert_array_equal(ratios(recordings, "slow", "rotational_diffusion_rad2_s"), 1.0)


def test_chambers_differ_within_their_day():
    recordings = levels(speed_spread=Spread(chamber=0.04), rotational_diffusion_spread=NONE)
    chambers = ratios(recordings, "slow")
    assert_spread(chambers, 0.04)
    assert abs(np.corrcoef(chambers[::2], chambers[1::2])[0, 1]) < 4 / np.sqrt(100)
    assert_array_equal(ratios(recordings, "slow", level="day_truth"), 1.0)


def test_recordings_of_a_chamber_share_its_truth():
    first, second = assay_of(
        with_(days=1, chambers_per_day=1, recordings_per_chamber=2)
    ).recordings[:2]
    assert first.chamber == second.chamber
    assert first.field != second.field
    assert first.chamber_truth == second.chamber_truth
    assert bytes_of(first) != bytes_of(second)


def test_a_wide_spread_keeps_the_mean_and_the_bounds():
    days = levels(speed_spread=Spread(day=0.6), rotational_diffusion_spread=NONE)
    effects = ratios(days, "wild type")[::2]
    assert_mean(effects, 1.0)
    assert effects.min() >= 0.2
    assert effects.max() <= 1.8


# ---- filaments ----


def test_filaments_differ_about_the_mean_of_their_chamber():
    scenario = with_(
        speed_spread=Spread(filament=0.1), rotational_diffusion_spread=Spread(filament=0.2)
    )
    truth = LevelTruth(speed_um_s=1.2, rotational_diffusion_rad2_s=0.04)
    mean_speed, mean_turn, speeds, turns = [], [], [], []
    for rng in np.random.default_rng(4).spawn(80):
        seen = simulate_recording(scenario, WILD, chamber_truth=truth, rng=rng)
        # Weighed by filament-frames, of which 33 × 60 are expected.
        speed, turn = seen.true_speed_um_s, seen.true_rotational_diffusion_rad2_s
        weight = np.bincount(seen.track, minlength=len(speed)) / (33 * 60)
        mean_speed.append(weight @ (speed - 1.2))
        mean_turn.append(weight @ (turn - 0.04))
        here = seen.frame == 0
        speeds.append(speed[seen.track[here]])
        turns.append(turn[seen.track[here]])
    assert_mean(mean_speed, 0.0)
    assert_mean(mean_turn, 0.0)
    speeds, turns = np.concatenate(speeds), np.concatenate(turns)
    assert_spread(speeds / 1.2, 0.1)
    assert_spread(turns / 0.04, 0.2)
    assert abs(np.corrcoef(speeds, turns)[0, 1]) < 4 / np.sqrt(len(speeds))


def test_a_filament_is_the_same_on_all_its_visits():
    curly = dataclasses.replace(WILD, turning_rate_rad_s=0.3)
    scenario = with_(n_frames=200, field_um=(20.0, 20.0), speed_spread=Spread(filament=0.3))
    seen = recordings_of(scenario, curly, n=1)[0]
    visits = np.bincount(seen.filament)
    assert visits.max() > 1
    for filament in np.flatnonzero(visits > 1):
        assert len(np.unique(seen.true_speed_um_s[seen.filament == filament])) == 1


def test_turning_per_path_follows_the_speed_at_every_level():
    scenario = with_(
        speed_spread=Spread(day=0.2, chamber=0.1, filament=0.2),
        rotational_diffusion_spread=NONE,
        turning="per_path",
        days=2,
    )
    curly = dataclasses.replace(WILD, turning_rate_rad_s=0.1)
    for recording in assay_of(with_(scenario, conditions=(curly,))).recordings:
        for truth in (recording.day_truth, recording.chamber_truth):
            assert_allclose(
                truth.rotational_diffusion_rad2_s / truth.speed_um_s, 0.02 / 0.8, rtol=1e-12
            )
        seen = recording.truth
        speed = seen.true_speed_um_s
        assert_allclose(seen.true_rotational_diffusion_rad2_s / speed, 0.02 / 0.8, rtol=1e-12)
        assert_allclose(seen.true_turning_rate_rad_s / speed, 0.1 / 0.8, rtol=1e-12)
        assert speed.std() > 0.05


def test_turning_per_time_does_not_follow_the_speed():
    scenario = with_(speed_spread=Spread(filament=0.2), rotational_diffusion_spread=NONE)
    curly = dataclasses.replace(WILD, turning_rate_rad_s=0.1, turning_rate_sd_rad_s=0.05)
    seen = recordings_of(scenario, curly, n=1)[0]
    assert_allclose(seen.true_rotational_diffusion_rad2_s, 0.02, rtol=1e-12)
    assert seen.true_turning_rate_rad_s.std() == pytest.approx(0.05, rel=0.5)


# ---- who is seen ----


def frames_of_kind(seen, kind):
    return (seen.kind[seen.track] == kind).sum()


def test_the_motile_fraction_is_that_of_a_snapshot():
    half = dataclasses.replace(WILD, motile_fraction=0.5)
    scenario = with_(n_frames=200, speed_spread=NONE)
    assert scenario.expected_in_field(half) == {
        "gliding": 16.5,
        "stuck": 16.5,
        "pivoting": 0.0,
        "detached": 0.0,
    }
    seen = recordings_of(scenario, half, n=80)
    gliding = np.array([frames_of_kind(s, "gliding") for s in seen]) / 200
    stuck = np.array([frames_of_kind(s, "stuck") for s in seen]) / 200
    assert_mean(gliding, 16.5)
    assert_mean(stuck, 16.5)
    # Counted by tracks it is higher, since a length of edge is crossed v × density / π times a s.
    visits = [(s.kind == "gliding").sum() for s in seen]
    assert_mean(visits, 16.5 * (1 + 0.8 * 320 / 6400 / np.pi * 199 / 3))  # 30.4


def test_every_kind_has_its_share_of_the_filament_frames():
    scenario = with_(
        stuck_fraction=0.2,
        pivoting_fraction=0.15,
        detached_fraction=0.15,
        drift_um_s=0.02,
        drift_wander_um_s=0.01,
    )
    seen = recordings_of(scenario, WILD, n=150)
    for kind, share in zip(KINDS, (0.5, 0.2, 0.15, 0.15), strict=True):
        assert_mean([frames_of_kind(s, kind) / 60 for s in seen], 33 * share)


def test_a_motile_fraction_of_its_own_leaves_the_rest_in_proportion():
    scenario = with_(stuck_fraction=0.1, detached_fraction=0.3)
    still = dataclasses.replace(WILD, motile_fraction=0.2)
    expected = scenario.expected_in_field(still)
    assert expected["gliding"] == pytest.approx(0.2 * 33)
    assert expected["stuck"] == pytest.approx(0.8 * 33 / 4)
    assert expected["detached"] == pytest.approx(0.8 * 33 * 3 / 4)
    nothing = dataclasses.replace(WILD, motile_fraction=0.0)
    assert set(recordings_of(with_(), nothing, n=1)[0].kind) == {"stuck"}


def test_the_drift_moves_everything_alike():
    scenario = with_(stuck_fraction=1.0, drift_um_s=0.05, localization_error_um=0.0)
    seen = recordings_of(scenario, WILD, n=1)[0]
    whole = np.flatnonzero(np.bincount(seen.track) == 60)
    steps = []
    for track in whole:
        rows = seen.track == track
        steps.append([np.diff(seen.x_um[rows]), np.diff(seen.y_um[rows])])
    steps = np.array(steps)
    assert len(steps) > 10
    assert_allclose(steps, np.broadcast_to(steps[:1], steps.shape), atol=1e-9)
    assert_allclose(np.hypot(steps[:, 0], steps[:, 1]), 0.05 / 3, rtol=1e-9)


def test_pauses_lower_the_mean_speed_but_not_the_speed():
    pausing = dataclasses.replace(WILD, stop_rate_per_s=0.1, start_rate_per_s=0.4)
    assert pausing.running_fraction == pytest.approx(0.8)
    assert WILD.running_fraction == 1.0
    straight = dataclasses.replace(pausing, rotational_diffusion_rad2_s=0.0)
    tracks = clean_tracks(2_000, 11, condition=straight, frame_s=1.0, rng=np.random.default_rng(5))
    x, y = tracks.x_um.reshape(2_000, 11), tracks.y_um.reshape(2_000, 11)
    assert_mean(np.hypot(x[:, -1] - x[:, 0], y[:, -1] - y[:, 0]) / 10, 0.8 * 0.8)


# ---- randomness ----


def test_the_same_seed_gives_the_same_bytes_and_another_seed_does_not():
    first, again, other = (assay_of(with_(days=1), seed) for seed in (6, 6, 7))
    assert [bytes_of(r) for r in first.recordings] == [bytes_of(r) for r in again.recordings]
    assert bytes_of(first.recordings[0]) != bytes_of(other.recordings[0])
    rng = np.random.default_rng(6)
    one, two = simulate_assay(with_(days=1), rng), simulate_assay(with_(days=1), rng)
    assert bytes_of(one.recordings[0]) == bytes_of(first.recordings[0])
    assert bytes_of(two.recordings[0]) != bytes_of(first.recordings[0])


def test_filming_more_does_not_change_what_was_filmed():
    few = assay_of(with_(days=1, chambers_per_day=1, recordings_per_chamber=1)).recordings
    many = assay_of(with_(days=2, chambers_per_day=2, recordings_per_chamber=2)).recordings
    for condition in ("wild type", "slow"):
        before = next(r for r in few if r.condition == condition)
        after = next(r for r in many if r.condition == condition)
        assert bytes_of(before) == bytes_of(after)
        assert before.chamber_truth == after.chamber_truth


# ---- clean tracks ----


def test_clean_tracks_are_whole_and_straight_ones_have_their_exact_speed():
    straight = dataclasses.replace(WILD, rotational_diffusion_rad2_s=0.0)
    tracks = clean_tracks(
        7, 50, condition=straight, frame_s=0.5, exposure_s=0.5, rng=np.random.default_rng(8)
    )
    assert_array_equal(tracks.n_positions, np.full(7, 50))
    steps = np.hypot(np.diff(tracks.x_um.reshape(7, 50)), np.diff(tracks.y_um.reshape(7, 50)))
    assert_allclose(steps, 0.4, rtol=1e-9)
    assert_allclose(tracks.time_s.reshape(7, 50)[3], np.arange(50) * 0.5)


def test_clean_tracks_differ_by_their_spread_and_have_their_error():
    straight = dataclasses.replace(WILD, rotational_diffusion_rad2_s=0.0)
    tracks = clean_tracks(
        4_000,
        3,
        condition=straight,
        frame_s=1.0,
        speed_spread=0.1,
        localization_error_um=0.02,
        rng=np.random.default_rng(9),
    )
    x, y = tracks.x_um.reshape(-1, 3), tracks.y_um.reshape(-1, 3)
    speed = np.hypot(x[:, 2] - x[:, 0], y[:, 2] - y[:, 0]) / 2
    # The error of the two ends adds 2 σ² / (2 t)² to the variance, σ²/(4 t² v) to the mean.
    assert abs(speed.mean() - 0.8 - 0.02**2 / (4 * 0.8)) < 4 * 0.08 / np.sqrt(4_000)
    assert_allclose(speed.std(), np.hypot(0.08, 0.02 / np.sqrt(2)), rtol=4 / np.sqrt(8_000))
    bend = x[:, 2] - 2 * x[:, 1] + x[:, 0]
    assert_mean(bend**2, 6 * 0.02**2)


def test_tracks_seen_labels_the_tracks_in_order():
    seen = recordings_of(with_(), WILD, n=1)[0]
    tracks = tracks_seen(seen)
    assert tracks.label.tolist() == [str(k) for k in range(tracks.n_tracks)]
    assert tracks.frame.max() == 59


# ---- what cannot be ----


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"conditions": ()}, "conditions"),
        ({"conditions": (WILD, WILD)}, "its own name"),
        ({"days": 0}, "days"),
        ({"field_um": (80.0, 0.0)}, "field_um"),
        ({"stuck_fraction": 0.7, "detached_fraction": 0.4}, "together at most 1"),
        ({"lost_probability": 1.2}, "lost_probability"),
        ({"exposure_s": 1.0}, "exposure_s"),
        ({"pixel_um": 0.0}, "pixel_um"),
        ({"localization_error_um": -0.1}, "localization_error_um"),
    ],
)
def test_an_impossible_scenario_is_refused(changes, message):
    with pytest.raises(ValueError, match=message):
        with_(**changes)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"speed_um_s": 0.0}, "motile_fraction=0"),
        ({"motile_fraction": 1.2}, "motile_fraction must be"),
        ({"stop_rate_per_s": 0.1}, "start_rate_per_s"),
        ({"rotational_diffusion_rad2_s": -1.0}, "rotational_diffusion_rad2_s must be >= 0"),
    ],
)
def test_an_impossible_condition_is_refused(changes, message):
    with pytest.raises(ValueError, match=message):
        dataclasses.replace(WILD, **changes)


def test_an_impossible_spread_is_refused():
    with pytest.raises(ValueError, match="spread of chamber"):
        Spread(chamber=-0.1)


# ---- designs that are not the same everywhere ----


def test_days_may_have_unequal_chambers():
    scenario = with_(days=3, chambers_per_day=(1, 3, 2), n_frames=5)
    chambers = {}
    for recording in assay_of(scenario).recordings:
        if recording.condition == "slow":
            chambers.setdefault(recording.day, []).append(recording.chamber)
    assert list(map(len, chambers.values())) == [1, 3, 2]
    same = with_(days=3, chambers_per_day=(2, 2, 2), n_frames=5)
    for one, other in zip(
        assay_of(same).recordings, assay_of(with_(days=3, n_frames=5)).recordings, strict=True
    ):
        assert bytes_of(one) == bytes_of(other)


def test_chambers_may_have_unequal_filaments():
    scenario = with_(
        days=2,
        chambers_per_day=(1, 2),
        filaments_in_field=((10.0,), (200.0, 50.0)),
        n_frames=5,
        conditions=(WILD,),
    )
    assert sum(scenario.expected_in_field(WILD).values()) == pytest.approx(260 / 3)
    seen = [len(r.tracks.frame) / 5 for r in assay_of(scenario).recordings]
    # Poisson numbers: 4 standard deviations.
    for found, expected in zip(seen, (10.0, 200.0, 50.0), strict=True):
        assert abs(found - expected) < 4 * expected**0.5


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"days": 2, "chambers_per_day": (1, 2, 1)}, "one for each of the days"),
        ({"days": 2, "chambers_per_day": (1, 0)}, "must be >= 1"),
        ({"days": 1, "filaments_in_field": ((5.0,),)}, "a number for each chamber"),
        ({"days": 1, "filaments_in_field": ((5.0, -1.0),)}, "filaments_in_field >= 0"),
    ],
)
def test_impossible_designs(changes, said):
    with pytest.raises(ValueError, match=said):
        with_(**changes)


def test_motile_fraction_differs_from_chamber_to_chamber_about_its_mean():
    half = dataclasses.replace(WILD, motile_fraction=0.7)
    scenario = with_(
        days=150,
        conditions=(half,),
        n_frames=1,
        filaments_in_field=1e-9,
        motile_fraction_spread=Spread(day=0.05, chamber=0.08),
    )
    assay = assay_of(scenario, seed=4)
    by_day = np.array([r.motile_fraction for r in assay.recordings]).reshape(150, 2)
    assert_mean(by_day.mean(axis=1), 0.7)
    # The variance of a difference of two is 2 × 0.08²; its own relative error is √(2/150).
    within = np.diff(by_day, axis=1).var() / 2
    assert within == pytest.approx(0.08**2, rel=4 * (2 / 150) ** 0.5)
    assert by_day.min() >= 0.4
    assert by_day.max() <= 1.0
