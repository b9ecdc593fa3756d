from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_equal

from glidefit.evidence import BorrowedSpread, Combined
from glidefit.pipeline.simulated import cleaned
from glidefit.pipeline.study import study
from glidefit.quantities import QUANTITIES
from glidefit.results import Curve, Estimate
from glidefit.settings import resolve
from glidefit.steps import summarise
from glidefit.steps.simulate import Scenario, ScenarioCondition, simulate_assay

KINESIN = ScenarioCondition(
    name="c",
    speed_um_s=0.8,
    rotational_diffusion_rad2_s=0.008,
    longitudinal_diffusion_um2_s=0.003,
)
SCENARIO = Scenario(
    name="s",
    conditions=(KINESIN,),
    frame_s=1 / 3,
    n_frames=100,
    days=2,
    stuck_fraction=0.2,
    detached_fraction=0.05,
)
SETTINGS = resolve()


def recordings(scenario=SCENARIO, *, seed=1):
    assay = simulate_assay(scenario, np.random.default_rng(seed))
    return [cleaned(r, scenario, settings=SETTINGS.values) for r in assay.recordings]


def analysed(them, *, preparations=None, settings=SETTINGS):
    return study(
        name="s",
        conditions=[("c", False, "c")],
        recordings=them,
        recording_results=[],
        preparations={"c": preparations or []},
        settings=settings,
        seed=1,
        sheet_sha256="",
    ).conditions[0]


@pytest.fixture(scope="module")
def result():
    return analysed(recordings())


def test_counts_add_up(result):
    counts = result.counts
    assert (counts.days, counts.chambers, counts.recordings) == (2, 4, 4)
    assert counts.tracks_seen == counts.tracks_kept + sum(counts.set_aside.values())
    assert counts.frames_seen == counts.frames_kept + sum(counts.frames_set_aside.values())
    assert counts.set_aside["stuck"] > 10
    assert len(result.tracks) == counts.tracks_seen


def test_every_quantity_is_there_and_says_why_if_it_has_no_value(result):
    assert list(result.estimates) == list(QUANTITIES)
    for key, estimate in result.estimates.items():
        assert np.isfinite(estimate.value) or estimate.problem, key


def test_curves_hold_points_with_pairs_only_and_mark_those_that_were_fitted(result):
    curve = result.msd[0]
    assert np.all(np.isfinite(curve.value))
    assert_allclose(curve.lag_s[0], 1 / 3, rtol=1e-6)
    assert all(
        lag <= result.longest_lag_s * 1.001
        for lag, f in zip(curve.lag_s, curve.fitted, strict=True)
        if f
    )
    assert_allclose(curve.value, curve.model, rtol=0.05)


def test_chambers_are_those_of_the_sheet_with_their_kept_tracks(result):
    assert sum(c.tracks_kept for c in result.chambers) == result.counts.tracks_kept
    assert_allclose(
        np.mean([c.speed_um_s for c in result.chambers]), result.estimates["speed_um_s"].value
    )


def test_kept_tracks_have_a_rotational_diffusion_of_their_own_or_a_reason(result):
    """Those set aside have their own reason. An open interval has its high end alone."""
    kept = [t for t in result.tracks if t.kept]
    told = [t for t in kept if not t.rotational_diffusion_problem]
    assert len(told) > 0.7 * len(kept)
    for t in told:
        ends = t.rotational_diffusion_low_rad2_s, t.rotational_diffusion_high_rad2_s
        assert 0 < ends[0] < t.rotational_diffusion_rad2_s < ends[1]
    for t in result.tracks:
        if not t.kept or t.rotational_diffusion_problem:
            assert np.isnan(t.rotational_diffusion_rad2_s)
        assert t.kept or not t.rotational_diffusion_problem


def test_same_numbers_whatever_the_order_of_recordings(result):
    again = analysed(recordings()[::-1])
    for key, estimate in result.estimates.items():
        other = again.estimates[key]
        assert_equal(
            [other.value, other.low, other.high], [estimate.value, estimate.low, estimate.high]
        )


def one_sided_curve(factor):
    """Six lags, the fourth of which departs from the model; the last is outside the fit."""
    lag = tuple(float(k) for k in range(1, 7))
    model = tuple(t**2 for t in lag)
    value = tuple(m * (factor if t in (4.0, 6.0) else 1.0) for t, m in zip(lag, model, strict=True))
    none = (float("nan"),) * 6
    return Curve(
        lag_s=lag,
        value=value,
        low=none,
        high=none,
        model=model,
        model_low=none,
        model_high=none,
        fitted=(True,) * 5 + (False,),
        frame_s=1.0,
    )


