"""The columns of an assay sheet: their names, and what a cell of each may hold."""

from __future__ import annotations

import difflib
import os
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

from glidefit.errors import InputError
from glidefit.reading.table_cells import Cells, near_names, not_a_number, number, visible
from glidefit.reading.video import VIDEO_SUFFIXES

TABLE_SUFFIXES = (".csv", ".parquet", ".pq")

NEEDED = {
    "recording": "the path of a video or a track table",
    "condition": "the name of the condition",
    "day": "the day of the experiment, an ISO 8601 date or any label",
    "chamber": "the label of the flow chamber",
}
OPTIONAL = (
    "shape",
    "pixel_um",
    "frame_s",
    "exposure_s",
    "control",
    "preparation",
    "field",
    "start_time",
    "minutes",
    "first_frame",
    "last_frame",
    "channel",
    "position",
)
KNOWN = (*NEEDED, *OPTIONAL)


@dataclass(frozen=True, slots=True, kw_only=True)
class NumberColumn:
    """What a column of numbers holds: its meaning for messages and its limits."""

    expected: str
    allowed: Callable[[float], bool]


def _whole(value: float) -> bool:
    return value >= 0 and value.is_integer() and value < 1e15


NUMBERS: Mapping[str, NumberColumn] = {
    "pixel_um": NumberColumn(expected="the pixel size in µm, above 0", allowed=lambda v: v > 0),
    "frame_s": NumberColumn(expected="the frame interval in s, above 0", allowed=lambda v: v > 0),
    "exposure_s": NumberColumn(expected="the exposure in s, 0 or more", allowed=lambda v: v >= 0),
    "minutes": NumberColumn(
        expected="minutes after the start in the chamber, 0 or more", allowed=lambda v: v >= 0
    ),
    "first_frame": NumberColumn(expected="a frame as a whole number from 0", allowed=_whole),
    "last_frame": NumberColumn(expected="a frame as a whole number from 0", allowed=_whole),
    "channel": NumberColumn(expected="a channel as a whole number from 0", allowed=_whole),
    "position": NumberColumn(expected="a position as a whole number from 0", allowed=_whole),
}
_SHORTEST_S, _LONGEST_S = 1e-6, 1e5  # frame intervals beyond a camera and beyond a day
WHOLE = ("first_frame", "last_frame", "channel", "position")

CHOICES: Mapping[str, tuple[str, ...]] = {
    "shape": ("filament", "spot"),
    "control": ("yes", "no"),
}
_CHOICE_EXPECTED = {
    "shape": "'filament' or 'spot'",
    "control": "'yes', 'no' or an empty cell",
}

_RECORDING = "a video (TIFF or ND2) or a track table (CSV or Parquet)"

# SI prefix and unit, perhaps with an exponent (um2), or a unit that takes no prefix.
_UNIT = re.compile(
    r"[pnuµμmkcdMG]?(M|mol|g|l|L|m|s|A|V|W|Hz|Pa|K|C|N|J|Da|S|Osm|U)\d?"
    r"|percent|pct|pH|degC|deg|rad|min|h|d|minutes|hours|days|fold|rpm|ppm|bp|nt"
)

# What people call these columns; only for hints, nothing is renamed silently.
_OTHER_NAMES = {
    "recording": ("file", "filename", "path", "video", "movie", "name"),
    "condition": ("construct", "sample", "treatment", "group"),
    "day": ("date", "experiment"),
    "chamber": ("flow_cell", "slide", "cell", "lane"),
}


def has_unit(name: str) -> bool:
    """True if the last part of a column's name is a unit: atp_uM, motor_ug_ml, pH."""
    return name == "pH" or ("_" in name and bool(_UNIT.fullmatch(name.rsplit("_", 1)[1])))


def nearest(name: str) -> str:
    """The known column of which a name is probably a misspelling, or ""."""
    plain = re.sub(r"[\s\-.()]+", "_", name.replace("µ", "u").replace("μ", "u").casefold())
    near = difflib.get_close_matches(plain.strip("_"), KNOWN, n=1, cutoff=0.8)
    return near[0] if near else ""


