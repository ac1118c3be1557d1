"""What a policy says about its own limits, in words."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

from msgspec import UnsetType

from narrowgauge.conduct.account import CAUTIONS
from narrowgauge.policy.choice import Choice
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.policy import DomainPart
from narrowgauge.record.source import SourceEntry

__all__ = ["cautions", "unseen"]

_EVIDENCE = (
    "A policy is evidence, not approval: it holds for means, not for quantiles or nested expectations, of the audited "
    "kernel, over the audited domain, sample and cost table."
)
_POINT = "Nothing was audited beside the parameters that are written down here: with others the policy says nothing."
_ASSUMED = "The costs of a step were assumed from the bits of each format: gains, edges and paths rest on them."
_MEASURED = "The costs of a step were measured on one machine: gains, edges and paths rest on them."
_UNCLAIMED = {"result only": "rounds its result alone", "wider": "does not round", "narrower": "rounds more than that"}
# Why a verdict is open.
_WHY = {
    "bias": "it is not known whether rounding shifts the mean by more than its share of the target",
    "kurtosis": "too few paths carry the correction for the sample to be trusted",
    "budget": "the paths ran out before the edge was settled",
}


def cautions(record: AuditRecord, choices: Mapping[int, Choice], domain: DomainPart) -> list[str]:
    """Return every caution that a policy carries, what holds for all of them first."""
    found = [_EVIDENCE, *(one for one in record.cautions if one != CAUTIONS[0])]
    found += [_POINT] if record.domain is None else []
    found += domain.remarks
    if not isinstance(record.costs, UnsetType):
        found.append(_MEASURED)
    elif "cost.float64" in _texts(record.asked.get("assumed")):
        found.append(_ASSUMED)
    found += _undecided(choices)
    found += _replaced(choices)
    found += _draws(record, choices)
    found += _branches(record, choices)
    found += _bounded(record)
    found += _left_over(record)
    found += _false_formats(record)
    return found


def unseen(record: AuditRecord, source: SourceEntry, shared: Sequence[str]) -> list[str]:
    """Return what a change of the kernel's fingerprint would not show."""
    found = ["data files, environment variables and services that the kernel reads"]
    if source.covers == "bytes":
        found.append("libraries that it loads, programs that it starts, and the processor that it runs on")
    if source.covers == "code":
        found.append("another version of Python: the code of a function differs between them")
    if source.imports:
        found.append(f"modules that it imports and the audit does not list: {', '.join(source.imports)}")
    if shared:
        found.append(f"modules that were shared and not rounded: {', '.join(shared)}")
    if source.covers == "syntax trees":
        found.append("values that a module or a closure gets when it is executed, and compiled extensions")
    branches = record.branches
    if source.covers != "code" and branches is not None and {branches.low, branches.correction} != {record.kernel.run}:
        found.append(f"the branches {branches.low} and {branches.correction}, where they are not in the kernel's file")
    approximate = getattr(record.draws, "approximate", "")
    if approximate.rpartition(":")[0]:
        found.append(f"the function {approximate} that makes approximate draws, which the raw hash covers")
    return found


def _undecided(choices: Mapping[int, Choice]) -> Iterable[str]:
    for level, choice in choices.items():
        if choice.verdict == "undecided":
            yield (
                f"Level {level} uses the reference: it is undecided whether low precision pays there"
                f"{_because(choice.reason)}. An audit with a larger sampling.most_paths may decide it."
            )


def _replaced(choices: Mapping[int, Choice]) -> Iterable[str]:
    for level, choice in choices.items():
        if choice.kept or choice.verdict == "undecided":
            continue
        if choice.reason == "not tried in the domain":
            why = "the scheme that pays there is not the one that the scenarios of the domain tried"
        elif choice.reason == "not judged":
            why = f"{choice.asked.narrow}, which the audit planned, is not among formats.narrow and was not judged"
        else:
            why = f"{choice.asked.narrow}, which the audit planned, does not pay for every quantity"
        yield f"Level {level} uses {choice.scheme}: {why}."


def _draws(record: AuditRecord, choices: Mapping[int, Choice]) -> Iterable[str]:
    """Say which approximate draws a level uses: a rule says no more than that they are approximate."""
    levels = [str(level) for level, one in choices.items() if record.arms[one.scheme.narrow].draws == "approximate"]
    draws = record.draws
    if not levels or draws is None or isinstance(draws, UnsetType):
        return
    sizes = (("cells", draws.cells), ("intervals", draws.intervals), ("degree", draws.degree))
    made = ", ".join([draws.approximate, *(f"{name} = {size}" for name, size in sizes if size is not None)])
    yield f"Approximate draws, on level {', '.join(levels)}, are those of the audit alone: {made}."


def _branches(record: AuditRecord, choices: Mapping[int, Choice]) -> Iterable[str]:
    """Say where the branches of a split that is used are not the same bits, although it stays admissible."""
    mismatches = [] if record.branches is None else record.branches.mismatches
    within = {(one.level, one.arm) for one in mismatches if one.splits == "within budget"}
    used = {(level, one.scheme.narrow) for level, one in choices.items() if one.scheme.wide is not None}
    levels = [str(level) for level, _ in sorted(within & used)]
    if levels:
        yield (
            f"The two branches of the split on level {', '.join(levels)} are not the same bits: the mean shifts by "
            "what they differ by, which is within its share of the target."
        )


def _because(reason: str | None) -> str:
    return f", because {_WHY[reason]}" if reason in _WHY else ""


def _bounded(record: AuditRecord) -> Iterable[str]:
    levels = [str(one.level) for one in record.verdict.plan.levels if one.bounded]
    if levels:
        yield (
            f"Too few paths with a correction were seen on level {', '.join(levels)}: the paths there follow from an "
            "upper bound of its variance."
        )


def _left_over(record: AuditRecord) -> Iterable[str]:
    """Say that the target does not count what the finest level leaves of the discretisation error."""
    for name, quantity in record.quantities.items():
        weak, rmse = quantity.allocation.weak_error, quantity.allocation.rmse
        if weak is None and len(quantity.levels) > 1:
            yield f"{name}: how far the finest level is from the limit of small steps is not known."
        elif weak is not None and rmse is not None and weak > rmse:
            yield (
                f"{name}: the finest level leaves a discretisation error of about {weak:.2g}, more than the target of "
                f"{rmse:g}, which does not count it."
            )


def _false_formats(record: AuditRecord) -> Iterable[str]:
    canary = [] if isinstance(record.canary, UnsetType) else record.canary
    for arm, finding in dict.fromkeys((one.arm, one.finding) for one in canary if one.finding in _UNCLAIMED):
        yield f"In {arm} the kernel {_UNCLAIMED[finding]}: what is said of that format is said of what was run."


def _texts(value: object) -> list[str]:
    return [one for one in value if isinstance(one, str)] if isinstance(value, list) else []
