"""Track tables: positions of tracks from CSV or Parquet, in µm, s and rad."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError, InputErrors
from glidefit.reading.table_cells import visible
from glidefit.reading.track_columns import Columns, labels, numbers, read_columns
from glidefit.settings import ColumnSettings
from glidefit.tracks import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_FARTHEST_UM = 1e6  # a stage moves by centimetres; beyond a metre the unit is wrong
_LONGEST = 1_000_000  # frames, unless rows are so many that the range is no mistake
_FRAMES_PER_ROW = 1000
_AGREEMENT = 0.01  # relative, between the sheet's frame_s and the table's times
_EXPECTED = {
    "x_um": "a position in µm",
    "y_um": "a position in µm",
    "x_px": "a position in pixels",
    "y_px": "a position in pixels",
    "time_s": "a time in s",
    "heading_rad": "a heading in rad, or an empty cell",
    "length_um": "a length in µm, or an empty cell",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackTable:
    """What a track table holds."""

    tracks: Tracks
    frame_s: float
    frame_s_source: str  # "sheet" or "file"
    pixel_um: float  # NaN for a table in µm
    first_frame: int  # number in the table of the frame that is 0 in the tracks
    n_frames: int  # from the first frame with a position to the last
    notes: tuple[str, ...]  # what is odd, in words for the user


def read_track_table(
    path: Path,
    *,
    columns: ColumnSettings,
    frame_s: float | None,
    pixel_um: float | None,
    where: str | None = None,
) -> TrackTable:
    """The tracks of one table, their frames counted from the first one with a position.

    Parameters
    ----------
    path : Path
        CSV (comma or semicolon) or Parquet.
    columns : ColumnSettings
        What its columns are called.
    frame_s : float or None
        Frame interval in s as the sheet has it.
    pixel_um : float or None
        Pixel size in µm as the sheet has it.
    where : str, optional
        What messages call the table; the name of the file if not given.

    Raises
    ------
    InputError
        For a file that cannot be read, or columns that contradict each other or the sheet.
    InputErrors
        For cells that hold what they may not, the first of each column at once.
    """
    table = read_columns(path, columns=columns, called=where or path.name)
    scale, notes = _scale(table, pixel_um)
    unit, factor = ("um", 1.0) if math.isnan(scale) else ("px", scale)
    values, texts = _values(table, unit)
    for name in (f"x_{unit}", f"y_{unit}"):
        _reject_far(table, name, values[name] * factor)
    rows = _sorted(values, texts)
    _reject_wide_range(table, rows)
    _reject_repeats(table, rows)
    _reject_backward_times(table, rows)
    interval, source = _interval(table, rows, frame_s)
    first = int(rows.frame.min())
    frame = rows.frame - first
    counted = np.asarray(frame * interval, dtype=np.float64)
    tracks = Tracks(
        label=np.array(rows.labels, dtype=np.str_),
        offsets=np.concatenate([[0], np.cumsum(np.bincount(rows.index))]).astype(np.int64),
        frame=frame,
        time_s=counted if rows.time is None else rows.time,
        x_um=values[f"x_{unit}"][rows.order] * factor,
        y_um=values[f"y_{unit}"][rows.order] * factor,
        heading_rad=_optional(values, "heading_rad", rows.order),
        length_um=_optional(values, "length_um", rows.order),
        flag=_flags(table, rows.order),
    )
    return TrackTable(
        tracks=tracks,
        frame_s=interval,
        frame_s_source=source,
        pixel_um=scale,
        first_frame=first,
        n_frames=int(frame.max()) + 1,
        notes=tuple(notes + _order_notes(rows)),
    )


def _scale(table: Columns, pixel_um: float | None) -> tuple[float, list[str]]:
    """Pixel size of a table in pixels, NaN for one in µm, and notes on the choice."""
    in_px = "x_px" in table.written and "y_px" in table.written
    if "x_um" in table.written and "y_um" in table.written:
        note = "positions in µm were used, those in pixels were not"
        return math.nan, [note] if in_px else []
    if pixel_um is None:
        raise InputError(
            table.called,
            "the positions are in pixels, and the pixel size is not known",
            expected="the pixel size in µm, in the column pixel_um of the assay sheet",
            remedy="Fill in pixel_um for this recording.",
        )
    if 0.001 <= pixel_um <= 10:
        return pixel_um, []
    return pixel_um, [f"a pixel of {pixel_um:g} µm is unusual; check pixel_um"]


def _values(table: Columns, unit: str) -> tuple[dict[str, Floats], Sequence[str]]:
    """Columns of numbers, and the label of the track of each row."""
    errors: list[InputError] = []
    values: dict[str, Floats] = {}
    texts: Sequence[str] = ()
    try:
        texts = labels(table)
    except InputError as error:
        errors.append(error)
    for name in ("frame", "time_s", f"x_{unit}", f"y_{unit}", "heading_rad", "length_um"):
        if name not in table.values:
            continue
        try:
            values[name] = _column(table, name)
        except InputError as error:
            errors.append(error)
    if errors:
        raise InputErrors(errors)
    return values, texts


def _column(table: Columns, name: str) -> Floats:
    if name == "frame":
        return _frames(table)
    optional = name in ("heading_rad", "length_um")
    values = numbers(table, name, expected=_EXPECTED[name], may_be_empty=optional)
    if name == "heading_rad" and np.any(turned := np.abs(values) > 2 * math.pi + 0.1):
        row = int(np.argmax(turned))
        raise InputError(
            table.where(name, row),
            f"holds {values[row]:g}, more than a full turn: it looks like degrees",
            expected=_EXPECTED[name],
            remedy="Multiply the column by π/180.",
        )
    return values


def _frames(table: Columns) -> Floats:
    expected = "a frame as a whole number from 0"
    values = numbers(table, "frame", expected=expected)
    wrong = (values < 0) | (values != np.floor(values)) | (values > 1e15)
    if np.any(wrong):
        row = int(np.argmax(wrong))
        remedy = "Number the frames from 0, whatever their times."
        found = f"holds {values[row]:g}"
        raise InputError(table.where("frame", row), found, expected=expected, remedy=remedy)
    return values


@dataclass(frozen=True, slots=True, kw_only=True)
class _Sorted:
    """The rows of a table sorted by track, as tracks first appear, then by frame."""

    order: Ints  # (n,) row of the table
    index: Ints  # (n,) of the track
    labels: tuple[str, ...]
    frame: Ints  # (n,) as the table has it
    time: Floats | None  # (n,)
    inside: NDArray[np.bool_]  # (n - 1,) the next row is of the same track

    def step(self, k: int) -> tuple[int, int]:
        """Rows of the table before and after the step k."""
        return int(self.order[k]), int(self.order[k + 1])


def _sorted(values: Mapping[str, Floats], texts: Sequence[str]) -> _Sorted:
    rank = {label: k for k, label in enumerate(dict.fromkeys(texts))}
    index = np.fromiter(map(rank.__getitem__, texts), dtype=np.int64, count=len(texts))
    order = np.lexsort((values["frame"], index))
    return _Sorted(
        order=order,
        index=index[order],
        labels=tuple(rank),
        frame=values["frame"][order].astype(np.int64),
        time=values["time_s"][order] if "time_s" in values else None,
        inside=np.diff(index[order]) == 0,
    )


def _order_notes(rows: _Sorted) -> list[str]:
    notes = []
    if np.any(np.diff(rows.order)[rows.inside] < 0):
        notes.append("rows were not in order of frames within a track and were sorted")
    return notes


def _reject_far(table: Columns, name: str, position_um: Floats) -> None:
    far = np.abs(position_um) > _FARTHEST_UM
    if not np.any(far):
        return
    row = int(np.argmax(far))
    pixels = name.endswith("_px")
    raise InputError(
        table.where(name, row),
        f"holds a position of {position_um[row]:.6g} µm, which no stage reaches",
        expected=f"a position within ±{_FARTHEST_UM:.0f} µm",
        remedy="Correct it, or pixel_um in the assay sheet."
        if pixels
        else "Correct it, or the unit of the column; positions are in µm.",
    )


def _reject_wide_range(table: Columns, rows: _Sorted) -> None:
    span = int(rows.frame.max()) - int(rows.frame.min()) + 1
    if span <= max(_LONGEST, _FRAMES_PER_ROW * len(rows.frame)):
        return
    k = int(np.argmax(rows.frame))
    raise InputError(
        table.where("frame", int(rows.order[k])),
        f"frame {rows.frame[k]} is {span - 1} frames after the first one, "
        f"in a table of {len(rows.frame)} rows",
        expected="frame numbers that count images",
        remedy="Correct it; a time belongs in the column time_s.",
    )


def _reject_repeats(table: Columns, rows: _Sorted) -> None:
    repeated = np.flatnonzero(rows.inside & (np.diff(rows.frame) == 0))
    if not len(repeated):
        return
    k = int(repeated[0])
    first, second = table.row_numbers[list(rows.step(k))]
    more = f" ({len(repeated)} such rows in all)" if len(repeated) > 1 else ""
    label = rows.labels[rows.index[k]]
    raise InputError(
        f"{table.called}, row {second}",
        f"frame {rows.frame[k]} of track {label!r} was already in row {first}{more}",
        expected="each frame once in a track",
        remedy="Delete one of the rows, or give two tracks two labels.",
    )


def _reject_backward_times(table: Columns, rows: _Sorted) -> None:
    if rows.time is None:
        return
    backward = np.flatnonzero(rows.inside & (np.diff(rows.time) <= 0))
    if not len(backward):
        return
    k = int(backward[0])
    label = rows.labels[rows.index[k]]
    raise InputError(
        f"{table.called}, row {table.row_numbers[rows.step(k)[1]]}",
        f"in track {label!r} the time goes from {rows.time[k]:g} s in frame {rows.frame[k]} "
        f"to {rows.time[k + 1]:g} s in frame {rows.frame[k + 1]}",
        expected="times that increase with the frames",
        remedy="Correct the columns for frame and time, or delete the column for time.",
    )


def _interval(table: Columns, rows: _Sorted, frame_s: float | None) -> tuple[float, str]:
    """The frame interval in s, and whether the sheet or the file told it."""
    told = math.nan
    if rows.time is not None and np.any(rows.inside):
        told = float(np.median(np.diff(rows.time)[rows.inside] / np.diff(rows.frame)[rows.inside]))
    if frame_s is None:
        if math.isnan(told):
            raise _no_interval(table, has_times=rows.time is not None)
        return told, "file"
    if abs(told / frame_s - 1) > _AGREEMENT:
        raise InputError(
            table.called,
            f"its times advance by {told:.6g} s per frame (median), "
            f"but frame_s in the assay sheet is {frame_s:.6g} s",
            expected="the same frame interval from both, within 1 %",
            remedy="Correct frame_s, or leave it empty to use the times of the table.",
        )
    return frame_s, "sheet"


def _no_interval(table: Columns, *, has_times: bool) -> InputError:
    found = "the frame interval is not known"
    if has_times:
        found += ": no track has two positions, so the times do not tell it"
    return InputError(
        table.called,
        found,
        expected="frame_s in the assay sheet, or a column time_s in the table",
        remedy="Fill in frame_s (in s) for this recording.",
    )


def _flags(table: Columns, order: Ints) -> NDArray[np.str_] | None:
    """Why positions are not trusted; a column without any text is none."""
    texts = [visible(str(text)) for text in table.values.get("flag", ())]
    return np.array(texts, dtype=np.str_)[order] if any(texts) else None


def _optional(values: Mapping[str, Floats], name: str, order: Ints) -> Floats | None:
    """A column that may be missing; an empty one says no more than a missing one."""
    if name not in values or np.all(np.isnan(values[name])):
        return None
    return values[name][order]
