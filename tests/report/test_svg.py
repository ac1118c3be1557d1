"""Drawings made fit for a page: no styles, no colours, no ids that meet those of another drawing."""

from __future__ import annotations

import re

import pages
import pytest

from narrowgauge.report.crossing import crossing_chart
from narrowgauge.report.figures import NARROW, WIDE, gains, lines
from narrowgauge.report.parts import gain_chart
from narrowgauge.report.svg import page_svg

HEAD = '<svg xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink" viewBox="0 0 9 9">'


def drawings():
    record = pages.large_record()
    entry = record.quantities["option"]
    for layout in (WIDE, NARROW):
        yield lines(crossing_chart(record, entry), layout, layout.name)
        yield gains(gain_chart(record, entry), layout, f"gain-{layout.name}")


def test_a_drawing_has_no_style_and_no_colour_of_its_own():
    """The page's policy would block the one, and the other would be lost on a dark page."""
    for text in drawings():
        assert not re.search(r"style=|<style|#[0-9a-f]{6}|<metadata|\bDate\b", text)
        assert all('class="' in found for found in re.findall(r"<text[^>]*>", text))


def test_colours_become_classes():
    """Each by its role; what is no colour becomes an attribute, and a number is shortened."""
    text = f'{HEAD}<path d="M 1.23456 2.0" style="stroke: #112233; stroke-width: 1.5; fill: none"/></svg>'
    found = page_svg(text, {"#112233": "ink"}, "p")
    assert '<path d="M 1.23 2" stroke-width="1.5" fill="none" class="k-ink" />' in found


def test_ids_are_the_drawings_own():
    """They begin with its prefix, and those that nothing refers to go."""
    text = f'{HEAD}<defs><path id="a" d="M 0 0"/></defs><g id="b"><use xlink:href="#a"/></g></svg>'
    found = page_svg(text, {}, "p")
    assert '<path id="p-0" d="M 0 0" />' in found
    assert '<use href="#p-0" />' in found
    assert 'id="b"' not in found


@pytest.mark.parametrize(
    ("style", "words"),
    [("fill: #123456", "fill: #123456 is the colour of no role"), ("filter: blur(1px)", "style filter would be lost")],
)
def test_what_a_page_would_lose_is_refused(style, words):
    """A new colour or property does not vanish unseen."""
    with pytest.raises(ValueError, match=re.escape(words)):
        page_svg(f'{HEAD}<path d="M 0 0" style="{style}"/></svg>', {}, "p")


def test_names_are_moved_apart():
    """Lines that end together have names that do not lie on each other."""
    for text in drawings():
        places = [
            (float(x), float(y))
            for x, y in re.findall(r'<text[^>]*font-weight="700"[^>]* x="([\d.]+)" y="([\d.]+)"', text)
        ]
        for number, (x, y) in enumerate(places):
            assert all(abs(y - other) >= 12 for left, other in places[number + 1 :] if left == x)
