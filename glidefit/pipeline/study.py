"""From cleaned recordings to the results of all conditions."""

from __future__ import annotations

import zlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

import glidefit
from glidefit.assay import Recording
from glidefit.errors import NothingLeft
from glidefit.evidence import (
    REASONS,
    SHORT,
    BorrowedSpread,
    ChamberEvidence,
    CleanRecording,
    Combined,
)
from glidefit.pipeline.side_by_side import side_by_side
from glidefit.results import (
    ConditionResult,
    Estimate,
    RecordingResult,
    SettingRow,
    StudyResult,
    TimePoint,
)
from glidefit.settings import Settings, SourcedSettings, declarations

if TYPE_CHECKING:
    from glidefit.steps.fit import ConditionFit


def study(
    *,
    name: str,
    conditions: Sequence[tuple[str, bool, str]],
    recordings: Sequence[CleanRecording],
    recording_results: Sequence[RecordingResult],
    preparations: dict[str, list[str]],
    settings: SourcedSettings,
    seed: int,
    sheet_sha256: str,
    sheet: Sequence[Recording] = (),
) -> StudyResult:
    """Fit every condition and put the study together.

    Parameters
    ----------
    name : str
        Of the study.
    conditions : sequence of (name, is the control, slug)
        In the order of the pages.
    recordings, recording_results : sequences
        In the order of the sheet.
    preparations : dict
        By condition, the preparations of its recordings.
    settings : SourcedSettings
    seed : int
    sheet_sha256 : str
    sheet : sequence of Recording
        Rows of the sheet: start times, and columns of numbers for response curves.

    Raises
    ------
    NothingLeft
        If that is true of all conditions.
    """
    from glidefit.steps.fields import same_fields
    from glidefit.steps.fit import with_floating

    by_condition = {
        # The order of rows in a sheet means nothing, so it must not change which draws a day gets.
        condition: sorted(
            (r for r in recordings if r.condition == condition),
            key=lambda r: (r.day, r.chamber, r.recording),
        )
        for condition, _, _ in conditions
    }
    by_condition = {
        condition: with_floating(own, settings=settings.values.fit)
        for condition, own in by_condition.items()
    }
    numbers = _all_numbers(
        by_condition,
        control=next((name for name, control, _ in conditions if control), ""),
        settings=settings.values,
        seed=seed,
    )
    films = {r.recording for r in recording_results if (r.kind, r.shape) == ("video", "filament")}
    results = [
        _condition(
            condition,
            control,
            slug,
            by_condition[condition],
            numbers.get(condition),
            preparations[condition],
            settings,
            from_contours=any(r.recording in films for r in by_condition[condition]),
        )
        for condition, control, slug in conditions
    ]
    if all(result.model == "none" for result in results):
        raise NothingLeft("\n".join(result.problems[0] for result in results))
    beside = side_by_side(results, sheet, settings=settings.values, seed=seed)
    return StudyResult(
        name=name,
        conditions=tuple(_with_variation(beside.conditions, seed=seed)),
        comparisons=beside.comparisons,
        pairs=beside.pairs,
        responses=beside.responses,
        day_charts=beside.day_charts,
        recordings=tuple(recording_results),
        settings=_setting_rows(settings),
        problems=tuple(same_fields(recordings)),
        seed=seed,
        version=glidefit.__version__,
        sheet_sha256=sheet_sha256,
    )


def _with_variation(results: Sequence[ConditionResult], *, seed: int) -> list[ConditionResult]:
    """The results with their variance components, for which all conditions must be there."""
    from glidefit.steps.components import variation

    out = []
    for result in results:
        rng = np.random.default_rng([seed, zlib.crc32(result.condition.encode()), 1])
        out.append(replace(result, variation=variation(results, result, rng=rng)))
    return out


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionNumbers:
    """Fit, motility and intervals of one condition, before they are put on a page."""

    fitted: ConditionFit
    gliding: tuple[ChamberEvidence, ...]
    combined: Combined
    motile: Combined
    estimates: dict[str, Estimate]
    borrowed: dict[str, BorrowedSpread] = field(default_factory=dict)


def condition_numbers(
    recordings: Sequence[CleanRecording], *, settings: Settings, rng: np.random.Generator
) -> ConditionNumbers:
    """Fit the kept tracks of one condition, combine its chambers, make the intervals."""
    from glidefit.steps import fit, motility, summarise, uncertainty

    fitted = fit.fit(recordings, settings=settings.fit)
    gliding = motility.motility(recordings, passive=fitted.model == "passive")
    interval = settings.interval
    combined = uncertainty.combine(
        fitted.chambers, settings=interval, rng=rng, n_scalars=len(fitted.columns)
    )
    motile = uncertainty.combine(gliding, settings=interval, rng=rng)
    numbers = ConditionNumbers(
        fitted=fitted, gliding=gliding, combined=combined, motile=motile, estimates={}
    )
    known = _estimates(numbers, settings=settings)
    known["smallest_speed_um_s"] = summarise.smallest_speed(recordings, level=interval.level)
    return replace(numbers, estimates=known)


