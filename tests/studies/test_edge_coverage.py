"""A small run of the coverage study, with the rate at which it would fail for nothing."""

import edge_coverage as study
import pytest
from scipy import stats

SEEDS = range(1, 25)
CELLS = 30
# An interval of 93% coverage misses this many of 24 truths or fewer in all 30 cells but once in 10,000 runs.
LEAST = int(stats.binom.ppf(1e-4 / CELLS, len(SEEDS), 0.93)) - 1


@pytest.fixture(scope="module")
def truth():
    return study.truth(2**20)


def test_intervals_hold_the_truth(truth):
    """Every cell's 95% interval of the log edge holds the truth in at least LEAST of 24 seeds."""
    found = study.hits(SEEDS, truth)
    assert len(found) == CELLS
    assert min(found.values()) > LEAST


def test_intervals_of_a_quarter_of_the_width_would_be_noticed(truth):
    """Negative control: the same check rejects intervals that are four times too narrow."""
    found = study.hits(SEEDS, truth, shrink=0.25)
    assert min(found.values()) <= LEAST
