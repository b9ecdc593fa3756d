"""How often comparisons and response curves are wrong, from drawn chamber estimates.

    python tests/benchmarks/null_comparisons.py [--experiments 2000] [--seed 1] [--case NAME]

Chamber estimates are drawn with effects of the day (SD 7 %), of day × condition (3 %), of the
chamber (4 %) and of the filaments of a chamber (2 %), and go through the steps that a run takes
them through. "against chambers" is the test that pairs by day but takes the scatter of chambers
for the error, as if there were no day × condition.

null        no difference: share of experiments in which the 95 % interval excludes 1
coverage    ratio 0.9: share in which the interval holds it; the same with different days
paired      day SD twice the chamber SD (4 %, filaments included), 6 days × 2 chambers, several
            SD of day × condition: width unpaired / width paired
fraction    difference of motile fractions with overdispersion between days and chambers
curve       Michaelis-Menten, 6 concentrations × 3 days: coverage of K_m and v_max
chain       no difference, simulated tracks through cleaning and fit (a tenth as many, only if
            asked for)
"""

from __future__ import annotations

import argparse
import dataclasses
import math
import time
from collections.abc import Callable

import numpy as np
from scipy import stats

from glidefit.kernels.response_curves import SHAPES, fit_response
from glidefit.kernels.response_intervals import scale_bounds, shape_bounds
from glidefit.pipeline.simulated import experiment
from glidefit.quantities import QUANTITIES
from glidefit.results import ChamberResult, ConditionResult, Counts, Estimate
from glidefit.settings import CompareSettings, Settings
from glidefit.steps.compare.ratios import compare_in
from glidefit.steps.simulate import Scenario, ScenarioCondition, Spread

DAY, DAY_CONDITION, CHAMBER, FILAMENTS = 0.07, 0.03, 0.04, 0.02
SETTINGS = CompareSettings()
NO_COUNTS = Counts(
    days=0,
    chambers=0,
    recordings=0,
    tracks_seen=0,
    tracks_kept=0,
    set_aside={},
    frames_seen=0,
    frames_kept=0,
    frames_set_aside={},
)
EMPTY = ConditionResult(
    condition="",
    slug="",
    control=False,
    model="active",
    counts=NO_COUNTS,
    estimates={key: Estimate() for key in QUANTITIES},
    problems=(),
    msd=(),
    heading_correlation=(),
    chambers=(),
    tracks=(),
    drawn=(),
    time_points=(),
    spread=(),
    generalises="",
    longest_lag_s=1.0,
    heading_diffusion_rad2_s=1.0,
    methods="",
)


def condition(name: str, values: np.ndarray, days: list[str], *, quantity: str) -> ConditionResult:
    """A condition from chamber values, (days, chambers)."""
    other = {"speed_um_s": 0.8, "rotational_diffusion_rad2_s": 0.02, "motile_fraction": 0.8}
    chambers = tuple(
        ChamberResult(
            day=day,
            chamber=f"{name}{c}",
            tracks_kept=30,
            frames_kept=3000,
            frame_speed_um_s=0.8,
            **{**other, quantity: float(value)},
        )
        for day, row in zip(days, values, strict=True)
        for c, value in enumerate(row)
    )
    return dataclasses.replace(EMPTY, condition=name, chambers=chambers)


def drawn(
    rng: np.random.Generator,
    shape: tuple[int, int],
    *,
    factor: float,
    day: float = DAY,
    interaction: float = DAY_CONDITION,
    chamber: float = math.hypot(CHAMBER, FILAMENTS),
) -> tuple[np.ndarray, np.ndarray]:
    """Speeds of two conditions on the same days; the second is ``factor`` times the first."""
    shared = day * rng.standard_normal((shape[0], 1))
    sides = []
    for _ in range(2):
        own = shared + interaction * rng.standard_normal((shape[0], 1))
        logs = own + chamber * rng.standard_normal(shape)
        sides.append(0.8 * np.exp(logs))
    return sides[0], factor * sides[1]


def days_of(n: int, prefix: str = "d") -> list[str]:
    return [f"{prefix}{k:02d}" for k in range(n)]


def compared(first: ConditionResult, second: ConditionResult, quantity: str, rng):
    return compare_in(quantity, second, first, settings=SETTINGS, level=0.95, rng=rng)


