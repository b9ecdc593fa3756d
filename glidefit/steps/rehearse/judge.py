"""What many simulated experiments of one design found, against their truth."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from glidefit.designs import (
    ChamberOutcome,
    ConditionRehearsal,
    FilmedDesign,
    Outcome,
    RehearsedQuantity,
)
from glidefit.kernels.power import binomial_p_value
from glidefit.quantities import QUANTITIES
from glidefit.steps.rehearse.against_bound import against_bound, bound_sentences

Floats = NDArray[np.float64]

REHEARSED = (
    "speed_um_s",
    "rotational_diffusion_rad2_s",
    "persistence_length_um",
    "motile_fraction",
)
SHOWN = 100
CONSISTENT, TOO_LOW, TOO_HIGH, NO_INTERVAL = (
    "consistent",
    "too low",
    "too high",
    "no interval",
)
_SURE = 0.05


def judge(
    design: FilmedDesign,
    outcomes: Sequence[Mapping[str, Outcome]],
    *,
    level: float,
    chambers: Sequence[Sequence[ChamberOutcome]] = (),
) -> ConditionRehearsal:
    """Bias, scatter and coverage of every quantity over simulated experiments.

    Parameters
    ----------
    design : FilmedDesign
    outcomes : sequence of mapping
        By experiment, the outcome of each quantity.
    level : float
        Nominal confidence of the intervals.
    chambers : sequence of sequence of ChamberOutcome
        By experiment, its chambers; without them nothing is compared with the bound.
    """
    truth = design.truth
    quantities = tuple(
        replace(
            _quantity(key, truth[key], [one[key] for one in outcomes], level),
            against_bound=against_bound(
                key, [one[key].value / truth[key] - 1 for one in outcomes], chambers
            )
            if chambers and truth[key] > 0
            else None,
        )
        for key in REHEARSED
        if math.isfinite(truth[key])
    )
    said = [_sentence(q, len(outcomes), level, first=n == 0) for n, q in enumerate(quantities)]
    return ConditionRehearsal(
        design=design, quantities=quantities, said=(*said, *bound_sentences(quantities))
    )


def _quantity(
    key: str, truth: float, outcomes: Sequence[Outcome], level: float
) -> RehearsedQuantity:
    table = np.array([(o.value, o.low, o.high) for o in outcomes])
    value, low, high = table.T
    scale = truth if truth > 0 else math.nan
    off = value[np.isfinite(value)] / scale - 1
    there = np.isfinite(low) | np.isfinite(high)
    n = int(there.sum())
    # NaN is an open end, and nothing is beyond it.
    held = int((there & ~(low > truth) & ~(high < truth)).sum())
    p = binomial_p_value(held, n, share=level) if n else math.nan
    coverage = held / n if n else math.nan
    widths = (high - low)[there] / 2 / scale
    return RehearsedQuantity(
        quantity=key,
        truth=truth,
        with_value=len(off),
        bias=_short(np.mean(off)) if len(off) else math.nan,
        bias_error=_short(np.std(off, ddof=1) / len(off) ** 0.5) if len(off) > 1 else math.nan,
        rmse=_short(np.sqrt(np.mean(off**2))) if len(off) else math.nan,
        with_interval=n,
        held=held,
        coverage=coverage,
        coverage_error=_monte_carlo_error(coverage, n, level),
        p_value=_short(p),
        verdict=_verdict(coverage, p, level),
        # An open interval is wider than any other.
        half_width=_short(_median([w if math.isfinite(w) else math.inf for w in widths])),
        shown=tuple(outcomes[:SHOWN]),
    )


def _median(values: Sequence[float]) -> float:
    middle = float(np.sort(values)[len(values) // 2]) if len(values) else math.nan
    return middle if math.isfinite(middle) else math.nan


def _short(value: float) -> float:
    return float(f"{value:.6g}")


def _monte_carlo_error(coverage: float, n: int, level: float) -> float:
    """Binomial standard error; where all or none held, that of the nominal level."""
    if n == 0:
        return math.nan
    share = coverage if 0 < coverage < 1 else level
    return _short(math.sqrt(share * (1 - share) / n))


def _verdict(coverage: float, p_value: float, level: float) -> str:
    if math.isnan(coverage):
        return NO_INTERVAL
    if p_value >= _SURE:
        return CONSISTENT
    return TOO_LOW if coverage < level else TOO_HIGH


_MEANS = {
    CONSISTENT: "consistent with {}",
    TOO_LOW: "less than {}, so the interval is too narrow and is to be quoted with care",
    TOO_HIGH: "more than {}, so the interval is wider than it need be",
}


def _sentence(q: RehearsedQuantity, n: int, level: float, *, first: bool) -> str:
    label, nominal = QUANTITIES[q.quantity].label, f"{100 * level:g} %"
    start = f"In {n} simulated experiments of this very design the"
    if q.with_interval == 0:
        return f"{start} {label} had no interval: nothing in the design repeats."
    some = "" if q.with_interval == n else f" ({q.with_interval} of {n} had one)"
    whose = f"{start} {nominal} interval for the" if first else "That for the"
    truth = "held the truth" if first else "held it"
    return (
        f"{whose} {label}{some} {truth} in {100 * q.coverage:.3g} % "
        f"(± {100 * q.coverage_error:.1f} %): {_MEANS[q.verdict].format(nominal)}."
    )
