"""What there is to say about the processes that measured: that they differ, or compute without subnormal numbers."""

from __future__ import annotations

from rich.text import Text

from narrowgauge.record.audit import AuditRecord
from narrowgauge.report.wording import clean, joined

__all__ = ["worker_alarms"]

_NAMES = {"vector_features": "processor features", "threads": "threads of linear algebra"}


def worker_alarms(record: AuditRecord) -> list[Text]:
    """Return a paragraph for what may make bits differ from worker to worker, and one for what makes them wrong."""
    listed = record.provenance.get("workers")
    workers = [one for one in listed if isinstance(one, dict)] if isinstance(listed, list) else []
    found = []
    if any(one.get("subnormals") is False for one in workers):
        text = Text("SUBNORMAL NUMBERS WERE SWITCHED OFF. ", style="bold red")
        words = (
            "A process that measured takes the smallest numbers for zero, most likely because of a library that the "
            "kernel imports. The emulation is wrong where it meets them: leave that library out and audit again."
        )
        found.append(text.append(words, style="not bold default"))
    keys = {key for one in workers for key in one}
    differing = sorted(key for key in keys if any(one.get(key) != workers[0].get(key) for one in workers))
    if differing:
        text = Text("THE WORKERS DIFFER. ", style="bold")
        words = (
            f"Blocks were measured by {len(workers)} kinds of workers, which differ in "
            f"{joined(clean(_NAMES.get(key, key)) for key in differing)}. Another run may give other last bits, "
            "within the intervals; audit.json lists the workers under provenance."
        )
        found.append(text.append(words, style="not bold"))
    return found
