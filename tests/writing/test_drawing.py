"""From a matplotlib figure to an inline SVG."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from glidefit.writing.colours import INK, hue
from glidefit.writing.drawing import (
    canvas,
    draw_dots,
    drawing_style,
    framed,
    log_ticks,
    panel,
    svg_text,
)


def make_svg(*, key="k", label="time (s)", colour=INK):
    with drawing_style():
        figure = canvas(200)
        ax = panel(figure, left=40, top=10, right=10, bottom=40)
        ax.plot([1, 2, 3], [1, 3, 2], color=colour, marker="o")
        ax.fill_between([1, 2, 3], [0, 1, 1], [2, 4, 3], color=hue(0), alpha=0.2, lw=0)
        draw_dots(ax, [1.5, 2.5], [2, 2], colour=INK, size=3, alpha=0.5)
        ax.set_xlabel(label)
        return svg_text(figure, key=key, title="A title", description="Its numbers.")


def test_same_figure_gives_the_same_text():
    assert make_svg() == make_svg()


def test_ids_start_with_the_key_and_every_reference_is_there():
    svg = make_svg(key="speed")
    ids = set(re.findall(r' id="([^"]+)"', svg))
    used = set(re.findall(r'href="#([^"]+)"|url\(#([^)]+)\)', svg))
    assert {first or second for first, second in used} <= ids
    assert all(name.startswith("speed-") for name in ids)
    assert not ids & set(re.findall(r' id="([^"]+)"', make_svg(key="msd")))


def test_text_and_lines_follow_the_page():
    svg = make_svg()
    assert set(re.findall(r"#[0-9a-f]{6}", svg)) == set()
    assert 'stroke="currentColor"' in svg
    assert "fill:var(--hue1)" in svg
    assert "font-family" not in svg
    assert "<style" not in svg
    assert "<!--" not in svg
    assert "metadata" not in svg


def test_a_colour_that_cannot_follow_the_page_is_refused():
    with pytest.raises(ValueError, match="no colour of the page"):
        make_svg(colour="red")


def test_text_of_the_user_is_text():
    label = '</svg><script>alert(1)</script> $x^2$ "q" \x07\u202e 対照 id="figure_1" 1.23456'
    svg = make_svg(label=label)
    shown = (
        '&lt;/svg&gt;&lt;script&gt;alert(1)&lt;/script&gt; $x^2$ "q" �� 対照 id="figure_1" 1.23456'
    )
    assert shown in svg
    assert "<script" not in svg


def test_alternative_text_is_named_by_the_figure():
    svg = framed("<g/>", key="k", view="0 0 1 1", title="a < b", description='"c"\x00')
    assert 'role="img" aria-labelledby="k-title k-desc"' in svg
    assert '<title id="k-title">a &lt; b</title><desc id="k-desc">&quot;c&quot;�</desc>' in svg


def test_dots_are_strokes_of_no_length():
    dots = re.search(r'd="(M[^"]+h0[^"]*)"', make_svg())
    assert dots is not None
    assert dots[1].count("h0") == 2


def test_settings_of_the_user_do_not_reach_a_figure():
    import matplotlib as mpl

    with mpl.rc_context({"axes.linewidth": 7.0, "svg.fonttype": "path"}):
        assert make_svg() == make_svg()
        odd = make_svg()
    assert odd == make_svg()


@pytest.mark.parametrize(
    ("low", "high", "ticks"),
    [
        (0.05, 200, [0.1, 1, 10, 100]),
        (0.15, 15, [0.3, 1, 3, 10]),
        (0.9, 6, [1, 2, 5]),
    ],
)
def test_ticks_of_a_logarithmic_axis(low, high, ticks):
    assert log_ticks(low, high) == pytest.approx(ticks)


@given(st.floats(1e-6, 1e5), st.floats(1.6, 1e6))
def test_ticks_lie_inside_and_are_few(low, factor):
    ticks = log_ticks(low, low * factor)
    assert 2 <= len(ticks) <= 6
    assert all(low <= tick <= low * factor for tick in ticks)