def with_borrowed(
    numbers: Mapping[str, ConditionNumbers], *, control: str, settings: Settings
) -> dict[str, ConditionNumbers]:
    """The same values, with the intervals that the conditions of a study give each other.

    Parameters
    ----------
    numbers : mapping
        By condition.
    control : str
        Its name; "" without one.
    settings : Settings
    """
    from glidefit.steps import motility
    from glidefit.steps.uncertainty.borrowing import borrowed_spreads

    spreads = borrowed_spreads(
        {
            name: ((one.fitted.chambers, one.fitted.columns), (one.gliding, motility.COLUMNS))
            for name, one in numbers.items()
        },
        control=control,
        settings=settings.interval,
    )
    out = {}
    for name, one in numbers.items():
        borrowing = replace(one, borrowed=spreads[name])
        known = _estimates(borrowing, settings=settings)
        out[name] = replace(borrowing, estimates=one.estimates | known)
    return out


def _estimates(numbers: ConditionNumbers, *, settings: Settings) -> dict[str, Estimate]:
    """Without the quantities that the model does not have."""
    from glidefit.steps import motility, summarise, uncertainty

    known: dict[str, Estimate] = {}
    for combined, columns in (
        (numbers.combined, numbers.fitted.columns),
        (numbers.motile, motility.COLUMNS),
    ):
        known |= uncertainty.estimates(
            combined, columns, settings=settings.interval, borrowed=numbers.borrowed
        )
    speed = known.pop(uncertainty.SPEED_OF_PASSIVE)
    if numbers.fitted.model == "passive":
        return summarise.passive(known, speed)
    del known["diffusion_um2_s"]
    if "circling" not in numbers.fitted.model:
        del known["turning_rate_rad_s"]
    if "pausing" not in numbers.fitted.model:
        known = summarise.without_pauses(known, level=settings.interval.level)
    given = numbers.fitted.known
    for name, key in (
        ("sideways_diffusion", "sideways_diffusion_um2_s"),
        ("error_variance_along", "further_error_along_um"),
    ):
        if name not in given.freed and name not in given.fixed:
            del known[key]
    for key in set(given.held) & set(known):
        known[key] = Estimate(
            value=known[key].value, level=settings.interval.level, method="held at the value given"
        )
    return known


def _all_numbers(
    by_condition: Mapping[str, Sequence[CleanRecording]],
    *,
    control: str,
    settings: Settings,
    seed: int,
) -> dict[str, ConditionNumbers]:
    """Numbers of all conditions that keep a track; each draws the same whatever the others."""
    numbers = {
        condition: condition_numbers(
            recordings,
            settings=settings,
            rng=np.random.default_rng([seed, zlib.crc32(condition.encode())]),
        )
        for condition, recordings in by_condition.items()
        if any(r.clean.kept.any() for r in recordings)
    }
    return with_borrowed(numbers, control=control, settings=settings)


def _setting_rows(settings: SourcedSettings) -> tuple[SettingRow, ...]:
    rows = []
    for d in declarations():
        value = getattr(getattr(settings.values, d.section), d.name)
        text = "chosen from the data" if value is None else f"{value}"
        rows.append(
            SettingRow(
                key=d.key, value=text, unit=d.unit, source=settings.source(d.key), help=d.help
            )
        )
    return tuple(rows)


