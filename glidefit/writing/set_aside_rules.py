"""Why a track is set aside, in one line for each rule."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from glidefit.results import Counts, SettingRow
from glidefit.writing.rounding import percent
from glidefit.writing.wording import visible

# Reason: (what the rule says, the setting that holds its limit).
_RULES = {
    "stuck": (
        "Strayed no farther from its mean position than noise and the stage explain. "
        "It still counts in the motile fraction, as not gliding.",
        "clean.stuck",
    ),
    "pivoting": ("Turned on the spot instead of getting away from it.", "clean.pivot_extent"),
    "detached": (
        "More likely floats beside the motors than glides: its steps do not keep a direction.",
        "",
    ),
    "jump": (
        "Took a step too long for its speed: most likely two tracers joined to one track.",
        "clean.jump",
    ),
    "unclear": (
        "Was cut by the edge of the field or hidden by others in all but two frames or fewer.",
        "",
    ),
    "short": ("Has fewer than three positions: no track yet, but counted.", ""),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """One row of the table of what was kept and set aside."""

    name: str
    rule: str
    limit: str  # "2.0 × noise", "" if the rule has none
    tracks: int
    tracks_share: str
    frames: int
    frames_share: str


def outcomes(counts: Counts, settings: Sequence[SettingRow]) -> tuple[Outcome, ...]:
    """The kept tracks, then each reason, the most frequent first."""
    reasons = sorted(counts.set_aside, key=lambda r: (-counts.set_aside[r], r))
    limits = {row.key: f"{row.value} {row.unit}".strip() for row in settings}
    rows = [("kept", "Enters the fit.", "", counts.tracks_kept, counts.frames_kept)]
    for reason in reasons:
        rule, key = _RULES.get(reason, ("", ""))
        frames = counts.frames_set_aside.get(reason, 0)
        rows.append((visible(reason), rule, limits.get(key, ""), counts.set_aside[reason], frames))
    return tuple(
        Outcome(
            name=name,
            rule=rule,
            limit=limit,
            tracks=tracks,
            tracks_share=percent(tracks, counts.tracks_seen),
            frames=frames,
            frames_share=percent(frames, counts.frames_seen),
        )
        for name, rule, limit, tracks, frames in rows
    )
