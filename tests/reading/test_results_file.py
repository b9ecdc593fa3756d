"""results.json, read back: whole results, and what is said of anything else."""

import json

import pytest

from glidefit.errors import InputError
from glidefit.reading.results_file import read_results
from glidefit.results import Comparison, Ratio, SettingRow, StudyResult

RESULT = StudyResult(
    name="assay",
    conditions=(),
    comparisons=(
        Comparison(
            condition="k",
            reference="wild type",
            quantity="speed_um_s",
            ratio=Ratio(value=1.1, low=1.0, high=1.25, level=0.95),
            p_value=0.05,
            p_adjusted=0.1,
            p_permutation=0.2,
            problem="",
        ),
    ),
    recordings=(),
    settings=(SettingRow(key="a.b", value="1", unit="µm", source="default", help="?"),),
    problems=("no control",),
    seed=7,
    version="0.1.0",
    sheet_sha256="ab",
)
RUN = "expected results.json of a run of glidefit."
AGAIN = "Take the results.json of a finished run, or run the analysis again."


@pytest.fixture
def path(tmp_path):
    return tmp_path / "results.json"


def problem(path, content=None):
    if content is not None:
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(InputError) as caught:
        read_results(path)
    return str(caught.value)


@pytest.mark.parametrize("mark", ["", "\ufeff"])
def test_results_come_back(path, mark):
    path.write_text(mark + json.dumps(RESULT.to_json()), encoding="utf-8")
    assert read_results(path) == RESULT


def test_a_file_that_is_not_there(path):
    assert problem(path) == (
        f"{path}: there is no such file in {path.parent}; {RUN} "
        "Check the path; nothing in that folder has a name like it."
    )
    assert problem(path.parent) == (
        f"{path.parent}: is a folder; {RUN} Give the path of the file itself."
    )
    assert problem(path, "") == (f"{path}: the file is empty; {RUN} Check that it was saved whole.")


@pytest.mark.parametrize("text", ["{", "[1, 2", "x", '{"format": "glidefit-results/1"'])
def test_a_file_that_is_no_json(path, text):
    assert problem(path, text) == (
        f"{path}, line 1, column {len(text) + 1 if text != 'x' else 1}: "
        f"the file is no JSON, or it was cut off; {RUN} {AGAIN}"
    )


def test_a_file_that_is_no_text(path):
    assert problem(path, b'{"name": "\xb5"}') == (
        f"{path}: line 1 holds the byte 0xB5, which is not UTF-8 (in Latin-1 it is 'µ'); "
        f"expected text in UTF-8. {AGAIN}"
    )


def test_a_file_that_is_nested_without_end(path):
    assert problem(path, "[" * 200_000) == (f"{path}: the file is nested too deeply; {RUN} {AGAIN}")


@pytest.mark.parametrize("content", [[], 3, "glidefit-results/1", None, {}, {"format": None}])
def test_json_of_something_else(path, content):
    assert problem(path, json.dumps(content)) == (
        f"{path}: the file does not say its format; expected the format 'glidefit-results/1'. "
        f"{AGAIN}"
    )


def test_other_formats(path):
    expected = "expected the format 'glidefit-results/1'."
    assert problem(path, '{"format": "glidefit-results/2"}') == (
        f"{path}: the format is 'glidefit-results/2'; {expected} "
        "It comes from another version of glidefit; use that one, or run again."
    )
    assert problem(path, '{"format": 1}') == f"{path}: the format is 1; {expected} {AGAIN}"


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (lambda data: data.pop("seed"), "StudyResult: key 'seed' is missing"),
        (lambda data: data["comparisons"][0].pop("ratio"), "Comparison: key 'ratio' is missing"),
        (
            lambda data: data["comparisons"][0]["ratio"].update(low="much"),
            "could not convert string to float: 'much'",
        ),
        (lambda data: data.update(problems=None), "'NoneType' object is not iterable"),
        (lambda data: data.update(comparisons=[3]), "argument of type 'int' is not iterable"),
    ],
)
def test_results_that_are_not_complete(path, change, reason):
    data = RESULT.to_json()
    change(data)
    text = problem(path, json.dumps(data))
    if reason.startswith(("'", "argument")):  # the words are those of the Python in use
        assert text.startswith(f"{path}: the results are not complete (")
        assert text.endswith(f"); {RUN} {AGAIN}")
    else:
        assert text == f"{path}: the results are not complete ({reason}); {RUN} {AGAIN}"