def column_names(cells: Cells) -> tuple[dict[str, int], list[InputError]]:
    """Index of each named column, known names as this module spells them, and what is wrong.

    Capitals and surrounding blanks do not matter in known names.
    """
    columns: dict[str, int] = {}
    errors: list[InputError] = []
    known = {name.casefold(): name for name in KNOWN}
    taken: dict[str, int] = {}
    for i, written in enumerate(cells.header):
        key = written.casefold()
        if not written:
            errors += _nameless(cells, i)
        elif key in taken:
            errors.append(_duplicate(cells, i, first=taken[key]))
        else:
            taken[key] = i
            columns[known.get(key, written)] = i
    misspelled = {
        name: near
        for name in columns
        if name not in KNOWN and (near := nearest(name)) and near not in columns
    }
    errors += [_misspelled(cells, name, near) for name, near in misspelled.items()]
    absent = [name for name in NEEDED if name not in columns and name not in misspelled.values()]
    errors += [_missing(cells, name, columns) for name in absent]
    return columns, errors


def _nameless(cells: Cells, column: int) -> list[InputError]:
    for row_number, row in zip(cells.row_numbers, cells.rows, strict=True):
        if column < len(row) and row[column].strip():
            return [
                InputError(
                    cells.place(row_number, column),
                    f"holds {row[column].strip()!r}, but its column has no name",
                    expected="a name at the head of every column",
                    remedy="Name the column in the first row, or empty it.",
                )
            ]
    return []


def _duplicate(cells: Cells, column: int, *, first: int) -> InputError:
    return InputError(
        cells.file,
        f"columns {first + 1} and {column + 1} are both called {cells.header[column]!r}",
        expected="every column once",
        remedy="Delete or rename one of them.",
    )


def _misspelled(cells: Cells, name: str, near: str) -> InputError:
    return InputError(
        cells.file,
        f"the column {name!r} is nearly {near!r}",
        expected=f"exactly {near!r}, or a name that is less like it",
        remedy=f"Did you mean {near!r}? Then rename it.",
    )


def _missing(cells: Cells, name: str, columns: Mapping[str, int]) -> InputError:
    present = {written.casefold(): written for written in columns}
    other = [present[alias] for alias in _OTHER_NAMES[name] if alias in present]
    remedy = "Add the column."
    if other:
        remedy = f"If {other[0]!r} is that column, rename it to {name!r}."
    return InputError(
        cells.file,
        f"the column {name!r} is missing",
        expected=f"in it {NEEDED[name]}",
        remedy=remedy,
    )


def number_cell(name: str, text: str, where: str) -> float | None:
    """The number in a cell of a number column, None if the cell is empty.

    Raises
    ------
    InputError
        For text, a decimal comma or a number out of limits.
    """
    column = NUMBERS[name]
    if not visible(text):
        return None
    value = number(text)
    if value is None:
        raise not_a_number(text, where, expected=column.expected)
    if not column.allowed(value):
        remedy = "Correct it, or leave the cell empty if it is not known."
        raise InputError(where, f"holds {text}", expected=column.expected, remedy=remedy)
    if name == "frame_s" and not _SHORTEST_S <= value <= _LONGEST_S:
        raise InputError(
            where,
            f"holds {text}, which no film has",
            expected=f"the frame interval in seconds, {_SHORTEST_S:g} to {_LONGEST_S:g}",
            remedy="Check the unit, or leave the cell empty if it is not known.",
        )
    return value


def choice_cell(name: str, text: str, where: str) -> str:
    """One of the words a column allows, in small letters, or "" for an empty cell.

    Raises
    ------
    InputError
        For any other word.
    """
    word = text.casefold()
    if word in ("", *CHOICES[name]):
        return word
    near = difflib.get_close_matches(word, CHOICES[name], n=1)
    raise InputError(
        where,
        f"holds {text!r}",
        expected=_CHOICE_EXPECTED[name],
        remedy=f"Did you mean {near[0]!r}?" if near else "Write one of these words.",
    )


def recording_cell(text: str, where: str, folder: Path) -> Path:
    """Absolute path of the file that a cell names, from the folder of the sheet.

    Raises
    ------
    InputError
        For a file that does not exist (with near names), a folder, a pipe or an unknown type.
    """
    path = folder / text
    if not os.path.lexists(path) and "\\" in text:
        path = folder / text.replace("\\", "/")  # a sheet that was written under Windows
    path = Path(os.path.abspath(path))
    suffix = path.suffix.lower()
    remedy = "Give one row for each file."
    if not os.path.exists(path):
        found, remedy = f"there is no file {text!r}", near_names(path)
    elif os.path.isdir(path):
        found = f"{text!r} is a folder"
    elif not os.path.isfile(path):
        found, remedy = f"{text!r} is a pipe or a device", "Save it as a file first."
    elif suffix not in VIDEO_SUFFIXES and suffix not in TABLE_SUFFIXES:
        found, remedy = f"{text!r} is of an unknown type", "Save it as one of these."
    else:
        return path
    raise InputError(where, found, expected=_RECORDING, remedy=remedy)
