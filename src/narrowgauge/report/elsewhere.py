"""The section on other parameters: what was tried in the box, what is claimed, and which scenario decides."""

from __future__ import annotations

from narrowgauge.record.audit import AuditRecord
from narrowgauge.report.blocks import Block, Words, points, tabled
from narrowgauge.report.domain import box_table, deciding, domain_summary, domain_table, lost_table, passing_table

__all__ = ["domain"]


def domain(record: AuditRecord) -> list[Block] | str:
    """Return what became of the verdict elsewhere in the box of parameters."""
    found = record.domain
    if found is None:
        return (
            "Not measured in this audit: other parameters than those of the audit file. The verdict holds for these "
            "alone, and there is no deciding scenario. A table [domain] in the audit file has others tried."
        )
    before, after = domain_summary(found)
    blocks: list[Block] = [Words(after[0], "answer"), *points([before[1], *after[1:]])]
    blocks += [Words(before[0]), tabled("The box of parameters", box_table(found))]
    if found.levels:
        blocks.append(tabled("The worst of all scenarios on each level", domain_table(found)))
    if decide := deciding(found):
        which = "The scenario that decides" if len(decide) == 1 else "The scenarios that decide"
        blocks += [Words(f"{which} a level:"), *points(decide)]
    for caption, table in (
        ("Scenarios that do not pass", lost_table(found)),
        ("Scenarios that pass", passing_table(found)),
    ):
        if table.rows:
            blocks.append(tabled(caption, table))
    return blocks
