"""The last sections of the page: how the kernel rounds, how it was measured with every number, cautions."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from msgspec import UnsetType
from rich.text import Text

from narrowgauge.record.audit import AuditRecord, QuantityEntry
from narrowgauge.report.blocks import Block, Cell, Table, Words, points, tabled, visible
from narrowgauge.report.canary import CANNOT_SHOW, HELD_AGAINST, canary_lines
from narrowgauge.report.layout import Ruled
from narrowgauge.report.sections import per_quantity
from narrowgauge.report.settings import arithmetics, bias_share, measured_costs
from narrowgauge.report.trial import ROUNDED, reach_notes, reach_summary, reach_table
from narrowgauge.report.wording import NONE, clean, count, figure, interval, setting_value, shown_edge
from narrowgauge.report.workers import speed_notes

__all__ = ["cautions", "measured", "rounding"]


def rounding(record: AuditRecord) -> list[Block]:
    """Return whether every operation is rounded: the reach of the emulation, or the canary."""
    blocks: list[Block] = []
    if not isinstance(record.canary, UnsetType):
        blocks += [Words(HELD_AGAINST, "answer"), *points(canary_lines(record.canary)), Words(CANNOT_SHOW, "note")]
    if record.reach is not None:
        blocks.append(Words(f"{ROUNDED} {reach_summary(record.reach)}", "answer"))
        if record.reach.lines:
            blocks.append(tabled("Operations of the trial run, by line of the kernel", reach_table(record.reach)))
        blocks += points(map(clean, reach_notes(record.reach)))
    return blocks or [Words("Neither the reach of an emulation nor a canary is in this audit.", "answer")]


def measured(record: AuditRecord) -> list[Block]:
    """Return what is needed to repeat the audit, and the figures behind the verdict that stand nowhere else."""
    blocks: list[Block] = [Words(f"{arithmetics(record)}.", "answer")]
    if costs := measured_costs(record):
        blocks.append(Words(f"Measured costs of a step of one path, by every audit anew: {costs}."))
    blocks += points(text.plain for text in speed_notes(record))
    blocks.append(_listed("What was audited", {"kernel": record.kernel.run, "fingerprint": record.kernel.fingerprint}))
    blocks.append(_asked(record))
    blocks.append(_listed("The limits by which figures became verdicts", _rules(record)))

    def one(name: str, entry: QuantityEntry) -> Iterable[Block]:
        yield tabled(f"Levels and paths of {clean(name)}", _sample(record, entry))
        yield tabled(f"The reference, float64, on each level of {clean(name)}", _reference(entry))
        yield tabled(f"Rounding errors of {clean(name)} by format and level", _errors(record, name))
        if any(level.corrections for level in entry.levels):
            yield tabled(f"Corrections of {clean(name)} by pair of formats and level", _corrections(record, entry))

    blocks += per_quantity(record, one)
    found = dict(_flat("", record.provenance))
    blocks.append(
        _listed("Where it was measured, and with what", found) if found else Words("It is not recorded where.")
    )
    return blocks


def cautions(record: AuditRecord) -> list[Block]:
    """Return the cautions of the record."""
    return points(map(clean, record.cautions)) or [Words("The record holds none.")]


def _listed(caption: str, found: Mapping[str, object]) -> Table:
    rows = tuple((Cell(visible(key)), Cell(_value(value))) for key, value in found.items())
    return Table(caption=caption, columns=(("name", "words"), ("value", "words")), rows=rows)


def _asked(record: AuditRecord) -> Table:
    """Return every key of the audit file with its value, defaults among them and marked."""
    asked = {key: value for key, value in record.asked.items() if key != "assumed"}
    listed = record.asked.get("assumed")
    assumed = {str(key) for key in listed} if isinstance(listed, list | tuple) else set()
    rows = []
    for key, value in _flat("", asked):
        rows.append((Cell(visible(key)), Cell(_value(value)), Cell("default" if key in assumed else "audit file")))
    columns = (("key", "words"), ("value", "words"), ("from", "words"))
    return Table(caption="What the audit file asked for, defaults filled in", columns=columns, rows=tuple(rows))


def _rules(record: AuditRecord) -> dict[str, object]:
    rules = record.rules
    return {
        "standard errors apart that the reference's levels may lie": rules.telescoping_se,
        "least number of paths that must effectively carry a correction": rules.least_effective_size,
        "edge below which a format does not pay": rules.worthwhile,
        "share of the target RMSE that rounding may shift a mean by": rules.bias_share,
        "levels that share it": rules.levels_sharing,
    }


def _flat(path: str, value: object) -> Iterable[tuple[str, object]]:
    """Yield the leaves of nested mappings with their dotted keys; a list of mappings is numbered."""
    if isinstance(value, Mapping) and value:
        for key, inner in value.items():
            yield from _flat(f"{path}.{key}" if path else str(key), inner)
    elif isinstance(value, list) and any(isinstance(one, Mapping) for one in value):
        for number, inner in enumerate(value, start=1):
            yield from _flat(f"{path} {number}", inner)
    else:
        yield path, value


def _value(value: object) -> str:
    """Return a value whole, as the audit file would write it: nothing is rounded, or dropped, that must be repeated."""
    if isinstance(value, str):
        return visible(value)
    if isinstance(value, list | tuple):
        return f"[{', '.join(_value(one) for one in value)}]"
    return setting_value(value)


def _sample(record: AuditRecord, entry: QuantityEntry) -> Ruled:
    sound = record.rules.telescoping_se
    names = ("level", "steps", "h", "paths", "blocks", "standard errors apart from the level below")
    table = Ruled(*((name, "number") for name in names))
    for level in entry.levels:
        below, apart = level.telescoping, NONE
        if below is not None and below.difference is not None and below.se:
            apart = shown_edge(below.difference / below.se, (-sound, sound))
        cells = (
            count(level.level),
            count(level.steps),
            setting_value(level.h),
            count(level.paths),
            count(level.blocks),
        )
        table.add_row(*map(Text, (*cells, apart)))
    return table


def _reference(entry: QuantityEntry) -> Ruled:
    names = (
        "level",
        "mean",
        "its error",
        "mean of the difference",
        "its error",
        "variance of it",
        "its error",
        "kurtosis",
    )
    table = Ruled(*((name, "number") for name in names))
    for level in entry.levels:
        own = level.reference
        cells = [count(level.level), figure(own.mean, 6), figure(own.mean_se), figure(own.level_mean)]
        cells += [figure(own.level_mean_se), figure(own.level_variance), figure(own.level_variance_se)]
        table.add_row(*map(Text, (*cells, figure(own.level_kurtosis))))
    return table


def _errors(record: AuditRecord, name: str) -> Ruled:
    entry, share = record.quantities[name], bias_share(record, name)
    thresholds = (0.0,) if share is None else (-share, 0.0, share)
    names = (
        "level",
        "mean error",
        "its error",
        "error variance",
        "its error",
        "shift of the mean under its scheme",
        "non-finite",
    )
    table = Ruled(("format", "unbroken"), *((name, "number") for name in names))
    arms = dict.fromkeys(arm for level in entry.levels for arm in level.arms)
    for arm in arms:
        for level in entry.levels:
            one = level.arms.get(arm)
            if one is None or (one.error_mean is None and one.raised is None and one.verdict is None):
                continue
            cells = [clean(arm), count(level.level), figure(one.error_mean), figure(one.error_mean_se)]
            cells += [figure(one.error_variance), figure(one.error_variance_se)]
            shift = NONE if one.bias is None else interval(one.bias, one.bias_low, one.bias_high, thresholds)
            table.add_row(*map(Text, (*cells, shift, count(one.nonfinite))))
    return table


def _corrections(record: AuditRecord, entry: QuantityEntry) -> Ruled:
    least = float(record.rules.least_effective_size)
    names = ("level", "mean", "its error", "variance", "its error", "kurtosis", "effective paths", "paths that differ")
    table = Ruled(("formats", "words"), *((name, "number") for name in names))
    pairs = dict.fromkeys(pair for level in entry.levels for pair in level.corrections)
    for pair in pairs:
        narrow, _, wide = pair.partition(":")
        for level in entry.levels:
            one = level.corrections.get(pair)
            if one is None:
                continue
            cells = [f"{clean(narrow)} with {clean(wide)}", count(level.level), figure(one.mean), figure(one.mean_se)]
            cells += [figure(one.variance), figure(one.variance_se), figure(one.kurtosis)]
            table.add_row(*map(Text, (*cells, shown_edge(one.effective_size, (least,)), count(one.events))))
    return table
