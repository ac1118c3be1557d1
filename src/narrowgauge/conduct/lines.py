"""Which lines cost the accuracy of a format: their shares on one level, and which of them are worth a wider format."""

from __future__ import annotations

import linecache
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.conduct.branches import broken_splits
from narrowgauge.conduct.entries import finite
from narrowgauge.conduct.lineroles import Seen, lasting, roles
from narrowgauge.conduct.whatifs import what_ifs
from narrowgauge.conduct.widening import Candidates, searched
from narrowgauge.dispatch.byline import CONSTANTS, DRAWS, STEP, Item, Widths
from narrowgauge.dispatch.placed import Operation
from narrowgauge.dispatch.setting import Place
from narrowgauge.draws.streams import GRAIN
from narrowgauge.errors import DispatchError, KernelError, WorkerError, said
from narrowgauge.judge.intervals import Interval
from narrowgauge.judge.lines import Share, Shares, leading, shares_of
from narrowgauge.kernel.arms import wider
from narrowgauge.kernel.auditfile import AuditFile, with_draws
from narrowgauge.kernel.linestable import LinesTable
from narrowgauge.measure.engines import Engine
from narrowgauge.measure.linearms import Errors, LineRunner
from narrowgauge.measure.tally import Raised
from narrowgauge.measure.task import Bench, pinned
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.lines import (
    FormatLines,
    LineEntry,
    LinesEntry,
    PartShare,
    QuantityLines,
    ShareEntry,
    SourceLine,
    SumEntry,
)

__all__ = ["LineStudy", "line_study", "studied"]

_FEW = 32  # paths of the runs that are only looked at
_WORTH_WIDENING = 0.02  # a part that saves less of the variance is no candidate
_ALL = "all"
_NONE_ENDS = "every narrow format pays to the end of the ladder, and lines.formats names none"
_BESIDE = 2  # source lines kept on either side of a line that was studied
_FARTHEST = 12  # lines between two that were studied, up to which all of them are kept


@dataclass(frozen=True, slots=True, kw_only=True)
class LineStudy:
    """What to study: by format the finest level on which it pays; draws a step, and whether levels are coupled.

    `shifts` has by how much the exponents of a format would have to lie higher, `broken`, by level, the formats of
    which no split is admissible. A task for a bench, of plain data.
    """

    finest: Mapping[str, int | None]
    factors: int
    coupled: bool
    shifts: Mapping[str, int] = field(default_factory=dict)
    broken: Mapping[int, frozenset[str]] = field(default_factory=dict)

    def __call__(self, bench: Bench) -> LinesEntry:
        """Run the study; raises what running the kernel raises."""
        file = bench.file
        if file.kernel.takes == "rng":
            file = with_draws(file, self.factors, "sum" if self.coupled else "none")
        with pinned():
            studies = {
                form: _Study(file, bench, form, level, shift=self.shifts.get(form, 0), broken=self.broken)
                for form, level in self.finest.items()
            }
            formats = {form: study.entry() for form, study in studies.items()}
        source = _source(file, [study.places for study in studies.values()])
        return LinesEntry(formats=formats, source=source, reason=None)


def line_study(file: AuditFile, record: AuditRecord) -> LineStudy | None:
    """Return the study that an audit asks for by [lines], of the formats it names or that stop paying; else None."""
    if file.lines is None:
        return None
    levels = {arm: one.level for arm, one in record.verdict.finest_paying_level.items()}
    named = file.lines.formats or [arm for arm in file.formats.narrow if _stops(levels[arm], file.ladder.finest)]
    chosen = {arm: levels[arm] for arm in named}
    watched = None if record.range is None else record.range.watched
    shifts = {} if watched is None else {arm: one.exponent for arm, one in watched.shifts.items() if arm in chosen}
    return LineStudy(
        finest=chosen,
        factors=file.kernel.factors,
        coupled=file.kernel.coupling == "sum",
        shifts=shifts,
        broken={level: found for level in file.ladder.levels if (found := broken_splits(record.branches, level))},
    )


def studied(study: LineStudy | None, engine: Engine) -> LinesEntry | None:
    """Run a study on an engine; what stops it is its result: a measured audit is not lost for it."""
    if study is None:
        return None
    if not study.finest:
        return LinesEntry(formats={}, source=[], reason=_NONE_ENDS)
    try:
        return engine.call(study, "the study of the lines")
    except (DispatchError, KernelError, WorkerError) as problem:
        return LinesEntry(formats={}, source=[], reason=said(problem))


def _stops(level: int | None, finest: int) -> bool:
    return level is None or level < finest


