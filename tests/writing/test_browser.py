"""Pages in a real browser: silent, self-contained, as wide as the screen, printable."""

from __future__ import annotations

import shutil

import pytest

from glidefit.writing.comparison_page import comparison_page
from glidefit.writing.pages import condition_page, index_page
from glidefit.writing.response_page import response_page

pytestmark = pytest.mark.browser

ARGUMENTS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
]


@pytest.fixture(scope="module")
def browser():
    from playwright.sync_api import sync_playwright

    path = shutil.which("chromium")
    assert path, "Chromium is not installed: deselect these tests with -m 'not browser'"
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=path, headless=True, args=ARGUMENTS)
        yield browser
        browser.close()


@pytest.fixture(scope="module")
def pages(study, hostile, compared, emptied, invented, sized, tmp_path_factory):
    """Files of pages: usual, hostile, with nothing left, with much of everything."""
    much = invented(
        [f"construct {n} with a name that goes on to {n} mM" for n in range(30)],
        size=sized(days=8, chambers=4, recordings=1, tracks=5),
        control=None,
    )
    folder = tmp_path_factory.mktemp("pages")
    texts = {
        "condition": condition_page(study, study.conditions[0]),
        "index": index_page(study),
        "hostile": condition_page(hostile, hostile.conditions[0]),
        "hostile-index": index_page(hostile),
        "nothing": condition_page(study, emptied(study.conditions[0])),
        "comparison": comparison_page(compared),
        "response": response_page(compared),
        "compared-index": index_page(compared),
        "hostile-comparison": comparison_page(hostile),
        "hostile-response": response_page(hostile),
        "much": condition_page(much, much.conditions[0]),
        "much-index": index_page(much),
    }
    for name, text in texts.items():
        (folder / f"{name}.html").write_text(text, encoding="utf-8")
    return {name: (folder / f"{name}.html").as_uri() for name in texts}


@pytest.fixture
def watched(browser):
    """Open a page of which every sign of life is noted."""
    context = browser.new_context()
    page = context.new_page()
    page.signs = []
    page.on("console", lambda message: page.signs.append(f"console: {message.text}"))
    page.on("pageerror", lambda error: page.signs.append(f"error: {error}"))
    page.on("dialog", lambda dialog: (page.signs.append("dialog"), dialog.dismiss()))
    page.on(
        "request",
        lambda request: (
            page.signs.append(f"request: {request.url}")
            if not request.is_navigation_request()
            else None
        ),
    )
    yield page
    context.close()


NAMES = ["condition", "index", "hostile", "hostile-index", "nothing", "much", "much-index"]
NAMES += ["comparison", "response", "compared-index", "hostile-comparison", "hostile-response"]


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_page_is_silent_and_fits_the_screen(watched, pages, name, scheme):
    watched.emulate_media(color_scheme=scheme)
    for width in (390, 1280):
        watched.set_viewport_size({"width": width, "height": 900})
        watched.goto(pages[name])
        assert watched.evaluate("document.documentElement.scrollWidth") == width
        wide = watched.evaluate(
            """() => [...document.querySelectorAll('main *:not(svg *)')].filter(
                e => e.getBoundingClientRect().right > innerWidth + 0.5
                     && !e.closest('.unseen')).map(e => e.outerHTML.slice(0, 80))"""
        )
        assert wide == []
    assert watched.signs == []


@pytest.mark.parametrize("name", NAMES)
def test_labels_of_figures_are_whole_and_apart(watched, pages, name):
    watched.set_viewport_size({"width": 1280, "height": 900})
    watched.goto(pages[name])
    cut = watched.evaluate(
        """() => [...document.querySelectorAll('svg[role=img] text')].filter(t => {
            const a = t.getBoundingClientRect();
            const b = t.closest('svg').getBoundingClientRect();
            return a.left < b.left - 1 || a.right > b.right + 1 || a.top < b.top - 1
                || a.bottom > b.bottom + 1;
        }).map(t => t.textContent)"""
    )
    assert cut == []
    overlapping = watched.evaluate(
        """() => [...document.querySelectorAll('svg[role=img]')].flatMap(svg => {
            const boxes = [...svg.querySelectorAll('text')].map(
                t => [t.textContent, t.getBoundingClientRect()]);
            return boxes.flatMap(([s, a], i) => boxes.slice(i + 1).filter(([t, b]) =>
                a.left < b.right - 1 && b.left < a.right - 1 &&
                a.top < b.bottom - 3 && b.top < a.bottom - 3).map(([t]) => [s, t]));
        })"""
    )
    assert overlapping == []


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_text_stands_out_from_its_ground(watched, pages, scheme):
    watched.emulate_media(color_scheme=scheme)
    watched.goto(pages["condition"])
    ink, paper, label = watched.evaluate(
        """() => [getComputedStyle(document.body).color,
                  getComputedStyle(document.body).backgroundColor,
                  getComputedStyle(document.querySelector('svg[role=img] text')).fill]"""
    )
    assert ink == label
    bright = {"light": paper, "dark": ink}[scheme]
    dim = {"light": ink, "dark": paper}[scheme]
    first, second = (sum(map(int, c[4:-1].split(","))) for c in (bright, dim))
    assert first - second > 3 * 128


def test_table_sorts_and_says_so(watched, pages):
    watched.set_viewport_size({"width": 1280, "height": 900})
    watched.goto(pages["condition"])
    button = watched.locator("#chambers th button", has_text="Speed (µm/s)").first
    shown = "() => [...document.querySelectorAll('#chambers tbody td:nth-child(5)')]"
    shown += ".map(c => parseFloat(c.textContent))"
    button.click()
    rising = watched.evaluate(shown)
    assert rising == sorted(rising)
    assert watched.locator("#chambers th[aria-sort=ascending]").count() == 1
    button.click()
    assert watched.evaluate(shown) == rising[::-1]
    assert watched.locator("#chambers th[aria-sort=descending]").count() == 1


def test_page_is_whole_without_script(browser, pages):
    context = browser.new_context(java_script_enabled=False)
    page = context.new_page()
    page.goto(pages["condition"])
    assert page.locator("button").count() == 0
    assert page.locator("#chambers tbody tr").count() == 6
    context.close()


def test_page_prints_on_paper_with_everything_unfolded(watched, pages):
    watched.emulate_media(color_scheme="dark", media="print")
    watched.goto(pages["condition"])
    paper = watched.evaluate("getComputedStyle(document.body).backgroundColor")
    assert paper == "rgb(255, 255, 255)"
    row = watched.locator("details code", has_text="link.max_speed")
    assert row.bounding_box()["height"] > 0
    pdf = watched.pdf(prefer_css_page_size=True)
    assert pdf.startswith(b"%PDF-")
    assert 3 <= pdf.count(b"/Type /Page\n") <= 12
    assert watched.signs == []
