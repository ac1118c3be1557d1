"""Which scheme a policy uses on each level: only what is known to pay for every quantity, else the reference."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from narrowgauge.judge.gain import LevelCosts, Scheme
from narrowgauge.record.audit import AuditRecord, LevelEntry
from narrowgauge.record.plan import SchemeEntry

__all__ = ["REFERENCE", "Choice", "chosen", "scheme_of", "spread"]

REFERENCE = Scheme(kind="alone", narrow="float64")
_FEW = 20  # paths with a correction, below which the record's variance of it is no plan's


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """The scheme of one level, and why: `reason` is that of the arm that would have been used, or None."""

    scheme: Scheme
    verdict: Literal["pays", "does not pay", "undecided"]
    reason: str | None
    asked: Scheme

    @property
    def kept(self) -> bool:
        """Whether it is the scheme that the audit planned."""
        return self.scheme == self.asked


def chosen(record: AuditRecord, level: int, costs: LevelCosts) -> Choice:
    """Return the scheme of one level.

    The audit's scheme for all quantities is used where its narrow arm pays for each of them. Where that arm is
    undecided, the reference is. Where it does not pay, or was not judged, the cheapest of the schemes whose arms do pay
    takes its place, and the reference where there is none.
    """
    entry = record.verdict.schemes[level]
    if entry is None:
        raise KeyError(f"a scheme on level {level}")
    asked = scheme_of(entry)
    levels = {name: quantity.levels[level] for name, quantity in record.quantities.items()}
    if asked == REFERENCE:
        return _reference(asked, levels, {})
    verdicts = _verdicts(levels, asked.narrow)
    if set(verdicts.values()) == {"pays"}:
        return Choice(scheme=asked, verdict="pays", reason=None, asked=asked)
    if "undecided" not in verdicts.values():
        scheme = _cheapest(_paying(levels), levels, costs)
        if scheme is not None:
            return Choice(scheme=scheme, verdict="pays", reason=None, asked=asked)
    return _reference(asked, levels, verdicts)


def scheme_of(entry: SchemeEntry) -> Scheme:
    """Return a scheme that was written down."""
    return Scheme(kind=entry.kind, narrow=entry.narrow, wide=entry.wide)


def spread(level: LevelEntry, scheme: Scheme) -> list[float] | None:
    """Return the variances of a scheme's branches, the low one first; None where one of them is not known."""
    found = [level.arms[scheme.narrow].level_variance]
    if scheme.wide is not None:
        correction = level.corrections[f"{scheme.narrow}:{scheme.wide}"]
        few = correction.counted and correction.events < _FEW
        found.append(None if few else correction.variance)
    known = [one for one in found if one is not None]
    return known if len(known) == len(found) else None


def _verdicts(levels: Mapping[str, LevelEntry], arm: str) -> dict[str, str | None]:
    return {name: level.arms[arm].verdict for name, level in levels.items()}


def _reference(asked: Scheme, levels: Mapping[str, LevelEntry], verdicts: Mapping[str, str | None]) -> Choice:
    """Return the reference, with the reason of the arm that is undecided, else of the first that does not pay."""
    first = next(iter(levels.values()))
    arms = [asked.narrow] if verdicts else list(first.arms)
    judged = [level.arms[arm] for arm in arms for level in levels.values()]
    for verdict in ("undecided", "does not pay"):
        reasons = [one.reason for one in judged if one.verdict == verdict]
        if reasons:
            return Choice(
                scheme=REFERENCE,
                verdict="undecided" if verdict == "undecided" else "does not pay",
                reason=reasons[0],
                asked=asked,
            )
    return Choice(scheme=REFERENCE, verdict="does not pay", reason="not judged", asked=asked)


def _paying(levels: Mapping[str, LevelEntry]) -> list[Scheme]:
    """Return the schemes of the arms that pay for every quantity; each was found admissible for all of them."""
    found = []
    for arm in next(iter(levels.values())).arms:
        if set(_verdicts(levels, arm).values()) == {"pays"}:
            entries = [level.arms[arm].scheme for level in levels.values()]
            found += [scheme_of(entry) for entry in entries if entry is not None]
    return list(dict.fromkeys(found))


def _cheapest(schemes: list[Scheme], levels: Mapping[str, LevelEntry], costs: LevelCosts) -> Scheme | None:
    """Return the scheme with the smallest worst ratio of its cost to a quantity's least; None where that is float64."""
    sizes: dict[Scheme, list[float]] = {}
    for scheme in [*schemes, REFERENCE]:
        found = [_size(level, scheme, costs) for level in levels.values()]
        known = [one for one in found if one is not None]
        if len(known) == len(found):
            sizes[scheme] = known
    least = [min(column) for column in zip(*sizes.values(), strict=True)]
    worst = {
        scheme: max(one / small if small > 0 else math.inf for one, small in zip(found, least, strict=True))
        for scheme, found in sizes.items()
    }
    best = min(worst, key=worst.__getitem__, default=None)
    return None if best == REFERENCE else best


def _size(level: LevelEntry, scheme: Scheme, costs: LevelCosts) -> float | None:
    """Return S of a scheme on one level, the sum of sqrt(V C) over its branches."""
    variances = spread(level, scheme)
    if variances is None:
        return None
    prices = [costs.path(scheme.narrow)]
    if scheme.wide is not None:
        prices.append(costs.correction(scheme.narrow, scheme.wide))
    return sum(math.sqrt(variance * price) for variance, price in zip(variances, prices, strict=True))
