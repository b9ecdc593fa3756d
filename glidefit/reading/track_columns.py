"""Columns of a track table, CSV or Parquet, as text or numbers with their row numbers."""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from glidefit.errors import InputError
from glidefit.reading.table_cells import (
    csv_header,
    file_bytes,
    not_a_number,
    number,
    read_csv,
    visible,
)
from glidefit.settings import ColumnSettings

Floats = NDArray[np.float64]
_TABLE = "a track table"
_SHOWN = 20  # columns listed in a message

# What programs write where they have no position, and what to do about it.
_LOST = ("nan", "inf", "infinity")
_GAP = "Delete the row: a missing frame is a gap."


@dataclass(frozen=True, slots=True, kw_only=True)
class Columns:
    """The columns of a table that have a meaning here, under our names for them."""

    called: str  # the file, in messages
    written: Mapping[str, str]  # "x_um": as the file calls it
    row_numbers: NDArray[np.int64]
    values: Mapping[str, Sequence[str] | Floats]  # "x_um": texts, or numbers with NaN for none

    def where(self, name: str, row: int) -> str:
        """The place of one cell: "tracks.csv, row 17, column 'x_um'"."""
        return f"{self.called}, row {self.row_numbers[row]}, column {self.written[name]!r}"


def read_columns(path: Path, *, columns: ColumnSettings, called: str) -> Columns:
    """The columns that ``columns`` names and the file has; every other one is left alone.

    Raises
    ------
    InputError
        For an unreadable file, one without rows, a row with too many cells, a column twice.
    """
    names = columns.model_dump()
    if path.suffix.lower() in (".parquet", ".pq"):
        header, rows, values = _parquet_columns(
            path, called, set(names.values()), text=columns.track
        )
    else:
        header, rows, values = _csv_columns(path, called, set(names.values()))
    written = _written(names, header, called)
    for column in written.values():
        if header.count(column) > 1:
            found = f"{header.count(column)} columns are called {column!r}"
            remedy = "Delete or rename all but one."
            raise InputError(called, found, expected="every column once", remedy=remedy)
    _require(written, header, columns=columns, called=called)
    if not len(rows):
        remedy = "Check that it was saved whole."
        found = "the table has a header but no rows"
        raise InputError(called, found, expected="one row for each position", remedy=remedy)
    return Columns(
        called=called,
        written=written,
        row_numbers=rows,
        values={name: values[column] for name, column in written.items()},
    )


def require_columns(path: Path, *, columns: ColumnSettings, called: str) -> None:
    """Look at the header of a table only.

    Raises
    ------
    InputError
        For an unreadable file, or one without the columns that ``columns`` names.
    """
    names = columns.model_dump()
    if path.suffix.lower() in (".parquet", ".pq"):
        header, _, _ = _parquet_columns(path, called, set(), text=columns.track)
    else:
        header = csv_header(path, called=called, expected=_TABLE, known=set(names.values()))
    _require(_written(names, header, called), header, columns=columns, called=called)


def _written(names: Mapping[str, str], header: Sequence[str], called: str) -> dict[str, str]:
    """What the file calls each of our columns that it has; none may stand for two of them."""
    written = {name: column for name, column in names.items() if column in header}
    first: dict[str, str] = {}
    for name, column in written.items():
        if first.setdefault(column, name) != name:
            raise InputError(
                called,
                f"the column {column!r} is named for both {first[column]} and {name}",
                expected="a column of its own for each of them",
                remedy="Correct [columns] in the settings file.",
            )
    return written


_Read = tuple[Sequence[str], NDArray[np.int64], dict[str, Sequence[str] | Floats]]


def _csv_columns(path: Path, called: str, wanted: set[str]) -> _Read:
    cells = read_csv(path, called=called, expected=_TABLE, known=wanted)
    width = len(cells.header)
    uneven = set(map(len, cells.rows)) - {width}
    if uneven:
        for row_number, row in zip(cells.row_numbers, cells.rows, strict=True):
            if any(text.strip() for text in row[width:]):
                raise InputError(
                    f"{called}, row {row_number}",
                    f"has {len(row)} cells, the header has {width}",
                    expected="no more cells than columns",
                    remedy="Numbers take a decimal point, not a comma.",
                )
    rows = cells.rows
    if uneven:
        rows = [[*row[:width], *[""] * (width - len(row))] for row in rows]
    every = list(zip(*rows, strict=True)) if rows else [()] * width
    values: dict[str, Sequence[str] | Floats] = {
        name: every[i] for i, name in enumerate(cells.header) if name in wanted
    }
    return cells.header, np.array(cells.row_numbers, dtype=np.int64), values


def _parquet_columns(path: Path, called: str, wanted: set[str], *, text: str) -> _Read:
    data = file_bytes(path, called=called, expected=_TABLE)
    try:
        import pyarrow
        import pyarrow.parquet
    except ImportError as error:
        raise InputError(
            called,
            "reading Parquet needs the library pyarrow, which is not installed",
            expected="pyarrow, or the table as CSV",
            remedy="Install it: pip install 'glidefit[parquet]'",
        ) from error
    try:
        file = pyarrow.parquet.ParquetFile(pyarrow.BufferReader(data))
        header = list(file.schema_arrow.names)
        table = file.read(columns=[name for name in header if name in wanted])
    except (pyarrow.ArrowException, OSError) as error:
        raise InputError(
            called,
            "the file is not a readable Parquet file",
            expected=_TABLE,
            remedy="Write it anew, or save the table as CSV.",
        ) from error
    values: dict[str, Sequence[str] | Floats] = {}
    for name, column in zip(table.column_names, table.columns, strict=True):
        kind = column.type
        is_number = pyarrow.types.is_integer(kind) or pyarrow.types.is_floating(kind)
        if is_number and name != text:
            values[name] = column.to_numpy().astype(np.float64)
        else:
            values[name] = ["" if item is None else str(item) for item in column.to_pylist()]
    return header, np.arange(1, table.num_rows + 1), values


