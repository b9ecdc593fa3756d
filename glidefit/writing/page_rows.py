"""The rows of the tables of a page: records of results turned into text."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from glidefit.quantities import QUANTITIES, Quantity
from glidefit.results import (
    ConditionResult,
    Drift,
    Estimate,
    LevelSpread,
    ModelCheck,
    ModelEvidence,
    RecordingResult,
    SettingRow,
    TrackResult,
    VariancePart,
)
from glidefit.writing.rounding import NONE, Rounded, percent, rounded, significant
from glidefit.writing.wording import counted, joined, named, sentence, visible

MAIN = (
    "speed_um_s",
    "rotational_diffusion_rad2_s",
    "persistence_length_um",
    "path_persistence_length_um",
    "motile_fraction",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class EstimateRow:
    """One estimate as a reader sees it."""

    quantity: Quantity
    shown: Rounded
    interval: str  # "95 % interval: 0.77 to 0.83, over days"
    method: str
    problem: str
    absent: bool  # the problem says why there is no value


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordingRow:
    """One recording: its calibration and what was measured on it."""

    recording: str
    kind: str
    place: str
    calibration: tuple[str, ...]
    noise: str
    smallest_speed: str
    drift: str
    tracks: str
    set_aside: str
    problems: tuple[str, ...]
    sha256: str


@dataclass(frozen=True, slots=True, kw_only=True)
class SpreadRow:
    """How much one level brings to the uncertainty of one quantity."""

    level: str
    units: str
    error: str
    bar: int  # percent of the widest bar


@dataclass(frozen=True, slots=True, kw_only=True)
class VariationRow:
    """How far one level differs, in one quantity."""

    level: str
    sd: str
    interval: str
    share: str


def main_estimates(condition: ConditionResult) -> tuple[EstimateRow, ...]:
    """The five numbers a reader looks for."""
    return tuple(_estimate(key, condition.estimates[key]) for key in MAIN)


def other_estimates(condition: ConditionResult) -> tuple[EstimateRow, ...]:
    """All other quantities, in the order of their declaration."""
    return tuple(_estimate(key, condition.estimates[key]) for key in QUANTITIES if key not in MAIN)


def _estimate(key: str, estimate: Estimate) -> EstimateRow:
    shown = rounded(estimate.value, estimate.low, estimate.high)
    interval = shown.interval
    if math.isfinite(estimate.low) or math.isfinite(estimate.high):
        kind = "limit" if estimate.method.startswith("one-sided") else "interval"
        # The unit stands behind the value, if there is one.
        unit = f" {QUANTITIES[key].unit}".rstrip() if shown.value == NONE else ""
        interval = f"{percent(estimate.level)} {kind}: {interval}{unit}"
        if estimate.covers:
            interval += f", over {visible(estimate.covers)}"
    return EstimateRow(
        quantity=QUANTITIES[key],
        shown=shown,
        interval=interval,
        method=sentence(estimate.method),
        problem=sentence(estimate.problem),
        absent=shown.value == NONE,
    )


def recording_rows(
    recordings: Iterable[RecordingResult], settings: Sequence[SettingRow]
) -> tuple[RecordingRow, ...]:
    """One row a recording."""
    return tuple(
        RecordingRow(
            recording=named(r.recording),
            kind=f"{r.kind} of {r.shape}s, {counted(r.n_frames, 'frame')}{_field(r.field_um)}",
            place=f"{named(r.day)}, chamber {named(r.chamber)}",
            calibration=_calibration(r, settings),
            noise=_with_unit(r.localization_error_um, "µm"),
            smallest_speed=_with_unit(r.smallest_speed_um_s, "µm/s"),
            drift=_drift(r.drift),
            tracks=f"{r.tracks_kept:,} of {counted(r.tracks_seen, 'track')} kept",
            set_aside=", ".join(f"{visible(why)} {n:,}" for why, n in r.set_aside.items() if n),
            problems=r.problems,
            sha256=r.sha256,
        )
        for r in recordings
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckRow:
    """One check of the model as text."""

    name: str
    value: str
    expected: str
    meaning: str
    holds: bool


def check_rows(checks: Iterable[ModelCheck]) -> tuple[CheckRow, ...]:
    """Checks of the model, with what was expected and how far off it may be."""
    return tuple(
        CheckRow(
            name=check.name,
            value=significant(check.value),
            expected="cannot tell"
            if math.isnan(check.value)
            else f"{check.expected:g} ± {check.tolerance:.2g}",
            meaning=check.meaning,
            holds=check.holds,
        )
        for check in checks
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class EvidenceRow:
    """One number from which the model was chosen, as text."""

    model: str
    name: str
    value: str
    needed: str
    speaks: str  # "for" or "against"
    meaning: str


def evidence_rows(evidence: Iterable[ModelEvidence]) -> tuple[EvidenceRow, ...]:
    """What spoke for and against each model that could have been chosen."""
    return tuple(
        EvidenceRow(
            model=one.model,
            name=one.name,
            value=significant(one.value),
            needed=f"above {one.needed:.2g}",
            speaks="for" if one.speaks_for else "against",
            meaning=one.meaning,
        )
        for one in evidence
    )


def shared_calibration(rows: Sequence[RecordingRow]) -> tuple[str, ...]:
    """The calibration of all recordings if it is one and the same, else nothing."""
    distinct = {row.calibration for row in rows}
    return rows[0].calibration if len(rows) > 1 and len(distinct) == 1 else ()


def _calibration(recording: RecordingResult, settings: Sequence[SettingRow]) -> tuple[str, ...]:
    r = recording
    pixel = "positions in µm"
    if math.isfinite(r.pixel_um):
        pixel = f"pixel {r.pixel_um:g} µm{_source(r.pixel_um_source)}"
    frame = f"frame interval {r.frame_s:g} s{_source(r.frame_s_source)}"
    return pixel, frame, _exposure(r, settings)


def _field(size_um: tuple[float, float]) -> str:
    width, height = size_um
    return f", {significant(width)} × {significant(height)} µm" if width > 0 and height > 0 else ""


def _exposure(recording: RecordingResult, settings: Sequence[SettingRow]) -> str:
    if math.isfinite(recording.exposure_s):
        return f"exposure {recording.exposure_s:g} s{_source(recording.exposure_source)}"
    share = next((row.value for row in settings if row.key == "fit.unknown_exposure"), "")
    try:
        assumed = float(share) * recording.frame_s
    except ValueError:
        return "exposure unknown"
    return f"exposure unknown, assumed {assumed:g} s"


def _source(source: str) -> str:
    return f" ({visible(source)})" if source else ""


def _with_unit(value: float, unit: str) -> str:
    return f"{significant(value)} {unit}" if math.isfinite(value) else NONE


def _drift(drift: Drift) -> str:
    note = visible(drift.note)
    if not drift.measured:
        return note if note.startswith("not measured") else f"not measured: {note}".rstrip(": ")
    speed = significant(drift.speed_um_s, digits=2)
    far = significant(drift.largest_um, digits=2)
    objects = counted(drift.n_objects, "stuck object")
    done = note or ("subtracted" if drift.subtracted else "not subtracted")
    return f"{speed} µm/s, up to {far} µm, from {objects}; {done}"


def spread_tables(
    spread: Iterable[LevelSpread],
) -> tuple[tuple[str, tuple[SpreadRow, ...], str], ...]:
    """For each quantity its label, a row a level, and the level that brings most."""
    by_quantity: dict[str, list[LevelSpread]] = {}
    for item in spread:
        if math.isfinite(item.relative_error):
            by_quantity.setdefault(item.quantity, []).append(item)
    tables = []
    for key, items in by_quantity.items():
        label = QUANTITIES[key].label if key in QUANTITIES else visible(key)
        widest = max(items, key=lambda item: item.relative_error)
        rows = tuple(_spread(item, widest.relative_error) for item in items)
        advice = f"Most comes from {visible(widest.level)}."
        tables.append((label, rows, advice if widest.relative_error > 0 else ""))
    return tuple(tables)


def _spread(item: LevelSpread, widest: float) -> SpreadRow:
    bar = round(100 * item.relative_error / widest) if widest > 0 else 0
    return SpreadRow(
        level=visible(item.level),
        units=f"{item.units:,}",
        error=percent(item.relative_error),
        bar=bar,
    )


_VARIATION_LEVELS = {
    "days": "days",
    "day × condition": "of which in this condition's own way",
    "chambers": "chambers of a day",
    "filaments": "filaments, on a chamber's mean",
}


def variation_tables(
    variation: Iterable[VariancePart],
) -> tuple[tuple[str, str, tuple[VariationRow, ...]], ...]:
    """For each quantity its label, the level of its intervals, and a row a level."""
    by_quantity: dict[str, list[VariancePart]] = {}
    for part in variation:
        by_quantity.setdefault(part.quantity, []).append(part)
    return tuple(
        (
            QUANTITIES[key].label if key in QUANTITIES else visible(key),
            percent(parts[0].confidence),
            tuple(
                VariationRow(
                    level=_VARIATION_LEVELS.get(part.level, visible(part.level)),
                    sd=percent(part.relative_sd),
                    interval=f"{percent(part.low).removesuffix(' %')} to {percent(part.high)}",
                    share=percent(part.share),
                )
                for part in parts
            ),
        )
        for key, parts in by_quantity.items()
    )


def own_values(tracks: Iterable[TrackResult]) -> str:
    """What the table of tracks says of each, and how well; "" where no track has its own D_r."""
    kept = [t for t in tracks if t.kept]
    known = [t for t in kept if math.isfinite(t.rotational_diffusion_rad2_s)]
    if not known:
        return ""
    factors = sorted(
        (t.rotational_diffusion_high_rad2_s / t.rotational_diffusion_low_rad2_s) ** 0.5
        for t in known
    )
    errors = sorted(t.speed_error_um_s / t.speed_um_s for t in kept if t.speed_error_um_s > 0)
    text = (
        "tables/per_track.csv has what each track alone says: its speed with a standard error"
        f"{f' (± {percent(errors[len(errors) // 2])} in the median)' if errors else ''}, and its "
        "rotational diffusion as median and 68 % interval, one standard error on the log scale "
        f"(a factor of {significant(factors[len(factors) // 2], digits=2)} either way in the "
        "median). That of a single track is vague, so it is the posterior under a weak prior: "
        "log D_r is normal about the value of the chamber, a factor of 10 being one standard "
        "deviation."
    )
    without = len(kept) - len(known)
    return f"{text} {counted(without, 'kept track')} cannot tell it." if without else text


def summary(condition: ConditionResult) -> str:
    """What went into a condition: "3 days, 6 chambers, 12 recordings; 168 of 204 tracks kept"."""
    n = condition.counts
    parts = [
        counted(n.days, "day"),
        counted(n.chambers, "chamber"),
        counted(n.recordings, "recording"),
    ]
    return f"{joined(parts)}; {n.tracks_kept:,} of {counted(n.tracks_seen, 'track')} kept"


def problem_count(condition: ConditionResult, recordings: Iterable[RecordingResult]) -> int:
    """How many problems of a condition and of its recordings wait to be read on its page."""
    own = [r for r in recordings if r.condition == condition.condition]
    return len(condition.problems) + sum(len(r.problems) for r in own)
