"""Conditions compared: pairing, ratios, tests, confounds, and how often the test is wrong."""

from __future__ import annotations

import dataclasses
import math
import warnings

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from glidefit.results import ChamberResult, TrackResult
from glidefit.settings import CompareSettings
from glidefit.steps.compare import FilmedAt, compare, pairs_to_compare
from glidefit.steps.compare.pairing import arrange

SETTINGS = CompareSettings()


@pytest.fixture(scope="module")
def made(finished_study):
    """A condition from {(day, chamber): speed}, or (speed, D_r, motile fraction)."""
    base = finished_study.conditions[0]

    def make(name, values, *, control=False, tracks=()):
        chambers = []
        for (day, chamber), value in values.items():
            speed, turning, motile = value if isinstance(value, tuple) else (value, 0.02, 0.8)
            chambers.append(
                ChamberResult(
                    day=day,
                    chamber=chamber,
                    tracks_kept=10,
                    frames_kept=600,
                    speed_um_s=speed,
                    rotational_diffusion_rad2_s=turning,
                    motile_fraction=motile,
                    frame_speed_um_s=speed,
                )
            )
        return dataclasses.replace(
            base, condition=name, control=control, chambers=tuple(chambers), tracks=tuple(tracks)
        )

    return make


def compared(*conditions, settings=SETTINGS, **more):
    comparisons, pairs = compare(conditions, settings=settings, level=0.95, seed=1, **more)
    return {(c.condition, c.reference, c.quantity): c for c in comparisons}, pairs


def days(n, *, chambers=2, prefix="c", first=1):
    return [(f"d{d}", f"{prefix}{k}") for d in range(first, first + n) for k in range(chambers)]


RNG = np.random.default_rng(5)
WILD = {key: float(v) for key, v in zip(days(4), RNG.normal(0.8, 0.05, 8), strict=True)}
MUTANT = {
    (d, f"m{c}"): float(0.9 * v * f)
    for ((d, c), v), f in zip(WILD.items(), RNG.normal(1, 0.02, 8), strict=True)
}


def by_day(values):
    found = {}
    for (day, _), value in values.items():
        found.setdefault(day, []).append(value)
    return np.array([np.mean(v) for v in found.values()])


def test_paired_by_day_is_the_t_test_of_daily_log_ratios(made):
    table, (pair,) = compared(made("wt", WILD, control=True), made("mut", MUTANT))
    c = table["mut", "wt", "speed_um_s"]
    logs = np.log(by_day(MUTANT) / by_day(WILD))
    other = stats.ttest_1samp(logs, 0)
    assert_allclose(c.p_value, other.pvalue, rtol=1e-10)
    assert_allclose(
        np.log([c.ratio.low, c.ratio.high]), other.confidence_interval(0.95), rtol=1e-10
    )
    assert_allclose(
        np.log([c.equivalence_low, c.equivalence_high]), other.confidence_interval(0.9), rtol=1e-9
    )
    assert_allclose([u.change for u in c.units], np.exp(logs))
    assert [u.day for u in c.units] == ["d1", "d2", "d3", "d4"]
    assert (c.covers, c.degrees_of_freedom) == ("days", 3)
    assert pair.paired
    assert "the same 4 days" in pair.note


