"""What a trial lists by line besides operations: allowed escapes, integers, changed decisions, then the remarks."""

from __future__ import annotations

import made_records as made
from msgspec.structs import replace
from rendering import HOSTILE, flat

from narrowgauge.record.audit import LineCount
from narrowgauge.report.text import audit_text, trial_text
from narrowgauge.report.trial import reach_notes


def test_notes_in_their_order():
    """One value and several, in words; then the remarks as they are."""
    assert reach_notes(made.REACH) == [
        "reserve.py:9: a value was let out unrounded, as kernel.allow says",
        "reserve.py:8: 4 values were taken out of the state by int()",
        "reserve.py:8: float16 takes 4 decisions, 1 of them true, where the reference takes 3, 2 of them true",
        "/home/user/reserve.py:12: the sum along the paths stays in float64",
    ]


def test_ten_of_a_kind_and_the_rest_counted():
    """A kind does not push the others away."""
    many = [LineCount(file="reserve.py", line=line, count=1) for line in range(1, 14)]
    notes = reach_notes(replace(made.REACH, integers=many))
    assert notes[11] == "3 further lines like that; audit.json has them all"
    assert len(notes) == 1 + 11 + 1 + 1


def test_notes_are_shown_in_trial_and_audit():
    """Both texts have them, and the constants."""
    for text in (trial_text(made.trial_entry(escapes=False)), audit_text(made.audit_record(), None)):
        words = flat(text, 200)
        assert all(f"- {note}" in words for note in reach_notes(made.REACH))
        assert "- reserve.py:7: 1e-08 becomes 0 in float16; " in words


def test_a_trial_without_a_reference_knows_no_constants():
    """Where float64 stops it does not say that there are none."""
    words = flat(trial_text(replace(made.trial_entry(escapes=True), range=None)))
    assert "Not known, since float64 stops before all of them are met." in words


def test_hostile_names():
    """Neither files nor formats colour or hide anything."""
    line = LineCount(file=HOSTILE, line=3, count=1)
    changed = [replace(made.REACH.changed_decisions[0], file=HOSTILE, arm=HOSTILE)]
    reach = replace(made.REACH, integers=[line], allowed_escapes=[line], changed_decisions=changed)
    words = flat(trial_text(replace(made.trial_entry(escapes=False), reach=reach)), 200)
    assert words.isprintable()
    assert words.count("va[31mlue[red]<script> next:3: a value was ") == 2
