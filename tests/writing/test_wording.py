"""Words on pages."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from glidefit.writing.wording import (
    counted,
    joined,
    named,
    sentence,
    short_names,
    shortened,
    visible,
)


def test_what_cannot_be_shown_is_replaced():
    assert visible("a\x00b\u202ec\u2066d\udce9e\x9ff") == "a�b�c�d�e�f"
    assert visible("µ, 対照, \n tab\t, é") == "µ, 対照, \n tab\t, é"


def test_missing_name_is_said():
    assert [named(""), named("  "), named("x ")] == ["(no name)", "(no name)", "x"]


def test_long_text_loses_its_middle():
    assert shortened("kinesin construct 12", width=11) == "kines…ct 12"
    assert shortened("short", width=5) == "short"


@given(st.lists(st.text(), max_size=12), st.integers(12, 30))
def test_short_names_are_short_and_distinct(names, width):
    made = short_names(names, width=width)
    assert len(set(made)) == len(names)
    assert all(0 < len(text) <= width for text in made)


def test_remark_becomes_a_sentence():
    assert [sentence("hardly resolved"), sentence("Done."), sentence(" ")] == [
        "Hardly resolved.",
        "Done.",
        "",
    ]


def test_counts_and_lists():
    assert [counted(1, "track"), counted(0, "day"), counted(1200, "filament-frame")] == [
        "1 track",
        "0 days",
        "1,200 filament-frames",
    ]
    assert [joined([]), joined(["a"]), joined(["a", "b", "c"])] == ["", "a", "a, b and c"]
