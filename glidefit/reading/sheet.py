"""The assay sheet: one row a recording, read from CSV or XLSX and checked as a whole."""

from __future__ import annotations

import os
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from glidefit.assay import Assay, Recording
from glidefit.errors import InputError, InputErrors
from glidefit.reading.chamber_times import minutes_from_start
from glidefit.reading.sheet_columns import (
    CHOICES,
    KNOWN,
    NEEDED,
    NUMBERS,
    WHOLE,
    choice_cell,
    column_names,
    has_unit,
    number_cell,
    recording_cell,
)
from glidefit.reading.sheet_labels import label_notes, plain_day, plain_label
from glidefit.reading.table_cells import (
    Cells,
    formula_errors,
    has_decimal_comma,
    holds_formula,
    not_a_number,
    number,
    read_csv,
    read_workbook,
    visible,
)
from glidefit.reading.video import VIDEO_SUFFIXES

_SHEET = "an assay sheet as CSV or XLSX"


@dataclass(slots=True, kw_only=True)
class _Row:
    """One row while it is being checked."""

    number: int
    where: str
    text: dict[str, str]  # every named column, its blanks made plain
    broken: set[str]  # columns whose cell was already found to be wrong
    values: dict[str, Any]  # numbers and choices
    path: Path | None = None


def read_sheet(path: Path) -> Assay:
    """The assay sheet in a CSV or XLSX file.

    The columns are those of README.md; a column of another name whose filled cells are all
    numbers, and whose name ends in a unit (``atp_uM``), goes into ``Recording.numbers``, any
    other into ``Recording.labels``. Where ``minutes`` is open and ``start_time`` is not, minutes
    count from the earliest start in that chamber. Days written as 20260303 or 3.3.2026 become
    ISO dates.

    Raises
    ------
    InputErrors
        Everything that is wrong with the sheet, at once.
    """
    path = Path(os.path.abspath(path))
    try:
        cells = _sheet_cells(path)
    except InputError as error:
        raise InputErrors([error]) from error
    errors = formula_errors(cells)
    columns, wrong = column_names(cells)
    errors += wrong
    rows = list(_rows(cells, columns, errors))
    if not cells.rows:
        errors.append(_no_rows(cells))
    for row in rows:
        errors += _check_row(row, cells, columns, path.parent)
    errors += _decimal_commas(rows, cells, columns)
    errors += _repeated(rows)
    errors += _control_conflicts(rows, cells.file)
    minutes, wrong = minutes_from_start([row.text for row in rows], [row.where for row in rows])
    errors += wrong
    if errors:
        raise InputErrors(sorted(errors, key=_row_number))
    return Assay(name=path.stem, path=path, recordings=_recordings(rows, columns, minutes))


def sheet_notes(assay: Assay) -> tuple[str, ...]:
    """What looks odd in a sheet that can be used: labels, and pixel sizes no microscope has."""
    notes = label_notes(assay)
    for recording in assay.recordings:
        pixel = recording.pixel_um
        if pixel is not None and not 0.001 <= pixel <= 10:
            notes.append(
                f"{recording.where}: a pixel of {pixel:g} µm is unusual; "
                "pixel_um is the width of one pixel in the sample, in µm"
            )
    return tuple(notes)


def _row_number(error: InputError) -> int:
    """The row an error speaks of, 0 for the whole sheet."""
    row = re.search(r", (?:row |cell [A-Z]+)(\d+)", error.where)
    return int(row[1]) if row else 0


def _sheet_cells(path: Path) -> Cells:
    suffix = path.suffix.lower()
    if suffix == ".xlsx":
        return read_workbook(path, called=path.name, expected=_SHEET)
    if suffix == ".csv" or os.path.isdir(path) or not os.path.exists(path):
        return read_csv(path, called=path.name, expected=_SHEET, known=KNOWN)
    raise InputError(
        path.name,
        f"{path.suffix!r} is no type of an assay sheet" if suffix else "the file has no type",
        expected=_SHEET,
        remedy="In the spreadsheet program, save it as XLSX or as 'CSV UTF-8'.",
    )


def _no_rows(cells: Cells) -> InputError:
    return InputError(
        cells.file,
        "there is no row below the header",
        expected="one row for each recording",
        remedy="Add the recordings.",
    )


