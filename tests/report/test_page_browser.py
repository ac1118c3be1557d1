"""The page in a browser: with and without scripts, on a phone and on a large screen, in light and dark.

Skipped where there is no Chromium; the continuous integration installs one.
"""

from __future__ import annotations

import json

import made_records as made
import pages
import pytest
import test_approximate_text as approximate
from browser import Browser, chromium
from msgspec.structs import replace

from narrowgauge.report.blocks import visible
from narrowgauge.report.page import page

RECORDS = {
    "sound": pages.sound_record,
    "full": pages.full_record,
    "two quantities": made.audit_record,
    "approximate draws": approximate.record,
    "large": pages.large_record,
    "hostile": pages.hostile_record,
    **pages.EMPTY,
}
A4 = 718  # pixels between margins of 1 cm: (210 - 20) mm at 96 an inch
SHAPES = [
    (scripts, width, dark) for scripts in (False, True) for width in (360, 720, 1024, 1920) for dark in (False, True)
]


@pytest.fixture(scope="module")
def browser():
    program = chromium()
    if program is None:
        pytest.skip("no Chromium is installed; on Debian: apt-get install chromium")
    with Browser(program) as found:
        yield found


@pytest.fixture(scope="module", params=RECORDS)
def opened(request, tmp_path_factory):
    """The file of a page."""
    path = tmp_path_factory.mktemp("page") / "report.html"
    path.write_text(page(RECORDS[request.param]()), encoding="utf-8")
    return path


SEEN = visible(pages.CONTROL)  # as a page shows it
HOSTILE_PLACES = [
    ("h3", f"Quantity {pages.BRACKETS}"),
    ("caption", pages.SCRIPT),
    ("#branches li", pages.SCRIPT),
    ("#lines .source code", "a\\x1b[31mb\\u202ec\\x00d"),
    ("#lines caption", pages.SCRIPT),
    ("#range th", pages.SCRIPT),
    ("#domain th", pages.SCRIPT),
    ("#rounding td", pages.BRACKETS),
    ("#measured tbody th", f"parameters.{pages.SCRIPT}"),
    ("#measured tbody td", SEEN),
    ("#measured tbody td", f"[1.5, {SEEN}]"),
    ("#cautions li", pages.SCRIPT),
]
# What every page must satisfy, as an expression that gives a list of what does not.
WIDER = """
[...document.querySelectorAll('body *')].filter(e => e.getBoundingClientRect().right > innerWidth + 1
  && getComputedStyle(e).position !== 'absolute' && !e.closest('.hidden, thead, svg'))
  .map(e => e.outerHTML.slice(0, 200))
"""
NOT_DRAWN = """
[...document.querySelectorAll('figure')].filter(f => {
  const shown = [...f.querySelectorAll('svg')].filter(s => s.getBoundingClientRect().width > 200
    && s.getBoundingClientRect().height > 60);
  return shown.length !== 1 || shown[0].querySelectorAll('path, use').length < 5
    || [...shown[0].querySelectorAll('use')].some(u => u.getBBox().width === 0 && u.getBBox().height === 0)
    || !f.querySelector('[role=img]').getAttribute('aria-label');
}).map(f => f.outerHTML.slice(0, 300))
"""
CUT = """
[...document.querySelectorAll('figure svg')].filter(s => s.getBoundingClientRect().width > 0).flatMap(s => {
  const b = s.getBoundingClientRect();
  return [...s.querySelectorAll('text')].filter(t => {
    const r = t.getBoundingClientRect();
    return r.left < b.left - 1 || r.right > b.right + 1 || r.top < b.top - 1 || r.bottom > b.bottom + 1;
  }).map(t => t.textContent);
})
"""
OVERLAID = """
[...document.querySelectorAll('figure svg')].filter(s => s.getBoundingClientRect().width > 0).flatMap(s => {
  const all = [...s.querySelectorAll('text')].map(t => [t.textContent, t.getBoundingClientRect()]);
  return all.flatMap(([a, p], n) => all.slice(n + 1).filter(([b, q]) => p.left < q.right - 2 && q.left < p.right - 2
    && p.top < q.bottom - 5 && q.top < p.bottom - 5).map(([b, q]) => a + ' over ' + b));
})
"""
BROKEN_LINKS = """
[...document.querySelectorAll('a[href]')].map(a => a.getAttribute('href'))
  .filter(h => !h.startsWith('#') || !document.getElementById(h.slice(1)))
"""
BROKEN_INTERVALS = """
[...document.querySelectorAll('td .unbroken')].filter(e => e.getClientRects().length > 1).map(e => e.innerText)
"""
BELOW_ITS_LABEL = """
[...document.querySelectorAll('.stacked td .unbroken')].filter(e => getComputedStyle(e.closest('td')).display === 'grid'
  && e.getBoundingClientRect().left < e.closest('td').getBoundingClientRect().left + 80).map(e => e.innerText)
"""
DOUBLE_IDS = """
[...document.querySelectorAll('[id]')].map(e => e.id).filter((id, n, all) => all.indexOf(id) !== n)
"""


