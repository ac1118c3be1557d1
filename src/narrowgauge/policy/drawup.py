"""From the record of an audit to a policy: pure, and only where the record supports one."""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Literal, TypeVar

import msgspec
from scipy import stats

from narrowgauge import __version__
from narrowgauge.errors import PolicyError
from narrowgauge.judge.gain import LevelCosts
from narrowgauge.kernel.audittables import (
    CostTable,
    FormatsTable,
    KernelTable,
    LadderTable,
    SamplingTable,
    Table,
    TargetTable,
)
from narrowgauge.measure.moments import BATCHES
from narrowgauge.policy.advice import advised
from narrowgauge.policy.cautions import cautions, unseen
from narrowgauge.policy.choice import REFERENCE, Choice, chosen
from narrowgauge.policy.plan import replanned
from narrowgauge.policy.region import claimed_box, held_in_box, single_point
from narrowgauge.record import audit as audited
from narrowgauge.record import policy as made
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.auditreading import read_audit
from narrowgauge.record.canonical import write_atomically
from narrowgauge.record.policy import PolicyDocument, policy_text
from narrowgauge.record.range import ShareEntry

__all__ = ["draw_up", "read_audit", "write_policy"]

_Table = TypeVar("_Table", bound=Table)
_Part = TypeVar("_Part", bound=msgspec.Struct)


def draw_up(record: AuditRecord, digest: str, *, source: str = "audit") -> PolicyDocument:
    """Return the policy that an audit supports; `digest` is that of its file.

    Raises PolicyError, with what messages call the audit and the reason, where it supports none: no target, a reference
    that is not finite, levels that do not telescope or are not coupled, an audit that does not say what its kernel was,
    scenarios of which not even the audited point passes.
    """
    reason = _unsupported(record)
    if reason is not None:
        raise PolicyError(f"{source}: no policy: {reason}")
    try:
        return _Draft(record, digest).document()
    except PolicyError as problem:
        raise PolicyError(f"{source}: no policy: {problem}") from None
    except (KeyError, IndexError) as problem:
        what = problem.args[0] if isinstance(problem, KeyError) else "a level"
        raise PolicyError(f"{source}: the record is not whole: it lacks {what}") from None
    except msgspec.ValidationError as problem:
        raise PolicyError(f"{source}: the record cannot be used: {problem}") from None


def write_policy(document: PolicyDocument, path: Path) -> None:
    """Write a policy so that the file holds either its old content or all of the new; PolicyError where it cannot."""
    try:
        write_atomically(path, policy_text(document))
    except OSError as problem:
        raise PolicyError(f"{path}: cannot be written: {problem.strerror}") from None


def _unsupported(record: AuditRecord) -> str | None:
    """Return why an audit supports no policy, or None."""
    if record.asked.get("target") is None:
        return (
            "the audit file has no [target], so that nobody knows how much rounding may shift the mean and how many "
            "paths are needed; accepted: an audit with [target] rmse"
        )
    if not record.verdict.sound:
        return (
            "the levels do not fit together: in the reference the coarse and the fine paths of a level differ in their "
            "mean, so that the kernel or the coupling of its draws is wrong"
        )
    for name, quantity in record.quantities.items():
        for level in quantity.levels:
            if level.reference.nonfinite or level.reference.level_variance is None:
                dropped = f"{level.reference.nonfinite} of {level.paths} paths"
                return f"the reference is not finite: {name}, level {level.level}, {dropped}"
    if record.verdict.plan.reason is not None or None in record.verdict.schemes:
        return f"no paths are planned: {record.verdict.plan.reason or 'a level without a finite scheme'}"
    if isinstance(record.source, msgspec.UnsetType):
        return "the audit does not say what its kernel was; accepted: one made anew"
    return None


