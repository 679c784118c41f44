"""The page in a real browser: complete, quiet, within its width, readable, usable by keyboard and screen reader."""

from __future__ import annotations

import base64
import itertools
import json
import re

import pytest

from fieldmover.report.write import write_report
from tests.browser import Tab, missing, tab
from tests.reports import full_report, some_pictures

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

WIDTHS = (400, 1400)
PAPER = 688  # an A4 page less margins of 14 mm, at 96 pixels an inch

OVERFLOW = """(() => {
  const root = document.documentElement;
  const loose = [...document.querySelectorAll("body *")].filter(e =>
    e.getBoundingClientRect().right > root.clientWidth + 1 && !e.closest(INSIDE));
  return [root.scrollWidth - root.clientWidth, loose.map(e => e.outerHTML.slice(0, 80))];
})()"""

PICTURES = """Promise.all([...document.querySelectorAll("image")].map(async i => {
  const copy = new Image();
  copy.src = i.getAttribute("href");
  await copy.decode();
  const box = i.getBoundingClientRect();
  return [copy.naturalWidth, copy.naturalHeight, box.width, box.height];
}))"""

# Every piece of text with its colour and the colour behind it, as drawn.
COLOURS = """(() => {
  const found = new Map(), walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
  const behind = e => {
    for (; e; e = e.parentElement) {
      const back = getComputedStyle(e).backgroundColor;
      if (back !== "rgba(0, 0, 0, 0)") return back;
    }
    return "rgb(255, 255, 255)";
  };
  while (walker.nextNode()) {
    const e = walker.currentNode.parentElement, style = getComputedStyle(e);
    if (!walker.currentNode.data.trim()) continue;
    const colour = e.closest("svg") ? style.fill : style.color;
    found.set([colour, behind(e)].join(), [colour, behind(e), walker.currentNode.data.trim().slice(0, 30)]);
  }
  return [...found.values()];
})()"""


@pytest.fixture(scope="module")
def page(tmp_path_factory):
    """A page with everything that one can have."""
    place = tmp_path_factory.mktemp("report")
    return write_report(place / "report", full_report(place), some_pictures())


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    with tab(tmp_path_factory.mktemp("profile")) as found:
        yield found


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize("dark", [False, True])
def test_complete_quiet_and_within_its_width(browser: Tab, page, width, dark):
    browser.open(page, width, dark)
    assert browser.evaluate("innerWidth") == width
    inside = browser.evaluate(OVERFLOW.replace("INSIDE", '".scroll, pre, svg, .skip"'))
    assert inside == [0, []]
    drawn = browser.evaluate(PICTURES)
    assert len(drawn) == 20  # maps and their colour bars
    assert all(wide > 0 and tall > 0 and room > 5 and high > 50 for wide, tall, room, high in drawn)
    assert browser.messages() == []
    asked = browser.requests()
    assert asked[0] == page.as_uri()
    assert all(address.startswith("data:image/png;base64,") for address in asked[1:])
    back = browser.evaluate("getComputedStyle(document.body).backgroundColor")
    assert back == ("rgb(20, 24, 29)" if dark else "rgb(255, 255, 255)")


@pytest.mark.parametrize("width", WIDTHS)
def test_long_words_find_room(browser: Tab, tmp_path, width):
    """Titles, files and datasets may be called anything."""
    report, long = full_report(tmp_path), "ring" * 60
    report["title"] = long
    report["files"]["source"]["name"] = long
    report["conventions"]["moved by"] = {long: long}
    report["conventions"]["source"] = {"magnetic field": {"data": [long]}}
    report["job"]["text"] = long
    report["limits"][0] = {**report["limits"][0], "name": "divergence", "reference": {"report": long, "value": 1.0}}
    browser.open(write_report(tmp_path / "report", report, []), width)
    assert browser.evaluate(OVERFLOW.replace("INSIDE", '".scroll, pre, svg, .skip"')) == [0, []]


