"""What a person asks of an audit, in that order: the page and the terminal answer the same questions."""

from __future__ import annotations

from typing import NamedTuple

__all__ = ["QUESTIONS", "Question"]


class Question(NamedTuple):
    """A question as a heading, and the few words that lead to it."""

    short: str
    words: str


# By the key of the place on the page where the answer stands.
QUESTIONS = {
    "crossing": Question("Noise and signal", "Where does rounding noise cross the level\u2019s own signal?"),
    "law": Question("The law of rounding", "Does rounding follow \u03b4\u00b2/h, and which part rules?"),
    "schemes": Question("Schemes and saving", "Which scheme on each level, and what does it save?"),
    "draws": Question("Approximate draws", "What do approximate draws cost?"),
    "branches": Question("Branches", "Do the branches cancel?"),
    "lines": Question("Source lines", "Which lines cost what?"),
    "range": Question("Range", "Is there range enough, and headroom?"),
    "averaging": Question("Averaging", "What does averaging in a narrow format do?"),
    "domain": Question("Domain", "Does it hold for other parameters?"),
    "rounding": Question("Every operation", "Is every operation rounded?"),
    "measured": Question("How it was measured", "How was it measured?"),
    "cautions": Question("Cautions", "What must be kept in mind?"),
    "words": Question("Words", "What do the words of the tables mean?"),
}
