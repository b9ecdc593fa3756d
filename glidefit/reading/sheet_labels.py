"""Labels of an assay sheet: days in one style, blanks in one form, and what looks odd in them."""

from __future__ import annotations

import datetime
import re
from collections.abc import Iterable

from glidefit.assay import Assay

_DIGITS = re.compile(r"(?P<y>\d{4})(?P<m>\d{2})(?P<d>\d{2})", re.ASCII)
_DOTTED = re.compile(r"(?P<d>\d{1,2})\.(?P<m>\d{1,2})\.(?P<y>\d{4})", re.ASCII)
_ISO = re.compile(r"\d{4}-\d{2}-\d{2}", re.ASCII)
_DATE_LIKE = re.compile(r"\d{1,4}([./ -])\d{1,2}\1\d{1,4}|\d{4}-\d{2}-\d{2}[T ].*", re.ASCII)
_YEARS = range(1970, 2100)  # eight digits of another year are a number, not a date


def plain_label(text: str) -> str:
    """A label without surrounding blanks, every blank inside it one ordinary blank."""
    return " ".join(text.split())


def plain_day(text: str) -> str:
    """A label of a day; 20260303 and 3.3.2026 become 2026-03-03, any other stays."""
    text = plain_label(text)
    found = _DIGITS.fullmatch(text) or _DOTTED.fullmatch(text)
    if found is None or int(found["y"]) not in _YEARS:
        return text
    try:
        return datetime.date(int(found["y"]), int(found["m"]), int(found["d"])).isoformat()
    except ValueError:  # no day of the calendar, so a label like any other
        return text


def label_notes(assay: Assay) -> list[str]:
    """What looks odd in conditions, days and chambers that can be used as they are."""
    days = list(dict.fromkeys(r.day for r in assay.recordings))
    notes = _near_twins("conditions", (r.condition for r in assay.recordings))
    return [*notes, *_near_twins("days", days), *_day_styles(days), *_shared_chambers(assay)]


def _near_twins(what: str, names: Iterable[str]) -> list[str]:
    """Names that differ only by capitals or blanks."""
    alike: dict[str, list[str]] = {}
    for name in dict.fromkeys(names):
        seen = "".join(c for c in name if c.isprintable() and not c.isspace())
        alike.setdefault(seen.casefold(), []).append(name)
    return [
        f"{what} {' and '.join(map(repr, group))} differ only by capitals or blanks; "
        "if they are the same, write them alike"
        for group in alike.values()
        if len(group) > 1
    ]


def _day_styles(days: Iterable[str]) -> list[str]:
    first: dict[str, str] = {}
    for day in days:
        style = "date" if _ISO.fullmatch(day) else "like" if _DATE_LIKE.fullmatch(day) else "label"
        first.setdefault(style, day)
    if len(first) < 2:
        return []
    examples = " and ".join(map(repr, first.values()))
    note = f"days are written in different styles, such as {examples}; "
    return [note + "a day written in two styles counts as two days"]


def _shared_chambers(assay: Assay) -> list[str]:
    """Chambers of a day that several conditions use; the first of them and how many more."""
    held: dict[tuple[str, str], dict[str, None]] = {}
    for r in assay.recordings:
        held.setdefault((r.day, r.chamber), {})[r.condition] = None
    shared = {place: list(names) for place, names in held.items() if len(names) > 1}
    if not shared:
        return []
    (day, chamber), names = next(iter(shared.items()))
    more = f" (and {len(shared) - 1} more such)" if len(shared) > 1 else ""
    conditions = ", ".join(map(repr, names[:-1])) + f" and {names[-1]!r}"
    return [
        f"chamber {chamber!r} of day {day!r} holds the conditions {conditions}{more}: "
        "a solution exchange? Then this is right; otherwise give each chamber its own label"
    ]
