"""The terminal and the page say the same, in the same order."""

from __future__ import annotations

import pages
import pytest
import test_approximate_text as approximate
from rendering import flat, rendered
from test_page import words

from narrowgauge.report.headline import headline
from narrowgauge.report.nextsteps import next_steps
from narrowgauge.report.questions import QUESTIONS
from narrowgauge.report.text import audit_text
from narrowgauge.report.wording import joined


@pytest.mark.parametrize("record", [pages.full_record, pages.hostile_record, approximate.record])
def test_the_terminal_answers_the_questions_of_the_page(record):
    """In its words and order, below the verdict; what was not measured has no heading, and is named."""
    text = rendered(audit_text(record(), None), 120)
    asked = {key: text.find(f"\n{question.words}\n{'=' * 120}\n") for key, question in QUESTIONS.items()}
    found = [place for place in asked.values() if place >= 0]
    assert found == sorted(found)
    assert 0 < text.index("\nVerdict\n") < text.index("\nWhat to do next\n") < found[0]
    left = [QUESTIONS[key].short.lower() for key, place in asked.items() if place < 0]
    assert ("Not measured in this audit: " in text) == bool(left)
    assert not left or f"Not measured in this audit: {joined(left)}.\n" in text


@pytest.mark.parametrize("name", sorted(pages.EMPTY))
def test_the_terminal_begins_as_the_page_does(name):
    """The same sentence and steps; the sentence again at the end, where a terminal stands when all is printed."""
    record = pages.EMPTY[name]()
    sentence, said = headline(record).sentence, flat(audit_text(record, None), 120)
    steps = " ".join(f"{number}. {step}" for number, step in enumerate(next_steps(record), start=1))
    assert f"Verdict {'=' * 120} {sentence} {headline(record).rests_on} " in said
    assert f"What to do next {steps} " in said
    assert said.endswith(f" {sentence}")


def test_what_was_found_is_said_in_the_same_words():
    """Sentences of each answer that both have."""
    record = pages.full_record()
    terminal, page = flat(audit_text(record, None), 400), words(pages.full_record)
    for sentence in (
        "float16: on every level where both were measured the noise stays below the signal",
        "the walk of step roundings (\u03b4\u00b2/h) rules on every level. Walk 0.500 (0.490 to 0.510) u\u00b2 a step",
        "1.00 (0.970 to 1.03)",
        "The walks of the formats agree within 5%",
        "The cheapest scheme of each level of value",
        "Branches of a split:",
        "On level 3, 8 steps, from 16,384 paths of every run.",
        "Every number of 256 paths on levels",
        "Constants that a format cannot take",
        "Sums over the paths: what adding them up in a format does to means",
        "In a trial run the emulation met 46 operations on arrays, of which 40 were rounded one by one",
        "A verdict is evidence, not approval.",
    ):
        assert sentence in terminal
        assert sentence in page