def _require(
    written: Mapping[str, str], header: Sequence[str], *, columns: ColumnSettings, called: str
) -> None:
    """Raise an InputError unless track, frame and a pair of coordinates are there."""
    names = [name for name in ("track", "frame") if name not in written]
    pairs = (("x_um", "y_um"), ("x_px", "y_px"))
    if not any(x in written and y in written for x, y in pairs):
        half = [n for x, y in pairs for n, other in ((x, y), (y, x)) if other in written]
        names += half[:1]
        if not half:
            names += ["x_um", "y_um"]
    if not names:
        return
    wanted = [getattr(columns, name) for name in names]
    are = "columns {} are" if len(names) > 1 else "column {} is"
    *most, last = [repr(name) for name in wanted]
    listed = f"{', '.join(most)} and {last}" if most else last
    raise InputError(
        called,
        f"the {are.format(listed)} missing",
        expected=f"columns {columns.track}, {columns.frame}, {columns.x_um} and {columns.y_um} "
        f"(or {columns.x_px} and {columns.y_px})",
        remedy=_mapping_hint(names, [h for h in header if h not in written.values()], header),
    )


def _mapping_hint(names: Sequence[str], free: Sequence[str], header: Sequence[str]) -> str:
    """How to say in the settings file what the columns are called, with a guess where possible."""
    there = [repr(name) for name in header if name]
    shown = ", ".join(there[:_SHOWN]) + (", …" if len(there) > _SHOWN else "")
    lines = ", ".join(f'{name} = "{_guess(name, free)}"' for name in names)
    hint = f"Its columns are {shown}. If they have other names, say so in the settings file "
    hint += f"under [columns]: {lines}"
    if "x_um" in names:
        hint += " (x_px and y_px if they are in pixels)"
    return hint + "."


def _guess(name: str, free: Sequence[str]) -> str:
    """The column among those without a meaning that is probably meant, or an ellipsis."""
    if name[:2] in ("x_", "y_"):
        free = [column for column in free if column[:1].casefold() == name[0]]
        return free[0] if free else "…"
    return next(iter(difflib.get_close_matches(name, free, n=1)), "…")


def labels(columns: Columns) -> Sequence[str]:
    """The label of the track in each row, without surrounding blanks.

    Raises
    ------
    InputError
        For an empty label.
    """
    texts = list(map(visible, map(str, columns.values["track"])))
    if not all(texts):
        empty = [i for i, text in enumerate(texts) if not text]
        raise InputError(
            columns.where("track", empty[0]),
            f"is empty{_more(len(empty) - 1)}",
            expected="the label of a track",
            remedy="Fill it in, or delete the row.",
        )
    return texts


def numbers(columns: Columns, name: str, *, expected: str, may_be_empty: bool = False) -> Floats:
    """The finite numbers of a column; NaN for an empty cell where cells may be empty.

    Raises
    ------
    InputError
        For the first cell that holds none, with the count of the others.
    """
    values = columns.values[name]
    if isinstance(values, np.ndarray):
        bad = np.isinf(values) if may_be_empty else ~np.isfinite(values)
        texts: Sequence[str] = ["" if np.isnan(v) else str(v) for v in values[bad]]
        rows = np.flatnonzero(bad)
    else:
        parsed, rows = _parsed(values, may_be_empty=may_be_empty)
        texts, values = [visible(values[int(i)]) for i in rows], parsed
    if not len(rows):
        return values
    where = columns.where(name, int(rows[0]))
    more = _more(len(rows) - 1)
    if texts[0]:
        error = not_a_number(texts[0], where, expected=expected)
        remedy = error.remedy if may_be_empty or texts[0].strip("+-").lower() not in _LOST else _GAP
        raise InputError(where, error.found + more, expected=error.expected, remedy=remedy)
    remedy = f"Fill it in, or {_GAP[0].lower()}{_GAP[1:]}"
    raise InputError(where, f"is empty{more}", expected=expected, remedy=remedy)


def _parsed(texts: Sequence[str], *, may_be_empty: bool) -> tuple[Floats, NDArray[np.int64]]:
    """Numbers, and the rows of those cells that hold none."""
    try:
        values = np.array(list(map(float, texts)))
    except ValueError:
        values = np.full(len(texts), np.nan)
    # float() also takes "nan", "inf" and "1_000", which are no numbers here.
    if np.all(np.isfinite(values)) and "_" not in "".join(texts):
        return values, np.empty(0, dtype=np.int64)
    found = [number(text) for text in texts]
    allowed = ("", "nan") if may_be_empty else ()
    bad = [
        i
        for i, (value, text) in enumerate(zip(found, texts, strict=True))
        if value is None and visible(text).casefold() not in allowed
    ]
    filled = [np.nan if value is None else value for value in found]
    return np.array(filled, dtype=np.float64), np.array(bad, dtype=np.int64)


def _more(count: int) -> str:
    if not count:
        return ""
    return f" (and {count} more {'cell' if count == 1 else 'cells'} of this column)"
