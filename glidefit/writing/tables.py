"""Tables as CSV text: RFC 4180, UTF-8, no cell that a spreadsheet would take for a formula."""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.quantities import QUANTITIES
from glidefit.results import StudyResult
from glidefit.tracks import Tracks

Cell = str | int | float | bool
TrackRows = (
    tuple[str, Tracks, Sequence[str]] | tuple[str, Tracks, Sequence[str], Sequence[str] | None]
)

_FORMULA = ("=", "+", "-", "@", "\t", "\r")
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_SURROGATE = re.compile("[\ud800-\udfff]")
_DIGITS = 9  # far below any interval, and 0.1 + 0.2 reads 0.3
_PLACES_UM = 6  # 1 pm
_PLACES_S = 9
_TRACK = ("recording", "day", "chamber", "track")
_OWN = (
    "speed_um_s",
    "speed_error_um_s",
    "rotational_diffusion_rad2_s",
    "rotational_diffusion_low_rad2_s",
    "rotational_diffusion_high_rad2_s",
    "rotational_diffusion_problem",
)
_LENGTHS = ("n_positions", "duration_s", "net_advance_um", "path_um")


def table_text(header: Sequence[str], rows: Iterable[Sequence[Cell]]) -> str:
    """A table as CSV.

    Numbers have up to nine significant digits and a decimal point, NaN is empty, truth is
    ``true`` or ``false``. Text that a spreadsheet would run gets an apostrophe in front.
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow(header)
    for row in rows:
        writer.writerow([_cell(value) for value in row])
    return out.getvalue()


def estimates_table(study: StudyResult) -> str:
    """One row an estimate: every quantity of every condition."""
    names = ("value", "low", "high", "level", "covers", "method", "problem")
    rows: list[list[Cell]] = [
        [c.condition, c.control, c.model, key, QUANTITIES[key].unit, *_columns(estimate, names)]
        for c in study.conditions
        for key, estimate in c.estimates.items()
    ]
    return table_text(["condition", "control", "model", "quantity", "unit", *names], rows)


def per_track_table(study: StudyResult) -> str:
    """One row a track, kept and set aside."""
    names = (*_TRACK, "kept", "set_aside_reason", *_LENGTHS, *_OWN, "gliding_probability")
    rows = [[c.condition, *_columns(t, names)] for c in study.conditions for t in c.tracks]
    return table_text(["condition", *names], rows)


def set_aside_table(study: StudyResult) -> str:
    """One row a track that was set aside, with its reason."""
    names = (*_TRACK, "set_aside_reason", *_LENGTHS)
    rows = [
        [c.condition, *_columns(t, names)] for c in study.conditions for t in c.tracks if not t.kept
    ]
    return table_text(["condition", *names], rows)


def comparisons_table(study: StudyResult) -> str:
    """One row a comparison of a condition with its reference."""
    whose = ("condition", "reference", "quantity")
    ratio = ("value", "low", "high", "level")
    tests = ("p_value", "p_adjusted", "p_permutation", "problem")
    difference = ("value", "low", "high", "p_value")
    more = (
        "primary",
        "smallest_p_permutation",
        "equivalence_low",
        "equivalence_high",
        "equivalence_level",
        "margin",
        "equivalent",
        "degrees_of_freedom",
        "covers",
        "method",
    )
    rows = [
        [
            *_columns(c, whose),
            *_columns(c.ratio, ratio),
            *_columns(c, tests),
            *_columns(c.difference, difference),
            *_columns(c, more),
        ]
        for c in study.comparisons
    ]
    head = [*whose, "ratio", "ratio_low", "ratio_high", "level", *tests]
    head += ["difference", "difference_low", "difference_high", "difference_p_value", *more]
    return table_text(head, rows)


def response_table(study: StudyResult) -> str:
    """One row a parameter of a response curve, and one a curve that was tried."""
    whose = ("column", "series", "quantity")
    names = ("key", "unit", "value", "low", "high", "level", "error", "method", "problem")
    rows: list[list[Cell]] = []
    for curve in study.responses:
        own = _columns(curve, whose)
        rows += [[*own, curve.model, *_columns(p, names), math.nan] for p in curve.parameters]
        rows += [
            [*own, m.name, "criterion", "", *[math.nan] * 5, "", m.problem, m.criterion]
            for m in curve.models
        ]
    return table_text([*whose, "model", "parameter", *names[1:], "criterion"], rows)


def tracks_table(recordings: Iterable[TrackRows]) -> str:
    """Every position of every recording: the track table with its verdicts.

    Parameters
    ----------
    recordings : iterable of (recording, tracks, reasons) or (recording, tracks, reasons, flags)
        ``reasons`` has one text a track, "" for a kept one; ``flags`` one text a position,
        "" where it is trusted, or is None.

    Raises
    ------
    ValueError
        If there are not as many reasons as tracks, or flags as positions.
    """
    items = list(recordings)
    optional = [
        name
        for name in ("heading_rad", "length_um")
        if any(getattr(item[1], name) is not None for item in items)
    ]
    header = ["track", "frame", "time_s", "x_um", "y_um", *optional]
    header += ["recording", "kept", "set_aside_reason", "flag"]
    lines = [",".join(header)]
    for item in items:
        lines += _track_lines(*item, optional=optional)
    return "\r\n".join(lines) + "\r\n"


def _track_lines(
    recording: str,
    tracks: Tracks,
    reasons: Sequence[str],
    flags: Sequence[str] | None = None,
    *,
    optional: Sequence[str],
) -> list[str]:
    n = len(tracks.frame)
    if len(reasons) != tracks.n_tracks:
        raise ValueError(f"{recording}: {len(reasons)} reasons for {tracks.n_tracks} tracks")
    if flags is not None and len(flags) != n:
        raise ValueError(f"{recording}: {len(flags)} flags for {n} positions")
    labels = _repeated([_field(label) for label in tracks.label.tolist()], tracks)
    name = _field(recording)
    verdicts = [f"{name},{'false' if r else 'true'},{_field(r)}" for r in map(str, reasons)]
    marks = [""] * n if flags is None else [_field(str(flag)) for flag in flags]
    columns = [
        labels,
        map(str, tracks.frame.tolist()),
        _numbers(tracks.time_s, n, places=_PLACES_S),
        _numbers(tracks.x_um, n, places=_PLACES_UM),
        _numbers(tracks.y_um, n, places=_PLACES_UM),
        *(_numbers(getattr(tracks, key), n, places=_PLACES_UM) for key in optional),
        _repeated(verdicts, tracks),
        marks,
    ]
    return [",".join(row) for row in zip(*columns, strict=True)]


def _numbers(values: NDArray[np.float64] | None, n: int, *, places: int) -> Iterable[str]:
    if values is None:
        return [""] * n
    texts = map(repr, np.round(values, places).tolist())
    if np.all(np.isfinite(values)):
        return texts
    return [text if ok else "" for text, ok in zip(texts, np.isfinite(values), strict=True)]


def _repeated(texts: list[str], tracks: Tracks) -> Iterable[str]:
    """The text of each track at each of its rows."""
    rows: list[str] = []
    for text, count in zip(texts, tracks.n_positions.tolist(), strict=True):
        rows += [text] * count
    return rows


def _columns(record: object, names: Sequence[str]) -> list[Cell]:
    """Fields of a record; columns are called as the fields are."""
    return [getattr(record, name) for name in names]


def _cell(value: Cell) -> str:
    if isinstance(value, str):
        return _harmless(value)
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(float(f"{value:.{_DIGITS}g}")) if math.isfinite(value) else ""
    return str(value)


def _harmless(text: str) -> str:
    text = _SURROGATE.sub("\ufffd", text)
    if text.startswith(_FORMULA) and not _NUMBER.fullmatch(text):
        return f"'{text}"
    return text


def _field(text: str) -> str:
    """One text as it stands in a line of CSV."""
    text = _harmless(text)
    if any(sign in text for sign in ',"\r\n'):
        return '"' + text.replace('"', '""') + '"'
    return text