def told(factor=1.0, *, heading=0.008, undecided=0, heading_sd=0.0):
    """Problems of a condition whose D_r is 0.008 from the MSD in each of three days."""
    draws = np.tile([0.008, heading], (10, 1)) + np.linspace(-1e-5, 1e-5, 10)[:, None] * [1, -1]
    combined = Combined(
        value=np.array([0.008, heading]),
        draws=draws,
        units=np.full(2, 3),
        covers="days",
        level_error={},
        level_units={},
    )
    return summarise.problems(
        estimates={"rotational_diffusion_rad2_s": Estimate(value=0.008)},
        combined=combined,
        columns={"rotational_diffusion": 0, "heading_diffusion": 1},
        msd=[one_sided_curve(factor)],
        fit_problems=[],
        undecided=undecided,
        heading_sd=heading_sd,
    )


def test_a_heading_that_is_hardly_known_is_a_problem():
    assert told(1.0, heading_sd=0.24) == []
    (found,) = told(1.0, heading_sd=0.28)
    assert found.startswith("From frame to frame the heading is known to ±0.28 rad only")


def test_a_fit_that_misses_its_points_is_a_problem():
    assert told(1.04) == []
    found = told(1.2)
    assert len(found) == 1
    assert found[0].startswith(
        "The mean squared displacement departs from the fitted curve by 18% at a lag of 4 s"
    )


def test_a_heading_correlation_that_disagrees_is_a_problem():
    assert told(heading=0.010) == []
    found = told(heading=0.02)
    assert len(found) == 1
    assert found[0].startswith(
        "The heading correlation gives a rotational diffusion 2.5 times that of the mean squared"
    )


def test_undecided_tracks_are_told():
    assert told(undecided=1) == [
        "1 track says too little of whether they glide: they are left out of the motile fraction "
        "(clean.odds)."
    ]


def test_a_clean_condition_has_no_problem_of_fit(result):
    assert not any("departs" in text or "heading correlation" in text for text in result.problems)


@pytest.mark.parametrize(
    ("covers", "preparations", "expected"),
    [
        ("days", ["", ""], "The intervals cover other days like these 3."),
        (
            "days",
            ["K5", "K5"],
            "The intervals cover other days with the same preparation (K5): 3 days repeat the "
            "day, not the preparation.",
        ),
        ("days", ["K5", "K6"], "The intervals cover other days like these 3."),
        (
            "chambers",
            [],
            "The 4 chambers are of one day: the intervals cover other chambers of that day, not "
            "other days. Film on further days to say more.",
        ),
        (
            "",
            [],
            "There is one chamber, so no interval can be given: how much another chamber would "
            "differ has not been seen. Film at least a second chamber, better a second day.",
        ),
    ],
)
def test_to_what_the_intervals_generalise(covers, preparations, expected):
    combined = Combined(
        value=np.zeros(1),
        draws=np.zeros((2, 1)),
        units=np.ones(1, dtype=int),
        covers=covers,
        level_error={},
        level_units={"days": 3, "chambers": 4},
    )
    assert summarise.generalises("c", combined, preparations) == expected


def loan(covers, *sources):
    return BorrowedSpread(half_width=0.1, df=9, covers=covers, sources=sources, method="")


@pytest.mark.parametrize(
    ("days", "borrowed", "expected"),
    [
        (
            2,
            {"speed_um_s": loan("days", "w"), "motile_fraction": loan("days", "w")},
            "The intervals cover other days like these 2. How far days differ is borrowed from w "
            "for speed and motile fraction.",
        ),
        (
            1,
            {"speed_um_s": loan("chambers", "a", "b")},
            "The 2 chambers are of one day: the intervals cover other chambers of that day, not "
            "other days. How far chambers differ is pooled with a and b for speed. Film on further "
            "days to say more.",
        ),
        (
            1,
            {"speed_um_s": loan("days", "w"), "motile_fraction": loan("chambers", "a")},
            "The 2 chambers are of one day. The intervals of speed cover other days all the same: "
            "how far days differ is borrowed from w. That holds if c differs from day to day as w "
            "does, which one day cannot show. How far chambers differ is pooled with a for motile "
            "fraction. All other intervals cover other chambers of that day, not other days. Film "
            "on further days to do without what is borrowed.",
        ),
    ],
)
def test_what_is_borrowed_is_said(days, borrowed, expected):
    combined = Combined(
        value=np.zeros(1),
        draws=np.zeros((2, 1)),
        units=np.ones(1, dtype=int),
        covers="days" if days > 1 else "chambers",
        level_error={},
        level_units={"days": days, "chambers": 2},
    )
    assert summarise.generalises("c", combined, [], borrowed) == expected


