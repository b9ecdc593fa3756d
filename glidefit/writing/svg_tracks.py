"""Tracks in the plane: one small drawing a recording, written without a plotting library.

Paths are integers in tenths of a px, relative, and thinned to what the eye can tell, so that
hundreds of tracks stay light and print sharp.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

import numpy as np
from numpy.typing import NDArray

from glidefit.results import ConditionResult, DrawnTrack, RecordingResult
from glidefit.writing.colours import hue, page_colour
from glidefit.writing.drawing import framed
from glidefit.writing.rounding import significant
from glidefit.writing.wording import counted, named, visible

Floats = NDArray[np.float64]
MOST_FIELDS = 12
_FIELD_PX = 220.0
_TENTHS = 10
_MARGIN = 6.0  # px around the field, for lines that touch its edge
_BAR_ROOM = 24.0  # px below it, for the scale bar
_COARSE_PX = 0.7  # steps shorter than this are not drawn


@dataclass(frozen=True, slots=True, kw_only=True)
class Field:
    """The drawing of one recording."""

    svg: str
    recording: str
    place: str  # "2026-03-02, chamber A"
    counts: str  # "20 kept, 3 set aside"


@dataclass(frozen=True, slots=True, kw_only=True)
class Fields:
    """Drawings of the recordings of a condition, all at the same scale."""

    fields: tuple[Field, ...]
    note: str  # "" if every recording is drawn


@dataclass(frozen=True, slots=True, kw_only=True)
class _Frame:
    left: float  # µm
    top: float
    width: float
    height: float
    known: bool  # the field of view, and not only the extent of the tracks


def draw_tracks(condition: ConditionResult, recordings: Sequence[RecordingResult]) -> Fields:
    """Kept and set-aside tracks of each recording, at most twelve recordings evenly chosen."""
    by_name = {r.recording: r for r in recordings}
    tracks: dict[str, list[DrawnTrack]] = {}
    for track in condition.drawn:
        if track.x_um:
            tracks.setdefault(track.recording, []).append(track)
    names = list(tracks)
    chosen = names
    if len(names) > MOST_FIELDS:
        chosen = [names[i * len(names) // MOST_FIELDS] for i in range(MOST_FIELDS)]
    frames = {name: _frame(tracks[name], by_name.get(name)) for name in chosen}
    widest = max((max(f.width, f.height) for f in frames.values()), default=1.0)
    scale = _FIELD_PX / widest
    fields = tuple(
        _field(n, name, tracks[name], frames[name], by_name.get(name), scale)
        for n, name in enumerate(chosen, start=1)
    )
    note = ""
    if len(chosen) < len(names):
        note = f"Drawn: {len(chosen)} of {counted(len(names), 'recording')}, evenly chosen."
    return Fields(fields=fields, note=note)


def _frame(tracks: Sequence[DrawnTrack], recording: RecordingResult | None) -> _Frame:
    """The field of view if it holds the tracks, else their extent."""
    x = np.concatenate([t.x_um for t in tracks])
    y = np.concatenate([t.y_um for t in tracks])
    if recording is not None:
        width, height = recording.field_um
        slack = 0.02 * max(width, height)
        if (
            width > 0
            and height > 0
            and min(x.min(), y.min()) >= -slack
            and x.max() <= width + slack
            and y.max() <= height + slack
        ):
            return _Frame(left=0, top=0, width=width, height=height, known=True)
    width = max(float(x.max() - x.min()), 1.0)
    height = max(float(y.max() - y.min()), 1.0)
    return _Frame(left=float(x.min()), top=float(y.min()), width=width, height=height, known=False)


def _field(
    n: int,
    name: str,
    tracks: Sequence[DrawnTrack],
    frame: _Frame,
    recording: RecordingResult | None,
    scale: float,
) -> Field:
    kept = [t for t in tracks if not t.reason]
    aside = [t for t in tracks if t.reason]
    key = f"field{n}"
    width = _tenths(frame.width * scale)
    height = _tenths(frame.height * scale)
    margin, room = _tenths(_MARGIN), _tenths(_BAR_ROOM)
    counts = f"{len(kept)} kept, {len(aside)} set aside"
    place = f"{named(recording.day)}, chamber {named(recording.chamber)}" if recording else ""
    body = (
        _start_mark(key)
        + _edge(width, height, dashed=not frame.known)
        + _group(aside, frame, scale, muted=True, key=key)
        + _group(kept, frame, scale, muted=False, key=key)
        + _scale_bar(width, height, frame, scale)
    )
    view = f"{-margin} {-margin} {width + 2 * margin} {height + room + 2 * margin}"
    svg = framed(
        body,
        key=key,
        view=view,
        title=f"Tracks of {named(name)}",
        description=f"{place}: {counts}; {significant(frame.width)} by "
        f"{significant(frame.height)} µm.",
    )
    return Field(svg=svg, recording=named(name), place=place, counts=counts)


def _start_mark(key: str) -> str:
    return (
        f'<defs><marker id="{key}-start" markerUnits="userSpaceOnUse" markerWidth="50" '
        'markerHeight="50" viewBox="-25 -25 50 50"><circle r="20" fill="currentColor"/>'
        "</marker></defs>"
    )


def _edge(width: int, height: int, *, dashed: bool) -> str:
    dash = ' stroke-dasharray="30 30"' if dashed else ""
    return (
        f'<rect width="{width}" height="{height}" fill="none" stroke="currentColor" '
        f'stroke-width="8" stroke-opacity="0.35"{dash}/>'
    )


def _group(
    tracks: Sequence[DrawnTrack], frame: _Frame, scale: float, *, muted: bool, key: str
) -> str:
    if not tracks:
        return ""
    paths = "".join(_path(t, frame, scale, n, muted=muted) for n, t in enumerate(tracks))
    look = (
        'class="aside" stroke="currentColor" stroke-width="20" stroke-opacity="0.5" '
        'stroke-dasharray="1 30"'
        if muted
        else f'class="kept" stroke-width="14" marker-start="url(#{key}-start)"'
    )
    return f'<g fill="none" stroke-linecap="round" {look}>{paths}</g>'


def _path(track: DrawnTrack, frame: _Frame, scale: float, n: int, *, muted: bool) -> str:
    x = np.asarray(track.x_um, dtype=float) - frame.left
    y = np.asarray(track.y_um, dtype=float) - frame.top
    d = _relative(np.column_stack([x, y]) * scale)
    name = f"track {named(track.track)}"
    title = f"{name}, set aside: {visible(track.reason)}" if muted else name
    colour = "" if muted else f' style="stroke:{page_colour(hue(n))}"'
    return f'<path d="{d}"{colour}><title>{escape(title)}</title></path>'


def _relative(points_px: Floats) -> str:
    """Path data: the start, then steps, all in whole tenths of a px."""
    tenths = np.rint(points_px[_telling(points_px)] * _TENTHS).astype(int)
    steps = np.diff(tenths, axis=0).ravel().tolist()
    start = f"M{tenths[0, 0]} {tenths[0, 1]}l"
    return start + (" ".join(map(str, steps)).replace(" -", "-") if steps else "0 0")


def _telling(points_px: Floats) -> NDArray[np.intp]:
    """Rows to draw: the first, the last, and each far enough from the one before."""
    rows = [0]
    x, y = points_px.T.tolist()
    for i in range(1, len(x)):
        if math.hypot(x[i] - x[rows[-1]], y[i] - y[rows[-1]]) >= _COARSE_PX:
            rows.append(i)
    if rows[-1] != len(x) - 1:
        rows.append(len(x) - 1)
    return np.asarray(rows)


def _scale_bar(width: int, height: int, frame: _Frame, scale: float) -> str:
    """A round length of about a quarter of the field, below it."""
    target = frame.width / 4
    power = 10.0 ** math.floor(math.log10(target))
    length = next(m * power for m in (5, 2, 1) if m * power <= target)
    bar = _tenths(length * scale)
    y = height + _tenths(14)
    return (
        f'<path d="M0 {y}h{bar}" stroke="currentColor" stroke-width="25" fill="none" '
        f'stroke-linecap="butt"/><text x="{bar + 60}" y="{y + 45}" font-size="130" '
        f'fill="currentColor">{length:g} µm</text>'
    )


def _tenths(px: float) -> int:
    return round(px * _TENTHS)
