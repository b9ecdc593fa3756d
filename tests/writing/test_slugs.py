"""Names of files made from names of conditions."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from glidefit.writing.slugs import slug, slugs


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("kinesin, wild type", "kinesin-wild-type"),
        ("../../x", "x"),
        ("<script>alert(1)</script>", "script-alert-1-script"),
        ("10 µM ATP", "10-um-atp"),
        ("10 μM ATP", "10-um-atp"),  # the Greek letter, not the sign
        ("Zürich", "zurich"),
        ("", "unnamed"),
        ("対照", "unnamed"),
        ("NUL", "unnamed-nul"),
        ("com¹", "unnamed-com1"),
        ("C:\\temp\\x.", "c-temp-x"),
        ("a\x00b\n", "a-b"),
    ],
)
def test_slug(name, expected):
    assert slug(name) == expected


def test_long_names_are_cut_and_stay_apart():
    names = ["a" * 300, "a" * 301]
    made = slugs(names)
    assert list(made.values()) == ["a" * 60, "a" * 58 + "-2"]


def test_same_slug_is_numbered_and_never_taken_twice():
    assert slugs(["a", "A", "a!", "a-2", "a"]) == {
        "a": "a",
        "A": "a-2",
        "a!": "a-3",
        "a-2": "a-2-2",
    }


@given(st.lists(st.text(max_size=90), unique=True))
def test_slugs_are_safe_and_distinct(names):
    made = slugs(names)
    assert list(made) == names
    assert len(set(made.values())) == len(names)
    for text in made.values():
        assert re.fullmatch(r"[a-z0-9]+(-[a-z0-9]+)*", text)
        assert len(text) <= 60
        assert text not in {"con", "prn", "aux", "nul", "com1", "lpt9"}
