from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.evidence import ChamberEvidence
from glidefit.settings import IntervalSettings
from glidefit.steps.uncertainty import band, combine, estimates

COLUMNS = {"speed": 0, "rotational_diffusion": 1}
SETTINGS = IntervalSettings()


def chamber(day, name, values, *, influence=None, recording=None):
    influence = np.zeros((2, 2)) if influence is None else influence
    recording = np.zeros(len(influence), dtype=np.int64) if recording is None else recording
    return ChamberEvidence(
        day=day,
        chamber=name,
        values=np.array(values, dtype=np.float64),
        influence=influence,
        recording_of_track=recording,
    )


def combined(chambers, *, seed=1, settings=SETTINGS):
    return combine(chambers, settings=settings, rng=np.random.default_rng(seed))


def nested(rng, *, days, chambers, day_sd=0.07, chamber_sd=0.04, turn_sd=0.2):
    """Chamber values (speed 0.8, D_r 0.008) with day and chamber effects."""
    out = []
    for d in range(days):
        day = 1 + day_sd * rng.standard_normal(), 1 + turn_sd * rng.standard_normal()
        for c in range(chambers if isinstance(chambers, int) else chambers[d]):
            speed = 0.8 * (day[0] + chamber_sd * rng.standard_normal())
            turn = 0.008 * (day[1] + 0.1 * rng.standard_normal())
            out.append(chamber(f"d{d}", f"c{c}", (speed, turn)))
    return out


def test_value_is_the_mean_of_day_means():
    found = combined(
        [chamber("a", "1", (1, 4)), chamber("a", "2", (2, 5)), chamber("b", "1", (4, 9))]
    )
    assert_allclose(found.value, [(1.5 + 4) / 2, (4.5 + 9) / 2], rtol=1e-12)
    assert found.covers == "days"
    assert found.level_units["chambers"] == 3


def test_interval_is_students_t_over_days():
    """Oracle: scipy.stats.t over the day values; 2 % is 2 standard errors of 2,000 resamples."""
    chambers = nested(np.random.default_rng(2), days=4, chambers=2)
    days = np.array([c.values for c in chambers]).reshape(4, 2, 2).mean(axis=1)
    expected = stats.t.interval(0.95, 3, days[:, 0].mean(), stats.sem(days[:, 0]))
    found = estimates(
        combined(chambers, settings=IntervalSettings(resamples=50_000)), COLUMNS, settings=SETTINGS
    )["speed_um_s"]
    # A standard deviation of 50,000 resamples is known to 0.3 %; 4 of them.
    assert_allclose(
        (found.high - found.low) / (expected[1] - expected[0]), 1, atol=4 / np.sqrt(2 * 50_000)
    )
    assert_allclose(found.value, days[:, 0].mean(), rtol=1e-12)
    assert found.covers == "days"


def test_one_day_covers_chambers_and_one_chamber_covers_nothing():
    day = nested(np.random.default_rng(3), days=1, chambers=4)
    found = estimates(combined(day), COLUMNS, settings=SETTINGS)["speed_um_s"]
    assert found.covers == "chambers"
    assert "3 degrees of freedom over 4 chambers" in found.method
    alone = estimates(combined(day[:1]), COLUMNS, settings=SETTINGS)["speed_um_s"]
    assert_allclose(alone.value, day[0].values[0])
    assert np.isnan([alone.low, alone.high]).all()
    assert alone.covers == ""


@pytest.mark.parametrize(
    ("days", "chambers"), [(3, 2), (6, 2), (2, 3), (1, 4), (4, (1, 3, 2, 2))], ids=str
)
def test_intervals_hold_the_truth_at_their_level(days, chambers):
    """600 simulated experiments each; outside the binomial 99.9 % range of 95 % is a failure."""
    rng = np.random.default_rng([7, days])
    settings = IntervalSettings(resamples=400)
    n, held = 600, np.zeros(3)
    for _ in range(n):
        day_sd = 0.0 if days == 1 else 0.07
        turn_sd = 0.0 if days == 1 else 0.2
        them = nested(rng, days=days, chambers=chambers, day_sd=day_sd, turn_sd=turn_sd)
        found = estimates(combine(them, settings=settings, rng=rng), COLUMNS, settings=settings)
        for i, (key, truth) in enumerate(
            [
                ("speed_um_s", 0.8),
                ("rotational_diffusion_rad2_s", 0.008),
                ("persistence_length_um", 100.0),
            ]
        ):
            low, high = found[key].low, found[key].high
            held[i] += not (low > truth or high < truth)  # an open end holds everything
    low, high = stats.binom.ppf([0.0005, 0.9995], n, 0.95)
    assert np.all((held >= low) & (held <= high)), held / n