def _condition(
    condition: str,
    control: bool,
    slug: str,
    recordings: Sequence[CleanRecording],
    numbers: ConditionNumbers | None,
    preparations: list[str],
    sourced: SourcedSettings,
    *,
    from_contours: bool,
) -> ConditionResult:
    from glidefit.steps import ageing, fit, motility, summarise, uncertainty

    settings = sourced.values
    level = settings.interval.level
    if numbers is None:
        return summarise.condition_result(
            condition=condition,
            slug=slug,
            control=control,
            recordings=recordings,
            level=level,
            problem=_why_nothing(condition, recordings, sourced),
        )
    fitted, combined, motile = numbers.fitted, numbers.combined, numbers.motile

    def band(columns: slice) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        return uncertainty.band(combined, columns, settings=settings.interval)

    msd = tuple(
        summarise.curve(c.lag_s, c.fitted, c.frame_s, band(c.msd), band(c.model))
        for c in fitted.curves
    )
    heading = tuple(
        summarise.curve(
            c.heading_lag_s, c.heading_fitted, c.frame_s, band(c.heading), band(c.heading_model)
        )
        for c in fitted.curves
    )
    points: tuple[TimePoint, ...] = ()
    if fitted.model != "passive":
        points = motility.time_course(
            recordings, longest_lag_s=fitted.longest_lag_s, pooled=fitted.pooled
        )
    counted = summarise.counts(recordings)
    covers = summarise.generalises(condition, combined, preparations, numbers.borrowed)
    estimates = summarise.all_estimates(numbers.estimates, level=level)
    drawn = summarise.drawn(recordings, most=settings.page.drawn_tracks)
    by_chamber = {
        (e.day, e.chamber): {name: float(e.values[i]) for name, i in fitted.columns.items()}
        for e in fitted.chambers
    }
    for e in numbers.gliding:
        by_chamber.setdefault((e.day, e.chamber), {}).update(
            {name: float(e.values[i]) for name, i in motility.COLUMNS.items()}
        )
    checks = summarise.model_checks(fitted.innovation, combined, fitted.columns, model=fitted.model)
    problems = summarise.problems(
        estimates=estimates,
        combined=combined,
        columns=fitted.columns,
        msd=msd,
        fit_problems=fitted.problems,
        undecided=sum(
            int((~r.clean.decided & (r.clean.reason != SHORT)).sum()) for r in recordings
        ),
        checks=checks,
        model=fitted.model,
        left_out=fitted.left_out,
        from_contours=from_contours,
        heading_sd=_heading_sd(recordings, combined, fitted.columns),
        kept=counted.tracks_kept,
    )
    return ConditionResult(
        condition=condition,
        slug=slug,
        control=control,
        model=fitted.model,
        counts=counted,
        estimates=estimates,
        problems=(*problems, *ageing.ageing(points)),
        msd=msd,
        heading_correlation=heading,
        chambers=summarise.chambers(recordings, by_chamber),
        tracks=summarise.tracks(
            recordings, fitted.track_speeds, fit.track_diffusions(recordings, fitted)
        ),
        drawn=drawn,
        time_points=points,
        spread=(
            *summarise.spread_by_level(combined, fitted.columns),
            *summarise.spread_by_level(motile, motility.COLUMNS),
        ),
        generalises=covers,
        longest_lag_s=fitted.longest_lag_s,
        heading_diffusion_rad2_s=float(combined.value[fitted.columns["heading_diffusion"]]),
        methods=summarise.methods(
            recordings=recordings,
            counted=counted,
            longest_lag_s=fitted.longest_lag_s,
            generalises=covers,
            level=level,
            resamples=settings.interval.resamples,
            version=glidefit.__version__,
            method=fitted.method,
            model=fitted.model,
        ),
        model_checks=checks,
        model_evidence=fitted.evidence,
    )


def _heading_sd(
    recordings: Sequence[CleanRecording], combined: Combined, columns: Mapping[str, int]
) -> float:
    """How vaguely the positions tell the heading, in rad; 0 where the values do not say."""
    from glidefit.kernels.likelihood import heading_uncertainty

    speed, diffusion, variance = (
        float(combined.value[columns[name]])
        for name in ("speed", "rotational_diffusion", "localization_variance")
    )
    if not (speed > 0 and diffusion > 0 and variance > 0):
        return 0.0
    return heading_uncertainty(
        speed=speed,
        rotational_diffusion=diffusion,
        localization_error=float(np.sqrt(variance)),
        frame_s=float(np.median([r.frame_s for r in recordings])),
    )


def _why_nothing(
    condition: str, recordings: Sequence[CleanRecording], settings: SourcedSettings
) -> str:
    """Which rule set everything aside, and by how much it failed."""
    reason = np.concatenate([r.clean.reason for r in recordings])
    counts = {name: int((reason == name).sum()) for name in REASONS if (reason == name).any()}
    listed = ", ".join(f"{n} {name}" for name, n in counts.items())
    text = (
        f"{condition}: nothing left to fit; all of {len(reason)} tracks were set aside ({listed})."
    )
    worst = max(counts, key=lambda name: counts[name])
    return f"{text} {_closest(worst, recordings)}"


def _closest(worst: str, recordings: Sequence[CleanRecording]) -> str:
    from glidefit.steps.clean import closest_miss

    return max(
        (closest_miss(r.clean, worst) for r in recordings),
        key=lambda miss: miss[0],
    )[1]
