"""The settings file: TOML, with errors in plain words."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from glidefit.errors import InputError
from glidefit.reading.table_cells import file_bytes, utf8_text

_SETTINGS = "a settings file in TOML"
_PLACE = re.compile(r" \(at (?:line (\d+), column (\d+)|end of document)\)$")
_NAME = re.compile(r"[A-Za-z0-9_.\- \"']+")
_EXAMPLE = 'For example max_speed = 8.0 under [link], or track = "particle" under [columns].'


def read_settings(path: Path, *, expected: str = _SETTINGS) -> dict[str, Any]:
    """Sections of a settings file, not yet checked against the known settings.

    Parameters
    ----------
    path : Path
    expected : str
        What the file should be, for messages.

    Raises
    ------
    InputError
        For a file that is missing, not UTF-8 or not TOML, with line and column.
    """
    called = path.name
    data = file_bytes(path, called=called, expected=expected, may_be_empty=True)
    text = utf8_text(data, called=called, remedy="Save it as UTF-8 in a text editor.")
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _plain_error(str(error), text, called) from error


def _plain_error(message: str, text: str, called: str) -> InputError:
    lines = text.splitlines()
    place = _PLACE.search(message)
    reason = message[: place.start()] if place else message
    if place and place[1]:
        number, column = int(place[1]), int(place[2])
        where = f"{called}, line {number}, column {column}"
    else:
        # The parser met the end, so the fault is in the last line that says something.
        number = max((i for i, line in enumerate(lines, 1) if line.strip()), default=1)
        where = f"{called}, line {number}, at its end"
    line = lines[number - 1].strip() if number <= len(lines) else ""
    found, expected, remedy = _explain(reason, line)
    return InputError(where, found, expected=expected, remedy=remedy)


def _explain(reason: str, line: str) -> tuple[str, str, str]:
    """What was found, what was expected and what to do, for one message of the parser."""
    shown = f"cannot read {line!r}"
    name, equals, value = (part.strip() for part in line.partition("="))
    if twice := re.fullmatch(r"Cannot declare \((.*)\) twice", reason):
        section = ".".join(re.findall(r"'(.*?)'", twice[1]))
        found = f"the section [{section}] begins a second time"
        return found, "each section once", "Move its settings to the first one."
    if reason == "Cannot overwrite a value":
        found = f"{name!r} is set twice"
        return found, "each setting once in its section", "Delete one of the lines."
    if reason == "Unterminated string" or re.fullmatch(r"Expected [\"']{3,}", reason):
        found = f"{shown}: a quotation mark is never closed"
        return found, 'text as "…" on one line', "Close the quotation mark."
    if line.startswith("["):
        remedy = "Put the name of the section between one pair of brackets."
        return shown, "a section in brackets, such as [link]", remedy
    if not (equals and value and _NAME.fullmatch(name)):
        return shown, "a setting as name = value", _EXAMPLE
    return (shown, *_explain_value(name, value))


def _explain_value(name: str, value: str) -> tuple[str, str]:
    """What was expected of a value that cannot be read, and what to do."""
    if re.match(r"[+-]?\d+,\d", value):
        return "a number with a decimal point", f"Write {value.replace(',', '.', 1)}."
    if re.fullmatch(r"[+-]?(\.\d+|\d+\.|0\d+(\.\d*)?)", value):
        return "a number with digits on both sides of its point", f"Write {float(value)}."
    if number := re.match(r"[+-]?\d+(\.\d+)?(?=\s*[^\s\d.])", value):
        return "nothing after a number but a comment that begins with #", (
            f"Write {name} = {number[0]}, and every setting on a line of its own."
        )
    if re.fullmatch(r"[^\W\d][^\"']*", value):
        text = value.partition("#")[0].strip()
        return "a number, or text in quotation marks", f'For text write {name} = "{text}".'
    remedy = "Write each setting on a line of its own, and a backslash in text as \\\\."
    return "a number, or text in quotation marks", remedy