def test_on_paper_nothing_is_cut_off(browser: Tab, page):
    """There are no scroll bars on paper: tables too must fit."""
    browser.open(page, PAPER, dark=True, media="print")
    assert browser.evaluate(OVERFLOW.replace("INSIDE", '"svg"')) == [0, []]
    assert browser.evaluate("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
    assert browser.evaluate("getComputedStyle(document.querySelector('nav')).display") == "none"


def test_it_prints(browser: Tab, page):
    browser.open(page, 1400, media="print")
    try:
        found = browser.send("Page.printToPDF", preferCSSPageSize=True)
    except RuntimeError as error:
        pytest.skip(f"this browser does not print: {error}")
    pdf = base64.b64decode(found["data"])
    assert pdf.startswith(b"%PDF")
    assert 3 <= len(re.findall(rb"/Type\s*/Page\b", pdf)) <= 12


@pytest.mark.parametrize(("dark", "media"), [(False, "screen"), (True, "screen"), (False, "print")])
def test_every_text_has_contrast(browser: Tab, page, dark, media):
    """At least 4.5 to 1: Web Content Accessibility Guidelines 2.1 (W3C, 2018), success criterion 1.4.3."""
    browser.open(page, 1400, dark, media)
    found = browser.evaluate(COLOURS)
    assert len(found) > 3
    for colour, behind, text in found:
        assert contrast(rgb(colour), rgb(behind)) >= 4.5, (colour, behind, text)


def rgb(text: str) -> list[float]:
    numbers = [float(part) for part in re.findall(r"[\d.]+", text)]
    assert len(numbers) == 3, text
    return numbers


def contrast(one: list[float], other: list[float]) -> float:
    """As WCAG 2.1 defines contrast ratio and relative luminance."""

    def luminance(colour: list[float]) -> float:
        linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in (v / 255 for v in colour)]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)


def test_the_formula_of_contrast():
    """Black on white is 21 to 1; #767676 is the lightest grey that passes on white (from memory)."""
    assert contrast([0, 0, 0], [255, 255, 255]) == pytest.approx(21)
    assert contrast([0x76] * 3, [255] * 3) > 4.5 > contrast([0x77] * 3, [255] * 3)


def test_the_keyboard_reaches_everything(browser: Tab, page):
    """Tab goes to the skip link, the sections, every table that may scroll, and the job; each shows that it has it."""
    browser.open(page, 400)
    wanted = browser.evaluate("[...document.querySelectorAll('a, [tabindex]')].map(e => e.outerHTML.slice(0, 90))")
    state = "(e => [e.outerHTML.slice(0, 90), getComputedStyle(e).outlineStyle, e.getBoundingClientRect().left])"
    reached = []
    for _ in wanted:
        browser.press("Tab", 9)
        reached.append(browser.evaluate(f"{state}(document.activeElement)"))
    assert [html for html, *_ in reached] == wanted
    assert all(outline == "solid" and left >= 0 for _, outline, left in reached)
    assert "To the report" in wanted[0]
    assert len(wanted) > 12


def test_a_screen_reader_finds_names(browser: Tab, page):
    """The tree that assistive technology sees: landmarks, headings in order, a name for each picture and table."""
    browser.open(page, 1400)
    nodes = browser.send("Accessibility.getFullAXTree")["nodes"]
    named = [
        (node["role"]["value"], node.get("name", {}).get("value", "")) for node in nodes if not node.get("ignored")
    ]
    roles = [role for role, _ in named]
    assert {"main", "navigation", "banner"} <= set(roles)
    pictures = [name for role, name in named if role in ("image", "img")]
    assert len(pictures) == 15
    assert all(len(name) > 40 and re.search(r"\d", name) for name in pictures)
    for role in ("table", "region"):
        names = [name for found, name in named if found == role]
        assert len(names) > 5
        assert all(names)
        assert len(set(names)) == len(names), json.dumps(names)
    levels = browser.evaluate("[...document.querySelectorAll('h1, h2, h3')].map(e => +e.tagName[1])")
    assert levels[0] == 1
    assert all(after <= before + 1 for before, after in itertools.pairwise(levels))
