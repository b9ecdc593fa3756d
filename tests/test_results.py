"""Result records: JSON and back again, and what a record refuses."""

import dataclasses
import json
import math
import typing

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import glidefit.results
from glidefit.quantities import QUANTITIES
from glidefit.results import (
    FORMAT,
    ConditionResult,
    Counts,
    Curve,
    Estimate,
    RecordingResult,
    StudyResult,
    TrackResult,
)

NUMBERS = st.just(math.nan) | st.floats(allow_nan=False, allow_infinity=False)
TEXTS = st.text(max_size=5)


@st.composite
def estimates(draw):
    low, value, high = sorted(draw(st.lists(st.floats(-1e9, 1e9), min_size=3, max_size=3)))
    ends = draw(st.sampled_from([(low, high), (math.nan, high), (low, math.nan)]))
    value = draw(st.sampled_from([value, math.nan]))
    return Estimate(value=value, low=ends[0], high=ends[1], method=draw(TEXTS), problem=draw(TEXTS))


def values(hint):
    """Values of any type that a field of a result may have."""
    origin, args = typing.get_origin(hint), typing.get_args(hint)
    simple = {float: NUMBERS, int: st.integers(0, 10**9), str: TEXTS, bool: st.booleans()}
    if hint in simple:
        return simple[hint]
    if hint is Estimate:
        return estimates()
    if dataclasses.is_dataclass(hint):
        return records(hint)
    if origin is tuple and args[-1] is Ellipsis:
        return st.lists(values(args[0]), max_size=2).map(tuple)
    if origin is tuple:
        return st.tuples(*map(values, args))
    assert origin is dict, hint
    if args[1] is Estimate:
        return st.fixed_dictionaries({key: estimates() for key in QUANTITIES})
    return st.dictionaries(TEXTS, values(args[1]), max_size=2)


def records(kind):
    hints = typing.get_type_hints(kind)
    names = [field.name for field in dataclasses.fields(kind) if field.name != "format"]
    return st.builds(kind, **{name: values(hints[name]) for name in names})


def same(a, b):
    """Equality in which NaN equals NaN and types count."""
    if type(a) is not type(b):
        return False
    if dataclasses.is_dataclass(a):
        names = [field.name for field in dataclasses.fields(a)]
        return all(same(getattr(a, name), getattr(b, name)) for name in names)
    if isinstance(a, tuple):
        return len(a) == len(b) and all(map(same, a, b))
    if isinstance(a, dict):
        return list(a) == list(b) and all(same(a[key], b[key]) for key in a)
    return a == b or (a != a and b != b)


def study(**changes):
    """A result without conditions."""
    empty = dict.fromkeys(("conditions", "comparisons", "recordings", "settings", "problems"), ())
    return StudyResult(**{
        **empty, "name": "a", "seed": 1, "version": "0.1", "sheet_sha256": "00", **changes
    })  # fmt: skip


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(written=records(StudyResult))
def test_a_study_comes_back_from_json_and_gives_the_same_json(written):
    text = json.dumps(written.to_json(), allow_nan=False)
    read = StudyResult.from_json(json.loads(text))
    assert same(read, written)
    assert json.dumps(read.to_json(), allow_nan=False) == text


def test_every_kind_of_record_is_reached_from_a_study():
    def kinds(hint):
        if dataclasses.is_dataclass(hint):
            found = {hint}
            for inner in typing.get_type_hints(hint).values():
                found |= kinds(inner)
            return found
        return {kind for arg in typing.get_args(hint) for kind in kinds(arg)}

    declared = {kind for kind in vars(glidefit.results).values() if isinstance(kind, type)}
    assert kinds(StudyResult) == {kind for kind in declared if dataclasses.is_dataclass(kind)}


def test_the_format_is_the_first_key():
    assert next(iter(study().to_json().items())) == ("format", FORMAT)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_what_is_no_number_becomes_null(value):
    record = dataclasses.replace(curve(), frame_s=value)
    assert _plain_of(record)["frame_s"] is None