def test_agrees_with_a_mixed_model_of_days_and_day_by_condition(made):
    # In a balanced design restricted maximum likelihood gives the paired difference and its error.
    import pandas as pd
    import statsmodels.formula.api as smf

    rng = np.random.default_rng(21)
    keys = days(8)
    shared = dict(zip((f"d{d}" for d in range(1, 9)), rng.normal(0, 0.08, 8), strict=True))
    sides = []
    for side in range(2):
        own = {day: rng.normal(0.1 * side, 0.05) for day in shared}
        sides.append(
            {k: 0.8 * math.exp(shared[k[0]] + own[k[0]] + rng.normal(0, 0.02)) for k in keys}
        )
    table = pd.DataFrame(
        [
            {"y": math.log(v), "side": n, "day": day, "cell": f"{day} {n}"}
            for n, values in enumerate(sides)
            for (day, _), v in values.items()
        ]
    )
    cells = {"cell": "0 + C(cell)"}
    model = smf.mixedlm("y ~ side", table, groups="day", re_formula="1", vc_formula=cells)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of steps on the way to the optimum
        fitted = model.fit(reml=True)
    mutant = {(d, f"m{c}"): v for (d, c), v in sides[1].items()}
    c = compared(made("wt", sides[0], control=True), made("mut", mutant))[0]
    c = c["mut", "wt", "speed_um_s"]
    # The log of a mean is not the mean of logs: 0.02² / 2 apart.
    assert_allclose(math.log(c.ratio.value), fitted.params["side"], atol=4e-4)
    error = math.log(c.ratio.high / c.ratio.low) / 2 / stats.t.ppf(0.975, 7)
    assert_allclose(error, fitted.bse["side"], rtol=0.01)


def test_one_ratio_serves_both_persistence_lengths(made):
    one = made("wt", {k: (v, 0.02 * v**2, 0.8) for k, v in WILD.items()}, control=True)
    two = made("mut", {k: (v, 0.03, 0.8) for k, v in MUTANT.items()})
    table, _ = compared(one, two)
    ratios = [
        table["mut", "wt", q].ratio.value
        for q in ("speed_um_s", "rotational_diffusion_rad2_s", "persistence_length_um")
    ]
    assert_allclose(ratios[0] / ratios[1], ratios[2], rtol=1e-12)


def test_motile_fraction_is_compared_by_its_difference(made):
    one = made("wt", dict.fromkeys(WILD, (0.8, 0.02, 0.8)), control=True)
    fractions = dict(zip(MUTANT, (0.6, 0.7, 0.65, 0.7, 0.55, 0.6, 0.7, 0.75), strict=True))
    two = made("mut", {k: (0.8, 0.02, f) for k, f in fractions.items()})
    c = compared(one, two)[0]["mut", "wt", "motile_fraction"]
    other = stats.ttest_1samp(by_day(fractions) - 0.8, 0)
    assert_allclose(c.difference.p_value, other.pvalue)
    assert_allclose((c.difference.low, c.difference.high), other.confidence_interval(0.95))
    assert math.isnan(c.ratio.value)
    assert math.isnan(c.p_value)


def test_chambers_with_both_conditions_are_paired_within_the_day(made):
    own = {key: 0.9 * WILD[key] for key in WILD}
    own["d1", "c0"] *= 1.1
    table, (pair,) = compared(made("wt", WILD, control=True), made("mut", own))
    c = table["mut", "wt", "speed_um_s"]
    assert_allclose([u.change for u in c.units], 0.9 * np.array([1.1**0.5, 1, 1, 1]))
    assert "in 8 chambers of 4 days" in pair.note


def test_chambers_of_one_day_are_paired_and_cover_chambers(made):
    wild = {k: v for k, v in WILD.items() if k[0] in ("d1",)} | {("d1", "c2"): 0.8}
    own = {k: 0.9 * v for k, v in wild.items()}
    own["d1", "c0"] *= 1.02
    table, (pair,) = compared(made("wt", wild, control=True), made("mut", own))
    c = table["mut", "wt", "speed_um_s"]
    assert (c.covers, c.degrees_of_freedom) == ("chambers", 2)
    assert [u.chamber for u in c.units] == ["c0", "c1", "c2"]
    assert "not other days" in pair.note


def test_one_shared_day_is_judged_between_its_chambers(made):
    own = {("d2", f"m{n}"): v for n, v in enumerate((0.7, 0.72, 0.69))}
    table, (pair,) = compared(made("wt", WILD, control=True), made("mut", own))
    c = table["mut", "wt", "speed_um_s"]
    wild = [np.log(v) for (day, _), v in WILD.items() if day == "d2"]
    other = stats.ttest_ind(np.log(list(own.values())), wild, equal_var=False)
    assert_allclose(c.p_value, other.pvalue)
    assert c.covers == "chambers"
    assert not pair.paired
    assert "They share one day" in pair.note