class _Study:
    """The study of one format."""

    def __init__(
        self,
        file: AuditFile,
        bench: Bench,
        form: str,
        pays_to: int | None,
        *,
        shift: int,
        broken: Mapping[int, frozenset[str]],
    ) -> None:
        assert file.lines is not None  # or there is no study
        table: LinesTable = file.lines
        self._file, self._table, self._form, self._pays_to = file, table, FORMATS[form], pays_to
        self._finest, self._shift, self._broken = file.ladder.finest, shift, broken
        first_refused = 0 if pays_to is None else min(pays_to + 1, self._finest)
        self.level = first_refused if table.level is None else table.level
        self._wide = table.wide or _next_wider(file, form)
        self._runner = LineRunner(file, bench.kernel, form, beside=bench.runner)
        # A kernel that is run path by path takes as long for one run as others for all.
        few = self._runner.singly and "lines.paths" in file.assumed
        self._paths = GRAIN if few else table.paths
        self.places: list[Place] = []
        self._items: list[Item] = []
        self._sums: dict[Operation, float] = {}
        self._entries: list[LineEntry] = []
        self._look()

    def entry(self) -> FormatLines:
        """Return the shares of every part, and what widening the best of them buys."""
        found = self._errors()
        if isinstance(found, Raised):
            return self._made({}, 0, reason=f"a run raised {found.kind}: {found.message}")
        errors, paths = found
        alpha = 1 - self._file.sampling.confidence
        quantities, judged = {}, []
        for name in errors[_ALL]:
            error = self._shares(errors, name, "error", alpha)
            correction = self._shares(errors, name, "correction", alpha)
            assert error is not None  # there is one of every quantity
            judged.append(correction or error)
            quantities[name] = self._quantity(errors[_ALL][name], error, correction)
        if not self._table.search:
            return self._made(quantities, paths, reason="no search was asked for")
        if self._wide is None:
            return self._made(quantities, paths, reason="formats.wide has no format that is wider")
        return self._made(quantities, paths, reason=None, judged=judged)

    def _look(self) -> None:
        """Find the lines, their roles and operations, and the constants that do not depend on the step size."""
        other = 0 if self.level else min(1, self._finest)
        looked = {level: self._seen(level) for level in sorted({self.level, other})}
        seen = {level: one for level, (one, _) in looked.items()}
        few, many = seen[min(seen)], seen[max(seen)]
        if len(seen) > 1:
            self._runner.lasting = lasting([few, many])
        known = roles(few, many)
        values = {place: count for place, count in seen[self.level].values.items() if count}
        self.places = sorted(values)
        self._items = [*self.places, DRAWS, *([STEP] if len(seen) > 1 else []), CONSTANTS]
        drawn = self._file.ladder.steps(self.level) * self._file.kernel.factors * looked[self.level][1]
        whole = sum(values.values()) + drawn
        # With one step nothing is carried: the other run says which additions are to the state.
        self._sums = {one: count / sum(many.values.values()) for one, count in many.sums.items()}
        for item in self._items:
            if isinstance(item, Place):
                file, role = self._file.shown(item.file), known.get(item)
                entry = LineEntry(kind="line", file=file, line=item.line, role=role, operations=values[item] / whole)
            else:
                share = drawn / whole if item == DRAWS else 0.0
                entry = LineEntry(kind=item, file=None, line=None, role=None, operations=share)
            self._entries.append(entry)

    def _seen(self, level: int) -> tuple[Seen, int]:
        """Return what a run of a few paths of a level shows, and their number: a block's where a few do not do."""
        for paths in (_FEW, GRAIN):
            one = Seen()
            try:
                self._runner.observed(level, paths, one)
                break
            except KernelError:  # perhaps a kernel that works on groups of paths
                if paths == GRAIN or self._runner.singly:
                    raise
        return one, paths

    def _errors(self) -> tuple[dict[str, dict[str, Errors]], int] | Raised:
        """Run every part alone, all but every part, and all; return the errors by run and quantity, and the paths."""
        runs = {_ALL: Widths(rest=self._form)}
        for place, item in enumerate(self._items):
            runs[f"alone {place}"] = Widths(rest=None, named={item: self._form})
            runs[f"saved {place}"] = Widths(rest=self._form, named={item: None})
        total: dict[str, dict[str, Errors]] = {}
        paths = block = 0
        while paths < self._paths:
            found = self._runner.errors(self.level, block, runs)
            if isinstance(found, Raised):
                return found
            for run, by_name in found.items():
                known = total.setdefault(run, {})
                for name, one in by_name.items():
                    known[name] = known[name] + one if name in known else one
            paths += self._runner.paths(self.level)
            block += 1
        self._runner.forget(list(runs))
        return total, paths

    def _shares(self, errors: Mapping[str, Mapping[str, Errors]], name: str, which: str, alpha: float) -> Shares | None:
        whole = getattr(errors[_ALL][name], which)
        if whole is None:
            return None
        alone, saved = (
            {str(place): getattr(errors[f"{kind} {place}"][name], which) for place in range(len(self._items))}
            for kind in ("alone", "saved")
        )
        return shares_of(whole, alone, saved, alpha)

    def _quantity(self, whole: Errors, error: Shares, correction: Shares | None) -> QuantityLines:
        parts = []
        for place in range(len(self._items)):
            own = error.parts.get(str(place))
            other = None if correction is None else correction.parts.get(str(place))
            parts.append(
                PartShare(
                    part=place,
                    error=_share_entry(own),
                    correction=None if correction is None else _share_entry(other),
                )
            )
        return QuantityLines(
            error=_sum_entry(error, whole.error.moments.variance),
            correction=None
            if correction is None or whole.correction is None
            else _sum_entry(correction, whole.correction.moments.variance),
            parts=parts,
        )

    def _made(
        self,
        quantities: dict[str, QuantityLines],
        paths: int,
        *,
        reason: str | None,
        judged: Sequence[Shares] | None = None,
    ) -> FormatLines:
        plain, widenings = None, None
        if judged is not None and self._wide is not None:
            # Constants follow their line, and the step size is one of them: what can be widened is lines and draws.
            places = [int(name) for name in leading(judged, _WORTH_WIDENING)]
            places = [place for place in places if self._entries[place].kind in ("line", "draws")]
            candidates = Candidates(
                form=self._form,
                wide=FORMATS[self._wide],
                items={place: self._items[place] for place in places},
                operations={place: self._entries[place].operations for place in places},
                broken=self._broken,
            )
            plain, widenings = searched(self._file, self._runner, candidates, self.level, self._paths)
        tried = None
        if self._table.what_ifs:
            wide = None if self._wide is None else FORMATS[self._wide]
            tried = what_ifs(
                self._file, self._runner, self._form, wide, self._sums, broken=self._broken, shift=self._shift
            )
        return FormatLines(
            level=self.level,
            steps=self._file.ladder.steps(self.level),
            paths=paths,
            wide=self._wide,
            parts=self._entries,
            quantities=quantities,
            plain=plain,
            widenings=widenings,
            what_ifs=tried,
            reason=reason,
        )


