"""results.json and provenance.json as text: stable, readable, NaN as null."""

from __future__ import annotations

import dataclasses
import json
import math
import re
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from glidefit.results import StudyResult

if TYPE_CHECKING:
    from _typeshed import DataclassInstance

# Names of files may hold bytes that are no UTF-8; Python keeps them as lone surrogates, which
# no UTF-8 file can hold but which JSON can spell.
_SURROGATE = re.compile("[\ud800-\udfff]")


def results_text(study: StudyResult) -> str:
    """Text of results.json; read back, it gives the same record and the same text."""
    return _text(study.to_json())


def record_text(record: DataclassInstance) -> str:
    """Text of a record in the order of its fields, NaN as null."""
    return _text(_plain(dataclasses.asdict(record), where=type(record).__name__))


def provenance_text(mapping: Mapping[str, Any]) -> str:
    """Text of provenance.json: the mapping in its own order, NaN as null.

    Raises
    ------
    ValueError
        For a value that JSON does not know.
    """
    return _text(_plain(mapping, where="provenance"))


def _text(data: Any) -> str:
    text = _indented(data, indent="") + "\n"
    return _SURROGATE.sub(lambda match: f"\\u{ord(match[0]):04x}", text)


def _indented(data: Any, *, indent: str) -> str:
    """Nested records on lines of their own, plain lists on one."""
    if isinstance(data, dict):
        items, ends = [f"{_compact(k)}: " for k in data], "{}"
        values = list(data.values())
    elif isinstance(data, list):
        items, ends = [""] * len(data), "[]"
        values = data
    else:
        return _compact(data)
    if not any(isinstance(value, (dict, list)) and value for value in values):
        return _compact(data)
    deeper = indent + " "
    lines = [
        f"{deeper}{item}{_indented(v, indent=deeper)}"
        for item, v in zip(items, values, strict=True)
    ]
    return f"{ends[0]}\n" + ",\n".join(lines) + f"\n{indent}{ends[1]}"


def _compact(data: Any) -> str:
    return json.dumps(data, ensure_ascii=False, allow_nan=False)


def _plain(value: Any, *, where: str) -> Any:
    if isinstance(value, Mapping):
        return {str(k): _plain(v, where=f"{where}.{k}") for k, v in value.items()}
    if isinstance(value, (tuple, list)):
        return [_plain(item, where=where) for item in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, (str, bool, int)):
        return value
    raise ValueError(f"{where}: JSON has no {type(value).__name__}")
