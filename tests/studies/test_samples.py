"""The sample reports: a small one is made as the command makes them."""

from __future__ import annotations

import re
from xml.etree import ElementTree

import pytest
import samples

from narrowgauge.record.auditreading import audit_in

SMALL = """
[domain]
parameters.price_volatility = { low = 0.34, high = 0.36 }
scenarios = 2
paths = 1024
most_paths = 1024
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A sample with a small domain in place of the two studies."""
    path = tmp_path_factory.mktemp("samples")
    samples.sample("reserve", SMALL, path)
    return path


def test_a_sample_has_its_page_its_record_its_policy_and_its_audit_file(folder):
    """Each is small enough for a repository, and names no folder of this machine."""
    assert sorted(one.name for one in folder.iterdir()) == sorted([*samples.KEPT, "reserve.toml"])
    for one in folder.iterdir():
        assert one.stat().st_size < samples.LARGEST
        assert str(samples.ROOT) not in one.read_text(encoding="utf-8")
    assert "The verdict is claimed for" in (folder / "report.html").read_text(encoding="utf-8")


def test_the_picture_stands_alone(folder):
    """It is the figure of the page with its colours in it, the same bytes each time, and asks for nothing."""
    record = audit_in(folder)
    text = samples.picture(record)
    assert samples.picture(record) == text
    root = ElementTree.fromstring(text)
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    words = [one.text for one in root.iter() if one.tag.endswith("}text")]
    assert {"signal", "float16", "bfloat16", "float32"} <= set(words)
    used = {name for one in root.iter() for name in one.get("class", "").split()}
    assert used <= set(re.findall(r"\.([kf]-\w+)\{", text))
    addresses = [value for one in root.iter() for key, value in one.attrib.items() if key.endswith("href")]
    assert all(address.startswith("#") for address in addresses)