def curve():
    names = ("lag_s", "value", "low", "high", "model", "model_low", "model_high")
    return Curve(**dict.fromkeys(names, (1.0,)), fitted=(True,), frame_s=0.5)


def _plain_of(record):
    condition = dataclasses.replace(condition_result(), msd=(record,))
    return study(conditions=(condition,)).to_json()["conditions"][0]["msd"][0]


def condition_result(**changes):
    """A condition in which nothing was measured."""
    fields = {field.name: () for field in dataclasses.fields(ConditionResult)}
    fields |= dict.fromkeys(("condition", "slug", "model", "generalises", "methods"), "")
    fields |= dict.fromkeys(("longest_lag_s", "heading_diffusion_rad2_s"), math.nan)
    counts = dict.fromkeys((field.name for field in dataclasses.fields(Counts)), 0)
    fields["counts"] = Counts(**(counts | {"set_aside": {}, "frames_set_aside": {}}))
    fields |= {"control": False, "estimates": {key: Estimate() for key in QUANTITIES}}
    return ConditionResult(**(fields | changes))


def test_a_key_that_is_new_does_not_matter():
    data = study().to_json()
    assert StudyResult.from_json({**data, "added_later": 1}) == study()


@pytest.mark.parametrize("format_", [None, "glidefit-results/2", "x"])
def test_another_format_is_refused(format_):
    data = study().to_json() | {"format": format_}
    with pytest.raises(ValueError, match=f"^format is {format_!r}, not 'glidefit-results/1'$"):
        StudyResult.from_json(data)


def test_a_missing_key_is_named_with_its_record():
    data = study(conditions=(condition_result(),)).to_json()
    del data["conditions"][0]["counts"]["days"]
    with pytest.raises(ValueError, match=r"^Counts: key 'days' is missing$"):
        StudyResult.from_json(data)


def test_a_reversed_interval_is_refused_and_an_open_one_is_not():
    with pytest.raises(ValueError, match=r"^interval 2 to 1 is reversed$"):
        Estimate(value=1.5, low=2.0, high=1.0)
    open_above = Estimate(value=1.5, low=1.0)
    assert (open_above.low, math.isnan(open_above.high)) == (1.0, True)


def test_a_condition_has_an_estimate_of_every_quantity():
    incomplete = {key: Estimate() for key in QUANTITIES if key != "speed_um_s"}
    with pytest.raises(ValueError, match=r"^k: no estimate of \['speed_um_s'\]$"):
        condition_result(condition="k", estimates=incomplete)


def test_a_quantity_added_since_is_there_without_a_value():
    data = study(conditions=(condition_result(),)).to_json()
    del data["conditions"][0]["estimates"]["sideways_diffusion_um2_s"]
    (condition,) = StudyResult.from_json(data).conditions
    added = condition.estimates["sideways_diffusion_um2_s"]
    assert math.isnan(added.value)
    assert added.problem == "not estimated by the version that made this run"


def test_records_are_frozen():
    with pytest.raises(dataclasses.FrozenInstanceError):
        study().name = "b"


def test_numbers_of_a_recording_end_in_their_unit():
    hints = typing.get_type_hints(RecordingResult)
    floats = [name for name, hint in hints.items() if hint is float]
    assert floats
    assert all(name.endswith(("_s", "_um")) for name in floats)


def test_results_from_before_a_key_was_added_are_still_read():
    track = TrackResult(
        recording="r",
        day="d",
        chamber="1",
        track="1",
        kept=True,
        set_aside_reason="",
        n_positions=3,
        duration_s=1.0,
        net_advance_um=1.0,
        path_um=1.0,
        speed_um_s=1.0,
        speed_error_um_s=0.1,
    )
    data = glidefit.results._plain(track)
    del data["speed_error_um_s"]
    assert math.isnan(glidefit.results._record(TrackResult, data).speed_error_um_s)
    del data["speed_um_s"]
    with pytest.raises(ValueError, match="TrackResult: key 'speed_um_s' is missing"):
        glidefit.results._record(TrackResult, data)
