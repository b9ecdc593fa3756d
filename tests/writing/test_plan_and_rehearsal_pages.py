"""Pages of a plan and of a rehearsal: whole, self-contained, closed to the user's text."""

from __future__ import annotations

import dataclasses
import math
import re
import shutil
import xml.etree.ElementTree as ET

import numpy as np
import pytest

from glidefit.designs import ChamberOutcome, Goal, Outcome, Plan, Rehearsal
from glidefit.steps.components import components, interaction
from glidefit.steps.plan import plan
from glidefit.steps.rehearse import REHEARSED, filmed_design, has_components, judge
from glidefit.writing.plan_page import plan_page
from glidefit.writing.rehearsal_page import rehearsal_page

NAN = math.nan
INTERVAL = Goal(half_width=0.05, difference=NAN, power=NAN)
DIFFERENCE = Goal(half_width=NAN, difference=0.1, power=0.8)
HOSTILE = "</td></svg></title><script>alert(2)</script><img src=x onerror=alert(3)>\x1b\u202e"


def make_plan(study, goal=INTERVAL, *, name=None):
    condition = study.conditions[0]
    parts = components(condition, "speed_um_s")
    crossed = interaction(study.conditions, condition, "speed_um_s")
    if name is not None:
        crossed = dataclasses.replace(crossed, conditions=(name, name), note=name)
    made = plan(
        parts,
        crossed,
        goal=goal,
        filaments_per_chamber=30.0,
        recording_s=30.0,
        rng=np.random.default_rng(1),
    )
    return Plan(
        study=study.name,
        version="0.1.0",
        seed=1,
        condition=condition.condition if name is None else name,
        quantity="speed_um_s",
        goal=goal,
        components=parts,
        filaments_per_chamber=30.0,
        recording_s=30.0,
        frame_s=0.5,
        interaction=crossed,
        tables=made.tables,
        alone=made.alone,
        advice=made.advice,
        assumptions=made.assumptions,
    )


def simulated_chambers(rng):
    """Two chambers of one experiment that scatter as the bound says."""
    keys = REHEARSED[:3]
    return [
        ChamberOutcome(
            day=day,
            tracks=30,
            truth=dict(zip(keys, rng.normal(0, 0.05, 3), strict=True)),
            off=dict(zip(keys, rng.normal(0, 0.02, 3), strict=True)),
            bound=dict.fromkeys(keys, 0.02),
            present=0.021,
        )
        for day in ("2026-03-02", "2026-03-03")
    ]


def make_rehearsal(study, *, n=40, name=None, intervals=True):
    """Experiments whose intervals hold the truth but for the first."""
    rng = np.random.default_rng(4)
    conditions = []
    for condition in study.conditions[:2]:
        design = filmed_design(
            condition,
            [r for r in study.recordings if r.condition == condition.condition],
            [components(condition, key) for key in has_components(condition)],
            unknown_exposure=1.0,
        )
        if name is not None:
            design = dataclasses.replace(design, condition=name, notes=(name,))
        outcomes = []
        for i in range(n):
            off = rng.normal(0, 0.05, len(REHEARSED)) + 0.3 * (i == 0)
            outcomes.append(
                {
                    key: Outcome(
                        value=t * (1 + x),
                        low=t * (0.85 + x) if intervals else NAN,
                        high=t * (1.15 + x) if intervals and i != 1 else NAN,
                    )
                    for (key, t), x in zip(design.truth.items(), off, strict=True)
                }
            )
        own = np.random.default_rng(5)
        chambers = [simulated_chambers(own) for _ in range(n)] if intervals else ()
        conditions.append(judge(design, outcomes, level=0.95, chambers=chambers))
    return Rehearsal(
        study=study.name,
        version="0.1.0",
        seed=1,
        experiments=n,
        level=0.95,
        conditions=tuple(conditions),
    )


@pytest.fixture(scope="module")
def pages(finished_study):
    """Every kind of page by its name."""
    study, evil = finished_study, dataclasses.replace(finished_study, name=HOSTILE)
    return {
        "plan": plan_page(make_plan(study), study),
        "difference": plan_page(make_plan(study, DIFFERENCE), study),
        "rehearsal": rehearsal_page(make_rehearsal(study), study),
        "no-interval": rehearsal_page(make_rehearsal(study, intervals=False), study),
        "evil-plan": plan_page(make_plan(evil, DIFFERENCE, name=HOSTILE), evil),
        "evil-rehearsal": rehearsal_page(make_rehearsal(evil, name=HOSTILE), evil),
    }


NAMES = ["plan", "difference", "rehearsal", "no-interval", "evil-plan", "evil-rehearsal"]


def headings(text):
    return re.findall(r"<h2[^>]*>(.*?)</h2>", text)


def svgs(text):
    return [ET.fromstring(svg) for svg in re.findall(r"<svg xmlns.*?</svg>", text, re.DOTALL)]


def test_sections_of_a_plan(pages):
    assert headings(pages["plan"]) == [
        "Advice",
        "Expected half width",
        "What one change brings",
        "Where the spread lies",
        "What this assumes",
        "Cautions",
        "Provenance",
    ]
    assert headings(pages["difference"])[1:3] == [
        "Both conditions on the same days",
        "Each condition on days of its own",
    ]


def test_sections_of_a_rehearsal(pages):
    assert headings(pages["rehearsal"]) == [
        "What was done",
        "wild type",
        "loop mutant",
        "What a simulation cannot show",
        "Cautions",
        "Provenance",
    ]