@pytest.mark.parametrize(("scripts", "width", "dark"), SHAPES)
def test_the_page_is_whole_everywhere(browser, opened, scripts, width, dark):
    """No error, no request, no scrolling sideways, every figure drawn and no word of it cut, every link leads on."""
    browser.open(opened, scripts=scripts, width=width, dark=dark)
    requested = {one["request"]["url"] for one in browser.told("Network.requestWillBeSent")}
    assert {url for url in requested if not url.startswith("data:")} == {opened.absolute().as_uri()}
    assert browser.told("Log.entryAdded", "Runtime.consoleAPICalled", "Runtime.exceptionThrown") == []
    assert browser.value("document.documentElement.scrollWidth") <= width
    for expression in (WIDER, NOT_DRAWN, CUT, OVERLAID, BROKEN_LINKS, BROKEN_INTERVALS, BELOW_ITS_LABEL, DOUBLE_IDS):
        assert browser.value(expression) == [], expression
    ground = browser.value("getComputedStyle(document.body).backgroundColor")
    assert (ground == "rgb(20, 24, 27)") == dark


def test_markup_in_names_is_text(browser, tmp_path):
    """Nothing of a hostile name becomes an element or runs; a reader sees it as it is."""
    path = tmp_path / "report.html"
    path.write_text(page(pages.hostile_record()), encoding="utf-8")
    browser.open(path)
    assert browser.value("document.querySelectorAll('script, img, b, iframe').length") == 0
    text = browser.value("document.body.innerText")
    for shown in (pages.SCRIPT, pages.BRACKETS, "{{ 7 * 7 }}", "&amp;", "\\x1b[31m", "\\u202e", "\\x00"):
        assert shown in text, shown
    assert browser.told("Page.javascriptDialogOpening") == []


@pytest.mark.parametrize("name", [pages.SCRIPT, pages.BRACKETS])
def test_a_hostile_name_is_shown_where_it_belongs(browser, tmp_path, name):
    """The kernel's own name, as it is, at the top; names and values of users in each section that has them."""
    record = pages.hostile_record()
    path = tmp_path / "report.html"
    path.write_text(page(replace(record, kernel=replace(record.kernel, run=name))), encoding="utf-8")
    browser.open(path)
    assert browser.value("document.title") == f"Precision audit of {name}"
    assert browser.value("document.querySelector('.eyebrow code').innerText") == name
    for place, shown in HOSTILE_PLACES:
        seen = (
            f"[...document.querySelectorAll({json.dumps(place)})].some(e => e.innerText.includes({json.dumps(shown)}))"
        )
        assert browser.value(seen), f"{shown} at {place}"


def test_a_page_that_asks_for_something_is_noticed(browser, tmp_path):
    """The checks above can fail: a foreign picture, a wide block, an error and a dead link are all seen."""
    path = tmp_path / "bad.html"
    path.write_text(
        "<body><a href='#nowhere'>x</a><div style='width:5000px'>wide</div><figure></figure>"
        "<script>console.error('no')</script><img src='other.png'>",
        encoding="utf-8",
    )
    browser.open(path, width=360)
    assert len({one["request"]["url"] for one in browser.told("Network.requestWillBeSent")}) == 2
    assert browser.told("Log.entryAdded", "Runtime.consoleAPICalled", "Runtime.exceptionThrown")
    assert browser.value("document.documentElement.scrollWidth") > 360
    for expression in (WIDER, NOT_DRAWN, BROKEN_LINKS):
        assert len(browser.value(expression)) == 1


def test_the_printed_page_has_every_section(browser, opened):
    """On paper the list of contents goes, the answers stay, in the colours of a light page."""
    browser.open(opened, width=A4, dark=True)
    scheme = {"name": "prefers-color-scheme", "value": "dark"}
    browser.call("Emulation.setEmulatedMedia", media="print", features=[scheme])
    hidden = (
        "[...document.querySelectorAll('main > section')].filter(s => s.getBoundingClientRect().height < 20).length"
    )
    assert browser.value(hidden) == 0
    assert browser.value("document.documentElement.scrollWidth") <= A4
    assert browser.value("getComputedStyle(document.querySelector('nav')).display") == "none"
    assert browser.value("getComputedStyle(document.body).color") == "rgb(27, 33, 37)"
