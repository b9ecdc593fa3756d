"""From cleaned recordings to the results of all conditions."""

from __future__ import annotations

import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

import glidefit
from glidefit.assay import Recording
from glidefit.errors import NothingLeft
from glidefit.evidence import REASONS, ChamberEvidence, CleanRecording, Combined
from glidefit.pipeline.side_by_side import side_by_side
from glidefit.results import ConditionResult, Estimate, RecordingResult, SettingRow, StudyResult
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

    results = [
        _condition(
            condition,
            control,
            slug,
            [r for r in recordings if r.condition == condition],
            preparations[condition],
            settings,
            seed,
        )
        for condition, control, slug in conditions
    ]
    if all(result.model == "none" for result in results):
        raise NothingLeft("\n".join(result.problems[0] for result in results))
    beside = side_by_side(results, sheet, settings=settings.values, seed=seed)
    return StudyResult(
        name=name,
        conditions=beside.conditions,
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


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionNumbers:
    """Fit, motility and intervals of one condition, before they are put on a page."""

    fitted: ConditionFit
    gliding: tuple[ChamberEvidence, ...]
    combined: Combined
    motile: Combined
    estimates: dict[str, Estimate]


def condition_numbers(
    recordings: Sequence[CleanRecording], *, settings: Settings, rng: np.random.Generator
) -> ConditionNumbers:
    """Fit the kept tracks of one condition, combine its chambers, make the intervals."""
    from glidefit.steps import fit, motility, summarise, uncertainty

    fitted = fit.fit(recordings, settings=settings.fit)
    gliding = motility.motility(recordings)
    interval = settings.interval
    combined = uncertainty.combine(
        fitted.chambers, settings=interval, rng=rng, n_scalars=len(fitted.columns)
    )
    motile = uncertainty.combine(gliding, settings=interval, rng=rng)
    known = uncertainty.estimates(combined, fitted.columns, settings=interval)
    known |= uncertainty.estimates(motile, motility.COLUMNS, settings=interval)
    if fitted.model != "circling":
        del known["turning_rate_rad_s"]
    known["smallest_speed_um_s"] = summarise.smallest_speed(recordings, level=interval.level)
    return ConditionNumbers(
        fitted=fitted, gliding=gliding, combined=combined, motile=motile, estimates=known
    )


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
    preparations: list[str],
    sourced: SourcedSettings,
    seed: int,
) -> ConditionResult:
    from glidefit.steps import ageing, motility, summarise, uncertainty

    settings = sourced.values
    level = settings.interval.level
    # The order of rows in a sheet means nothing, so it must not change which draws a day gets.
    recordings = sorted(recordings, key=lambda r: (r.day, r.chamber, r.recording))
    if not any(r.clean.kept.any() for r in recordings):
        return summarise.condition_result(
            condition=condition,
            slug=slug,
            control=control,
            recordings=recordings,
            level=level,
            problem=_why_nothing(condition, recordings, sourced),
        )
    # The same numbers whatever the other conditions of the sheet, and in whatever order.
    rng = np.random.default_rng([seed, zlib.crc32(condition.encode())])
    numbers = condition_numbers(recordings, settings=settings, rng=rng)
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
    points = motility.time_course(
        recordings, longest_lag_s=fitted.longest_lag_s, pooled=fitted.pooled
    )
    counted = summarise.counts(recordings)
    covers = summarise.generalises(condition, combined, preparations)
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
        undecided=sum(int((r.clean.kept & ~r.clean.decided).sum()) for r in recordings),
        checks=checks,
        model=fitted.model,
        left_out=fitted.left_out,
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
        tracks=summarise.tracks(recordings, fitted.track_speeds),
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
        ),
        model_checks=checks,
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
    return f"{text} {_closest(worst, recordings, settings)}"


def _closest(worst: str, recordings: Sequence[CleanRecording], settings: SourcedSettings) -> str:
    from glidefit.steps.clean import closest_miss

    return max(
        (closest_miss(r.clean, worst, settings=settings.values.clean) for r in recordings),
        key=lambda miss: miss[0],
    )[1]
