"""Cells of a table file as text, each with its place as a spreadsheet shows it."""

from __future__ import annotations

import codecs
import csv
import datetime
import difflib
import io
import math
import os
import re
import warnings
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from glidefit.errors import InputError

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d+)?", re.ASCII | re.IGNORECASE)
_DECIMAL_COMMA = re.compile(r"[+-]?\d*,\d+", re.ASCII)
_FAILED = {"#DIV/0!", "#N/A", "#NAME?", "#NULL!", "#NUM!", "#REF!", "#VALUE!"}
# All that str.strip takes away, and zero-width characters that copying from a page brings along.
_UNSEEN = "".join(filter(str.isspace, map(chr, range(0x3001)))) + "\u200b\u200c\u200d\u2060\ufeff"
_HEAD = 100_000  # bytes in which a header must end
_LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZ"


@dataclass(frozen=True, slots=True, kw_only=True)
class Cells:
    """The filled rows of a table; row 1 is the first line of the file."""

    file: str  # as messages call it
    header: tuple[str, ...]  # names without surrounding blanks
    header_row: int
    row_numbers: Sequence[int]
    rows: Sequence[Sequence[str]]  # a row may be shorter or longer than the header
    delimiter: str  # "" in a workbook

    def place(self, row_number: int, column: int) -> str:
        """Where a cell stands: "assay.csv, row 3, column 'day'" or "assay.xlsx, cell C3"."""
        if not self.delimiter:
            return f"{self.file}, cell {_column_letters(column)}{row_number}"
        named = column < len(self.header) and self.header[column]
        name = repr(self.header[column]) if named else str(column + 1)
        return f"{self.file}, row {row_number}, column {name}"


def visible(text: str) -> str:
    """Text without blanks and characters of no width around it."""
    return text.strip(_UNSEEN)


def number(text: str) -> float | None:
    """The finite number a cell holds, written with a decimal point; None if it holds none."""
    text = visible(text)
    if not _NUMBER.fullmatch(text):
        return None
    value = float(text)
    return value if math.isfinite(value) else None


def not_a_number(text: str, where: str, *, expected: str) -> InputError:
    """The error of a cell that should hold a number and does not."""
    text = visible(text)
    if _DECIMAL_COMMA.fullmatch(text):
        point = text.replace(",", ".")
        return InputError(
            where,
            f"holds {text!r} with a decimal comma",
            expected=f"{expected}, with a decimal point",
            remedy=f"Write {point}.",
        )
    return InputError(
        where,
        f"holds {text!r}, which is not a number",
        expected=expected,
        remedy="Write the number alone, without a unit.",
    )


def has_decimal_comma(text: str) -> bool:
    """True for a number written with a decimal comma, as 0,5."""
    return bool(_DECIMAL_COMMA.fullmatch(visible(text)))


def file_bytes(
    path: Path, *, called: str, expected: str, may_be_empty: bool = False, most: int | None = None
) -> bytes:
    """What a file holds, or its first ``most`` bytes.

    Raises
    ------
    InputError
        If it is missing (with near names), a folder, a pipe or a device, unreadable, or empty
        and may not be so.
    """
    if os.path.isdir(path):
        remedy = "Give the path of the file itself."
        raise InputError(called, "is a folder", expected=expected, remedy=remedy)
    if not os.path.exists(path):
        found = f"there is no such file in {path.parent.resolve()}"
        raise InputError(called, found, expected=expected, remedy=near_names(path))
    if not os.path.isfile(path):  # reading a pipe would wait for somebody to write into it
        found, remedy = "is a pipe or a device, not a file on disk", "Save it as a file first."
        raise InputError(called, found, expected=expected, remedy=remedy)
    try:
        data = path.read_bytes() if most is None else _first_bytes(path, most)
    except OSError as error:
        found = f"the file cannot be read ({error.strerror})"
        raise InputError(called, found, expected=expected, remedy="Check its rights.") from error
    if not (may_be_empty or data.strip()):
        remedy = "Check that it was saved whole."
        raise InputError(called, "the file is empty", expected=expected, remedy=remedy)
    return data


