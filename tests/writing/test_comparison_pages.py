"""Pages of comparisons and response curves, and what the index says of them."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path

import pytest

from glidefit.writing.comparison_page import comparison_page
from glidefit.writing.comparison_rows import table_rows
from glidefit.writing.pages import index_page
from glidefit.writing.response_page import response_page

STORED = Path(__file__).parent / "stored"
PAGES = {"comparison": comparison_page, "response": response_page, "index": index_page}


@pytest.mark.parametrize("name", ["comparison", "response"])
def test_words_are_as_stored(compared, read_page, name, tmp_path):
    words = "\n".join(read_page(PAGES[name](compared)).words) + "\n"
    fresh = tmp_path / f"{name}.txt"
    fresh.write_text(words, encoding="utf-8")
    stored = (STORED / f"{name}.txt").read_text(encoding="utf-8")
    assert words == stored, f"the page's words are in {fresh}"


@pytest.mark.parametrize("name", PAGES)
def test_same_results_give_the_same_bytes(compared, name):
    assert PAGES[name](compared) == PAGES[name](compared)


@pytest.mark.parametrize("name", PAGES)
def test_nothing_of_the_user_leaves_its_place(hostile, read_page, name):
    reader = read_page(PAGES[name](hostile))
    assert len(reader.of("script")) == 1
    assert reader.of("img") == []
    assert not any(key.startswith("on") for _, a in reader.elements for key in a)


def test_the_page_begins_with_sentences_and_links_to_conditions(compared, read_page):
    text = comparison_page(compared)
    headings = re.findall(r"<h2[^>]*>(.*?)</h2>", text)
    assert headings[:4] == ["In words", "Against the reference", "Side by side", "Numbers"]
    links = [a["href"] for a in read_page(text).of("a")]
    assert links == [
        "index.html",
        *(f"conditions/{c.slug}.html" for c in compared.conditions[1:]),
    ]


def test_confound_stands_with_its_comparison(compared):
    for page in (comparison_page(compared), index_page(compared)):
        assert "wild type was always filmed before mutant (6 of 6 times)" in page


def test_index_tells_and_links(compared, study):
    text = index_page(compared)
    assert 'href="comparison.html"' in text
    assert 'href="response.html"' in text
    assert "1 of 6 days is out of control." in text
    assert "2026-03-05" in text.split('id="days"')[1]
    without = index_page(study)
    assert not re.search(r"comparison\.html|response\.html|Day by day", without)


def test_table_has_the_primary_quantity_first_and_no_p_adjusted_for_others(compared):
    rows = table_rows(compared.comparisons)
    assert [r.quantity for r in rows[::2]] == [
        *("speed", "rotational diffusion", "persistence length", "motile fraction")
    ]
    assert [r.primary for r in rows] == [True] * 2 + [False] * 6
    assert {r.p_adjusted for r in rows[2:]} == {"secondary"}
    assert {r.effect for r in rows[:-2]} == {"ratio"}
    assert {r.effect for r in rows[-2:]} == {"difference"}


def test_permutation_that_cannot_reject_says_the_smallest_p(compared):
    one = dataclasses.replace(
        compared.comparisons[0], p_permutation=float("nan"), smallest_p_permutation=0.25
    )
    assert table_rows([one])[0].p_permutation == "– (at least 0.25)"


def test_comparisons_of_all_pairs_name_both(compared):
    from glidefit.settings import CompareSettings
    from glidefit.steps.compare import compare

    settings = CompareSettings(reference="all", primary="motile_fraction")
    comparisons, pairs = compare(compared.conditions, settings=settings, level=0.95, seed=1)
    text = comparison_page(dataclasses.replace(compared, comparisons=comparisons, pairs=pairs))
    assert "3 pairs of conditions; tested first of all in motile fraction." in text
    assert "mutant / wild type" in text
    assert "Motile fraction, primary" in text


def test_curve_without_points_or_model_is_a_problem_and_no_figure(compared):
    curve = dataclasses.replace(
        compared.responses[0],
        model="",
        points=(),
        parameters=(),
        models=(),
        problems=("No curve against ATP.",),
    )
    text = response_page(dataclasses.replace(compared, responses=(curve,)))
    assert "No curve against ATP." in text
    assert "<figure>" not in text
