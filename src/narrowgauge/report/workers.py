"""What there is to say about the processes that measured.

That they differ, or compute without subnormal numbers; and what made them slower than they could be.
"""

from __future__ import annotations

from rich.text import Text

from narrowgauge.record.audit import AuditRecord
from narrowgauge.report.wording import clean, joined

__all__ = ["speed_notes", "worker_alarms"]

_SPEED = "compiling"  # the one entry of a worker that decides no bit
_NAMES = {"vector_features": "processor features", "threads": "threads of linear algebra"}


def worker_alarms(record: AuditRecord) -> list[Text]:
    """Return a paragraph for what may make bits differ from worker to worker, and one for what makes them wrong."""
    found, workers = [], _workers(record)
    if any(one.get("subnormals") is False for one in workers):
        text = Text("SUBNORMAL NUMBERS WERE SWITCHED OFF. ", style="bold red")
        words = (
            "A process that measured takes the smallest numbers for zero, most likely because of a library that the "
            "kernel imports. The emulation is wrong where it meets them: leave that library out and audit again."
        )
        found.append(text.append(words, style="not bold default"))
    keys = {key for one in workers for key in one} - {_SPEED}
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


def speed_notes(record: AuditRecord) -> list[Text]:
    """Return a line for each thing that made a worker slower than it could be and changed no bit."""
    slower = {clean(note) for one in _workers(record) if isinstance(note := one.get(_SPEED), str)}
    return [Text(f"Slower than it could be, with the same bits: {note}.") for note in sorted(slower)]


def _workers(record: AuditRecord) -> list[dict[str, object]]:
    listed = record.provenance.get("workers")
    return [one for one in listed if isinstance(one, dict)] if isinstance(listed, list) else []
