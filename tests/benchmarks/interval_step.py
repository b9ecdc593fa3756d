"""Coverage and width of the interval step alone, on chamber values drawn from known components.

    python -P tests/benchmarks/interval_step.py [--experiments 2000] [--case "3 x 2"] [--seed 1]

No tracks are simulated: chamber values are drawn from day effects (SD 7 % of speed, 15 % of D_r),
chamber effects (4 %, 10 %) and 33 filaments of SD 10 % and 15 %, and go through the same combining,
borrowing and intervals as fitted ones. Beside the interval stands Student's t over the condition's
own days (chambers, if there is one day), from the same experiments: the yardstick. An interval that
covers days is held against the true mean, one that covers chambers against that day's own value.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from glidefit.evidence import ChamberEvidence
from glidefit.settings import IntervalSettings
from glidefit.steps.motility import COLUMNS as MOTILE
from glidefit.steps.uncertainty import combine, estimates
from glidefit.steps.uncertainty.borrowing import borrowed_spreads

Floats = NDArray[np.float64]

COLUMNS = {"speed": 0, "rotational_diffusion": 1}
TRUTH = {
    "speed_um_s": 0.8,
    "rotational_diffusion_rad2_s": 0.008,
    "persistence_length_um": 100.0,
}
# Of speed and of rotational diffusion.
DAY, CHAMBER, FILAMENT = np.array([0.07, 0.15]), np.array([0.04, 0.10]), np.array([0.10, 0.15])
# Many enough that their noise (3.5 % of a width) does not show in the coverage.
SETTINGS = IntervalSettings(resamples=400)


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """Days and chambers of one condition, and how far it scatters, in units of the usual."""

    days: int
    chambers: int = 2
    filaments: tuple[int, ...] = (33,)  # of the chambers of a day, over and over
    day: float = 1.0
    own_day: float = 0.0  # day × condition
    chamber: float = 1.0


CASES: dict[str, tuple[Design, ...]] = {  # the first is judged, the second is the control
    "3 x 2": (Design(days=3),),
    "2 x 3": (Design(days=2, chambers=3),),
    "6 x 2": (Design(days=6),),
    "1 x 4": (Design(days=1, chambers=4),),
    "3 x 3, filaments 150, 20, 20": (Design(days=3, chambers=3, filaments=(150, 20, 20)),),
    "3 x 2, no day effects": (Design(days=3, day=0.0),),
    "3 x 2, day x condition as large": (Design(days=3, own_day=1.0),),
    "3 x 2 beside two conditions": (Design(days=3), Design(days=3), Design(days=3)),
    "1 x 4 beside two conditions": (Design(days=1, chambers=4),) * 3,
    "1 x 2 beside two conditions": (Design(days=1, chambers=2),) * 3,
    "1 x 4, others with 150 filaments": (
        Design(days=1, chambers=4),
        *(Design(days=1, chambers=4, filaments=(150,)),) * 2,
    ),
    "3 x 2, control 10 x 2": (Design(days=3), Design(days=10)),
    "2 x 2, control 10 x 2": (Design(days=2), Design(days=10)),
    "3 x 2, control 10 x 2, day x condition": (
        Design(days=3, own_day=1.0),
        Design(days=10, own_day=1.0),
    ),
    "3 x 1, control 10 x 3": (Design(days=3, chambers=1), Design(days=10, chambers=3)),
    "3 x 3, control 10 x 1": (Design(days=3, chambers=3), Design(days=10, chambers=1)),
    "3 x 2, control 10 x 2, no day effects": (Design(days=3, day=0.0), Design(days=10, day=0.0)),
    "1 x 4, control 10 x 2": (Design(days=1, chambers=4), Design(days=10)),
    # Where the assumption is wrong, and only the test stands against it.
    "WRONG 1 x 4, own chambers 2 x": (
        Design(days=1, chambers=4, chamber=2.0),
        *(Design(days=1, chambers=4),) * 2,
    ),
    "WRONG 3 x 2, own days 2 x": (Design(days=3, own_day=3**0.5), Design(days=10)),
    "WRONG 2 x 2, own days 2 x": (Design(days=2, own_day=3**0.5), Design(days=10)),
    "WRONG 3 x 2, own days half": (Design(days=3, day=0.5), Design(days=10)),
    "WRONG 1 x 4, own days 2 x": (
        Design(days=1, chambers=4, own_day=3**0.5),
        Design(days=10),
    ),
}


def chambers_of(
    design: Design, days: Floats, rng: np.random.Generator
) -> tuple[list[ChamberEvidence], Floats]:
    """Evidence of one condition, and the true values of its days, (d, 2)."""
    mean = np.array([TRUTH["speed_um_s"], TRUTH["rotational_diffusion_rad2_s"]])
    own = DAY * design.own_day * rng.standard_normal((design.days, 2))
    of_day = mean * (1 + design.day * days[: design.days] + own)
    out = []
    for d in range(design.days):
        for c in range(design.chambers):
            m = design.filaments[c % len(design.filaments)]
            chamber = CHAMBER * design.chamber * rng.standard_normal(2)
            filaments = mean * (chamber + FILAMENT * rng.standard_normal((m, 2)))
            values = of_day[d] + filaments.mean(axis=0)
            out.append(_evidence(d, c, values, (filaments - filaments.mean(axis=0)) / m))
    return out, of_day


def _evidence(d: int, c: int, values: Floats, influence: Floats) -> ChamberEvidence:
    return ChamberEvidence(
        day=f"day {d}",
        chamber=f"{c}",
        values=values,
        influence=influence,
        recording_of_track=np.zeros(len(influence), dtype=np.int64),
    )


def _slim(chamber: ChamberEvidence) -> ChamberEvidence:
    """Without its filaments, of which the interval knows nothing: drawing them takes time."""
    nothing = np.zeros((1, chamber.influence.shape[1]))
    return replace(chamber, influence=nothing, recording_of_track=np.zeros(1, dtype=np.int64))


def experiment(designs: Sequence[Design], rng: np.random.Generator) -> list[tuple[float, ...]]:
    """For each quantity (held, half width, borrowed, held by Student's t, its half width)."""
    shared = DAY * rng.standard_normal((max(d.days for d in designs), 2))
    drawn = [chambers_of(design, shared, rng) for design in designs]
    own, of_day = drawn[0]
    borrowed = borrowed_spreads(
        {f"condition {i}": [(them, COLUMNS)] for i, (them, _) in enumerate(drawn)},
        control="condition 1",
        settings=SETTINGS,
    )["condition 0"]
    combined = combine([_slim(c) for c in own], settings=SETTINGS, rng=rng)
    found = estimates(combined, COLUMNS, settings=SETTINGS, borrowed=borrowed)
    values = np.array([c.values for c in own])
    of_days = values.reshape(len(of_day), -1, 2).mean(axis=1)
    top = of_days if len(of_days) > 1 else values
    rows = []
    for key, truth in TRUTH.items():
        one = found[key]
        day_truth = _quantity(key, of_day.mean(axis=0)) if len(of_day) == 1 else truth
        target = truth if one.covers == "days" else day_truth
        t_low, t_high = _students_t(key, top)
        rows.append(
            (
                not (one.low > target or one.high < target),
                (one.high - one.low) / 2 / truth,
                key in borrowed,
                not (t_low > day_truth or t_high < day_truth),
                (t_high - t_low) / 2 / truth,
            )
        )
    return rows


def _quantity(key: str, values: Floats) -> float:
    v, d = values
    return {"speed_um_s": v, "rotational_diffusion_rad2_s": d}.get(key, v / d)


def _students_t(key: str, top: Floats) -> tuple[float, float]:
    """Of the lengths on the scale of curvature, inverted; an end beyond a straight path is open."""
    if key != "persistence_length_um":
        each = top[:, 0] if key == "speed_um_s" else top[:, 1]
        low, high = stats.t.interval(0.95, len(each) - 1, each.mean(), stats.sem(each))
        return max(low, 0.0), high
    each = top[:, 1] / top[:, 0]
    low, high = stats.t.interval(0.95, len(each) - 1, each.mean(), stats.sem(each))
    return 1 / high, 1 / low if low > 0 else np.nan


def median_width(widths: Floats) -> float:
    """An open interval is wider than any other."""
    return float(np.median(np.where(np.isnan(widths), np.inf, widths)))


def run(case: str, n: int, seed: int) -> None:
    n = n // 4 if case.startswith("WRONG") else n
    began = time.perf_counter()
    table = np.array(
        [experiment(CASES[case], np.random.default_rng([seed, i])) for i in range(n)], dtype=float
    )
    each = 1e3 * (time.perf_counter() - began) / n
    print(f"\n{case}: {n} experiments, {each:.0f} ms each")
    for j, key in enumerate(TRUTH):
        held, width, borrowed, t_held, t_width = table[:, j].T
        half, own = median_width(width), median_width(t_width)
        print(
            f"  {key:28s} coverage {held.mean():.3f} ± {_error(held.mean(), n):.3f}   half width "
            f"{100 * half:5.1f} %   borrowed in {100 * borrowed.mean():3.0f} %   |   Student's t: "
            f"{t_held.mean():.3f}, {100 * own:5.1f} %   ratio {half / own:.2f}"
        )


def _error(coverage: float, n: int) -> float:
    return float((coverage * (1 - coverage) / n) ** 0.5)


def shared_days(n: int, seed: int) -> None:
    """Why the variance of days is not pooled over conditions that share their days."""
    rng = np.random.default_rng(seed)
    a, k = 3, 3
    chamber = np.sqrt((CHAMBER[0] ** 2 + FILAMENT[0] ** 2 / 33) / 2)
    x = DAY[0] * rng.standard_normal((n, a, 1)) + chamber * rng.standard_normal((n, a, k))
    square = x.var(axis=1, ddof=1).mean(axis=1)
    own = np.abs(x[:, :, 0].mean(axis=1))
    of_days = x.mean(axis=2).var(axis=1, ddof=1)
    rest = (square - of_days) / (1 - 1 / k)
    df = square**2 / (of_days**2 / (a - 1) + ((1 - 1 / k) * rest) ** 2 / ((a - 1) * (k - 1)))
    for name, freedom in (("as if independent", k * (a - 1)), ("Satterthwaite", df)):
        held = np.mean(own < stats.t.ppf(0.975, freedom) * np.sqrt(square / a))
        print(
            f"  day variance pooled over 3 conditions of the same 3 days, {name}: "
            f"{held:.3f} ± {_error(held, n):.3f}"
        )


def straight(turning: float) -> Callable[[np.random.Generator], ChamberEvidence]:
    """3 × 2 chambers whose D_r has an error of 0.001 and, like a likelihood, stops at 0."""

    def draw(rng: np.random.Generator) -> list[ChamberEvidence]:
        raw = turning + 1e-3 * rng.standard_normal(6)
        return [
            _evidence(i // 2, i % 2, np.array([0.8, max(d, 0.0)]), np.zeros((2, 2)))
            for i, d in enumerate(raw)
        ]

    return draw


def motile(fraction: float, correlation: float) -> Callable[[np.random.Generator], ChamberEvidence]:
    """3 × 2 chambers of 33 filaments, half of the correlation between days, half in chambers."""
    size = (1 - correlation / 2) / (correlation / 2)

    def draw(rng: np.random.Generator) -> list[ChamberEvidence]:
        out = []
        for d in range(3):
            of_day = rng.beta(fraction * size, (1 - fraction) * size)
            for c in range(2):
                p = rng.beta(max(of_day * size, 1e-9), max((1 - of_day) * size, 1e-9))
                glides = (rng.random(33) < p).astype(float)
                influence = np.repeat(((glides - glides.mean()) / 33)[:, None], 2, axis=1)
                out.append(
                    ChamberEvidence(
                        day=f"day {d}",
                        chamber=f"{c}",
                        values=np.full(2, glides.mean()),
                        influence=influence,
                        recording_of_track=np.zeros(33, dtype=np.int64),
                        filaments=np.full(2, 33.0),
                    )
                )
        return out

    return draw


def near_limit(
    draw: Callable[[np.random.Generator], list[ChamberEvidence]],
    columns: dict[str, int],
    key: str,
    truth: float,
    n: int,
    seed: int,
) -> tuple[float, float, float]:
    """Coverage, share of one-sided limits, share without any interval."""
    held, limits, none = 0, 0, 0
    for i in range(n):
        rng = np.random.default_rng([seed, i])
        combined = combine([_slim(c) for c in draw(rng)], settings=SETTINGS, rng=rng)
        one = estimates(combined, columns, settings=SETTINGS)[key]
        there = np.isfinite([one.low, one.high])
        none += not there.any()
        limits += "one-sided" in one.method
        held += bool(there.any()) and not (one.low > truth or one.high < truth)
    return held / (n - none), limits / n, none / n


def limits(n: int, seed: int) -> None:
    print(f"\nnear a limit, 3 x 2: {n} experiments each")
    key = "rotational_diffusion_rad2_s"
    for turning in (0.0, 2.5e-4, 5e-4, 1e-3, 2e-3):
        held, limit, none = near_limit(straight(turning), COLUMNS, key, turning, n, seed)
        print(
            f"  D_r {1e3 * turning:4.2f} x its error     coverage {held:.3f} ± "
            f"{_error(held, n):.3f}   one-sided in {100 * limit:3.0f} %, none in {100 * none:.1f} %"
        )
    for fraction in (0.5, 0.9, 0.95, 0.98, 0.99, 0.998):
        for correlation in (0.02, 0.1):
            held, limit, none = near_limit(
                motile(fraction, correlation), MOTILE, "motile_fraction", fraction, n, seed
            )
            print(
                f"  motile {fraction:5.3f}, correlation {correlation:4.2f}   coverage {held:.3f} ± "
                f"{_error(held, n):.3f}   one-sided in {100 * limit:3.0f} %, none in "
                f"{100 * none:.1f} %"
            )


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--experiments", type=int, default=2000)
    parser.add_argument("--case", choices=[*CASES, "limits"], action="append")
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    for name in given.case or CASES:
        if name != "limits":
            run(name, given.experiments, given.seed)
    if not given.case:
        print()
        shared_days(100 * given.experiments, given.seed)
    if not given.case or "limits" in given.case:
        limits(given.experiments, given.seed)
