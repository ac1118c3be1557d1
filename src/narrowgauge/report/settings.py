"""What the audit file asked for, read back from a record."""

from __future__ import annotations

from msgspec import UnsetType

from narrowgauge.record.audit import AuditRecord, DrawsEntry
from narrowgauge.report.wording import clean, count, figure, joined, setting_value

__all__ = [
    "approximate_draws",
    "arithmetics",
    "assumed_costs",
    "assumptions",
    "bias_share",
    "confidence",
    "coupled",
    "exact_formats",
    "measured_costs",
    "measured_to",
    "narrow_formats",
    "setting",
    "terms",
    "today",
    "worthwhile",
]


def setting(record: AuditRecord, key: str) -> object:
    """Return the value of a dotted key, or None where the file has no such table or key."""
    value: object = record.asked
    for name in key.split("."):
        value = value.get(name) if isinstance(value, dict) else None
    return value


def narrow_formats(record: AuditRecord) -> list[str]:
    """Return the arms that were judged, in the order of the audit file."""
    return list(record.verdict.finest_paying_level)


def exact_formats(record: AuditRecord) -> list[str]:
    """Return those of them with exact draws, whose error is one of rounding alone."""
    return [name for name in narrow_formats(record) if record.arms[name].draws == "exact"]


def today(record: AuditRecord) -> str:
    """Return the format that the kernel runs in now."""
    return clean(setting(record, "formats.today") or "float64")


def worthwhile(record: AuditRecord) -> float:
    """Return the edge below which a format is not worth having."""
    return record.rules.worthwhile


def confidence(record: AuditRecord) -> str:
    """Return the confidence of all intervals together, such as "99%"."""
    value = setting(record, "sampling.confidence")
    return f"{100.0 * value if isinstance(value, int | float) else 0.0:.10g}%"


def coupled(record: AuditRecord) -> bool:
    """Return whether levels are differences of a fine and a coarse path."""
    return setting(record, "kernel.coupling") != "none"


def measured_to(record: AuditRecord) -> int:
    """Return the finest level that was measured."""
    return max(level.level for entry in record.quantities.values() for level in entry.levels)


def bias_share(record: AuditRecord, quantity: str) -> float | None:
    """Return by how much rounding may shift the mean of one level, in the unit of the quantity; None without a target.

    It is bias_share x rmse, shared by the levels where they are added up.
    """
    rmse = record.quantities[quantity].allocation.rmse
    return None if rmse is None else record.rules.bias_share * rmse / record.rules.levels_sharing


def assumed_costs(record: AuditRecord) -> bool:
    """Return whether the audit file has no costs of a step, so that storage bits stand for them."""
    return "cost.float64" in _assumed(record)


def measured_costs(record: AuditRecord) -> str:
    """Return the measured costs of a step, float64 being 1, each with its median time and the range of them."""
    if isinstance(record.costs, UnsetType):
        return ""
    shown = []
    for arm, one in record.costs.items():
        times = f"{figure(one.nanoseconds)} ns, {figure(one.fastest)} to {figure(one.slowest)}"
        shown.append(f"{clean(arm)} {figure(one.cost)} ({times})")
    return f"{joined(shown)}; medians of {next(iter(record.costs.values())).runs} runs in turns on this machine"


def assumptions(record: AuditRecord) -> str:
    """Return every default that was used, with its value, as one sentence a table; "" if the file gave every key."""
    tables: dict[str, list[str]] = {}
    # A kernel that draws for itself has no array of draws: these keys were worked out, and may not be given.
    worked_out = ("kernel.factors", "kernel.layout") if setting(record, "kernel.takes") == "rng" else ()
    for key in _assumed(record):
        if key in worked_out:
            continue
        table, _, name = key.partition(".")
        value = worthwhile(record) if key == "target.worthwhile" else setting(record, key)
        tables.setdefault(table, []).append(f"{clean(name)} = {setting_value(value)}")
    words = [f"[{clean(table)}] {', '.join(keys)}" for table, keys in tables.items()]
    if assumed_costs(record):
        words.append("with no [cost], a step costs as much as its format has bits, float64 being 1")
    return "; ".join(words)


def arithmetics(record: AuditRecord) -> str:
    """Return in what the arms compute, arms of one kind together."""
    kinds: dict[str, list[str]] = {}
    for arm, entry in record.arms.items():
        fused = "products fused into sums" if entry.fused else "products not fused into sums"
        words = f"rounding to {entry.rounding}, subnormals {entry.subnormals}, {fused}, {entry.draws} draws"
        if entry.subnormals is None:
            words = f"rounding is {entry.rounding}, {entry.draws} draws"
        words += f", {joined(entry.widened)} in a wider format" if entry.widened else ""
        kinds.setdefault(clean(words), []).append(clean(arm))
    return "; ".join(f"{joined(arms)}: {words}" for words, arms in kinds.items())


def approximate_draws(draws: DrawsEntry) -> str:
    """Return what approximate normals there are, and how good."""
    kind = {
        "constant": f"piecewise constant on {count(draws.cells or 0)} cells",
        "linear": f"piecewise linear on {count(draws.intervals or 0)} dyadic intervals either side of 1/2",
        "polynomial": f"a polynomial of degree {count(draws.degree or 0)}",
    }.get(draws.approximate, f"by {clean(draws.approximate)}")
    error = f"mean square error {figure(draws.mean_square_error)}"
    return f"{kind}; {error}, mean {figure(draws.mean)}, variance {figure(draws.variance, 5)}."


def terms(record: AuditRecord) -> dict[str, str]:
    """Return the words of the tables, each with what it means in this audit."""
    measured = "the quantity"
    if coupled(record):
        measured = "the level difference (fine less coarse path; on level 0 the quantity itself)"
    found = {
        "signal": f"standard deviation of {measured} in float64, in the unit of the quantity",
        "noise": "standard deviation of the rounding error, path by path, in the same unit",
        "with float32": "a scheme of two parts: most paths in the narrow format alone, a few in both to correct them",
        "gain": f"cost of the level as it runs today, {today(record)} alone, over its cost under the scheme, at equal "
        "variance",
        "edge": "cost of the best that wider formats can do, over the cost of the best scheme of this format",
        "pays": f"the interval of the edge is above 1; does not pay: below {worthwhile(record):g}, or not admissible",
        "breaks even": "up to this cost of a narrow step, a wide one costing 1, the scheme is worth it",
    }
    if not isinstance(record.draws, UnsetType):
        found["float16/approximate"] = (
            "float16 with approximate draws, made from the same uniforms as the exact ones, with which it competes"
        )
        found["arithmetic, draws, both"] = (
            "standard deviation of the correction to float64 from the format with exact draws, from float64 with "
            "approximate draws, and from the format with approximate draws"
        )
    return found


def _assumed(record: AuditRecord) -> list[str]:
    found = record.asked.get("assumed")
    return [str(key) for key in found] if isinstance(found, list | tuple) else []
