"""Pages: what is on them, in which order, and that nothing of the user's text leaves its place."""

from __future__ import annotations

import base64
import dataclasses
import hashlib
import math
import re
from pathlib import Path

import pytest

from glidefit.writing.pages import condition_page, index_page

STORED = Path(__file__).parent / "stored"
SECTIONS = [
    "Main numbers",
    "Problems",
    "Other estimates",
    "Kept and set aside",
    "Tracks in the plane",
    "Days and chambers",
    "Course in time",
    "Curves and fit",
    "Spread by level",
    "Chambers",
    "Recordings",
    "Settings",
    "Methods, to quote",
    "How to read the numbers",
    "Cautions",
    "Provenance",
]


@pytest.fixture(scope="module")
def page(study):
    condition = dataclasses.replace(study.conditions[0], problems=("A problem in plain words.",))
    return condition_page(study, condition)


@pytest.fixture(scope="module")
def index(study, compare):
    compared = (compare("kinesin, R203A", "kinesin, wild type"),)
    return index_page(dataclasses.replace(study, comparisons=compared))


def headings(text):
    return re.findall(r"<h2[^>]*>(.*?)</h2>", text)


def without_figures(text):
    return re.sub(r"<svg.*?</svg>", "", text, flags=re.S)


def test_sections_come_in_their_order(page):
    assert headings(page) == SECTIONS


def test_no_problems_no_section(study):
    assert "Problems" not in headings(condition_page(study, study.conditions[0]))


@pytest.mark.parametrize("name", ["condition", "index"])
def test_words_are_as_stored(page, index, read_page, name, tmp_path):
    words = "\n".join(read_page(page if name == "condition" else index).words) + "\n"
    fresh = tmp_path / f"{name}.txt"
    fresh.write_text(words, encoding="utf-8")
    stored = (STORED / f"{name}.txt").read_text(encoding="utf-8")
    assert words == stored, f"the page's words are in {fresh}"


def test_same_results_give_the_same_bytes(study, page, index):
    condition = dataclasses.replace(study.conditions[0], problems=("A problem in plain words.",))
    assert condition_page(study, condition) == page
    assert index_page(study) == index_page(study)
    assert not re.search(r"\d\d:\d\d:\d\d", page)


def test_both_persistence_lengths_stand_with_their_formulas(page):
    cards = without_figures(page).split('<ul class="cards">')[1].split("</ul>")[0]
    for label, formula in (("persistence length", "v / D_r"), ("path persistence", "v / (2 D_r)")):
        card = next(c for c in cards.split("<li") if f"<h3>{label}" in c)
        assert f'<p class="formula">{formula}</p>' in card
        assert "95 % interval" in card


def test_pages_are_well_formed_and_every_picture_has_words(page, index, read_page):
    for text in (page, index):
        reader = read_page(text)
        pictures = [a for a in reader.of("svg") if a.get("role") == "img"]
        assert len(pictures) >= 4
        for attributes in pictures:
            title, description = attributes["aria-labelledby"].split()
            assert {title, description} <= set(reader.ids)
        decorations = [a for a in reader.of("svg") if a.get("role") != "img"]
        assert all(a["aria-hidden"] == "true" for a in decorations)
        assert all("scope" in a for a in reader.of("th"))
        assert reader.of("html")[0]["lang"] == "en"


def test_every_reference_inside_a_page_is_there(page, index, read_page):
    for text in (page, index):
        ids = set(read_page(text).ids)
        used = re.findall(r'(?:href|xlink:href)="#([^"]+)"|url\(#([^)]+)\)', text)
        used += [
            (name, "") for a in re.findall(r'aria-labelledby="([^"]+)"', text) for name in a.split()
        ]
        assert {first or second for first, second in used} <= ids


def test_pages_stand_alone(page, index, read_page):
    for text in (page, index):
        assert not re.search(r"https?://(?!www\.w3\.org/2000/svg)", text)
        assert "@import" not in text
        assert not re.search(r"url\((?!#)", text)
        reader = read_page(text)
        assert reader.of("link") == reader.of("img") == reader.of("iframe") == []
        assert [a.get("src") for a in reader.of("script")] == [None]
        policy = next(a for a in reader.of("meta") if "http-equiv" in a)["content"]
        assert policy.startswith("default-src 'none'; img-src data:; style-src 'unsafe-inline'; ")
        script = re.search(r"<script>(.*?)</script>", text, flags=re.S)[1]
        digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
        assert f"script-src 'sha256-{digest}'" in policy