def test_no_shared_day_is_welch_over_days_and_the_page_says_what_it_costs(made):
    own = {(f"x{d}", c): v for (d, c), v in MUTANT.items()}
    table, (pair,) = compared(made("wt", WILD, control=True), made("mut", own))
    c = table["mut", "wt", "speed_um_s"]
    logs = np.log(by_day(own)), np.log(by_day(WILD))
    other = stats.ttest_ind(*logs, equal_var=False)
    assert_allclose((c.p_value, c.degrees_of_freedom), (other.pvalue, other.df))
    assert c.units == ()
    pooled = np.sqrt((logs[0].var(ddof=1) + logs[1].var(ddof=1)) / 2)
    assert f"one day differs from another by {100 * pooled:.2g} %" in pair.note
    assert "Film both on the same days" in pair.note


def test_single_day_of_its_own_borrows_the_spread_of_the_others(made):
    table, (pair,) = compared(made("wt", WILD, control=True), made("mut", {("x", "m"): 0.7}))
    c = table["mut", "wt", "speed_um_s"]
    other = stats.ttest_ind(np.log([0.7]), np.log(by_day(WILD)), equal_var=True)
    assert_allclose(c.p_value, other.pvalue)
    assert "days are taken to differ as those of wt do" in pair.note


def test_nothing_that_repeats_gives_a_value_and_no_interval(made):
    one, two = made("wt", {("d1", "a"): 0.8}, control=True), made("mut", {("d2", "a"): 0.6})
    table, (pair,) = compared(one, two)
    c = table["mut", "wt", "speed_um_s"]
    assert_allclose(c.ratio.value, 0.75)
    assert math.isnan(c.ratio.low)
    assert math.isnan(c.p_value)
    assert "nothing repeats" in c.problem
    assert "cannot be told" in pair.note


@pytest.mark.parametrize(
    ("one", "two", "kind"),
    [
        (days(2), days(2, prefix="m"), "days"),
        (days(2), days(2), "chambers of days"),
        (days(3), days(3, prefix="m", first=3), "two samples"),
        (days(2), days(2, prefix="m", first=2), "within one day"),
        (days(1), days(1), "chambers of one day"),
        (days(1, chambers=1), days(1, chambers=1), "nothing"),
        (days(1), days(4, first=2), "borrowed spread"),
        (days(3), [], "nothing"),
    ],
)
def test_arrangements(one, two, kind):
    assert arrange(one, two).kind == kind
    assert arrange(two, one).kind == kind


def test_permutation_is_left_out_where_it_could_never_reject(made):
    table, _ = compared(made("wt", WILD, control=True), made("mut", MUTANT))
    c = table["mut", "wt", "speed_um_s"]
    assert math.isnan(c.p_permutation)
    assert c.smallest_p_permutation == 2 / 2**4
    six = {key: 0.8 + 0.01 * n for n, key in enumerate(days(6, chambers=1))}
    own = {(d, "m"): 0.9 * v * (1 + 0.001 * n) for n, ((d, _), v) in enumerate(six.items())}
    c = compared(made("wt", six, control=True), made("mut", own))[0]["mut", "wt", "speed_um_s"]
    assert c.p_permutation == c.smallest_p_permutation == 2 / 2**6