def _first_bytes(path: Path, most: int) -> bytes:
    with path.open("rb") as file:
        return file.read(most)


def near_names(path: Path) -> str:
    """A sentence with the names in the folder of a missing file that are like its own."""
    if os.path.islink(path):
        return "It is a link that leads to no file; correct the link."
    if not os.path.isdir(path.parent):
        return f"There is no folder {path.parent} either; check the path."
    names = {p.name.casefold(): p.name for p in sorted(path.parent.iterdir())}
    wanted = path.name.casefold()
    near = [wanted] if wanted in names else difflib.get_close_matches(wanted, names, n=3)
    if not near:
        return "Check the path; nothing in that folder has a name like it."
    return f"Did you mean {' or '.join(repr(names[name]) for name in near)}?"


def utf8_text(data: bytes, *, called: str, remedy: str) -> str:
    """Text from UTF-8 with or without byte-order mark; an InputError names another encoding."""
    found = ""
    if data.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        found = "the file is written in UTF-16"
    elif data.startswith(b"PK\x03\x04"):
        found = "the file is a workbook (XLSX) or a ZIP archive, not text"
    elif b"\0" in data:
        found = "the file holds zero bytes, so it is written in UTF-16 or is not text at all"
    else:
        try:
            return data.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            line = data.count(b"\n", 0, error.start) + 1
            byte = data[error.start : error.start + 1]
            found = f"line {line} holds the byte 0x{byte[0]:02X}, which is not UTF-8"
            guess = byte.decode("latin-1")
            if guess.isprintable():
                found += f" (in Latin-1 it is {guess!r})"
    raise InputError(called, found, expected="text in UTF-8", remedy=remedy)


def read_csv(path: Path, *, called: str, expected: str, known: Collection[str]) -> Cells:
    """Cells of a CSV file with commas or semicolons, whichever suits its header.

    Parameters
    ----------
    path : Path
    called : str
        How messages call the file.
    expected : str
        What the file should be, for messages.
    known : collection of str
        Column names of which the header should hold some.

    Raises
    ------
    InputError
        For a file that is missing, empty, not UTF-8, separated by tabs or wrongly quoted.
    """
    data = file_bytes(path, called=called, expected=expected)
    remedy = "In the spreadsheet program, save it as 'CSV UTF-8'."
    text = utf8_text(data, called=called, remedy=remedy)
    if not text.strip():
        remedy = "Check that it was saved whole."
        raise InputError(called, "the file is empty", expected=expected, remedy=remedy)
    delimiter = _delimiter(text, called=called, known=known)
    return _cells(_records(text, called=called, delimiter=delimiter), called, delimiter)


def csv_header(
    path: Path, *, called: str, expected: str, known: Collection[str]
) -> tuple[str, ...]:
    """Names in the first filled line of a CSV file, without reading all of it.

    Raises
    ------
    InputError
        As `read_csv`, as far as the first lines show it.
    """
    data = file_bytes(path, called=called, expected=expected, most=_HEAD)
    whole = data[: data.rfind(b"\n") + 1] if len(data) == _HEAD else data
    remedy = "In the spreadsheet program, save it as 'CSV UTF-8'."
    text = utf8_text(whole or data, called=called, remedy=remedy)
    if not text.strip():
        remedy = "Check that it was saved whole."
        raise InputError(called, "the file is empty", expected=expected, remedy=remedy)
    delimiter = _delimiter(text, called=called, known=known)
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter)
    return tuple(name.strip() for name in next(filter(_is_filled, reader)))


def _delimiter(text: str, *, called: str, known: Collection[str]) -> str:
    def score(delimiter: str) -> tuple[int, int]:
        reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter)
        header = next(filter(_is_filled, reader))
        return len(wanted & {name.strip().casefold() for name in header}), len(header)

    wanted = {name.casefold() for name in known}
    best = max(",;", key=score)
    if score("\t") > score(best):
        raise InputError(
            called,
            "the columns are separated by tabs",
            expected="commas or semicolons between the columns",
            remedy="In the spreadsheet program, save it as 'CSV UTF-8'.",
        )
    return best


