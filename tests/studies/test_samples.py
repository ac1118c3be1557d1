"""The sample reports: a small one is made as the command makes them, and the committed ones are whole."""

from __future__ import annotations

import samples

SMALL = """
[domain]
parameters.price_volatility = { low = 0.34, high = 0.36 }
scenarios = 2
paths = 1024
most_paths = 1024
"""


def test_a_sample_has_its_page_its_record_its_policy_and_its_audit_file(tmp_path):
    """Each is small enough for a repository, and names no folder of this machine."""
    samples.sample("reserve", SMALL, tmp_path)
    assert sorted(one.name for one in tmp_path.iterdir()) == sorted([*samples.KEPT, "reserve.toml"])
    for one in tmp_path.iterdir():
        assert one.stat().st_size < samples.LARGEST
        assert str(samples.ROOT) not in one.read_text(encoding="utf-8")
    assert "The verdict is claimed for" in (tmp_path / "report.html").read_text(encoding="utf-8")
