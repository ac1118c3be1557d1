"""Sample reports: the audits of two examples with their pages and policies, and the picture that the README shows.

Run as a program (python tests/studies/samples.py) it writes reports/samples/reserve and reports/samples/membrane:
report.html, audit.json, policy.json, and the audit file, which is the example's with the tables below at its end; and
crossing.svg, the first figure of the reserve's page by itself. Two runs differ in where and when they were made, and in
nothing else. It takes some minutes.
"""

from __future__ import annotations

import shutil
import sys
import tempfile
from pathlib import Path
from xml.etree import ElementTree

from narrowgauge.cli import main as narrowgauge
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.auditreading import audit_in
from narrowgauge.report.crossing import crossing_chart
from narrowgauge.report.figures import WIDE, lines
from narrowgauge.report.palette import LIGHT

ROOT = Path(__file__).parents[2]
FOLDER = ROOT / "reports" / "samples"
KEPT = ("report.html", "audit.json", "policy.json")
LARGEST, TOGETHER = 1_000_000, 2_000_000  # bytes of a file and of all of them, for a repository
_AROUND = 12  # pixels of paper around the picture

_LINES = """
[lines]                       # which lines cost the accuracy
what_ifs = true
"""
ADDED = {
    "reserve": f"""
[domain]                      # does the verdict hold for other parameters?
parameters.price_volatility = {{ low = 0.1, high = 0.8 }}
parameters.inflow_start = {{ low = 0.3, high = 3.0, scale = "log" }}
scenarios = 32
{_LINES}""",
    "membrane": _LINES,
}


def sample(example: str, added: str, folder: Path) -> None:
    """Audit an example with more tables in its audit file, and leave its page, record, policy and audit file there.

    Raises RuntimeError where a command fails, or a file has grown too large.
    """
    with tempfile.TemporaryDirectory() as scratch:
        own = Path(scratch) / example
        shutil.copytree(ROOT / "examples" / example, own, ignore=shutil.ignore_patterns("audits", "__pycache__"))
        file, results = own / f"{example}.toml", own / "results"
        file.write_text(file.read_text(encoding="utf-8") + added, encoding="utf-8")
        for command in (["audit", str(file), "--out", str(results)], ["policy", str(results)]):
            if narrowgauge(command) != 0:
                raise RuntimeError(f"narrowgauge {command[0]} of {example} failed")
        folder.mkdir(parents=True, exist_ok=True)
        for found in (file, *(results / name for name in KEPT)):
            if found.stat().st_size > LARGEST:
                raise RuntimeError(f"{found.name} of {example} is larger than {LARGEST:,} bytes")
            shutil.copyfile(found, folder / found.name)


def picture(record: AuditRecord) -> str:
    """Return the figure of signal and noise of the first quantity as an SVG file, in the page's colours on paper."""
    chart = crossing_chart(record, next(iter(record.quantities.values())))
    if chart is None:
        raise RuntimeError("there is no figure of signal and noise: fewer than two levels have a signal")
    root = ElementTree.fromstring(lines(chart, WIDE, "crossing"))
    colours = [f".k-{role}{{stroke:{colour}}}.f-{role}{{fill:{colour}}}" for role, colour in LIGHT.items()]
    style = ElementTree.Element("style")
    style.text = f"text{{font-family:sans-serif}}{''.join(colours)}"
    _, _, width, height = map(float, root.attrib["viewBox"].split())
    frame = [str(round(number)) for number in (-_AROUND, -_AROUND, width + 2 * _AROUND, height + 2 * _AROUND)]
    paper = dict(zip(("x", "y", "width", "height"), frame, strict=True))
    root.insert(0, style)
    root.insert(1, ElementTree.Element("rect", {**paper, "class": "f-paper"}))
    root.attrib = {"xmlns": "http://www.w3.org/2000/svg", "viewBox": " ".join(frame)}
    return ElementTree.tostring(root, encoding="unicode") + "\n"


def main() -> int:
    """Write all samples and return the exit code."""
    for example, added in ADDED.items():
        sample(example, added, FOLDER / example)
    record = audit_in(FOLDER / "reserve")
    (FOLDER / "reserve" / "crossing.svg").write_text(picture(record), encoding="utf-8")
    written = sum(one.stat().st_size for one in FOLDER.rglob("*") if one.is_file())
    if written > TOGETHER:
        raise RuntimeError(f"the samples are larger than {TOGETHER:,} bytes together")
    return 0


if __name__ == "__main__":
    sys.exit(main())
