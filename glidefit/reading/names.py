"""A draft of the assay sheet, from the files in a folder and from their names."""

from __future__ import annotations

import difflib
import os
import re
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from glidefit.errors import InputError
from glidefit.reading.sheet_columns import KNOWN, NEEDED, TABLE_SUFFIXES, has_unit
from glidefit.reading.sheet_labels import plain_day, plain_label
from glidefit.reading.table_cells import near_names
from glidefit.reading.video import VIDEO_SUFFIXES

_FIRST_COLUMNS = (*NEEDED, "shape", "pixel_um", "frame_s", "exposure_s", "control")
_RECORDINGS = "a folder with videos or track tables"
_DATE = r"\d{4}-\d{2}-\d{2}|\d{8}|\d{1,2}\.\d{1,2}\.\d{4}"


def draft_sheet(
    folder: Path,
    *,
    names: str | None,
    facts: Callable[[Path], dict[str, str]] | None = None,
) -> list[dict[str, str]]:
    """Rows of an assay sheet for all videos and track tables below a folder.

    Hidden files, reports of earlier runs and assay sheets are passed over. What nobody knows
    stays empty, to be filled in. Days named as 20260303 or 3.3.2026 become ISO dates.

    Parameters
    ----------
    folder : Path
        Paths of recordings are relative to it, so the sheet belongs there.
    names : str or None
        Pattern for the path of a recording below the folder without its suffix, such as
        ``"{day}/{condition}_ch{chamber}_{field}"``: a column of the sheet in braces stands for
        text without "/", ``*`` for any text. Where a name can be read in two ways, the condition
        takes as much of it as it can, every other column as little.
    facts : callable, optional
        What a file says of itself: columns such as pixel_um and their texts.

    Returns
    -------
    list of dict
        One a recording, in natural order of paths, all with the same keys in the same order.

    Raises
    ------
    InputError
        For a folder without recordings, and a pattern that is malformed, names an unknown column
        or matches no file.
    """
    if not os.path.exists(folder):
        found, remedy = "there is no such folder", near_names(folder)
        raise InputError(str(folder), found, expected=_RECORDINGS, remedy=remedy)
    if not os.path.isdir(folder):
        found, remedy = "this is a file", "Give the folder it is in."
        raise InputError(str(folder), found, expected=_RECORDINGS, remedy=remedy)
    pattern = _pattern(names) if names is not None else None
    paths = sorted(_recordings(folder), key=lambda path: _natural(path.relative_to(folder)))
    if not paths:
        raise InputError(
            str(folder),
            "neither videos nor track tables are in it",
            expected=_RECORDINGS,
            remedy=f"The types read are {', '.join([*sorted(VIDEO_SUFFIXES), *TABLE_SUFFIXES])}.",
        )
    named = [pattern.match(_stem(path.relative_to(folder))) if pattern else {} for path in paths]
    if pattern is not None and not any(named):
        raise _no_match(pattern, [_stem(path.relative_to(folder)) for path in paths])
    rows = []
    for path, told in zip(paths, named, strict=True):
        known = facts(path) if facts else {}
        rows.append({"recording": path.relative_to(folder).as_posix()} | known | told)
    columns = dict.fromkeys([*_FIRST_COLUMNS, *(pattern.columns if pattern else ())])
    columns |= dict.fromkeys(name for row in rows for name in row)
    return [{name: row.get(name, "") for name in columns} for row in rows]


def _recordings(folder: Path) -> Iterator[Path]:
    try:
        entries = list(folder.iterdir())
    except OSError as error:
        found = f"the folder cannot be read ({error.strerror})"
        remedy = "Check its rights."
        raise InputError(str(folder), found, expected=_RECORDINGS, remedy=remedy) from error
    for entry in entries:
        suffix = entry.suffix.lower()
        if entry.name.startswith((".", "~$")):
            continue
        if entry.is_dir():
            circular = entry.is_symlink() and folder.resolve().is_relative_to(entry.resolve())
            if not circular and not (entry / "results.json").exists():
                yield from _recordings(entry)
        elif entry.exists() and not entry.is_file():
            continue  # a pipe or a device, which would be waited for
        elif suffix in VIDEO_SUFFIXES or (suffix in TABLE_SUFFIXES and not _is_sheet(entry)):
            yield entry