def test_missing_estimates_are_filled_with_reasons():
    known = {"speed_um_s": Estimate(value=1.0)}
    every = summarise.all_estimates(known, level=0.95)
    assert every["speed_um_s"].value == 1.0
    assert every["stop_rate_per_s"].problem.startswith("not fitted: no pauses of a size")
    assert every["rotational_diffusion_rad2_s"].problem == "no track was left to fit"


def test_drawn_tracks_are_thinned_but_end_where_they_end():
    one = recordings()[0]
    drawn = summarise.drawn([one], most=10)
    assert len(drawn) <= 10
    tracks = one.clean.tracks
    for track in drawn:
        rows = tracks.rows(list(tracks.label).index(track.track))
        assert_allclose(track.x_um[0], tracks.x_um[rows][0], atol=0.006)
        gap = np.hypot(
            track.x_um[-1] - tracks.x_um[rows][-1], track.y_um[-1] - tracks.y_um[rows][-1]
        )
        assert gap < 0.01 * max(one.field_um)


def test_methods_name_counts_model_and_formulas(result):
    text = result.methods
    for part in ("4 recordings", "2 days", "v/D_r", "v/(2 D_r)", "Student's t", result.generalises):
        assert part in text


def checks_of(innovation, *, msd=(0.8, 0.008)):
    """Checks of a condition of speed 0.8 and D_r 0.008, whose tracks bring errors of 2 and 10 %."""
    combined = Combined(
        value=np.array([0.8, 0.008, *msd]),
        draws=np.zeros((2, 4)),
        units=np.full(4, 3),
        covers="days",
        level_error={"tracks": np.array([0.016, 0.0008, 0.016, 0.0008])},
        level_units={},
    )
    names = ("speed", "rotational_diffusion", "msd_speed", "msd_rotational_diffusion")
    columns = {name: i for i, name in enumerate(names)}
    return {c.name: c for c in summarise.model_checks(innovation, combined, columns)}


def test_white_normal_innovations_pass_every_check():
    checks = checks_of(np.random.default_rng(2).standard_normal((20_000, 2)))
    assert all(check.holds for check in checks.values())
    # Means of 40,000 squares and products scatter by 0.7 and 0.5 %; 4 of them.
    assert_allclose(checks["size of innovations"].value, 1.0, atol=0.03)
    assert_allclose(checks["memory of innovations"].value, 0.0, atol=0.02)


@pytest.mark.parametrize(
    ("spoil", "failed"),
    [
        (lambda z: 1.2 * z, "size of innovations"),
        (lambda z: (z[1:] + 0.5 * z[:-1]) / np.sqrt(1.25), "memory of innovations"),
        (
            lambda z: np.where(np.arange(len(z))[:, None] % 20, z, 3 * z) / 1.18,
            "tails of innovations",
        ),
    ],
)
def test_each_departure_fails_its_own_check(spoil, failed):
    checks = checks_of(spoil(np.random.default_rng(3).standard_normal((20_000, 2))))
    assert [name for name, check in checks.items() if not check.holds] == [failed]


def test_a_second_opinion_that_differs_fails_its_check():
    z = np.random.default_rng(4).standard_normal((20_000, 2))
    assert checks_of(z, msd=(0.84, 0.010))["D_r from the MSD"].holds
    assert not checks_of(z, msd=(0.88, 0.008))["speed from the MSD"].holds
    assert not checks_of(z, msd=(0.8, 0.011))["D_r from the MSD"].holds


def test_innovations_do_not_reach_over_the_start_of_a_track():
    z = np.random.default_rng(5).standard_normal((1000, 2))
    z[::10] = np.nan
    assert all(check.holds for check in checks_of(z).values())


def test_pauses_fail_the_checks_of_the_active_model():
    pausing = ScenarioCondition(
        name="c",
        speed_um_s=3.0,
        rotational_diffusion_rad2_s=0.3,
        stop_rate_per_s=0.5,
        start_rate_per_s=2.0,
    )
    scenario = Scenario(
        name="s",
        conditions=(pausing,),
        frame_s=1 / 15,
        exposure_s=0.0,
        n_frames=150,
        days=2,
        chambers_per_day=1,
    )
    them = recordings(scenario)
    problems = analysed(them, settings=resolve(options={"fit.model": "active"})).problems
    assert any(text.startswith("The active model does not describe") for text in problems), problems
    chosen = analysed(them)
    assert chosen.model == "pausing"
    assert not any("does not describe" in text for text in chosen.problems), chosen.problems
    assert "Filaments pause at random" in chosen.methods
    assert chosen.estimates["stop_rate_per_s"].low < chosen.estimates["stop_rate_per_s"].high
    assert [one.model for one in chosen.model_evidence].count("pausing") == 3


def test_too_few_innovations_say_nothing():
    assert checks_of(np.full((500, 2), np.nan)) == {}
    assert checks_of(np.zeros((0, 2))) == {}