def test_holm_over_the_primary_quantity_only(made):
    others = [
        made(name, {k: f * v for k, v in MUTANT.items()})
        for name, f in (("a", 1.0), ("b", 1.05), ("c", 1.1))
    ]
    table, _ = compared(made("wt", WILD, control=True), *others)
    raw = [table[n, "wt", "speed_um_s"].p_value for n in "abc"]
    adjusted = [table[n, "wt", "speed_um_s"].p_adjusted for n in "abc"]
    order = np.argsort(raw)
    assert_allclose(adjusted[order[0]], min(1, 3 * raw[order[0]]))
    assert all(table[n, "wt", "speed_um_s"].primary for n in "abc")
    assert math.isnan(table["a", "wt", "motile_fraction"].p_adjusted)
    chosen = CompareSettings(primary="motile_fraction")
    table, _ = compared(made("wt", WILD, control=True), *others, settings=chosen)
    assert math.isnan(table["a", "wt", "speed_um_s"].p_adjusted)
    assert table["a", "wt", "motile_fraction"].primary


def test_alike_is_shown_by_the_interval_and_not_by_the_lack_of_a_difference(made):
    near = {
        (d, f"m{c}"): v * f for ((d, c), v), f in zip(WILD.items(), [1.01, 0.99] * 4, strict=True)
    }
    vague = {
        (d, f"m{c}"): v * f
        for ((d, c), v), f in zip(WILD.items(), [0.8, 0.8, 1.2, 1.2] * 2, strict=True)
    }
    table, _ = compared(made("wt", WILD, control=True), made("near", near), made("vague", vague))
    assert table["near", "wt", "speed_um_s"].equivalent
    assert table["vague", "wt", "speed_um_s"].p_value > 0.05
    assert not table["vague", "wt", "speed_um_s"].equivalent
    c = table["near", "wt", "speed_um_s"]
    assert 0.9 <= c.equivalence_low < c.equivalence_high <= 1.1
    assert c.equivalence_level == 0.9


def test_whom_to_compare(made):
    a, b, c = made("a", WILD, control=True), made("b", WILD), made("c", WILD)

    def names(reference, conditions=(a, b, c)):
        found = pairs_to_compare(conditions, reference)
        return [(x.condition, y.condition) for x, y in found]

    assert names("control") == [("b", "a"), ("c", "a")]
    assert names("b") == [("a", "b"), ("c", "b")]
    assert names("all") == [("b", "a"), ("c", "a"), ("c", "b")]
    assert names("control", (b, c)) == []
    with pytest.raises(ValueError, match="no condition 'd'"):
        names("d")


def test_without_a_value_there_is_a_problem(made, finished_study):
    none = dataclasses.replace(made("mut", MUTANT), chambers=())
    table, (pair,) = compared(made("wt", WILD, control=True), none)
    assert table["mut", "wt", "speed_um_s"].problem == "mut has no value to compare"
    assert "no speed to compare" in pair.note
    zero = made("mut", dict.fromkeys(MUTANT, (0.8, -0.001, 0.8)))
    c = compared(made("wt", WILD, control=True), zero)[0][
        "mut", "wt", "rotational_diffusion_rad2_s"
    ]
    assert "not above zero" in c.problem
    assert math.isnan(c.ratio.value)


def filmed(condition, minutes, clock="day"):
    return [
        FilmedAt(condition=condition, clock=f"{clock} {n}", minutes=m)
        for n, m in enumerate(minutes)
    ]


def test_control_always_filmed_first_is_a_problem(made):
    conditions = made("wt", WILD, control=True), made("mut", MUTANT)
    first = filmed("wt", [600, 610, 590]) + filmed("mut", [660, 650, 640])
    (problem,) = compared(*conditions, filmed=first)[1][0].problems
    assert problem.startswith("wt was always filmed before mut (3 of 3 times)")
    last = filmed("wt", [700, 710, 690]) + filmed("mut", [660, 650, 640])
    (problem,) = compared(*conditions, filmed=last)[1][0].problems
    assert problem.startswith("mut was always filmed before wt")
    for turn in ([600, 700, 590], [600]):
        mixed = filmed("wt", turn) + filmed("mut", [660, 650, 640])
        assert compared(*conditions, filmed=mixed)[1][0].problems == ()
    other_clocks = filmed("wt", [1, 1, 1], "a") + filmed("mut", [2, 2, 2], "b")
    assert compared(*conditions, filmed=other_clocks)[1][0].problems == ()


