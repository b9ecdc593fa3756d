"""The figures of a page, each an inline SVG with its heading, caption and alternative text."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from glidefit.results import ConditionResult, RecordingResult
from glidefit.writing.drawing import Drawing
from glidefit.writing.lag_figures import heading_correlation, mean_squared_displacement
from glidefit.writing.level_figures import rotational_diffusion_by_chamber, speeds_by_chamber
from glidefit.writing.overview_figures import overview, overview_caption
from glidefit.writing.svg_tracks import Fields, draw_tracks
from glidefit.writing.time_figures import course_within_chambers, course_within_recordings

__all__ = ["ConditionFigures", "condition_figures", "overview", "overview_caption"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionFigures:
    """All figures of a condition's page; a group is empty if there is nothing to draw."""

    tracks: Fields
    levels: tuple[Drawing, ...]
    times: tuple[Drawing, ...]
    lags: tuple[Drawing, ...]


def condition_figures(
    condition: ConditionResult, recordings: Sequence[RecordingResult]
) -> ConditionFigures:
    """Draw everything that a condition's page shows.

    Parameters
    ----------
    condition : ConditionResult
    recordings : sequence of RecordingResult
        At least those of the condition; they know the fields of view.
    """
    return ConditionFigures(
        tracks=draw_tracks(condition, recordings),
        levels=_present(speeds_by_chamber(condition), rotational_diffusion_by_chamber(condition)),
        times=_present(course_within_recordings(condition), course_within_chambers(condition)),
        lags=_present(mean_squared_displacement(condition), heading_correlation(condition)),
    )


def _present(*drawings: Drawing | None) -> tuple[Drawing, ...]:
    return tuple(drawing for drawing in drawings if drawing is not None)
