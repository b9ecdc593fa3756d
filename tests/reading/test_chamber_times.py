"""Start times as minutes: against the calendar, and in any order of rows."""

import datetime

import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from glidefit.reading.chamber_times import minutes_from_start, parse_start_time

DAY = datetime.date(2024, 5, 31)


@pytest.mark.parametrize(
    ("text", "kind", "minutes"),
    [
        ("00:00", "clock", 0),
        ("9:05", "clock", 545),
        ("23:59:30", "clock", 1439.5),
        ("14:05:00.6", "clock", 845.01),
        ("2000-01-01T00:01", "date", 1),
        ("2000-01-02 00:00:30", "date", 1440.5),
        ("2000-01-01T01:00+01:00", "zone", 0),
        ("2000-01-01T00:00Z", "zone", 0),
    ],
)
def test_forms_of_a_time(text, kind, minutes):
    found = parse_start_time(text)
    assert found is not None
    assert found[0] == kind
    assert_allclose(found[1], minutes, rtol=1e-12, atol=1e-9)


@pytest.mark.parametrize(
    "text", ["", "24:00", "10:60", "1:2", "10:00 pm", "2024-05-31", "2024-13-01T10:00", "T"]
)
def test_what_is_no_time(text):
    assert parse_start_time(text) is None


TIMES = st.lists(
    st.tuples(st.sampled_from("AB"), st.integers(0, 12 * 3600)), min_size=1, max_size=8
)


@given(starts=TIMES, form=st.sampled_from(["clock", "date"]), random=st.randoms())
def test_minutes_are_differences_of_the_calendar(starts, form, random):
    """A slow, obvious second version, chamber by chamber; the order of rows changes nothing."""
    midnight = datetime.datetime.combine(DAY, datetime.time())
    moments = [midnight + datetime.timedelta(seconds=seconds) for _, seconds in starts]
    texts = [m.time().isoformat() if form == "clock" else m.isoformat() for m in moments]
    rows = [
        {"day": "1", "chamber": chamber, "start_time": text}
        for (chamber, _), text in zip(starts, texts, strict=True)
    ]
    first = {}
    for (chamber, _), moment in zip(starts, moments, strict=True):
        first[chamber] = min(moment, first.get(chamber, moment))
    expected = [
        (moment - first[chamber]).total_seconds() / 60
        for (chamber, _), moment in zip(starts, moments, strict=True)
    ]
    minutes, errors = minutes_from_start(rows, ["?"] * len(rows))
    assert errors == []
    assert_allclose(minutes, expected, rtol=0, atol=1e-6)  # 6e-5 s; floats of minutes since 2000
    order = list(range(len(rows)))
    random.shuffle(order)
    again, _ = minutes_from_start([rows[i] for i in order], ["?"] * len(rows))
    assert again == [minutes[i] for i in order]


def test_time_zones_are_taken_into_account():
    rows = [
        {"day": "1", "chamber": "A", "start_time": "2024-05-31T12:00+02:00"},
        {"day": "1", "chamber": "A", "start_time": "2024-05-31T10:30Z"},
    ]
    minutes, errors = minutes_from_start(rows, ["row 2", "row 3"])
    assert errors == []
    assert_allclose(minutes, [0, 30], rtol=0, atol=1e-6)


def test_past_midnight_with_dates():
    rows = [
        {"day": "1", "chamber": "A", "start_time": "2024-05-31T23:50"},
        {"day": "1", "chamber": "A", "start_time": "2024-06-01T00:10"},
    ]
    minutes, errors = minutes_from_start(rows, ["row 2", "row 3"])
    assert errors == []
    assert_allclose(minutes, [0, 20], rtol=0, atol=1e-6)


def test_rows_without_time_or_chamber_have_no_minutes():
    rows = [
        {"day": "1", "chamber": "A", "start_time": ""},
        {"day": "1", "chamber": "", "start_time": "10:00"},
        {"day": "1", "chamber": "A"},
    ]
    assert minutes_from_start(rows, ["?"] * 3) == ([None, None, None], [])