def _next_wider(file: AuditFile, form: str) -> str | None:
    found = [name for name in file.formats.wide if wider(name, form)]
    return min(found, key=lambda name: FORMATS[name].precision, default=None)


def _share_entry(share: Share | None) -> ShareEntry:
    if share is None:
        return ShareEntry(**dict.fromkeys(ShareEntry.__struct_fields__))
    figures: dict[str, float | None] = {}
    for name, one in (("alone", share.alone), ("saved", share.saved), ("share", share.mean)):
        figures |= _figures(name, one)
    return ShareEntry(**figures)


def _figures(name: str, one: Interval) -> dict[str, float | None]:
    known = math.isfinite(one.estimate)
    return {
        name: finite(one.estimate) if known else None,
        f"{name}_low": finite(one.low) if known else None,
        f"{name}_high": finite(one.high) if known else None,
    }


def _sum_entry(shares: Shares, variance: float) -> SumEntry:
    total = None
    if shares.alone is not None and shares.saved is not None and shares.mean is not None:
        total = _share_entry(Share(alone=shares.alone, saved=shares.saved, mean=shares.mean))
    return SumEntry(variance=finite(variance), total=total, reason=shares.reason)


def _source(file: AuditFile, studied: Iterable[Sequence[Place]]) -> list[SourceLine]:
    """Return the source lines that were studied, with those between them and a few on either side."""
    by_file: dict[str, set[int]] = {}
    for places in studied:
        for place in places:
            by_file.setdefault(place.file, set()).add(place.line)
    found = []
    for name in sorted(by_file):
        texts = linecache.getlines(name)
        numbers = sorted(by_file[name])
        shown = set(numbers)
        for number, following in zip(numbers, [*numbers[1:], numbers[-1]], strict=True):
            shown |= set(range(number - _BESIDE, number + _BESIDE + 1))
            if following - number <= _FARTHEST:
                shown |= set(range(number, following))
        found += [
            SourceLine(file=file.shown(name), line=number, text=texts[number - 1].rstrip())
            for number in sorted(shown)
            if 0 < number <= len(texts)
        ]
    return found
