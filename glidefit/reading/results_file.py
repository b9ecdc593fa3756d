"""The results of an earlier run, read back from results.json."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from glidefit.errors import InputError
from glidefit.reading.table_cells import file_bytes, utf8_text
from glidefit.results import FORMAT, StudyResult

_RESULTS = "results.json of a run of glidefit"
_AGAIN = "Take the results.json of a finished run, or run the analysis again."


def read_results(path: Path) -> StudyResult:
    """The results in a results.json.

    Raises
    ------
    InputError
        For a file that is missing, not JSON, of another format or incomplete.
    """
    data = file_bytes(path, called=str(path), expected=_RESULTS)
    text = utf8_text(data, called=str(path), remedy=_AGAIN)
    content = _json(text, path)
    kind = content.get("format") if isinstance(content, dict) else None
    if kind != FORMAT:
        found = "the file does not say its format" if kind is None else f"the format is {kind!r}"
        remedy = _AGAIN
        if isinstance(kind, str) and kind.startswith("glidefit-results/"):
            remedy = "It comes from another version of glidefit; use that one, or run again."
        raise InputError(str(path), found, expected=f"the format {FORMAT!r}", remedy=remedy)
    try:
        return StudyResult.from_json(content)
    except (ValueError, TypeError, KeyError, AttributeError) as error:
        raise InputError(
            str(path),
            f"the results are not complete ({error})",
            expected=_RESULTS,
            remedy=_AGAIN,
        ) from error


def _json(text: str, path: Path) -> Any:
    try:
        return json.loads(text)
    except json.JSONDecodeError as error:
        where = f"{path}, line {error.lineno}, column {error.colno}"
        found = "the file is no JSON, or it was cut off"
        raise InputError(where, found, expected=_RESULTS, remedy=_AGAIN) from error
    except RecursionError as error:
        found = "the file is nested too deeply"
        raise InputError(str(path), found, expected=_RESULTS, remedy=_AGAIN) from error