def _rows(cells: Cells, columns: Mapping[str, int], errors: list[InputError]) -> Iterator[_Row]:
    for row_number, row in zip(cells.row_numbers, cells.rows, strict=True):
        where = f"{cells.file}, row {row_number}"
        # The cells of a row that is too long may all have moved: checking them helps nobody.
        if any(text.strip() for text in row[len(cells.header) :]):
            errors.append(_too_long(row, cells, where))
            continue
        text = {name: _plain(name, row[i]) if i < len(row) else "" for name, i in columns.items()}
        broken = {name for name, content in text.items() if holds_formula(content)}
        text.update(dict.fromkeys(broken, ""))
        yield _Row(number=row_number, where=where, text=text, broken=broken, values={})


def _plain(name: str, cell: str) -> str:
    """What a cell says, whatever its blanks; blanks inside a path belong to it."""
    text = visible(cell)
    if name == "recording" or holds_formula(text):
        return text
    return plain_day(text) if name == "day" else plain_label(text)


def _too_long(row: Sequence[str], cells: Cells, where: str) -> InputError:
    remedy = "Name the column, or empty the cell."
    if cells.delimiter:
        remedy = f'Put text that holds a {cells.delimiter!r} in quotation marks: "…".'
    if cells.delimiter == ",":
        remedy += " Numbers take a decimal point, not a comma."
    return InputError(
        where,
        f"has {len(row)} cells, the header has {len(cells.header)}",
        expected="no more cells than columns",
        remedy=remedy,
    )


def _check_row(
    row: _Row, cells: Cells, columns: Mapping[str, int], folder: Path
) -> list[InputError]:
    errors = []
    for name in columns:
        if name in row.broken:
            continue
        try:
            _check_cell(row, name, cells.place(row.number, columns[name]), folder)
        except InputError as error:
            errors.append(error)
            row.broken.add(name)
    return errors + _contradictions(row)


def _check_cell(row: _Row, name: str, where: str, folder: Path) -> None:
    text = row.text[name]
    if name in NEEDED and not text:
        remedy = "Fill it in; every recording needs it."
        raise InputError(where, "is empty", expected=NEEDED[name], remedy=remedy)
    if name in NUMBERS:
        row.values[name] = number_cell(name, text, where)
    elif name in CHOICES:
        row.values[name] = choice_cell(name, text, where)
    elif name == "recording":
        row.path = recording_cell(text, where, folder)


def _contradictions(row: _Row) -> list[InputError]:
    """What is wrong between the cells of one row."""
    errors = []
    first, last = row.values.get("first_frame"), row.values.get("last_frame")
    if first is not None and last is not None and first > last:
        errors.append(
            InputError(
                row.where,
                f"first_frame {first:g} comes after last_frame {last:g}",
                expected="the first frame before the last",
                remedy="Exchange them, or leave both empty to use the whole file.",
            )
        )
    exposure, interval = row.values.get("exposure_s"), row.values.get("frame_s")
    if exposure is not None and interval is not None and exposure > interval:
        errors.append(
            InputError(
                row.where,
                f"exposure_s is {exposure:g} s, but frame_s is only {interval:g} s",
                expected="an exposure no longer than the frame interval",
                remedy="Correct one of them; both are in s.",
            )
        )
    is_video = row.path is not None and row.path.suffix.lower() in VIDEO_SUFFIXES
    if is_video and "shape" not in row.broken and not row.values.get("shape"):
        errors.append(
            InputError(
                row.where,
                f"the shape is not given for the video {row.text['recording']!r}",
                expected="in the column 'shape' the word 'filament' or 'spot'",
                remedy="Write 'spot' for a bead or quantum dot that rides on a filament.",
            )
        )
    return errors


def _decimal_commas(
    rows: Sequence[_Row], cells: Cells, columns: Mapping[str, int]
) -> list[InputError]:
    """A number with a decimal comma would silently turn a column of numbers into labels."""
    return [
        not_a_number(row.text[name], cells.place(row.number, i), expected="a number")
        for name, i in columns.items()
        if name not in KNOWN and has_unit(name)
        for row in rows
        if has_decimal_comma(row.text[name])
    ]


