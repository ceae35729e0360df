"""The report as a browser shows it: on a telephone, a laptop and paper, with keyboard and screen reader."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import Any, NamedTuple

import pytest

import swarmpush
from swarmpush import Audit
from swarmpush.auditing.ladder import ASSUMPTIONS

PHONE, LAPTOP = (390, 844), (1366, 768)
PAPER = (680, 1000)  # A4 less margins of 15 mm, at 96 px per inch
SLACK = 0.5  # px: places are rounded
LEAST_TEXT = 7.5  # px: of text in the ladder's picture on a telephone, the height of lower print
LEAST_CONTRAST = 4.5  # of text against its ground, WCAG 2.2, 1.4.3

WIDTHS = "() => [document.documentElement.scrollWidth, document.documentElement.clientWidth]"
SPILLED = """() => [...document.querySelectorAll('body *')].filter(e =>
    !e.closest('.picture, .wide, .skip') && e.getBoundingClientRect().right > document.documentElement.clientWidth + 0.5
    ).map(e => e.outerHTML.slice(0, 80))"""
FOCUSED = """() => { const e = document.activeElement, box = e.getBoundingClientRect(), style = getComputedStyle(e);
    return [e.tagName, e.getAttribute('href') ?? '', box.top, style.outlineStyle, parseFloat(style.outlineWidth)] }"""
CONTRASTS = """() => {
    const light = text => { const c = text.match(/[\\d.]+/g).slice(0, 3).map(v => v / 255)
        .map(v => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
        return 0.2126 * c[0] + 0.7152 * c[1] + 0.0722 * c[2] };
    const ground = e => { for (; e; e = e.parentElement) { const b = getComputedStyle(e).backgroundColor;
        if (b !== 'rgba(0, 0, 0, 0)') return b } return 'rgb(255, 255, 255)' };
    return [...document.querySelectorAll('body *:not(svg, svg *)')].filter(e => e.textContent.trim()).map(e => {
        const pair = [light(getComputedStyle(e).color), light(ground(e))].sort((a, b) => b - a);
        return [(pair[0] + 0.05) / (pair[1] + 0.05), e.outerHTML.slice(0, 80)] }) }"""


class Shown(NamedTuple):
    """A page in the browser, what it asked for besides itself, and what it complained of."""

    page: Any
    asked: list[str]
    complaints: list[str]


@pytest.fixture(params=["audit_page", "run_page", "study_page"])
def path(request: pytest.FixtureRequest) -> Path:
    """Each kind of report."""
    found: Path = request.getfixturevalue(request.param)
    return found


def opened(browser: Any, path: Path, size: tuple[int, int], **options: Any) -> Iterator[Shown]:
    """Show a file in a window; whatever is not that file is refused and noted."""
    context = browser.new_context(viewport={"width": size[0], "height": size[1]}, **options)
    asked: list[str] = []
    complaints: list[str] = []

    def answer(route: Any) -> None:
        if route.request.url == path.as_uri():
            route.continue_()
        else:
            asked.append(route.request.url)
            route.abort()

    page = context.new_page()
    page.route("**/*", answer)
    page.on("console", lambda message: complaints.append(message.text))
    page.on("pageerror", lambda error: complaints.append(str(error)))
    page.goto(path.as_uri())
    yield Shown(page, asked, complaints)
    context.close()


@pytest.fixture
def laptop(browser: Any, path: Path) -> Iterator[Shown]:
    """A report on a laptop."""
    yield from opened(browser, path, LAPTOP)


@pytest.fixture
def phone(browser: Any, path: Path) -> Iterator[Shown]:
    """A report on a telephone."""
    yield from opened(browser, path, PHONE, is_mobile=True, has_touch=True)


@pytest.fixture(params=["short", "long"])
def audit_on_laptop(
    browser: Any, audit_page: Path, result: Audit, request: pytest.FixtureRequest, tmp_path: Path
) -> Iterator[Shown]:
    """The audit's report on a laptop, with the rungs of the scenario and with as many as there can be."""
    path = audit_page
    if request.param == "long":
        first, *rungs = result.ladder
        ladder = (first, *(rungs * 2)[: len(ASSUMPTIONS)], rungs[-1])
        path = swarmpush.report(replace(result, ladder=ladder), tmp_path / "report.html")
    yield from opened(browser, path, LAPTOP)


def assert_fits(page: Any) -> None:
    """Nothing reaches beyond the right edge, but for what has a scroll bar of its own."""
    wide, room = page.evaluate(WIDTHS)
    assert wide <= room
    assert page.evaluate(SPILLED) == []


def test_a_page_that_is_too_wide_is_found_out(laptop: Shown) -> None:
    """What the next tests must not find, they do find where it is."""
    laptop.page.evaluate("document.body.insertAdjacentHTML('beforeend', '<div style=\"width: 3000px\">x</div>')")
    with pytest.raises(AssertionError):
        assert_fits(laptop.page)


def test_on_a_laptop(laptop: Shown) -> None:
    """The page fits, asks for nothing, complains of nothing, and shows a hostile name as text."""
    assert_fits(laptop.page)
    assert laptop.asked == []
    assert laptop.complaints == []
    assert laptop.page.locator("h1").inner_text().startswith("<script>")
    assert laptop.page.title().startswith("<script>")
    assert laptop.page.locator("script, img").count() == 0


def test_on_a_telephone(phone: Shown) -> None:
    """The page fits a narrow screen at its own width, and its text can be read."""
    page = phone.page
    assert page.evaluate("innerWidth") == PHONE[0]
    assert_fits(page)
    assert page.locator(".answer").bounding_box()["y"] < PHONE[1] / 2
    assert page.evaluate("parseFloat(getComputedStyle(document.querySelector('table')).fontSize)") >= 12.0
    for text in page.locator(".slim svg text").all()[:8]:
        assert text.bounding_box()["height"] >= LEAST_TEXT
    for hidden in page.locator(".picture:not(.slim), .wide").all():  # what is wider than the screen can be scrolled
        assert hidden.evaluate("e => e.scrollWidth <= e.clientWidth || getComputedStyle(e).overflowX === 'auto'")


def test_on_paper(laptop: Shown) -> None:
    """On A4 nothing is cut off or hangs on a scroll bar, and there are pages to print."""
    page = laptop.page
    pages = page.pdf(prefer_css_page_size=True, print_background=True)
    boxes = set(re.findall(rb"/MediaBox\s*\[([^]]*)\]", pages))
    assert len(boxes) == 1
    assert [round(float(end)) for end in boxes.pop().split()] == [0, 0, 595, 842]
    page.set_viewport_size({"width": PAPER[0], "height": PAPER[1]})
    page.emulate_media(media="print")
    assert_fits(page)
    for box in page.locator(".picture, .wide").all():
        assert box.evaluate("e => e.scrollWidth") <= PAPER[0] + SLACK
    assert not page.locator("nav").is_visible()


def test_the_first_screen_holds_the_findings(audit_on_laptop: Shown) -> None:
    """Answer, ladder and the largest costs are seen before anything is scrolled."""
    page = audit_on_laptop.page
    for found in (".answer", ".first svg", ".costs"):
        box = page.locator(found).bounding_box()
        assert box["y"] >= 0.0
        assert box["y"] + box["height"] <= LAPTOP[1]
    assert page.locator(".first svg").bounding_box()["width"] >= LAPTOP[0] / 3
    bottom = page.locator(".costs").bounding_box()["y"] + page.locator(".costs").bounding_box()["height"]
    assert page.locator("#regimes").bounding_box()["y"] > bottom


def test_by_keyboard(laptop: Shown) -> None:
    """The first stop is the skip link, which then comes into sight and leads to the answer; every link is a stop."""
    page = laptop.page
    page.keyboard.press("Tab")
    tag, href, top, outline, width = page.evaluate(FOCUSED)
    assert (tag, href) == ("A", "#main")
    assert top >= 0.0
    assert outline != "none"
    assert width >= 2.0
    page.keyboard.press("Enter")
    assert page.evaluate("document.activeElement.id") == "main"
    links = [link.get_attribute("href") for link in page.locator("a:not(.skip)").all()]
    reached = []
    for _ in range(3 * len(links) + 20):
        page.keyboard.press("Tab")
        tag, href, _, outline, _ = page.evaluate(FOCUSED)
        if tag == "BODY":
            break
        assert outline != "none"
        reached += [href] if tag == "A" else []
    assert [href for href in reached if href != "#main"][: len(links)] == links


def test_links_lead_somewhere(laptop: Shown, path: Path) -> None:
    """A link leads to a place in the page or to a file beside it."""
    links = [link.get_attribute("href") for link in laptop.page.locator("a").all()]
    assert len(links) > 10
    for link in links:
        if link.startswith("#"):
            assert laptop.page.locator(link).count() == 1, link
        else:
            assert (path.parent / link).is_file(), link


def test_for_a_screen_reader(laptop: Shown) -> None:
    """Language, landmarks, headings in order, names of pictures, captions and scopes of tables; no name twice."""
    page = laptop.page
    assert page.evaluate("document.documentElement.lang") == "en"
    assert page.locator("main").count() == page.locator("h1").count() == 1
    levels = page.evaluate("[...document.querySelectorAll('h1,h2,h3,h4')].map(e => +e.tagName[1])")
    assert levels[0] == 1
    assert all(below <= above + 1 for above, below in pairwise(levels))
    pictures = page.get_by_role("img")
    assert pictures.count() == page.locator("svg").count() >= 8
    names = [picture.get_attribute("aria-label") for picture in pictures.all()]
    assert all(len(name) > 30 for name in names)
    assert len(set(names)) == len(names)
    for table in page.locator("table").all():
        assert table.locator("caption").inner_text()
        assert table.locator("th:not([scope])").count() == 0
        assert table.locator("thead th").count() == table.locator("tbody tr").first.locator("th, td").count()
    ids = page.evaluate("[...document.querySelectorAll('[id]')].map(e => e.id)")
    assert len(set(ids)) == len(ids)


def test_text_stands_out(laptop: Shown) -> None:
    """All text outside the pictures has enough contrast."""
    contrasts = laptop.page.evaluate(CONTRASTS)
    assert len(contrasts) > 50
    assert [entry for entry in contrasts if entry[0] < LEAST_CONTRAST] == []
