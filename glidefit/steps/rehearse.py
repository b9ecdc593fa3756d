"""Rehearse an experiment: how it was filmed, and what many simulated ones of its kind found."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.designs import (
    WITH_COMPONENTS,
    Components,
    ConditionRehearsal,
    FilmedDesign,
    Outcome,
    RehearsedQuantity,
)
from glidefit.kernels.power import binomial_p_value
from glidefit.quantities import QUANTITIES
from glidefit.results import ConditionResult, RecordingResult

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


def filmed_design(
    condition: ConditionResult,
    recordings: Sequence[RecordingResult],
    components: Sequence[Components],
    *,
    unknown_exposure: float,
) -> FilmedDesign:
    """How a condition was filmed, and what it showed.

    Parameters
    ----------
    condition : ConditionResult
        With a speed.
    recordings : sequence of RecordingResult
        Those of the condition.
    components : sequence of Components
        Of the quantities of `WITH_COMPONENTS` that the condition has.
    unknown_exposure : float
        Share of the frame interval that stands for an exposure that nobody told.
    """
    notes: list[str] = []
    frame_s = _usual([r.frame_s for r in recordings], "frame interval", "s", notes)
    n_frames = round(_usual([float(r.n_frames) for r in recordings], "frames", "", notes))
    exposure = _usual(
        [
            r.exposure_s if math.isfinite(r.exposure_s) else unknown_exposure * r.frame_s
            for r in recordings
        ],
        "exposure",
        "s",
        notes,
    )
    chambers = Counter((r.day, r.chamber) for r in recordings)
    each = _usual([float(n) for n in chambers.values()], "recordings per chamber", "", notes)
    frames, seen = condition.counts.frames_set_aside, max(condition.counts.frames_seen, 1)
    estimates = {key: e.value for key, e in condition.estimates.items()}

    def known(key: str, otherwise: float, instead: str) -> float:
        if math.isfinite(estimates[key]) and estimates[key] > 0:
            return estimates[key]
        notes.append(f"The {QUANTITIES[key].label} is not resolved; {instead}.")
        return otherwise

    noise = float(np.nanmedian([0.0, *(r.localization_error_um for r in recordings)][1:]))
    speed = estimates["speed_um_s"]
    return FilmedDesign(
        condition=condition.condition,
        slug=condition.slug,
        frame_s=frame_s,
        exposure_s=min(exposure, frame_s),
        n_frames=n_frames,
        field_um=_field(recordings, notes),
        recordings_per_chamber=round(each),
        filaments=_filaments(condition, recordings),
        motile_fraction=known("motile_fraction", 1.0, "all filaments are taken to glide"),
        stuck=frames.get("stuck", 0) / seen,
        pivoting=frames.get("pivoting", 0) / seen,
        detached=frames.get("detached", 0) / seen,
        localization_error_um=known(
            "localization_error_um", noise, f"the noise of the tracks, {noise:.3g} µm, is taken"
        ),
        speed_um_s=speed,
        rotational_diffusion_rad2_s=known(
            "rotational_diffusion_rad2_s", 0.0, "the simulated paths are straight"
        ),
        longitudinal_diffusion_um2_s=known("translational_diffusion_um2_s", 0.0, "0 is taken"),
        filament_spread=min(known("speed_spread_um_s", 0.0, "0 is taken") / speed, 1.0),
        components=tuple(components),
        notes=tuple(notes),
    )


def _usual(values: Sequence[float], name: str, unit: str, notes: list[str]) -> float:
    """The commonest value; a note if there are others."""
    value, n = Counter(values).most_common(1)[0]
    if n < len(values):
        notes.append(
            f"Recordings differ in {name}; the commonest is simulated: {value:g} {unit}".rstrip()
            + "."
        )
    return value


def _field(recordings: Sequence[RecordingResult], notes: list[str]) -> tuple[float, float]:
    """Median field: without a declared one it is the extent of the tracks, never quite the same."""
    sides = np.array([r.field_um for r in recordings])
    width, height = np.median(sides, axis=0)
    if np.any(np.ptp(sides, axis=0) > 0.05 * sides.min(axis=0)):
        notes.append(
            f"Recordings differ in their fields; one of {width:.3g} × {height:.3g} µm is simulated."
        )
    return _short(width), _short(height)


def _filaments(
    condition: ConditionResult, recordings: Sequence[RecordingResult]
) -> tuple[tuple[float, ...], ...]:
    """Filaments in the field at a moment, by day and chamber: filament-frames over frames."""
    frames: dict[tuple[str, str], float] = {}
    for r in recordings:
        frames[r.day, r.chamber] = frames.get((r.day, r.chamber), 0.0) + r.n_frames
    seen = dict.fromkeys(frames, 0)
    for track in condition.tracks:
        seen[track.day, track.chamber] += track.n_positions
    days = sorted({day for day, _ in frames})
    return tuple(
        tuple(float(f"{seen[key] / frames[key]:.4g}") for key in sorted(frames) if key[0] == day)
        for day in days
    )


def judge(
    design: FilmedDesign, outcomes: Sequence[Mapping[str, Outcome]], *, level: float
) -> ConditionRehearsal:
    """Bias, scatter and coverage of every quantity over simulated experiments.

    Parameters
    ----------
    design : FilmedDesign
    outcomes : sequence of mapping
        By experiment, the outcome of each quantity.
    level : float
        Nominal confidence of the intervals.
    """
    truth = design.truth
    quantities = tuple(
        _quantity(key, truth[key], [one[key] for one in outcomes], level)
        for key in REHEARSED
        if math.isfinite(truth[key])
    )
    said = tuple(_sentence(q, len(outcomes), level, first=n == 0) for n, q in enumerate(quantities))
    return ConditionRehearsal(design=design, quantities=quantities, said=said)


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


def has_components(condition: ConditionResult) -> tuple[str, ...]:
    """Quantities of the condition of which components can be told."""
    return tuple(
        key
        for key in WITH_COMPONENTS
        if condition.estimates[key].value > 0
        and any(math.isfinite(getattr(c, key)) for c in condition.chambers)
    )