def share(count: int, n: int) -> str:
    p = count / n
    return f"{p:.4f} ± {math.sqrt(p * (1 - p) / n):.4f}"


def against_chambers(one: np.ndarray, two: np.ndarray) -> float:
    """P value of the mean difference of days against the scatter of chambers within days."""
    days, chambers = one.shape
    df = 2 * days * (chambers - 1)
    within = sum(float(np.sum((t - t.mean(axis=1, keepdims=True)) ** 2)) for t in (one, two)) / df
    t = abs(one.mean() - two.mean()) / math.sqrt(2 * within / (days * chambers))
    return float(2 * stats.t.sf(t, df))


def null(n: int, seed: int) -> None:
    for shape in ((3, 2), (6, 2)):
        rng, rejected, by_chamber, permuted = np.random.default_rng([seed, *shape]), 0, 0, 0
        for _ in range(n):
            one, two = drawn(rng, shape, factor=1.0)
            days = days_of(shape[0])
            c = compared(
                condition("a", one, days, quantity="speed_um_s"),
                condition("b", two, days, quantity="speed_um_s"),
                "speed_um_s",
                rng,
            )
            excluded = not c.ratio.low <= 1 <= c.ratio.high
            assert excluded == (c.p_value < 0.05)
            rejected += excluded
            permuted += c.p_permutation < 0.05
            by_chamber += against_chambers(np.log(one), np.log(two)) < 0.05
        print(
            f"null, {shape[0]} × {shape[1]}: rejected {share(rejected, n)}; permutation "
            f"{share(permuted, n)}; against chambers {share(by_chamber, n)}"
        )


def coverage(n: int, seed: int) -> None:
    for shape in ((3, 2), (6, 2)):
        rng, held = np.random.default_rng([seed, 7, *shape]), np.zeros(2, dtype=int)
        for _ in range(n):
            one, two = drawn(rng, shape, factor=0.9)
            _, three = drawn(rng, shape, factor=0.9)
            first = condition("a", one, days_of(shape[0]), quantity="speed_um_s")
            pairs = ((two, "d"), (three, "e"))
            for k, (values, prefix) in enumerate(pairs):
                second = condition("b", values, days_of(shape[0], prefix), quantity="speed_um_s")
                c = compared(first, second, "speed_um_s", rng)
                held[k] += c.ratio.low <= 0.9 <= c.ratio.high
        print(
            f"coverage of the ratio, {shape[0]} × {shape[1]}: paired {share(held[0], n)}; "
            f"different days {share(held[1], n)}"
        )


def paired(n: int, seed: int) -> None:
    chamber = 0.04
    for interaction in (0.0, 0.01, 0.03):
        rng, widths = np.random.default_rng([seed, 3]), []
        spreads = {"day": 2 * chamber, "interaction": interaction, "chamber": chamber}
        for _ in range(n):
            one, two = drawn(rng, (6, 2), factor=1.0, **spreads)
            _, three = drawn(rng, (6, 2), factor=1.0, **spreads)
            first = condition("a", one, days_of(6), quantity="speed_um_s")
            both = []
            for values, prefix in ((two, "d"), (three, "e")):
                second = condition("b", values, days_of(6, prefix), quantity="speed_um_s")
                c = compared(first, second, "speed_um_s", rng)
                both.append(math.log(c.ratio.high / c.ratio.low))
            widths.append(both)
        table = np.array(widths)
        print(
            f"6 × 2, day SD 8 %, chamber SD 4 %, day × condition {100 * interaction:.0f} %: mean "
            f"width paired {table[:, 0].mean():.3f}, unpaired {table[:, 1].mean():.3f}, ratio "
            f"{table[:, 1].mean() / table[:, 0].mean():.2f}"
        )


def fraction(n: int, seed: int) -> None:
    """30 filaments a chamber; beta-binomial between days and chambers."""
    for shape in ((3, 2), (6, 2)):
        rng, held, naive = np.random.default_rng([seed, 5, *shape]), 0, 0
        for _ in range(n):
            table = []
            day = rng.normal(0, 0.05, (shape[0], 1))
            for mean in (0.7, 0.6):
                p = np.clip(mean + day + rng.normal(0, 0.05, shape), 0.02, 0.98)
                table.append(rng.binomial(30, p) / 30)
            days = days_of(shape[0])
            c = compared(
                condition("a", table[0], days, quantity="motile_fraction"),
                condition("b", table[1], days, quantity="motile_fraction"),
                "motile_fraction",
                rng,
            )
            held += c.difference.low <= -0.1 <= c.difference.high
            m = 30 * table[0].size
            means = [t.mean() for t in table]
            half = 1.96 * math.sqrt(sum(q * (1 - q) / m for q in means))
            naive += abs(means[1] - means[0] + 0.1) <= half
        print(
            f"motile fraction, {shape[0]} × {shape[1]}: difference held {share(held, n)}; "
            f"filaments taken for independent {share(naive, n)}"
        )


