"""Response curves from conditions and the columns of the sheet."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from glidefit.results import ChamberResult
from glidefit.settings import ResponseSettings
from glidefit.steps.response import SheetColumns, responses
from glidefit.steps.response.points import column

PUROMYCIN = Path(__file__).parents[1] / "published" / "data" / "puromycin.csv"
ATP = (5.0, 10, 25, 50, 150, 1000)


@pytest.fixture(scope="module")
def made(finished_study):
    """Conditions from {name: {(day, chamber): speed}}."""
    base = finished_study.conditions[0]

    def make(speeds):
        return [
            dataclasses.replace(
                base,
                condition=name,
                chambers=tuple(
                    ChamberResult(
                        day=day,
                        chamber=chamber,
                        tracks_kept=10,
                        frames_kept=600,
                        speed_um_s=speed,
                        rotational_diffusion_rad2_s=0.02,
                        motile_fraction=0.8,
                        frame_speed_um_s=speed,
                    )
                    for (day, chamber), speed in values.items()
                ),
            )
            for name, values in speeds.items()
        ]

    return make


def sheet(numbers, **labels):
    """Columns of each condition from {column: {condition: number}}."""
    names = {name for own in numbers.values() for name in own}
    return {
        name: SheetColumns(
            numbers={
                key: (own[name],) if not isinstance(own[name], tuple) else own[name]
                for key, own in numbers.items()
                if name in own
            },
            labels={key: (own[name],) for key, own in labels.items() if name in own},
        )
        for name in names
    }


def fitted(conditions, columns, **settings):
    return responses(conditions, columns, settings=ResponseSettings(**settings), level=0.95)


def series(xs=ATP, *, half=50.0, v_max=0.8, days=3, noise=0.03, seed=3, prefix=""):
    rng = np.random.default_rng(seed)
    shift = 0.07 * rng.standard_normal(days)
    return {
        f"{prefix}{x:g}": {
            (f"d{d}", c): float(
                v_max * x / (half + x) * np.exp(shift[d] + noise * rng.standard_normal())
            )
            for d in range(days)
            for c in "ab"
        }
        for x in xs
    }


def numbers_of(speeds):
    return {name: float(name.split()[-1]) for name in speeds}


def value(curve, key):
    return next(p for p in curve.parameters if p.key == key)


def test_puromycin_through_the_step(made):
    # Treloar (1974), in Bates & Watts (1988), appendix A1.3; R's nls: 212.68 ± 6.95,
    # 0.06412 ± 0.00828, all of one day, scatter constant as in their fit.
    rows = [r.split(",") for r in PUROMYCIN.read_text().splitlines() if r.endswith(",treated")]
    speeds = {}
    for n, (conc, rate, _) in enumerate(rows):
        speeds.setdefault(conc, {})["day", f"c{n}"] = float(rate)
    columns = sheet({"substrate_ppm": {name: float(name) for name in speeds}})
    (curve,) = fitted(made(speeds), columns, scatter="constant")
    assert curve.model == "michaelis-menten"
    v, k = value(curve, "v_max_um_s"), value(curve, "k_m_ppm")
    assert_allclose((v.value, v.error), (212.683743, 6.94716), rtol=1e-5)
    assert_allclose((k.value, k.error), (0.0641212812, 0.00828095), rtol=1e-4)
    assert_allclose((v.low, v.high), (197.302, 229.289), rtol=1e-4)
    assert curve.covers == "chambers"
    assert curve.problems == ()


def test_series_of_several_days(made):
    speeds = series()
    (curve,) = fitted(made(speeds), sheet({"atp_uM": numbers_of(speeds)}))
    assert (curve.model, curve.label, curve.unit) == ("michaelis-menten", "ATP", "µM")
    assert len(curve.points) == 18
    k, v = value(curve, "k_m_uM"), value(curve, "v_max_um_s")
    assert k.low < 50 < k.high
    assert v.low < 0.8 < v.high
    assert curve.covers == "days"
    assert [m.name for m in curve.models] == ["michaelis-menten", "hill", "linear"]
    assert [m.chosen for m in curve.models] == [True, False, False]
    assert curve.low[0] < curve.curve[0] < curve.high[0]
    assert (curve.x[0], curve.x[-1]) == (5.0, 1000.0)
    assert "each day with a factor of its own" in curve.method


def test_curve_beyond_the_largest_concentration_is_not_determined(made):
    speeds = series((5.0, 10, 20, 30), half=400.0)
    conditions, columns = made(speeds), sheet({"atp_uM": numbers_of(speeds)})
    (curve,) = fitted(conditions, columns, model="michaelis-menten")
    k, v = value(curve, "k_m_uM"), value(curve, "v_max_um_s")
    assert math.isnan(k.value)
    assert math.isnan(v.value)
    assert k.low > 30
    assert math.isnan(k.high)
    assert "K_m is not determined" in k.problem
    assert "beyond the largest concentration (30 µM)" in k.problem
    assert any("not determined" in p for p in curve.problems)
    assert not any(map(math.isnan, curve.curve))


def test_hill_is_chosen_only_when_it_is_clearly_better(made):
    rng = np.random.default_rng(2)
    speeds = {
        f"{x:g}": {
            (d, "a"): float(0.8 * x**2 / (50**2 + x**2) * np.exp(0.02 * rng.standard_normal()))
            for d in ("d1", "d2", "d3")
        }
        for x in ATP
    }
    (curve,) = fitted(made(speeds), sheet({"atp_uM": numbers_of(speeds)}))
    assert curve.model == "hill"
    n = value(curve, "hill_exponent")
    assert n.low < 2 < n.high
    assert n.high < 2.5


def test_temperature_gives_activation_energy_and_q10(made):
    rng = np.random.default_rng(4)
    speeds = {
        f"{t:g}": {
            (d, "a"): float(
                0.8
                * np.exp(-50 / 8.314462618e-3 * (1 / (t + 273.15) - 1 / 298.15))
                * np.exp(0.02 * rng.standard_normal())
            )
            for d in ("d1", "d2", "d3")
        }
        for t in (15.0, 18, 21, 24)
    }
    columns = sheet({"temperature_C": numbers_of(speeds)})
    (curve,) = fitted(made(speeds), columns, model="arrhenius")
    energy, factor = value(curve, "activation_energy_kJ_mol"), value(curve, "q10")
    assert energy.low < 50 < energy.high
    assert factor.low < 1.967351 < factor.high
    assert_allclose(factor.value, 1.967351 ** (energy.value / 50), rtol=1e-6)
    assert curve.problems == ()
    wide = {**speeds, "33": {k: 1.7 * v for k, v in speeds["24"].items()}}
    (curve,) = fitted(made(wide), sheet({"temperature_C": numbers_of(wide)}), model="arrhenius")
    assert "27 °C" in curve.problems[0]


def test_competitive_inhibition_needs_its_column(made):
    rng = np.random.default_rng(5)
    speeds, atp, adp = {}, {}, {}
    for x in ATP:
        for i in (0.0, 100.0):
            name = f"{x:g} and {i:g}"
            atp[name], adp[name] = x, i
            speeds[name] = {
                (d, "a"): float(
                    0.8 * x / (50 * (1 + i / 40) + x) * np.exp(0.02 * rng.standard_normal())
                )
                for d in ("d1", "d2")
            }
    columns = sheet({"atp_uM": atp, "adp_uM": adp})
    (curve,) = fitted(made(speeds), columns, inhibitor="adp_uM")
    assert curve.model == "competitive"
    k = value(curve, "k_i_uM")
    assert k.low < 40 < k.high
    assert sorted(set(curve.at_inhibitor)) == [0, 100]
    (without,) = fitted(made(speeds), columns)
    assert "have the same atp_uM" in without.problems[0]
    assert without.model == ""


def test_series_by_a_column_of_labels(made):
    one, two = series(prefix="wt "), series(prefix="mut ", half=200.0)
    both = {**one, **two}
    columns = sheet(
        {"atp_uM": numbers_of(both)}, construct={name: name.split()[0] for name in both}
    )
    (mixed,) = fitted(made(both), columns)
    assert mixed.model == ""
    wild, mutant = fitted(made(both), columns, series="construct")
    assert (wild.series, mutant.series) == ("wt", "mut")
    assert value(wild, "k_m_uM").high < value(mutant, "k_m_uM").low


def test_points_at_zero_are_left_out_and_said(made):
    speeds = series() | {"0": {("d0", "a"): 0.001}}
    (curve,) = fitted(made(speeds), sheet({"atp_uM": numbers_of(speeds)}))
    assert "points at zero are left out" in curve.method
    assert len(curve.points) == 19


def test_one_point_a_day_leaves_no_scale_for_each_day(made):
    speeds = {
        name: {(f"d{name}", "a"): values["d0", "a"]} for name, values in series(days=1).items()
    }
    (curve,) = fitted(made(speeds), sheet({"atp_uM": numbers_of(speeds)}))
    assert curve.covers == "days"
    assert "too few days with several points" in curve.method


def test_columns_with_fewer_than_three_values_are_no_curve(made):
    speeds = series((5.0, 10))
    assert fitted(made(speeds), sheet({"atp_uM": numbers_of(speeds)})) == ()
    (asked,) = fitted(made(speeds), sheet({"atp_uM": numbers_of(speeds)}), column="atp_uM")
    assert "fewer than 3 values" in asked.problems[0]
    several = sheet({"atp_uM": {**numbers_of(series()), "5": (5.0, 6.0)}})
    (mixed,) = fitted(made(series()), several)
    assert "filmed at several values" in mixed.problems[0]


def test_too_few_points_for_a_curve_are_a_problem(made):
    speeds = {f"{x}": {("d1", "a"): 0.1 * x} for x in (1, 2, 3)}
    columns = sheet({"atp_uM": numbers_of(speeds)})
    (curve,) = fitted(made(speeds), columns, model="hill")
    assert curve.model == ""
    assert "too few" in curve.problems[0]


@pytest.mark.parametrize(
    ("name", "label", "unit", "kind"),
    [
        ("atp_uM", "ATP", "µM", "concentration"),
        ("free_ca_nM", "free ca", "nM", "concentration"),
        ("temperature_C", "temperature", "°C", "temperature"),
        ("motor_ug_ml", "motor", "µg/ml", "density"),
        ("motor_per_um2", "motor", "1/µm2", "density"),
        ("ionic_strength_mM", "ionic strength", "mM", "concentration"),
        ("voltage_V", "voltage", "V", "other"),
        ("pH", "pH", "", "other"),
    ],
)
def test_columns_by_their_names(name, label, unit, kind):
    found = column(name)
    assert (found.label, found.unit, found.kind) == (label, unit, kind)