def test_rotational_diffusion_at_zero_is_not_resolved_and_opens_the_persistence_length():
    straight = [chamber(f"d{d}", "1", (0.8, turn)) for d, turn in enumerate((-1e-3, 2e-3, -2e-3))]
    found = estimates(combined(straight), COLUMNS, settings=SETTINGS)
    turning, length = found["rotational_diffusion_rad2_s"], found["persistence_length_um"]
    assert np.isnan(turning.value)
    assert turning.problem == "not resolved: the paths are straight within the noise"
    assert np.isnan(turning.low)
    # One-sided Student's t over three days, counted from 0; 2,000 resamples know it to 1.6 %.
    error = np.std([-1e-3, 2e-3, -2e-3], ddof=1) / np.sqrt(3)
    assert_allclose(turning.high, stats.t.ppf(0.95, 2) * error, rtol=4 / np.sqrt(2 * 2000))
    assert turning.method.startswith("one-sided limit: Student's t with 2 degrees of freedom")
    assert turning.covers == length.covers == "days"
    assert np.isnan(length.value)
    assert np.isnan(length.high)
    assert_allclose(length.low, 0.8 / turning.high, rtol=0.05)  # speed is the same everywhere


def test_interval_that_reaches_zero_says_so():
    noisy = [chamber(f"d{d}", "1", (0.8, turn)) for d, turn in enumerate((1e-3, 9e-3, 4e-3))]
    found = estimates(combined(noisy), COLUMNS, settings=SETTINGS)
    assert found["persistence_length_um"].problem == (
        "hardly resolved: the interval reaches a straight path"
    )
    assert np.isnan(found["persistence_length_um"].high)
    same = [chamber(f"d{d}", "1", (0.5, turn)) for d, turn in enumerate((1e-3, 9e-3, 4e-3))]
    assert estimates(combined(same), COLUMNS, settings=SETTINGS)["speed_um_s"].problem == (
        "no interval: it is the same in all 3 days"
    )


def test_path_persistence_length_is_half_and_lengths_are_speed_over_turning():
    found = estimates(
        combined(nested(np.random.default_rng(5), days=3, chambers=2)), COLUMNS, settings=SETTINGS
    )
    v, d = found["speed_um_s"].value, found["rotational_diffusion_rad2_s"].value
    assert_allclose(found["persistence_length_um"].value, v / d, rtol=1e-12)
    assert_allclose(found["path_persistence_length_um"].value, v / d / 2, rtol=1e-12)


def test_chamber_that_cannot_tell_is_left_out_and_lowers_the_degrees_of_freedom():
    them = nested(np.random.default_rng(6), days=3, chambers=1)
    them.append(chamber("d9", "1", (np.nan, np.nan)))
    found = estimates(combined(them), COLUMNS, settings=SETTINGS)["speed_um_s"]
    assert_allclose(found.value, np.mean([c.values[0] for c in them[:3]]))
    assert "2 degrees of freedom over 3 days" in found.method


def test_each_level_brings_the_error_of_its_own_draws():
    """Closed forms: sem over days, chambers within days, tracks within chambers."""
    rng = np.random.default_rng(8)
    them, within = [], []
    for d in range(4):
        for c in range(3):
            influence = rng.standard_normal((50, 2))
            influence -= influence.mean(axis=0)
            within.append((influence**2).sum(axis=0) * 50 / 49)
            values = rng.standard_normal(2) + d
            them.append(chamber(f"d{d}", f"c{c}", values, influence=influence))
    found = combined(them, settings=IntervalSettings(resamples=20_000))
    values = np.array([c.values for c in them]).reshape(4, 3, 2)
    four = 4 / np.sqrt(2 * 20_000)  # standard errors of a standard deviation
    assert_allclose(found.level_error["days"], stats.sem(values.mean(axis=1)), rtol=four)
    chambers = np.sqrt(values.var(axis=1, ddof=1).mean(axis=0) / 12)
    assert_allclose(found.level_error["chambers"], chambers, rtol=four)
    assert_allclose(found.level_error["tracks"], np.sqrt(np.mean(within, axis=0) / 12), rtol=four)
    assert np.isnan(found.level_error["recordings"]).all()  # one a chamber


def test_recordings_of_a_chamber_are_drawn_whole():
    rng = np.random.default_rng(9)
    influence = rng.standard_normal((60, 2))
    influence -= influence.mean(axis=0)
    recording = np.repeat([0, 1, 2], 20)
    found = combined(
        [chamber("a", "1", (1, 2), influence=influence, recording=recording)],
        settings=IntervalSettings(resamples=20_000),
    )
    sums = np.array([influence[recording == r].sum(axis=0) for r in range(3)])
    expected = np.sqrt((sums**2).sum(axis=0) * 3 / 2)
    assert_allclose(found.level_error["recordings"], expected, rtol=4 / np.sqrt(2 * 20_000))


def test_same_seed_same_numbers_and_another_seed_others():
    them = nested(np.random.default_rng(10), days=3, chambers=2)
    one, two, other = (combined(them, seed=s) for s in (1, 1, 2))
    assert np.array_equal(one.draws, two.draws)
    assert not np.array_equal(one.draws, other.draws)


