from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.quantities import QUANTITIES
from glidefit.results import ChamberResult, ConditionResult, Counts, Estimate, LevelSpread
from glidefit.steps.components import components, interaction, variation

NAN = float("nan")


def condition(values, *, tracks=0.02, name="c", value=None):
    """A condition whose speeds are ``values``: a list of chambers for each day."""
    values = {f"d{n}": day for n, day in enumerate(values)} if isinstance(values, list) else values
    chambers = tuple(
        ChamberResult(
            day=day,
            chamber=f"c{n}",
            tracks_kept=30,
            frames_kept=3000,
            speed_um_s=speed,
            rotational_diffusion_rad2_s=NAN,
            motile_fraction=NAN,
            frame_speed_um_s=NAN,
        )
        for day, speeds in values.items()
        for n, speed in enumerate(speeds)
    )
    mean = np.mean([np.mean(speeds) for speeds in values.values()]) if value is None else value
    speed = Estimate(value=float(mean), low=0.9 * float(mean), high=1.1 * float(mean))
    return ConditionResult(
        condition=name,
        slug=name,
        control=False,
        model="active",
        counts=Counts(
            days=len(values),
            chambers=len(chambers),
            recordings=len(chambers),
            tracks_seen=40,
            tracks_kept=30,
            set_aside={},
            frames_seen=4000,
            frames_kept=3000,
            frames_set_aside={},
        ),
        estimates={key: speed if key == "speed_um_s" else Estimate() for key in QUANTITIES},
        problems=(),
        msd=(),
        heading_correlation=(),
        chambers=chambers,
        tracks=(),
        drawn=(),
        time_points=(),
        spread=(
            LevelSpread(quantity="speed_um_s", level="tracks", units=60, relative_error=tracks),
        ),
        generalises="",
        longest_lag_s=1.0,
        heading_diffusion_rad2_s=NAN,
        methods="",
    )


def simulated(rng, *, day, chamber, filament, days=4, chambers=2, own=0.0, shared=None):
    """Chamber values of mean 1 with normal effects; the last is the filaments' part."""
    shared = day * rng.standard_normal(days) if shared is None else shared
    return [
        list(
            1
            + shared[d]
            + own * rng.standard_normal()
            + chamber * rng.standard_normal(chambers)
            + filament * rng.standard_normal(chambers)
        )
        for d in range(days)
    ]


def test_components_of_a_small_example_by_hand():
    """Days 0.9, 1.1 in two chambers each, ± 0.05: mean squares 0.04 and 0.005."""
    found = components(condition([[0.85, 0.95], [1.05, 1.15]], tracks=0.01), "speed_um_s")
    # 0.01² is the error of the mean of four chambers, so that of one is 4 × as large.
    assert_allclose(found.filament, 4e-4, rtol=1e-10)
    assert_allclose(found.chamber, 0.005 - 4e-4, rtol=1e-10)
    assert_allclose(found.day, (0.04 - 0.005) / 2, rtol=1e-10)
    assert_allclose(found.half_width, 0.1, rtol=1e-10)
    assert (found.day_df, found.chamber_df, found.chambers_of_day) == (1, 2, (2, 2))


def test_levels_add_up_to_the_error_of_the_mean():
    """Balanced and not clipped, the sum is the standard error over day means."""
    days = [[0.85, 0.95], [1.05, 1.15], [1.3, 1.42]]
    found = components(condition(days), "speed_um_s")
    means = np.array(days).mean(axis=1) / np.mean(days)
    total = sum(error**2 for error in found.errors.values())
    assert_allclose(total, means.var(ddof=1) / 3, rtol=1e-10)


def test_components_are_recovered_from_simulated_chambers():
    rng = np.random.default_rng(11)
    truth = {"day": 0.10**2, "chamber": 0.08**2}
    tracks = (0.03**2 / 8) ** 0.5
    found = [
        components(
            condition(
                simulated(rng, day=0.10, chamber=0.08, filament=0.03), tracks=tracks, value=1
            ),
            "speed_um_s",
        )
        for _ in range(1500)
    ]
    # Clipping at 0 lifts the mean a little; before it, the mean squares are unbiased.
    day = np.array(
        [(f.day_mean_square - f.chamber_mean_square) / f.chambers_in_day_square for f in found]
    )
    chamber = np.array([f.chamber_mean_square - f.filament for f in found])
    for name, each in (("day", day), ("chamber", chamber)):
        assert abs(each.mean() - truth[name]) < 4 * each.std() / len(each) ** 0.5, name
        assert np.mean([getattr(f, name) for f in found]) >= each.mean()


def test_small_components_are_not_negative():
    found = components(condition([[0.9, 1.1], [1.1, 0.9]], tracks=0.2), "speed_um_s")
    assert (found.day, found.chamber) == (0, 0)


def test_one_chamber_a_day_counts_its_chambers_to_the_days():
    found = components(condition([[0.9], [1.0], [1.1]], tracks=0.01), "speed_um_s")
    assert_allclose(found.day, 0.01 - 3e-4, rtol=1e-10)
    assert np.isnan(found.chamber)
    assert found.notes[0].startswith("No day has two chambers")


def test_one_day_knows_nothing_of_days():
    found = components(condition([[0.9, 1.1]]), "speed_um_s")
    assert np.isnan(found.day)
    assert found.chamber > 0


