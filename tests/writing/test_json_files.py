"""results.json and provenance.json."""

from __future__ import annotations

import dataclasses
import json
import math

import pytest

from glidefit.results import FORMAT, StudyResult
from glidefit.writing.json_files import provenance_text, results_text


def test_results_read_back_give_the_same_text(study):
    text = results_text(study)
    again = StudyResult.from_json(json.loads(text))
    assert results_text(again) == text


def test_results_are_strict_json_with_null_for_nan_and_format_first(study):
    text = results_text(study)

    def refuse(name):
        raise AssertionError(name)

    data = json.loads(text, parse_constant=refuse)
    assert next(iter(data)) == "format"
    assert data["format"] == FORMAT
    assert data["conditions"][0]["estimates"]["go_rate_per_s"]["value"] is None
    assert text.endswith("}\n")
    assert "µm" not in json.dumps("µm")  # what ensure_ascii would have made of it
    assert "× noise" in text


def test_results_hold_one_record_a_line(study):
    lines = results_text(study).splitlines()
    assert sum('"n_positions"' in line for line in lines) == sum(
        len(c.tracks) for c in study.conditions
    )


def test_name_that_is_no_utf8_can_be_written(study):
    name = b"caf\xe9".decode("utf-8", "surrogateescape")
    odd = dataclasses.replace(study, name=name)
    text = results_text(odd)
    text.encode("utf-8")
    assert json.loads(text)["name"] == name


def test_provenance_keeps_order_and_writes_nan_as_null():
    text = provenance_text({"z": 1, "a": {"x": math.nan, "list": (1.5, "µ", None, True)}})
    assert text == '{\n "z": 1,\n "a": {\n  "x": null,\n  "list": [1.5, "µ", null, true]\n }\n}\n'


def test_provenance_refuses_what_json_does_not_know():
    with pytest.raises(ValueError, match=r"provenance.path: JSON has no set"):
        provenance_text({"path": {1, 2}})