def track(key, *, kept=True, speed=0.8, length=math.nan, n=60):
    day, chamber = key
    return TrackResult(
        recording="r",
        day=day,
        chamber=chamber,
        track="1",
        kept=kept,
        set_aside_reason="" if kept else "pivoting",
        n_positions=n,
        duration_s=30.0,
        net_advance_um=24.0 if kept else 0.0,
        path_um=24.0,
        speed_um_s=speed,
        length_um=length,
    )


def tracks_aside(values, share):
    return [track(key, kept=k >= share) for key in values for k in range(10)]


def test_different_shares_set_aside_are_a_problem_with_the_result_without_cleaning(made):
    one = made("wt", WILD, control=True, tracks=tracks_aside(WILD, 1))
    two = made("mut", MUTANT, tracks=tracks_aside(MUTANT, 4))
    (pair,) = compared(one, two)[1]
    (look,), (problem,) = pair.side_looks, pair.problems
    assert "40% of the filament-frames of mut, 10% of wt" in problem
    assert_allclose(look.ratio.value, 6 / 9)
    same = made("mut", MUTANT, tracks=tracks_aside(MUTANT, 1))
    assert compared(one, same)[1][0].side_looks == ()


def test_speeds_at_a_common_length(made):
    rng = np.random.default_rng(3)

    def filmed_lengths(values, length):
        lengths = length * np.exp(0.3 * rng.standard_normal((len(values), 40)))
        # Speed falls by 0.2 of itself for each factor e of the length, whatever the condition.
        speeds = 0.8 * (1 - 0.2 * np.log(lengths / 5))
        tracks = [
            track(key, speed=float(s), length=float(x))
            for key, row, own in zip(values, lengths, speeds, strict=True)
            for x, s in zip(row, own, strict=True)
        ]
        means = dict(zip(values, map(float, speeds.mean(axis=1)), strict=True))
        return means, tracks

    one = filmed_lengths(WILD, 5.0)
    two = filmed_lengths(MUTANT, 9.0)
    conditions = made("wt", one[0], control=True, tracks=one[1]), made("mut", two[0], tracks=two[1])
    table, (pair,) = compared(*conditions)
    assert table["mut", "wt", "speed_um_s"].ratio.high < 0.95
    (look,) = pair.side_looks
    assert look.name == "at a common length of 6.85 µm"  # √(5 × 9) = 6.7, less what was drawn
    assert_allclose(look.ratio.value, 1, atol=0.01)
    assert "1.84 times as long" in pair.problems[0]


def null_p_value(*, n_days, n_chambers, rng):
    """Of one experiment with day, day × condition and chamber effects and no difference."""
    from glidefit.steps.compare.pairing import judge

    keys = [(str(d), f"{c}") for d in range(n_days) for c in range(n_chambers)]
    arrangement = arrange(keys, [(d, f"m{c}") for d, c in keys])
    day = 0.07 * rng.standard_normal((1, n_days, 1))
    own = 0.04 * rng.standard_normal((2, n_days, 1))
    logs = day + own + 0.04 * rng.standard_normal((2, n_days, n_chambers))

    def measure(which):
        return lambda group: math.log(
            np.mean([math.exp(logs[which, int(d), int(c.removeprefix("m"))]) for d, c in group])
        )

    return judge(arrangement, measure(0), measure(1), rng=rng).difference.p_value


@pytest.mark.parametrize("n_days", [3, 6])
def test_null_comparisons_reject_as_often_as_they_say(n_days):
    rng, n = np.random.default_rng([n_days, 11]), 400
    rejected = sum(null_p_value(n_days=n_days, n_chambers=2, rng=rng) < 0.05 for _ in range(n))
    # Four standard errors of a share of 5 % in 400.
    assert abs(rejected / n - 0.05) < 4 * math.sqrt(0.05 * 0.95 / n)