def _repeated(rows: Sequence[_Row]) -> list[InputError]:
    first_rows: dict[tuple[Any, ...], _Row] = {}
    errors = []
    for row in rows:
        if row.path is None or not row.broken.isdisjoint(WHOLE):
            continue
        first = first_rows.setdefault((os.path.realpath(row.path), *_part(row)), row)
        if first is not row:
            errors.append(
                InputError(
                    row.where,
                    f"{row.text['recording']!r} is already the recording of row {first.number}",
                    expected="each recording once, or other frames, channel or position of it",
                    remedy="Delete one of the two rows, or say in what they differ.",
                )
            )
    return errors


def _part(row: _Row) -> tuple[Any, ...]:
    """Channel, position, first and last frame that a row takes of its file."""
    first = row.values.get("first_frame") or 0
    values = row.values
    return values.get("channel"), values.get("position"), first, values.get("last_frame")


def _control_conflicts(rows: Sequence[_Row], file: str) -> list[InputError]:
    named = [row for row in rows if row.text.get("condition")]
    marked: dict[str, _Row] = {}
    for row in named:
        if row.values.get("control") == "yes":
            marked.setdefault(row.text["condition"], row)
    errors = []
    for row in named:
        name = row.text["condition"]
        if row.values.get("control") == "no" and name in marked:
            errors.append(
                InputError(
                    row.where,
                    f"control is 'no' for {name!r}, but 'yes' in row {marked[name].number}",
                    expected="one answer for all rows of a condition",
                    remedy="Write 'yes' in all of them, or in none.",
                )
            )
    if len(marked) > 1:
        controls = " and ".join(f"{name!r} (row {row.number})" for name, row in marked.items())
        errors.append(
            InputError(
                file,
                f"{len(marked)} conditions are marked as control: {controls}",
                expected="one condition with which all others are compared",
                remedy="Leave 'control' empty for the others.",
            )
        )
    return errors


def _recordings(
    rows: Sequence[_Row], columns: Mapping[str, int], minutes: Sequence[float | None]
) -> tuple[Recording, ...]:
    names = _names(rows)
    controls = {row.text["condition"] for row in rows if row.values.get("control") == "yes"}
    other = [name for name in columns if name not in KNOWN]
    numeric = [name for name in other if has_unit(name) and _all_numbers(rows, name)]
    return tuple(
        _recording(row, names[i], minutes[i], controls=controls, numeric=numeric, other=other)
        for i, row in enumerate(rows)
    )


def _all_numbers(rows: Sequence[_Row], name: str) -> bool:
    filled = [row.text[name] for row in rows if row.text[name]]
    return bool(filled) and all(number(text) is not None for text in filled)


def _recording(
    row: _Row,
    name: str,
    minutes: float | None,
    *,
    controls: set[str],
    numeric: Sequence[str],
    other: Sequence[str],
) -> Recording:
    assert row.path is not None
    text, values = row.text, row.values
    whole = {key: None if (v := values.get(key)) is None else int(v) for key in WHOLE}
    return Recording(
        name=name,
        path=row.path,
        condition=text["condition"],
        day=text["day"],
        chamber=text["chamber"],
        shape=values.get("shape") or "filament",
        pixel_um=values.get("pixel_um"),
        frame_s=values.get("frame_s"),
        exposure_s=values.get("exposure_s"),
        control=text["condition"] in controls,
        preparation=text.get("preparation", ""),
        field=text.get("field", ""),
        minutes=minutes if values.get("minutes") is None else values["minutes"],
        start_time=text.get("start_time", ""),
        **whole,
        numbers={key: float(text[key]) for key in numeric if text[key]},
        labels={key: text[key] for key in other if key not in numeric and text[key]},
        where=row.where,
    )


def _names(rows: Sequence[_Row]) -> list[str]:
    """The cell's text, and what tells the parts of one file apart: "a.tif [channel 1]"."""
    parts: dict[Path | None, list[tuple[Any, ...]]] = {}
    for row in rows:
        parts.setdefault(row.path, []).append(_part(row))
    names = []
    for row in rows:
        channels, positions, firsts, lasts = (set(c) for c in zip(*parts[row.path], strict=True))
        channel, position, first, last = _part(row)
        told = []
        if len(channels) > 1 and channel is not None:
            told.append(f"channel {channel:g}")
        if len(positions) > 1 and position is not None:
            told.append(f"position {position:g}")
        if len(firsts) > 1 or len(lasts) > 1:
            told.append(f"frames {first:g} to {'the end' if last is None else f'{last:g}'}")
        names.append(row.text["recording"] + (f" [{', '.join(told)}]" if told else ""))
    return names
