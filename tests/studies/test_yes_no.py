"""A small run of the study of yes/no payoffs."""

import pytest
import yes_no as study

SEEDS = range(1, 26)


@pytest.mark.parametrize(("name", "level", "strike"), study.CASES)
def test_a_rare_correction_never_pays_for_certain(name, level, strike):
    """No seed says "pays" where the true edge is below 1.

    False-alarm rate: at 99% confidence over all looks at most 1% a seed if the bounds were exact; they are wider.
    """
    assert all(study.verdict(name, level, strike, seed)[0] != "pays" for seed in SEEDS)


@pytest.mark.parametrize(("name", "level", "strike"), study.CASES)
def test_a_plain_jackknife_does_say_so(name, level, strike):
    """Negative control: the interval that knows only what it has seen says "pays" for some of 200 seeds."""
    assert any(study.plainly(name, level, strike, seed, 0.01) for seed in range(1, 201))


@pytest.mark.parametrize(("level", "strike"), [case[1:] for case in study.CASES])
def test_float32_pays_at_its_first_look(level, strike):
    """Enough paths without any correction are evidence: float32, whose edge is 2, pays."""
    verdict, paths = study.verdict("float32", level, strike, 1, study.LAST_LOOK)
    assert verdict == "pays"
    assert paths == study.LAST_LOOK
