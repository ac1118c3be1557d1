"""A small run of the study of damaged policy files."""

import damaged_policies as study
import pytest

from narrowgauge.record import policy


def test_a_damaged_file_is_a_policy_or_a_located_message():
    """Of 1,500 files each ends in one of the outcomes that a reader may have, and each outcome is met."""
    heard = []
    found = study.study(1500, 2, heard.append)
    assert heard == []
    met = sum(found.values(), start=study.Counter())
    assert set(met) == set(study.OUTCOMES)
    assert sum(met.values()) == 1500


def test_a_reader_that_lets_something_through_is_heard(monkeypatch):
    """Negative control: a reader that converts without the strict pass before it ends otherwise for some files."""
    monkeypatch.setattr(policy, "read_strict", lambda text, *_: study.json.loads(text))
    heard = []
    study.study(600, 2, heard.append)
    assert heard


@pytest.mark.parametrize("kind", study.KINDS)
def test_damage_is_done(kind):
    """Nearly every file is another one than before: the study looks at damaged files."""
    text = study.policies()[0]
    files = [study.DAMAGES[kind](text, study.random.Random(seed)) for seed in range(100)]
    before = study.json.loads(text)
    assert sum(file != text.encode() for file in files) > 90
    if kind == "structure":
        assert sum(study.json.loads(file) != before for file in files) > 80
