"""The pages in a real browser (the distribution's Chromium): layout, keyboard, names, no script."""

from __future__ import annotations

import time

import night_pages_data as data
import pytest

from truefall.validate.demo_page import Chapter
from truefall.validate.demo_page import page as demo_page
from truefall.validate.nightly.pages import write_pages


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    """A large night, one whose every text is hostile, one without any figures."""
    folder = tmp_path_factory.mktemp("pages")
    refused = tuple(
        data.case(k, "unusable", outcome="output refused", errors={}, curve=((), ()), margin=None)
        for k in range(3)
    )
    for name, (night, trends) in (
        ("large", data.large_night()), ("hostile", data.hostile_night()),
        ("refused", (data.night(refused), {})),
    ):  # fmt: skip
        (folder / name).mkdir()
        write_pages(night, trends, folder / name)
    return folder


@pytest.fixture(scope="module")
def browser(request):
    """One Chromium for all tests of this file."""
    tool = request.getfixturevalue("require_tool")("chromium")
    sync = pytest.importorskip("playwright.sync_api")
    with sync.sync_playwright() as playwright:
        found = playwright.chromium.launch(executable_path=tool, args=["--no-sandbox"])
        yield found
        found.close()


def opened(browser, path, width, scheme="light"):
    page = browser.new_page(viewport={"width": width, "height": 900}, color_scheme=scheme)
    page.goto(path.as_uri())
    return page


@pytest.mark.parametrize("width", [380, 1400])
@pytest.mark.parametrize("name", ["large", "hostile", "refused"])
def test_nothing_overflows_also_with_everything_unfolded(browser, pages, name, width):
    """The page is as wide as the window; so is every element of it that is shown."""
    page = opened(browser, pages / name / "index.html", width)
    page.evaluate("document.querySelectorAll('details').forEach(d => d.open = true)")
    wide = page.evaluate("document.documentElement.scrollWidth")
    outside = page.evaluate(
        "[...document.querySelectorAll('main *')].filter(e => !e.closest('thead') && "
        "!e.closest('pre') && e.getBoundingClientRect().right > innerWidth + 1).length"
    )
    heading = page.evaluate("document.querySelector('.cases thead').offsetHeight")
    page.close()

    assert wide == width
    assert heading < 80  # headings of empty columns are not broken letter by letter
    assert outside == 0


def test_it_opens_within_two_seconds_and_needs_no_network_and_no_script(browser, pages):
    """Sixty cases, four hundred nights; JavaScript switched off; every request counted."""
    context = browser.new_context(java_script_enabled=False)
    page = context.new_page()
    asked = []
    page.on("request", lambda request: asked.append(request.url))
    begin = time.perf_counter()
    page.goto((pages / "large" / "index.html").as_uri())
    text = page.text_content("main")
    took = time.perf_counter() - begin
    context.close()

    assert took < 2
    assert len(asked) == 1
    assert "ours/case-59" in text


def test_a_hostile_name_runs_no_script(browser, pages):
    """The title is what the page gave it, and the name is shown as it is."""
    page = opened(browser, pages / "hostile" / "index.html", 1400)
    title = page.title()
    shown = page.text_content("#cases + table")
    page.close()

    assert title.startswith("Night 400 of <script>")
    assert "broken" not in title.split("truefall")[-1]
    assert "document.title='broken'" in shown


def test_the_keyboard_reaches_everything_and_the_focus_is_seen(browser, pages):
    """The first stop skips to the report; a summary opens with Enter; an outline shows where."""
    page = opened(browser, pages / "large" / "index.html", 1400)
    page.keyboard.press("Tab")
    first = page.evaluate("document.activeElement.textContent")
    page.keyboard.press("Enter")
    page.keyboard.press("Tab")
    outline = page.evaluate("getComputedStyle(document.activeElement).outlineStyle")
    page.focus("tr.more summary")
    page.keyboard.press("Enter")
    unfolded = page.evaluate("document.querySelector('tr.more details').open")
    page.close()

    assert first == "To the report"
    assert outline == "solid"
    assert unfolded


def test_names_for_those_who_cannot_see(browser, pages):
    """Language, one first heading, headers with scope, a name for every picture."""
    page = opened(browser, pages / "large" / "index.html", 1400)
    found = page.evaluate(
        """() => ({
          lang: document.documentElement.lang,
          h1: document.querySelectorAll('h1').length,
          unscoped: [...document.querySelectorAll('th')].filter(t => !t.scope).length,
          unnamed: [...document.querySelectorAll('svg')].filter(
            s => s.getAttribute('role') !== 'img' || !s.getAttribute('aria-label')).length,
          captions: [...document.querySelectorAll('table')].filter(t => !t.caption).length,
          main: document.querySelectorAll('main').length,
        })"""
    )
    page.close()

    assert found == {"lang": "en", "h1": 1, "unscoped": 0, "unnamed": 0, "captions": 0, "main": 1}


CONTRAST = """(selector) => {
  const numbers = c => c.match(/[\\d.]+/g).slice(0, 3).map(Number);
  const light = c => { const [r, g, b] = numbers(c).map(v => { v /= 255;
    return v <= 0.03928 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; });
    return 0.2126 * r + 0.7152 * g + 0.0722 * b; };
  const back = light(getComputedStyle(document.body).backgroundColor);
  return [...document.querySelectorAll(selector)].map(e => {
    const ink = light(getComputedStyle(e).color);
    return (Math.max(ink, back) + 0.05) / (Math.min(ink, back) + 0.05); });
}"""


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_contrast_is_enough_in_light_and_dark(browser, pages, scheme):
    """4.5 to 1 for text (WCAG 2.2, success criterion 1.4.3), computed from the page's colours."""
    page = opened(browser, pages / "large" / "index.html", 1400, scheme)
    ratios = page.evaluate(CONTRAST, ".v, .soft, p, th, td, caption, a")
    page.close()

    assert len(ratios) > 500
    assert min(ratios) >= 4.5


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_print_is_dark_on_white_and_compact(browser, pages, scheme):
    """On paper every scheme gives dark text, and the table stays a table."""
    page = opened(browser, pages / "large" / "index.html", 700, scheme)
    page.emulate_media(media="print", color_scheme=scheme)
    ratios = page.evaluate(CONTRAST, ".v, .soft, p, th, td, caption, a")
    paper = page.evaluate("getComputedStyle(document.body).backgroundColor")
    row = page.evaluate("getComputedStyle(document.querySelector('#case-0')).display")
    page.close()

    assert paper == "rgb(255, 255, 255)"
    assert min(ratios) >= 4.5
    assert row == "table-row"


@pytest.mark.parametrize("width", [380, 1400])
def test_the_index_page_of_the_demo_fits_and_names_its_parts(browser, tmp_path, width):
    """Long lines of a report scroll inside it, also with the keyboard; tables have headers."""
    words = ("PASS", "FAIL", "UNDECIDED")
    chapters = [
        Chapter(f"tern-few-digits-{w.lower()}", w, "written with seven digits", (), "x" * 200)
        for w in words
    ]
    path = tmp_path / "index.html"
    path.write_text(demo_page(chapters), encoding="utf-8")
    page = opened(browser, path, width)
    found = page.evaluate(
        """() => [document.documentElement.scrollWidth,
          [...document.querySelectorAll('th')].filter(t => !t.scope).length,
          [...document.querySelectorAll('pre')].filter(
            p => p.tabIndex === 0 && p.getAttribute('aria-label')).length,
          document.querySelectorAll('main caption').length]"""
    )
    page.close()

    assert found == [width, 0, 3, 1]