def curve(n: int, seed: int) -> None:
    half, v_max = 50.0, 0.8
    x = np.tile([5.0, 10, 25, 50, 150, 1000], 3)
    day = np.repeat(np.arange(3), 6)
    held, shown, opened = np.zeros(2, dtype=int), [], 0
    rng = np.random.default_rng([seed, 9])
    for _ in range(n):
        logs = np.log(v_max * x / (half + x)) + (DAY * rng.standard_normal(3))[day]
        logs = logs + DAY_CONDITION * rng.standard_normal(18)
        scatter = math.hypot(CHAMBER, FILAMENTS) * rng.standard_normal((18, 2))
        y = np.exp(logs[:, None] + scatter).mean(axis=1)
        fit = fit_response(x, y, day, shape=SHAPES["michaelis-menten"])
        k, v = shape_bounds(fit, "half", level=0.95), scale_bounds(fit, level=0.95)
        held += [k.low <= math.log(half) <= k.high, v.low <= math.log(v_max) <= v.high]
        opened += math.isinf(k.high)
        shown.append([(k.high - k.low) / 2, (v.high - v.low) / 2])
    widths = 100 * np.median(shown, axis=0)
    print(
        f"Michaelis-Menten, 6 × 3 days: K_m held {share(held[0], n)} (half width {widths[0]:.1f} "
        f"%), v_max held {share(held[1], n)} ({widths[1]:.1f} %); {opened} open"
    )


def chain(n: int, seed: int) -> None:
    """Two conditions alike, 3 days × 2 chambers of 25 filaments, from tracks to p values."""
    truth = {"speed_um_s": 0.8, "rotational_diffusion_rad2_s": 0.01}
    scenario = Scenario(
        name="null",
        conditions=tuple(ScenarioCondition(name=name, **truth) for name in "ab"),
        n_frames=100,
        filaments_in_field=25.0,
        speed_spread=Spread(day=DAY, day_condition=DAY_CONDITION, chamber=CHAMBER, filament=0.1),
    )
    rejected, n = np.zeros(2, dtype=int), max(n // 10, 1)
    for i in range(n):
        rng = np.random.default_rng([seed, 11, i])
        found = experiment(scenario, settings=Settings(), rng=rng)
        sides = []
        for name, numbers in found.items():
            columns = numbers.fitted.columns
            chambers = tuple(
                ChamberResult(
                    day=e.day,
                    chamber=e.chamber,
                    tracks_kept=len(e.influence),
                    frames_kept=0,
                    speed_um_s=float(e.values[columns["speed"]]),
                    rotational_diffusion_rad2_s=float(e.values[columns["rotational_diffusion"]]),
                    motile_fraction=1.0,
                    frame_speed_um_s=0.8,
                )
                for e in numbers.fitted.chambers
            )
            sides.append(dataclasses.replace(EMPTY, condition=name, chambers=chambers))
        for k, quantity in enumerate(truth):
            rejected[k] += compared(sides[0], sides[1], quantity, rng).p_value < 0.05
    print(
        f"whole chain, 3 × 2: rejected speed {share(rejected[0], n)}, D_r {share(rejected[1], n)}"
    )


CASES: dict[str, Callable[[int, int], None]] = {
    "null": null,
    "coverage": coverage,
    "paired": paired,
    "fraction": fraction,
    "curve": curve,
    "chain": chain,
}

if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__.split("\n\n")[0])
    parser.add_argument("--experiments", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--case", choices=CASES, action="append")
    given = parser.parse_args()
    for name in given.case or [name for name in CASES if name != "chain"]:
        began = time.perf_counter()
        CASES[name](given.experiments, given.seed)
        print(f"   {name}: {time.perf_counter() - began:.0f} s", flush=True)