def test_nothing_of_the_user_leaves_its_place(hostile, read_page):
    texts = [index_page(hostile)]
    texts += [condition_page(hostile, condition) for condition in hostile.conditions]
    for text in texts:
        reader = read_page(text)
        assert len(reader.of("script")) == 1
        assert reader.of("img") == []
        assert not any(name.startswith("on") for _, a in reader.elements for name in a)
        assert not re.search(
            "[\x00-\x08\x0b-\x1f\x7f\u202a-\u202e\u2066-\u2069\ud800-\udfff]", text
        )
        text.encode("utf-8")
        assert "49" not in without_figures(text).split("<h1>")[1].split("</h1>")[0]


def test_links_of_the_index_are_slugs(hostile, read_page):
    links = [a["href"] for a in read_page(index_page(hostile)).of("a")]
    assert len(links) >= len(hostile.conditions)
    own = ("comparison.html", "response.html")
    assert all(
        link in own or re.fullmatch(r"conditions/[a-z0-9-]+\.html(#problems)?", link)
        for link in links
    )


def test_condition_without_a_name_has_words_for_it(study):
    text = condition_page(study, dataclasses.replace(study.conditions[0], condition=""))
    assert "<h1><bdi>(no name)</bdi>" in text


def test_nothing_left_is_a_whole_page(study, emptied, read_page):
    nothing = emptied(study.conditions[0])
    text = condition_page(study, nothing)
    words = " ".join(read_page(text).words)
    assert headings(text) == SECTIONS
    assert "No track was kept: every track is stuck." in text
    assert not re.search(r"\b(nan|None|inf)\b", words)
    assert "No track to draw." in text
    read_page(index_page(dataclasses.replace(study, conditions=(nothing,))))


def test_one_chamber_without_intervals(invented, sized, read_page):
    study = invented(
        ("lone",), size=sized(days=1, chambers=1, recordings=1, tracks=4, aside=0), control=None
    )
    condition = study.conditions[0]
    bare = {
        key: dataclasses.replace(e, low=math.nan, high=math.nan, covers="")
        for key, e in condition.estimates.items()
    }
    condition = dataclasses.replace(condition, estimates=bare, spread=())
    text = condition_page(study, condition)
    read_page(text)
    assert "1 day, 1 chamber and 1 recording; 4 of 4 tracks kept" in text
    assert text.count("no interval") >= 5
    assert "An interval of" not in text
    assert "Grey and dotted" not in text
    assert 'class="tag"' not in text


def test_study_without_conditions_or_recordings(study, read_page):
    nothing = dataclasses.replace(study, conditions=(), recordings=(), settings=())
    read_page(index_page(nothing))
    text = condition_page(nothing, study.conditions[0])
    read_page(text)
    assert "No recording." in text
    assert "All settings are at their defaults." in text


def test_thirty_conditions_with_long_names(invented, sized, read_page):
    names = [f"construct {n} " + "with a name that goes on " * 5 for n in range(30)]
    study = invented(
        names, size=sized(days=2, chambers=1, recordings=1, tracks=4), control=names[2]
    )
    text = index_page(study)
    read_page(text)
    assert text.count('<th scope="row">') == 30
    assert all(f">{n}  construct" in text for n in range(1, 31))
    assert len(text) < 400_000


def test_page_of_two_hundred_tracks_is_light(study):
    assert study.conditions[0].counts.tracks_seen == 204
    assert len(condition_page(study, study.conditions[0]).encode()) <= 400_000


def test_comparisons_are_shown_only_when_there_are_any(study, index):
    assert "Comparisons" in headings(index)
    assert "Comparisons" not in headings(index_page(study))


def test_settings_tell_their_source_and_defaults_are_folded(page):
    folded = page.split("<details>")[1].split("</details>")[0]
    assert "5 settings at the default" in folded
    assert "link.max_speed" in folded
    open_part = page.split("<details>")[0]
    row = open_part.split("<code>clean.jump</code>")[1].split("</tr>")[0]
    assert "4.0 × typical step" in row
    assert ">file<" in row


def test_problems_of_recordings_are_pointed_at(study):
    noisy = dataclasses.replace(study.recordings[0], problems=("Frames are missing.",))
    text = condition_page(
        dataclasses.replace(study, recordings=(noisy, *study.recordings[1:])), study.conditions[0]
    )
    alert = text.split('<div class="alert">')[1].split("</section>")[0]
    assert '1 recording with problems of its own: see <a href="#recordings">' in alert
    assert "Frames are missing." in text


def test_checksums_and_seed_are_given(study, page):
    assert study.sheet_sha256 in page
    assert page.count(f"<code>{study.recordings[0].sha256}</code>") == 12
    assert str(study.seed) in page