def test_band_of_a_curve_is_pointwise():
    them = nested(np.random.default_rng(11), days=3, chambers=2)
    value, low, high = band(combined(them), slice(0, 2), settings=SETTINGS)
    single = estimates(combined(them), COLUMNS, settings=SETTINGS)["speed_um_s"]
    assert_allclose([value[0], low[0], high[0]], [single.value, single.low, single.high])


FRACTION = {"motile_fraction": 0, "ever_moved_fraction": 1}


def counted(gliding, *, of=33):
    """3 days × 2 chambers: filaments gliding in each, of so many; the same in both columns."""
    return [
        ChamberEvidence(
            day=f"d{n // 2}",
            chamber=f"c{n % 2}",
            values=np.full(2, k / of),
            influence=np.zeros((of, 2)),
            recording_of_track=np.zeros(of, dtype=np.int64),
            filaments=np.full(2, float(of)),
        )
        for n, k in enumerate(gliding)
    ]


def test_where_all_filaments_glide_a_limit_is_counted():
    """Oracle: scipy.stats.betabinom, three days of 66 filaments with the correlation 0.1."""
    found = estimates(combined(counted([33] * 6)), FRACTION, settings=SETTINGS)["motile_fraction"]
    assert (found.value, found.covers, found.problem) == (1.0, "days", "")
    assert np.isnan(found.high)
    chance = stats.betabinom.pmf(66, 66, 9 * found.low, 9 * (1 - found.low)) ** 3
    assert_allclose(chance, 0.05, rtol=1e-9)
    assert "all of 198 filaments" in found.method
    assert "assumed to be 0.1" in found.method


def test_where_none_glides_the_limit_is_above_and_the_mirror_image():
    every, none = (
        estimates(combined(counted([k] * 6)), FRACTION, settings=SETTINGS)["motile_fraction"]
        for k in (33, 0)
    )
    assert none.value == 0.0
    assert np.isnan(none.low)
    assert_allclose(none.high, 1 - every.low)


def test_near_its_limit_the_interval_of_a_fraction_stays_inside():
    near = combined(counted([33, 33, 33, 32, 33, 33]))
    found = estimates(near, FRACTION, settings=SETTINGS)["motile_fraction"]
    assert 0.8 < found.low < found.value < found.high < 1
    assert found.method.endswith("near its limit, so from the effective count of filaments")
    middle = estimates(combined(counted([15, 16, 17, 18, 16, 14])), FRACTION, settings=SETTINGS)
    assert "limit" not in middle["motile_fraction"].method


def test_one_chamber_where_all_glide_has_no_interval():
    found = estimates(combined(counted([33])), FRACTION, settings=SETTINGS)["motile_fraction"]
    assert found.value == 1.0
    assert np.isnan([found.low, found.high]).all()


@pytest.mark.parametrize(
    ("turnings", "limited"),
    [
        ((0.0, 1e-3, 2e-3, 0.0, 1e-3, 1e-3), True),  # reaches 0, and two chambers are there
        ((0.0, 9e-3, 8e-3, 8e-3, 9e-3, 8e-3), True),  # one of six does not tell it from 0
        ((2e-3, 9e-3, 4e-3, 6e-3, 9e-3, 5e-3), False),  # few days, but every chamber tells
    ],
)
def test_chambers_that_stop_at_zero_make_a_limit(turnings, limited):
    """A likelihood knows no negative D_r: where chambers are at 0 their mean is too large."""
    them = [chamber(f"d{n // 2}", f"c{n % 2}", (0.8, d)) for n, d in enumerate(turnings)]
    found = estimates(combined(them), COLUMNS, settings=SETTINGS)
    turning, length = found["rotational_diffusion_rad2_s"], found["persistence_length_um"]
    assert np.isnan(turning.value) == limited
    assert np.isnan(turning.low) == limited
    assert np.isfinite(turning.high)
    assert length.method.startswith("one-sided limit") == limited
    if limited:
        assert np.isnan([length.value, length.high]).all()
        assert length.low > 0
        assert turning.problem == "not resolved: the paths are straight within the noise"


def test_where_all_chambers_stop_at_zero_the_mean_squared_displacement_gives_the_limit():
    columns = {**COLUMNS, "msd_speed": 2, "msd_rotational_diffusion": 3}
    them = [
        chamber(f"d{n}", "1", (0.8, 0.0, 0.8, d), influence=np.zeros((2, 4)))
        for n, d in enumerate((-1e-3, 2e-3, -2e-3))
    ]
    found = estimates(combined(them), columns, settings=SETTINGS)
    turning = found["rotational_diffusion_rad2_s"]
    assert turning.high > 1e-3
    assert turning.method.startswith("one-sided limit of the mean squared displacement")
    assert_allclose(found["persistence_length_um"].low, 0.8 / turning.high, rtol=0.01)
    alone = estimates(
        combined([chamber(f"d{d}", "1", (0.8, 0.0)) for d in range(3)]), COLUMNS, settings=SETTINGS
    )["rotational_diffusion_rad2_s"]
    assert np.isnan([alone.value, alone.low, alone.high]).all()
    assert alone.problem