def _is_sheet(path: Path) -> bool:
    """True for a CSV file whose first line has the columns of an assay sheet."""
    if path.suffix.lower() != ".csv":
        return False
    # What is wrong with the file, if anything, is said when it is read as a recording.
    try:
        with path.open("rb") as file:
            header = file.readline(100_000).decode("utf-8-sig", errors="replace")
    except OSError:
        return False
    names = {name.strip(' "\r\n').casefold() for name in re.split("[,;]", header)}
    return {"recording", "condition"} <= names


def _natural(path: Path) -> list[list[tuple[int, int, str]]]:
    """Sort key: numbers inside names by value, so that ch2 comes before ch10."""

    def key(name: str) -> list[tuple[int, int, str]]:
        parts = re.findall(r"[0-9]+|[^0-9]+", name)
        return [(0, int(p), p) if p[0] in "0123456789" else (1, 0, p.casefold()) for p in parts]

    return [key(name) for name in path.parts]


def _stem(path: Path) -> str:
    stem = path.with_suffix("").as_posix()
    return stem[:-4] if stem.lower().endswith(".ome") else stem


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pattern:
    """A pattern of names and the columns in its braces."""

    written: str
    columns: tuple[str, ...]
    expression: re.Pattern[str]

    def match(self, stem: str) -> dict[str, str]:
        """The text of each column, or nothing if the path does not match."""
        found = self.expression.fullmatch(stem)
        if found is None:
            return {}
        texts = {name: found[f"c{i}"] for i, name in enumerate(self.columns)}
        return {n: plain_day(t) if n == "day" else plain_label(t) for n, t in texts.items()}


def _pattern(names: str) -> _Pattern:
    columns: list[str] = []
    expression = ""
    for part in re.findall(r"\{[^{}]*\}|\*|[^{}*]+|[{}]", names):
        if part == "*":
            expression += ".*?"
        elif part in ("{", "}"):
            raise _malformed(names, f"a brace in {names!r} has no partner")
        elif not part.startswith("{"):
            expression += re.escape(part)
        elif (name := part[1:-1].strip()) in columns:
            expression += f"(?P=c{columns.index(name)})"
        else:
            _require_column(names, name)
            expression += f"(?P<c{len(columns)}>{_text_of(name)})"
            columns.append(name)
    if not columns:
        raise _malformed(names, f"{names!r} names no column")
    return _Pattern(written=names, columns=tuple(columns), expression=re.compile(expression))


def _text_of(name: str) -> str:
    if name == "day":
        return f"{_DATE}|[^/]+?"
    return "[^/]+" if name == "condition" else "[^/]+?"


def _require_column(names: str, name: str) -> None:
    if name != "recording" and (name in KNOWN or has_unit(name)):
        return
    known = [column for column in KNOWN if column != "recording"]
    near = difflib.get_close_matches(name.casefold(), known, n=1)
    hint = f"Did you mean {{{near[0]}}}?" if near else f"The columns are {', '.join(known)}."
    raise InputError(
        "--names",
        f"{{{name}}} is no column of the assay sheet that a name can fill",
        expected="columns of the sheet in braces, or a quantity with its unit, as {atp_uM}",
        remedy=hint,
    )


def _malformed(names: str, found: str) -> InputError:
    return InputError(
        "--names",
        found,
        expected="a pattern with columns of the assay sheet in braces",
        remedy='For example "{day}/{condition}_ch{chamber}_{field}".',
    )


def _no_match(pattern: _Pattern, stems: Sequence[str]) -> InputError:
    return InputError(
        "--names",
        f"{pattern.written!r} fits none of the {len(stems)} files",
        expected="a pattern for the whole path below the folder, without its type",
        remedy=f"The first one is {stems[0]!r}; '*' stands for any text.",
    )
