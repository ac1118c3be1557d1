"""The box of [domain]: its sides, defaults and scales, and what a draft says of it; refusals are in refusals.txt."""

from __future__ import annotations

import math
from pathlib import Path

import pytest
from auditfile_cases import LEAST, read

from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.domaintable import AxisTable
from narrowgauge.kernel.draft import draft

BOX = """
[parameters]
spot = 100
volatility = 0.2
[domain]
parameters.spot = { low = 50, high = 200, scale = "log" }
parameters.volatility = { low = 0.1, high = 0.4 }
"""


def test_what_is_left_out_is_filled_in_and_said(tmp_path: Path) -> None:
    """Scenarios, paths and the scale of a side have defaults, each of which is listed as assumed."""
    file = read(tmp_path, LEAST + BOX)
    assert file.asked()["domain"] == {
        "parameters": {
            "spot": {"low": 50.0, "high": 200.0, "scale": "log"},
            "volatility": {"low": 0.1, "high": 0.4, "scale": "linear"},
        },
        "scenarios": 32,
        "paths": 1024,
        "most_paths": 16384,
    }
    assert [key for key in file.assumed if key.startswith("domain")] == [
        "domain.scenarios",
        "domain.paths",
        "domain.most_paths",
        "domain.parameters.volatility.scale",
    ]


def test_a_file_without_the_table_has_no_domain(tmp_path: Path) -> None:
    """Nothing of it is asked or assumed."""
    file = read(tmp_path, LEAST)
    assert file.domain is None
    assert "domain" not in file.asked()
    assert not [key for key in file.assumed if key.startswith("domain")]


def test_a_mapping_passes_the_same_checks() -> None:
    """NumPy-free Python values do, tuples of them too."""
    least = {"kernel": {"run": "a.py:f", "takes": "normals"}, "ladder": {"horizon": 1.0, "finest": 3}}
    side = {"low": 1, "high": 3.0, "scale": "linear"}
    file = audit_file_from(
        {**least, "parameters": {"a": 2.0}, "domain": {"parameters": {"a": side}, "scenarios": None}}
    )
    assert file.domain is not None
    assert file.domain.scenarios == 32
    assert file.domain.parameters == {"a": AxisTable(low=1.0, high=3.0)}


@pytest.mark.parametrize(
    ("axis", "middle"),
    [
        (AxisTable(low=-1.0, high=3.0), 1.0),
        (AxisTable(low=1e-3, high=1e5, scale="log"), 10.0),
        (AxisTable(low=-1.5e308, high=1.5e308), 0.0),
    ],
)
def test_a_side_goes_from_end_to_end_on_its_scale(axis: AxisTable, middle: float) -> None:
    """The ends are hit to the bit, the middle is that of the scale, and the way back gives the coordinate."""
    assert (axis.value(0.0), axis.value(1.0)) == (axis.low, axis.high)
    assert math.isclose(axis.value(0.5), middle, rel_tol=1e-12, abs_tol=1e-12)
    for place in (0.0, 0.125, 0.5, 0.9, 1.0):
        value = axis.value(place)
        assert axis.low <= value <= axis.high
        assert math.isclose(axis.place(value), place, rel_tol=1e-12, abs_tol=1e-12)


def test_a_draft_shows_a_box_around_a_parameter(tmp_path: Path) -> None:
    """The first floating-point default is its one side, and switched on the table is read as it is."""
    path = tmp_path / "model.py"
    path.write_text("def kernel(dW, h, *, years=3, spot=100.0, rate=-0.5):\n    return dW\n", encoding="utf-8")
    text = draft(f"{path}:kernel")
    start = text.index("# [domain]")
    switched_on = text[:start] + text[start:].replace("\n# ", "\n").removeprefix("# ")
    file = read(tmp_path, switched_on)
    assert file.domain is not None
    assert file.domain.parameters == {"spot": AxisTable(low=50.0, high=200.0)}
    assert not [key for key in file.assumed if key.startswith("domain")]


def test_a_draft_without_a_number_to_vary_has_no_box(tmp_path: Path) -> None:
    """There is nothing that could be a side."""
    path = tmp_path / "model.py"
    path.write_text("def kernel(dW, h, *, years=3, kind='call'):\n    return dW\n", encoding="utf-8")
    assert "[domain]" not in draft(f"{path}:kernel")
