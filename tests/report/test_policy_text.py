"""What the terminal shows of a policy."""

from __future__ import annotations

from pathlib import Path

import pytest
from msgspec.structs import replace
from rendering import flat, rendered
from rich.cells import cell_len

from narrowgauge.record.policy import read_policy
from narrowgauge.report.policy import policy_lines

EXAMPLE = Path(__file__).parents[2] / "examples" / "policy" / "reserve.policy.json"


@pytest.mark.parametrize("width", [30, 40, 80])
def test_no_line_is_wider_than_the_terminal(width):
    """At 40 columns a table becomes a paragraph for each level."""
    text = rendered(policy_lines(read_policy(EXAMPLE), Path("policy.json")), width)
    assert max(map(cell_len, text.split("\n"))) <= width


def test_a_saving_is_not_rounded_to_none():
    """1.0004 times is more than once."""
    document = read_policy(EXAMPLE)
    near = replace(document, plan=replace(document.plan, saving=1.0004))
    assert "float64 alone costs 1.0004 times as much" in flat(policy_lines(near, Path("policy.json")))
