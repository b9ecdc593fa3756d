"""Colours told apart from their ground, light and dark."""

from __future__ import annotations

import pytest

from glidefit.writing import colours
from glidefit.writing.colours import DARK, LIGHT, contrast, page_colour


# Contrast of the Okabe-Ito colours on white by the formula of WCAG 2; #767676 and #777777 are
# the greys on either side of 4.5.
@pytest.mark.parametrize(
    ("colour", "ratio"),
    [
        ("#0072B2", 5.19),
        ("#D55E00", 3.87),
        ("#009E73", 3.42),
        ("#CC79A7", 3.06),
        ("#56B4E9", 2.31),
        ("#E69F00", 2.25),
        ("#F0E442", 1.32),
        ("#767676", 4.54),
        ("#777777", 4.48),
        ("#000000", 21.0),
    ],
)
def test_contrast_on_white(colour, ratio):
    assert contrast(colour, "#ffffff") == pytest.approx(ratio, abs=0.006)  # given to two places
    assert contrast("#ffffff", colour) == contrast(colour, "#ffffff")


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
def test_text_and_marks_stand_out(theme):
    # WCAG 2, 1.4.3 (text, 4.5) and 1.4.11 (marks, 3).
    for text in ("ink", "quiet", "link", "alert"):
        assert contrast(theme[text], theme["paper"]) >= 4.5
    for text in ("ink", "alert", "link"):
        assert contrast(theme[text], theme["alert-wash"]) >= 4.5
    for mark in ("hue1", "hue2", "hue3", "hue4"):
        assert contrast(theme[mark], theme["paper"]) >= 3


def test_both_themes_declare_the_same_colours():
    assert LIGHT.keys() == DARK.keys()
    assert colours.style_variables({"a": "#fff", "b": "#000"}) == "--a: #fff; --b: #000;"


def test_figures_draw_only_with_colours_that_follow_the_page():
    assert page_colour(colours.INK) == "currentColor"
    assert page_colour("#0072B2") == "var(--hue1)"
    assert page_colour("none") == "none"
    with pytest.raises(ValueError, match="no colour of the page"):
        page_colour("#123456")


def test_groups_differ_in_hue_and_marker():
    looks = {(colours.hue(n), colours.marker(n)) for n in range(35)}
    assert len(looks) == 35