def test_plan_shows_every_design_with_its_band_and_marks_those_that_reach(pages, finished_study):
    made, text = make_plan(finished_study), pages["plan"]
    table = made.tables[0]
    # Once in the caption, then once for each design that reaches the goal.
    assert text.count("✓") == 1 + sum(c.value <= 0.05 for c in table.cells)
    assert text.count('<small class="under">') == len(table.cells)
    for sentence in (*made.advice, *made.assumptions):
        assert sentence in text


def test_rehearsal_shows_bias_scatter_and_coverage(pages, finished_study):
    made, text = make_rehearsal(finished_study), pages["rehearsal"]
    q = made.conditions[0].quantities[0]
    assert (q.held, q.with_interval) == (39, 40)
    assert text.count("97.5 ± 2.5 %") == 8
    assert f"{100 * q.bias:+.1f} ± {100 * q.bias_error:.1f} %".replace("-", "−") in text
    assert text.count("consistent with 95 %</td>") == 8
    for condition in made.conditions:
        for sentence in condition.said:
            assert sentence in text


def test_rehearsal_shows_the_bound_beside_the_scatter(pages, finished_study):
    made, text = make_rehearsal(finished_study), pages["rehearsal"]
    for condition in made.conditions:
        for q in condition.quantities[:3]:
            b = q.against_bound
            assert f"{b.ratio:.2f} ± {b.ratio_error:.2f}</span>" in text
            assert f"{b.of_best:.2f} ± {b.of_best_error:.2f}</span>" in text
        b = condition.quantities[0].against_bound
        assert f"is {b.of_present:.2f} ± {b.of_present_error:.2f} times the least error" in text
    assert text.count("Against the Cramér-Rao bound") == 2
    assert "From 80 simulated chambers of 30 gliding tracks on average." in text
    assert "Cramér-Rao" not in pages["no-interval"]


def test_figures_of_a_rehearsal_draw_every_interval_and_count_misses(pages):
    """Four figures a condition; lines of the first hue hold the truth, of the second miss it."""
    figures = svgs(pages["rehearsal"])
    assert len(figures) == 8
    for figure in figures:
        lines = {
            hue: max(
                (
                    path.get("d").count("L")
                    for path in figure.iter("{http://www.w3.org/2000/svg}path")
                    if f"stroke:var(--{hue})" in path.get("style", "") and "L" in path.get("d")
                ),
                default=0,
            )
            for hue in ("hue1", "hue2")
        }
        assert lines == {"hue1": 39, "hue2": 1}
    assert "holds the truth: 39" in pages["rehearsal"]
    assert "misses it: 1" in pages["rehearsal"]


def test_rehearsal_without_intervals_says_so(pages):
    assert "had no interval: nothing in the design repeats." in pages["no-interval"]
    assert "misses it" not in pages["no-interval"]


@pytest.mark.parametrize("name", NAMES)
def test_pages_stand_alone(pages, name):
    text = pages[name]
    assert not re.search(r"<(link|img|iframe|object|embed|base)\b", text)
    assert not re.search(r"(src|href)=\"(?!#)", text)
    assert text.count("<script>") == 1
    shown = re.sub(r"<style>.*?</style>|<script>.*?</script>", "", text, flags=re.DOTALL)
    assert not re.search(r"\bnan\b", shown)
    ids = re.findall(r'\bid="([^"]+)"', text)
    assert len(set(ids)) == len(ids)


@pytest.mark.parametrize("name", ["evil-plan", "evil-rehearsal"])
def test_text_of_the_user_stays_text(pages, name):
    assert "&lt;script&gt;alert(2)" in pages[name]
    assert not re.search("[\x1b\u202e]", pages[name])


def test_same_records_give_the_same_bytes(pages, finished_study):
    again = rehearsal_page(make_rehearsal(finished_study), finished_study)
    assert again == pages["rehearsal"]
    assert plan_page(make_plan(finished_study), finished_study) == pages["plan"]


@pytest.fixture(scope="module")
def browser():
    from playwright.sync_api import sync_playwright

    arguments = ["--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--no-first-run"]
    arguments += ["--disable-background-networking", "--disable-component-update"]
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(
            executable_path=shutil.which("chromium"), headless=True, args=arguments
        )
        yield browser
        browser.close()


@pytest.mark.browser
@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_page_is_silent_and_fits_the_screen(browser, pages, tmp_path, name, scheme):
    path = tmp_path / "page.html"
    path.write_text(pages[name], encoding="utf-8")
    page, signs = browser.new_page(color_scheme=scheme), []
    page.on("console", lambda message: signs.append(message.text))
    page.on("pageerror", lambda error: signs.append(str(error)))
    for width in (390, 1280):
        page.set_viewport_size({"width": width, "height": 900})
        page.goto(path.as_uri())
        assert page.evaluate("document.documentElement.scrollWidth") == width
        cut = page.evaluate(
            """() => [...document.querySelectorAll('svg[role=img] text')].filter(t => {
                const a = t.getBoundingClientRect();
                const b = t.closest('svg').getBoundingClientRect();
                return a.left < b.left - 1 || a.right > b.right + 1 || a.top < b.top - 1
                    || a.bottom > b.bottom + 1;
            }).map(t => t.textContent)"""
        )
        assert cut == []
    page.close()
    assert signs == []