class _Draft:
    """A policy in the making."""

    def __init__(self, record: AuditRecord, digest: str) -> None:
        self._record, self._digest = record, digest
        self._kernel, self._ladder = self._asked(KernelTable), self._asked(LadderTable)
        self._target, self._sampling = self._asked(TargetTable), self._asked(SamplingTable)
        self._formats, self._costs = self._asked(FormatsTable), self._asked(CostTable)
        if not isinstance(record.costs, msgspec.UnsetType):
            steps = {name: one.cost for name, one in record.costs.items()}
            self._costs = msgspec.structs.replace(self._costs, **steps)
        self._level_costs = {level: self._priced(level) for level in self._ladder.levels}
        choices = {level: chosen(record, level, self._level_costs[level]) for level in self._ladder.levels}
        self._choices = choices if record.domain is None else held_in_box(record.domain, choices)
        levels = record.range.watched.levels if record.range is not None and record.range.watched is not None else []
        self._watched = {(level.level, arm): entry for level in levels for arm, entry in level.arms.items()}

    def document(self) -> PolicyDocument:
        """Return the policy."""
        record, target = self._record, self._target
        plans, plan = self._planned()
        parameters = _mapping(record.asked["parameters"])
        domain = single_point(parameters) if record.domain is None else claimed_box(record.domain, parameters)
        rmse = {name: one.allocation.rmse or math.nan for name, one in record.quantities.items()}
        laws = {
            name: {arm: _laws(one) for arm, one in quantity.accumulation.items()}
            for name, quantity in record.quantities.items()
        }
        return _plainly(
            PolicyDocument,
            schema=made.SCHEMA,
            written_by=f"narrowgauge {__version__}",
            kernel=self._known(),
            ladder=_copied(made.LadderPart, self._ladder),
            target=made.TargetPart(
                rmse=rmse,
                bias_share=target.bias_share,
                bias_budget={name: target.bias_share * one / record.rules.levels_sharing for name, one in rmse.items()},
                worthwhile=target.worthwhile,
            ),
            domain=domain,
            today=self._formats.today,
            accumulator="float64",
            levels=[self._level(level, *plans[level]) for level in self._ladder.levels],
            plan=plan,
            finest_paying_level=record.verdict.finest_paying_level,
            laws=laws,
            cost=self._cost(),
            evidence=self._evidence(),
            assumed={key: _looked_up(record.asked, key) for key in _texts(record.asked["assumed"])},
            cautions=cautions(record, self._choices, domain),
            **({"advice": advice} if (advice := advised(record)) else {}),
        )

    def _asked(self, kind: type[_Table]) -> _Table:
        table = self._record.asked[kind.table]
        names = kind.__struct_fields__
        given = {key: value for key, value in table.items() if key in names} if isinstance(table, dict) else table
        return msgspec.convert(given, kind)

    def _priced(self, level: int) -> LevelCosts:
        coarse = self._ladder.steps(level - 1) if level > 0 and self._kernel.coupling == "sum" else 0
        steps = self._ladder.steps(level)
        return LevelCosts(steps=steps + coarse, draws=steps * self._kernel.factors, table=self._costs)

    def _planned(self) -> tuple[dict[int, tuple[int, int | None]], made.PlanPart]:
        """Return the paths of both branches by level, and what they cost."""
        plan = self._record.verdict.plan
        if all(choice.kept for choice in self._choices.values()):
            paths = {one.level: (one.paths, one.correction_paths) for one in plan.levels}
            cost, times = plan.cost or 0.0, 1.0
        else:
            schemes = {level: choice.scheme for level, choice in self._choices.items()}
            anew = replanned(self._record, schemes, self._level_costs, self._target.bias_share)
            paths = {
                one.level: (one.low.paths, None if one.correction is None else one.correction.paths)
                for one in anew.levels
            }
            cost, times = anew.cost, (plan.cost or 0.0) / anew.cost if anew.cost else 1.0
        part = made.PlanPart(
            cost=cost,
            saving=_times(plan.saving, times),
            saving_over_reference=_times(plan.saving_over_reference, times),
            replanned=not all(choice.kept for choice in self._choices.values()),
        )
        return paths, part

    def _level(self, level: int, paths: int, correction_paths: int | None) -> made.LevelPart:
        choice = self._choices[level]
        arm, entries = choice.scheme.narrow, {n: q.levels[level] for n, q in self._record.quantities.items()}
        first = next(iter(entries.values()))
        arithmetic = self._record.arms[arm]
        worst, figures = self._worst(choice, entries)
        pair = None if choice.scheme.wide is None or worst is None else f"{arm}:{choice.scheme.wide}"
        return _plainly(
            made.LevelPart,
            level=level,
            steps=first.steps,
            h=first.h,
            scheme=choice.scheme.kind,
            narrow=arithmetic.format,
            wide=choice.scheme.wide,
            draws=arithmetic.draws,
            rounding=arithmetic.rounding,
            paths=paths,
            correction_paths=correction_paths,
            verdict=choice.verdict,
            reason=choice.reason,
            decided_by=worst,
            **figures,
            breakeven_cost_ratio=None if pair is None else entries[worst or ""].corrections[pair].breakeven_cost_ratio,
            measured={name: self._measured(entry) for name, entry in entries.items()},
        )

    def _worst(self, choice: Choice, entries: Mapping[str, audited.LevelEntry]) -> tuple[str | None, dict[str, Any]]:
        """Return the quantity with the least lower bound of the edge among those that this scheme was judged for."""
        names = [f"{figure}{bound}" for figure in ("gain", "edge") for bound in ("", "_low", "_high")]
        found = {
            name: arm
            for name, entry in entries.items()
            if (arm := entry.arms[choice.scheme.narrow]).scheme is not None
            and (arm.scheme.kind, arm.scheme.wide) == (choice.scheme.kind, choice.scheme.wide)
        }
        if not found:
            same = choice.scheme == REFERENCE and self._formats.today == REFERENCE.narrow
            return None, {name: 1.0 if same and name.startswith("gain") else None for name in names}
        worst = min(found, key=lambda name: _limit(found[name].edge_low))
        return worst, {name: getattr(found[worst], name) for name in names}

    def _measured(self, entry: audited.LevelEntry) -> made.MeasuredPart:
        figures = _copied(made.MeasuredPart, entry.reference, paths=entry.paths, arms={})
        arms = {name: self._arm(entry, name) for name in entry.arms if name != REFERENCE.narrow}
        return msgspec.structs.replace(figures, arms=arms)

    def _arm(self, entry: audited.LevelEntry, name: str) -> made.ArmPart:
        arm = entry.arms[name]
        reach = self._reach(entry.blocks)
        mean, mean_se = arm.error_mean, arm.error_mean_se
        variance, variance_se = arm.error_variance, arm.error_variance_se
        mean_bounds: tuple[float | None, float | None] = None, None
        bounds: tuple[float | None, float | None] = None, None
        if mean is not None and mean_se is not None:
            mean_bounds = mean - reach * mean_se, mean + reach * mean_se
        if variance is not None and variance_se is not None:  # of its logarithm, which is nearer to normal
            times = math.exp(min(reach * variance_se / variance, 700.0)) if variance > 0 else 1.0
            bounds = variance / times, variance * times
        correction = entry.corrections.get(f"{name}:{REFERENCE.narrow}")
        watched = self._watched.get((entry.level, name))
        return _copied(
            made.ArmPart,
            arm,
            error_mean_low=mean_bounds[0],
            error_mean_high=mean_bounds[1],
            error_variance_low=bounds[0],
            error_variance_high=None if bounds[1] is None or math.isinf(bounds[1]) else bounds[1],
            effective_size=None if correction is None else correction.effective_size,
            lost_additions=msgspec.UNSET if watched is None else _share(watched.lost),
            subnormals=msgspec.UNSET if watched is None else _share(watched.below),
        )

    def _reach(self, blocks: int) -> float:
        """Return how many standard errors an interval reaches, at the confidence of one look."""
        looks = max(1, (self._sampling.most_paths // self._sampling.paths).bit_length())
        return _quantile(1 - (1 - self._sampling.confidence) / looks / 2, blocks * BATCHES - 1)

    def _known(self) -> made.KernelPart:
        source, provenance = self._record.source, self._record.provenance
        assert not isinstance(source, msgspec.UnsetType)  # refused before
        packages = {**_mapping(provenance.get("packages", {})), **_mapping(provenance.get("imported", {}))}
        return _plainly(
            made.KernelPart,
            run=self._record.kernel.run,
            fingerprint=source.fingerprint,
            covers=source.covers,
            raw=self._record.kernel.fingerprint,
            modules=source.modules,
            imports=source.imports,
            packages=dict(sorted(packages.items())),
            unseen=unseen(self._record, source, self._kernel.shared),
        )

    def _cost(self) -> made.CostPart:
        assumed = "cost.float64" in _texts(self._record.asked["assumed"])
        measured = not isinstance(self._record.costs, msgspec.UnsetType)
        source: Literal["given", "assumed", "measured"] = "measured" if measured else "assumed" if assumed else "given"
        used = dict.fromkeys(one.format for one in self._record.arms.values())
        return made.CostPart(
            source=source,
            steps={name: self._costs.step(name) for name in used},
            draws=self._costs.draws,
            approximate_draws=self._costs.approximate_draws,
            path=self._costs.path,
        )

    def _evidence(self) -> made.EvidencePart:
        provenance = self._record.provenance
        first = next(iter(self._record.quantities.values()))
        reach = self._record.reach
        return _plainly(
            made.EvidencePart,
            audit=self._digest,
            seed=self._sampling.seed,
            confidence=self._sampling.confidence,
            paths=[level.paths for level in first.levels],
            versions={**_mapping(provenance.get("packages", {})), "python": str(provenance.get("python", ""))},
            machine=made.MachinePart(
                system=str(provenance.get("system", "")),
                machine=str(provenance.get("machine", "")),
                vector_features=_texts(provenance.get("vector_features", [])),
            ),
            finished=provenance.get("finished"),
            allowed_escapes=[] if reach is None else reach.allowed_escapes,
        )


def _laws(entry: audited.AccumulationEntry) -> made.LawsPart:
    return made.LawsPart(error=_copied(made.LawPart, entry.error), correction=_copied(made.LawPart, entry.correction))


def _copied(kind: type[_Part], entry: msgspec.Struct, **more: Any) -> _Part:
    """Return a part with the fields that an entry of the record has under the same names, and `more`."""
    shared = {name: getattr(entry, name) for name in kind.__struct_fields__ if name in entry.__struct_fields__}
    return kind(**{**shared, **more})


def _plainly(kind: type[_Part], **fields: Any) -> _Part:
    """Return a part of which every field was checked, as that of a policy that is read is; msgspec.ValidationError."""
    return msgspec.convert(msgspec.to_builtins(fields), kind)


def _limit(bound: float | None) -> float:
    """Return a lower bound; where there is none nothing is known."""
    return -math.inf if bound is None else bound


def _times(value: float | None, times: float) -> float | None:
    return None if value is None else value * times


@functools.cache
def _quantile(share: float, dof: int) -> float:
    return float(stats.t.ppf(share, dof))


def _looked_up(asked: Mapping[str, object], key: str) -> object:
    """Return the value that stands in the audit file, defaults filled in, under a dotted key."""
    table, _, name = key.partition(".")
    return _mapping(asked.get(table)).get(name)


def _mapping(value: object) -> dict[str, Any]:
    return value if isinstance(value, dict) else {}


def _texts(value: object) -> list[str]:
    return [str(one) for one in value] if isinstance(value, list) else []


def _share(entry: ShareEntry) -> made.SharePart | msgspec.UnsetType:
    if entry.share is None or entry.share_low is None or entry.share_high is None:
        return msgspec.UNSET
    return made.SharePart(share=entry.share, low=entry.share_low, high=entry.share_high, operations=entry.of)