def test_chambers_without_a_value_are_left_out():
    with_gap = condition([[0.85, NAN, 0.95], [1.05, 1.15]], value=1.0)
    assert components(with_gap, "speed_um_s").chambers_of_day == (2, 2)


def test_unknown_filaments_are_counted_to_the_chambers():
    found = components(condition([[0.85, 0.95], [1.05, 1.15]], tracks=NAN), "speed_um_s")
    assert found.filament == 0
    assert "not known" in found.notes[0]


def test_condition_without_a_value():
    with pytest.raises(ValueError, match="has no motile_fraction"):
        components(condition([[1.0]]), "motile_fraction")


def test_interaction_is_recovered_whatever_days_share():
    """Conditions of three chambers on five shared days; day SD 20 % must not leak in."""
    rng = np.random.default_rng(12)
    found = []
    for _ in range(600):
        shared = 0.2 * rng.standard_normal(5)
        made = [
            condition(
                simulated(
                    rng,
                    day=0,
                    chamber=0.05,
                    filament=0,
                    days=5,
                    chambers=3,
                    own=0.06,
                    shared=shared,
                ),
                tracks=0.0,
                name=f"c{n}",
                value=1,
            )
            for n in range(3)
        ]
        one = interaction(made, made[0], "speed_um_s")
        assert (one.df, one.days, len(one.conditions)) == (8, 5, 3)
        found.append(one.mean_square - one.within)
    found = np.array(found)
    # Values are divided by the mean of their own five days: 4 standard errors and 4 % of the whole.
    assert abs(found.mean() - 0.06**2) < 4 * found.std() / len(found) ** 0.5 + 0.04 * 0.06**2


def test_no_shared_days_no_interaction():
    a, b = condition({"d1": [1.0, 1.1], "d2": [0.9]}), condition({"d3": [1.0], "d4": [1.0]})
    found = interaction((a, dataclasses.replace(b, condition="b")), a, "speed_um_s")
    assert (np.isnan(found.variance), found.df) == (True, 0)
    assert found.note.startswith("No other condition")


def test_only_days_in_common_are_used():
    a = condition({"d1": [1.0, 1.1], "d2": [0.9, 1.0], "d3": [1.2, 1.1]})
    b = condition({"d2": [1.0, 1.0], "d3": [1.0, 1.2], "d4": [9.0, 9.0]}, name="b")
    once = condition({"d1": [1.0]}, name="once")
    found = interaction((a, b, once), a, "speed_um_s")
    assert (found.days, found.conditions) == (2, ("c", "b"))


def varied(*conditions, seed=1):
    found = variation(conditions, conditions[0], rng=np.random.default_rng(seed))
    return {part.level: part for part in found}


def test_variation_has_a_part_for_each_level_that_repeats():
    whole = varied(condition([[0.85, 0.95], [1.05, 1.15]], tracks=0.01))
    assert set(whole) == {"days", "chambers", "filaments"}
    own = components(condition([[0.85, 0.95], [1.05, 1.15]], tracks=0.01), "speed_um_s")
    assert_allclose(whole["days"].relative_sd, own.day**0.5, rtol=1e-4)
    assert_allclose(whole["filaments"].relative_sd, 0.02, rtol=1e-4)
    assert_allclose(sum(part.share for part in whole.values()), 1, rtol=1e-4)
    assert set(varied(condition([[0.9, 1.1]]))) == {"chambers", "filaments"}
    assert set(varied(condition([[0.9], [1.1]], tracks=NAN))) == {"days"}


def test_variation_of_days_has_a_part_that_is_the_conditions_own():
    same = {"a": [0.9, 1.0], "b": [1.1, 1.0], "c": [1.0, 1.1]}
    other = {"a": [1.1, 1.0], "b": [1.0, 0.9], "c": [1.2, 1.1]}
    found = varied(condition(same), condition(other, name="d"))
    own = interaction([condition(same), condition(other, name="d")], condition(same), "speed_um_s")
    assert_allclose(found["day × condition"].relative_sd, own.variance**0.5, rtol=1e-4)
    assert found["day × condition"].df == 2


def test_filaments_have_the_chi_square_interval():
    """Oracle: scipy; 180 tracks in six chambers leave 174 degrees of freedom."""
    part = varied(condition([[0.9, 1.0], [1.1, 1.0], [1.0, 1.1]], tracks=0.02))["filaments"]
    ends = part.relative_sd * np.sqrt(174 / stats.chi2.ppf([0.975, 0.025], 174))
    # 20,000 draws know the ends to 0.5 % of the standard deviation.
    assert_allclose([part.low, part.high], ends, rtol=0.01)


def test_intervals_of_the_variation_hold_the_truth():
    """400 experiments of 4 days × 3 chambers; below the binomial 99.95 % range is a failure.

    Above it is none: generalized intervals of differences of mean squares are known to be wide.
    """
    rng = np.random.default_rng(12)
    truth = {"days": 0.08, "chambers": 0.06}
    n, held = 400, dict.fromkeys(truth, 0)
    for _ in range(n):
        values = simulated(rng, day=0.08, chamber=0.06, filament=0.02, chambers=3)
        found = variation([], condition(values, tracks=0.02 / 12**0.5, value=1), rng=rng)
        for part in found:
            if part.level in truth:
                held[part.level] += part.low <= truth[part.level] <= part.high
    assert min(held.values()) >= stats.binom.ppf(0.0005, n, 0.95), held