def _records(text: str, *, called: str, delimiter: str) -> list[list[str]]:
    records: list[list[str]] = []
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    try:
        records.extend(reader)
    except csv.Error as error:
        raise InputError(
            f"{called}, row {len(records) + 1}",
            "the quotation marks do not match",
            expected='a quoted cell as "…", with every quotation mark inside it doubled',
            remedy="Check the quotation marks of this row.",
        ) from error
    return records


def _cells(records: Sequence[Sequence[str]], called: str, delimiter: str) -> Cells:
    filled = [i for i, row in enumerate(records) if row and (row[0].strip() or _is_filled(row))]
    header, body = filled[0], filled[1:]
    return Cells(
        file=called,
        header=tuple(name.strip() for name in records[header]),
        header_row=header + 1,
        row_numbers=[i + 1 for i in body],
        rows=[records[i] for i in body],
        delimiter=delimiter,
    )


def _is_filled(row: Sequence[str]) -> bool:
    return bool("".join(row).strip())


def read_workbook(path: Path, *, called: str, expected: str) -> Cells:
    """Cells of the first sheet of an XLSX workbook; a formula is its text, from "=" on.

    Dates become ISO dates, whole numbers lose their ".0".

    Raises
    ------
    InputError
        For a file that is missing, no workbook, or holds no filled cell.
    """
    data = file_bytes(path, called=called, expected=expected)
    try:
        records = _workbook_records(data)
    # What a damaged workbook raises depends on where the damage is.
    except Exception as error:
        raise InputError(
            called,
            "the file is not a readable XLSX workbook (damaged, or locked with a password)",
            expected=expected,
            remedy="Open it in the spreadsheet program and save it anew as XLSX.",
        ) from error
    if not any(map(_is_filled, records)):
        remedy = "The table must be on the first sheet of the workbook."
        raise InputError(called, "the first sheet is empty", expected=expected, remedy=remedy)
    return _cells(records, called, "")


def _workbook_records(data: bytes) -> list[list[str]]:
    import openpyxl

    with warnings.catch_warnings():
        # They speak of styles and drop-down lists, of which nothing is read here.
        warnings.simplefilter("ignore")
        book = openpyxl.load_workbook(io.BytesIO(data), read_only=True)
        sheet = book.worksheets[0]
        sheet.reset_dimensions()  # some programs write a wrong extent, which would hide cells
        return [[_cell_text(cell) for cell in row] for row in sheet.iter_rows()]


def _cell_text(cell: Any) -> str:
    value = cell.value
    if value is None:
        return ""
    if isinstance(value, bool):
        return str(value).upper()
    if isinstance(value, float) and value.is_integer() and abs(value) < 1e15:
        return str(int(value))
    if isinstance(value, datetime.datetime):
        whole_day = value.time() == datetime.time() and "h" not in cell.number_format.lower()
        return value.date().isoformat() if whole_day else value.isoformat(timespec="seconds")
    if isinstance(value, datetime.time):
        return value.isoformat(timespec="seconds")
    if hasattr(value, "ref"):  # a formula that fills a range
        return str(getattr(value, "text", None) or "={…}")
    return str(value)


def holds_formula(text: str) -> bool:
    """True for a cell with a formula, or with what a spreadsheet shows when one fails."""
    return text.lstrip().startswith("=") or text.strip() in _FAILED


def formula_errors(cells: Cells) -> list[InputError]:
    """One error for each cell, the header included, that holds a formula or a failed one."""
    errors = []
    lines = [(cells.header_row, cells.header), *zip(cells.row_numbers, cells.rows, strict=True)]
    for row_number, row in lines:
        for column, text in enumerate(row):
            if not holds_formula(text):
                continue
            found = f'holds the formula "{text.strip()}"'
            if text.strip() in _FAILED:
                found = f"holds {text.strip()}, the error of a formula"
            errors.append(
                InputError(
                    cells.place(row_number, column),
                    found,
                    expected="a plain value",
                    remedy="Write the value itself; no cell may begin with an equals sign.",
                )
            )
    return errors


def _column_letters(column: int) -> str:
    letters = ""
    column += 1
    while column:
        column, rest = divmod(column - 1, 26)
        letters = _LETTERS[rest] + letters
    return letters
