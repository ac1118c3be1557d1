"""Which schemes a format has on a level, whether they are admissible, and whether the format pays.

A verdict is one of three; its truth table, with `low` the lower bound of the edge against every rival that may be
admissible and `high` the upper bound against the rivals that are:

| own schemes                          | low > 1 | high < worthwhile | verdict       |
|--------------------------------------|---------|-------------------|---------------|
| none admissible                      |         |                   | does not pay  |
| one known to be admissible           | yes     |                   | pays          |
| any not refused                      |         | yes               | does not pay  |
| else                                 |         |                   | undecided     |
"""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field
from typing import Literal

from narrowgauge.judge.gain import LevelCosts, LevelView, Scheme
from narrowgauge.judge.intervals import Interval
from narrowgauge.kernel.arms import Arm, wider
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.moments import Series
from narrowgauge.measure.tally import LevelTally

__all__ = [
    "BIAS_SHARE",
    "LEAST_EFFECTIVE_SIZE",
    "ArmJudgement",
    "LevelJudgement",
    "Reason",
    "Verdict",
    "budget_levels",
    "coupled",
    "judge_level",
    "level_costs",
    "rmse_of",
]

Verdict = Literal["pays", "does not pay", "undecided"]
Reason = Literal["edge", "bias", "nonfinite", "raised", "branches", "no_variance", "kurtosis", "budget"]
Standing = Literal["yes", "no", "unknown"]

LEAST_EFFECTIVE_SIZE = 50
BIAS_SHARE = 0.25  # the default of the audit file: what a target would allow rounding to shift


@dataclass(frozen=True, slots=True, kw_only=True)
class Admission:
    """Whether a scheme may be used on a level: for every quantity, with the reason where it may not or is not known."""

    standing: Standing
    reason: Reason | None
    paths_needed: int | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ArmJudgement:
    """What a narrow format is worth on one level for one quantity; figures are None where they do not exist."""

    scheme: Scheme | None
    gain: Interval | None
    edge: Interval | None
    bias: Interval | None
    verdict: Verdict
    reason: Reason | None
    paths_needed: int | None
    admitted_rmse: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelJudgement:
    """All judgements of one level: per quantity and narrow format, the best scheme per quantity, and one for all.

    `joint` is the scheme of a run that serves all quantities.
    """

    level: int
    arms: Mapping[str, Mapping[str, ArmJudgement]]
    best: Mapping[str, Scheme | None]
    joint: Scheme | None
    views: Mapping[str, LevelView] = field(repr=False)

    @property
    def settled(self) -> bool:
        """Whether no format is undecided for any quantity."""
        return all(arm.verdict != "undecided" for arms in self.arms.values() for arm in arms.values())


def judge_level(
    tally: LevelTally, file: AuditFile, alpha: float, broken: Collection[str] = frozenset()
) -> LevelJudgement:
    """Judge every narrow arm on one level at confidence 1 - alpha; no split of a `broken` format is admissible."""
    views = {name: _view(tally, file, name) for name in tally.quantities}
    court = _Court(tally=tally, file=file, alpha=alpha, views=views, broken=broken)
    arms = {quantity: {name: court.judge(quantity, name) for name in file.narrow} for quantity in views}
    best = {quantity: court.best(quantity) for quantity in views}
    return LevelJudgement(level=tally.level, arms=arms, best=best, joint=court.joint(best), views=views)


def coupled(file: AuditFile, level: int) -> bool:
    """Whether a level is a difference of a fine and a coarse path."""
    return level > 0 and file.kernel.coupling == "sum"


def level_costs(file: AuditFile, level: int) -> LevelCosts:
    """Return the costs of one level of an audit."""
    steps = file.ladder.steps(level)
    below = file.ladder.steps(level - 1) if coupled(file, level) else 0
    return LevelCosts(steps=steps + below, draws=steps * file.kernel.factors, table=file.costs)


def rmse_of(file: AuditFile, quantity: str) -> float | None:
    """Return the target root-mean-square error of a quantity, or None without a target."""
    if file.target is None:
        return None
    rmse = file.target.rmse
    return rmse.get(quantity) if isinstance(rmse, dict) else rmse


def _view(tally: LevelTally, file: AuditFile, quantity: str) -> LevelView:
    declared = None if file.target is None else file.target.largest_correction
    bound = declared.get(quantity) if isinstance(declared, dict) else declared
    return LevelView(tally.quantities[quantity], level_costs(file, tally.level), bound)


class _Court:
    """The judgement of one level; keeps what several formats ask for."""

    def __init__(
        self,
        *,
        tally: LevelTally,
        file: AuditFile,
        alpha: float,
        views: Mapping[str, LevelView],
        broken: Collection[str] = frozenset(),
    ) -> None:
        self._tally, self._file, self._alpha, self._views, self._broken = tally, file, alpha, views, broken
        self._admissions: dict[tuple[Scheme, bool], Admission] = {}

    def own(self, name: str) -> list[Scheme]:
        """Return the schemes whose narrow format is `name`."""
        formats, schemes = self._file.formats, []
        if "alone" in formats.schemes:
            schemes.append(Scheme(kind="alone", narrow=name))
        if "split" in formats.schemes:
            schemes += [Scheme(kind="split", narrow=name, wide=b) for b in formats.wide if wider(b, name)]
        return schemes

    def rivals(self, name: str) -> list[Scheme]:
        """Return what an arm competes with: the best that formats of more precision can do with exact draws.

        Approximate draws compete with exact ones in the same format too: they have to be worth their own error.
        """
        formats = self._file.formats
        found = [Scheme(kind="alone", narrow=REFERENCE)]
        if wider(formats.today, name):
            found.append(Scheme(kind="alone", narrow=formats.today))
        for wide in formats.wide:
            if wider(wide, name):
                found += self.own(wide)
        arm = Arm.named(name)
        if not arm.exact:
            found += self.own(arm.format)
        return list(dict.fromkeys(found))

    def admission(self, scheme: Scheme, *, rival: bool = False) -> Admission:
        """Return whether a scheme may be used on this level, for every quantity.

        As rivals the reference alone and today alone are taken as they are: nobody asked whether they are biased.
        """
        given = rival and scheme.wide is None and scheme.narrow in (REFERENCE, self._file.formats.today)
        key = (scheme, given)
        if key not in self._admissions:
            self._admissions[key] = self._finite(scheme) if given else self._admit(scheme)
        return self._admissions[key]

    def judge(self, quantity: str, name: str) -> ArmJudgement:
        """Return what a format is worth for one quantity."""
        own = self.own(name)
        admissions = {scheme: self.admission(scheme) for scheme in own}
        open_schemes = [scheme for scheme in own if admissions[scheme].standing != "no"]
        if not open_schemes:
            reasons: list[Reason] = [a.reason for a in admissions.values() if a.reason is not None] or ["edge"]
            # Branches that differ can be put right, so that they are named first.
            return self._refused(quantity, own, "branches" if "branches" in reasons else reasons[0])
        view = self._views[quantity]
        # A variance of 0, or one past float64, compares with nothing.
        if not all(0 < view.tally.differences[arm].moments.variance < math.inf for arm in (REFERENCE, name)):
            return self._unseen(quantity, own, name) or self._refused(quantity, own, "no_variance")
        rivals = [s for s in self.rivals(name) if self._rivals(view, s)]
        alpha = self._alpha / len(own)
        table = {s: {r: view.ratio(s, r, alpha) for r in rivals} for s in open_schemes}
        return self._decided(quantity, table)

    def best(self, quantity: str) -> Scheme | None:
        """Return the scheme with the smallest cost among all that are admissible, or None if none is finite."""
        view = self._views[quantity]
        allowed = [scheme for scheme in self._allowed() if self._varies(view, scheme)]
        return min(allowed, key=lambda s: float(view.logarithm(s)[0]), default=None)

    def joint(self, best: Mapping[str, Scheme | None]) -> Scheme | None:
        """Return the admissible scheme that is least bad for its worst quantity, or None if none is finite.

        Bad is S^2 over that of the quantity's own best, and a quantity that has none is passed over. For one quantity
        this is its best.
        """
        own = {quantity: scheme for quantity, scheme in best.items() if scheme is not None}
        if len(own) == 1:
            return next(iter(own.values()))

        def excess(scheme: Scheme) -> float:
            views = ((self._views[quantity], least) for quantity, least in own.items())
            return max(float(view.logarithm(scheme)[0] - view.logarithm(least)[0]) for view, least in views)

        allowed = [s for s in self._allowed() if all(self._varies(self._views[quantity], s) for quantity in own)]
        return min(allowed, key=excess, default=None) if own else None

    def _allowed(self) -> list[Scheme]:
        formats = self._file.formats
        schemes = [Scheme(kind="alone", narrow=REFERENCE), Scheme(kind="alone", narrow=formats.today)]
        for name in dict.fromkeys([*formats.wide, *self._file.narrow]):
            schemes += self.own(name)
        return [s for s in dict.fromkeys(schemes) if self.admission(s, rival=True).standing == "yes"]

    def _rivals(self, view: LevelView, scheme: Scheme) -> bool:
        return self.admission(scheme, rival=True).standing != "no" and self._varies(view, scheme)

    def _varies(self, view: LevelView, scheme: Scheme) -> bool:
        return math.isfinite(view.logarithm(scheme)[0])

    def _finite(self, scheme: Scheme) -> Admission:
        # Nothing non-finite and nothing raised in any arm of the scheme, for any quantity.
        if any(arm in self._tally.raised for arm in scheme.arms):
            return Admission(standing="no", reason="raised", paths_needed=None)
        for view in self._views.values():
            if any(view.tally.values[arm].nonfinite or view.tally.differences[arm].nonfinite for arm in scheme.arms):
                return Admission(standing="no", reason="nonfinite", paths_needed=None)
            if view.tally.differences[REFERENCE].moments.total < 2:
                return Admission(standing="no", reason="nonfinite", paths_needed=None)
        return Admission(standing="yes", reason=None, paths_needed=None)

    def _admit(self, scheme: Scheme) -> Admission:
        finite = self._finite(scheme)
        if finite.standing == "no":
            return finite
        # The two branches agree to the bit, or as far as the audit file asks.
        if scheme.kind == "split" and Arm.named(scheme.narrow).format in self._broken:
            return Admission(standing="no", reason="branches", paths_needed=None)
        # The bias of the widest arm lies inside the level's share of the target, for every quantity.
        found = [self._within_budget(quantity, scheme) for quantity in self._views]
        found += [self._known_tail(series) for view in self._views.values() for series in self._risks(view, scheme)]
        return min(found, key=lambda a: ("no", "unknown", "yes").index(a.standing))

    def _within_budget(self, quantity: str, scheme: Scheme) -> Admission:
        rmse = rmse_of(self._file, quantity)
        if rmse is None or self._file.target is None:
            return Admission(standing="yes", reason=None, paths_needed=None)
        share = self._file.target.bias_share * rmse / budget_levels(self._file)
        bias = self._views[quantity].bias(scheme.top, self._alpha)
        if -share <= bias.low and bias.high <= share:
            return Admission(standing="yes", reason=None, paths_needed=None)
        if bias.low > share or bias.high < -share:
            return Admission(standing="no", reason="bias", paths_needed=None)
        room = abs(share - abs(bias.estimate))
        times = math.inf if room == 0 else max(1.0, bias.half_width / room)
        needed = self._grown(times * times)
        return Admission(standing="unknown", reason="bias", paths_needed=needed)

    def _risks(self, view: LevelView, scheme: Scheme) -> list[Series]:
        """Return the series whose tails a scheme rests on: its correction and, where bias is judged, its top's."""
        found = [view.correction(scheme)]
        if self._file.target is not None and scheme.wide is not None and scheme.wide != REFERENCE:
            found.append(view.tally.corrections[scheme.wide, REFERENCE])
        return [series for series in found if series is not None]

    def _known_tail(self, risk: Series) -> Admission:
        # A correction carried by few paths: the sample does not know what it misses.
        if risk.counted or risk.effective_size >= LEAST_EFFECTIVE_SIZE:
            return Admission(standing="yes", reason=None, paths_needed=None)
        needed = self._grown(LEAST_EFFECTIVE_SIZE / max(risk.effective_size, 1.0))
        return Admission(standing="unknown", reason="kurtosis", paths_needed=needed)

    def _trusted(self, view: LevelView, scheme: Scheme) -> bool:
        risk = view.correction(scheme)
        return risk is None or self._known_tail(risk).standing == "yes"

    def _grown(self, factor: float) -> int | None:
        return math.ceil(self._tally.paths * factor) if math.isfinite(factor) and factor < 1e9 else None

    def _decided(self, quantity: str, table: Mapping[Scheme, Mapping[Scheme, Interval]]) -> ArmJudgement:
        known = [s for s in table if self.admission(s).standing == "yes"]
        sure_rivals = [r for r in next(iter(table.values())) if self.admission(r, rival=True).standing == "yes"]
        low = max((min(i.low for i in table[s].values()) for s in known), default=0.0)
        # An upper bound means nothing either where the sample does not know what it misses.
        trusted = all(self._trusted(self._views[quantity], s) for s in table)
        high = max(min(table[s][r].high for r in sure_rivals) for s in table)
        edges = {s: _worst(row) for s, row in table.items()}
        scheme = max(known or table, key=lambda s: edges[s].estimate)
        edge = edges[scheme]
        verdict: Verdict = "undecided"
        reason: Reason | None = "budget"
        needed: int | None = None
        if low > 1:
            verdict, reason = "pays", None
        elif trusted and high < self._file.worthwhile:
            verdict, reason = "does not pay", "edge"
        else:
            # What hangs on an admission is undecided for its reason, what hangs on the edge for want of paths.
            waiting = [self.admission(s) for s in table]
            waiting += [self.admission(r, rival=True) for r in next(iter(table.values()))]
            open_one = next((a for a in waiting if a.standing == "unknown"), None)
            reason, needed = (
                ("budget", self._paths_for(edge)) if open_one is None else (open_one.reason, open_one.paths_needed)
            )
        return self._made(quantity, scheme, edge, verdict=verdict, reason=reason, needed=needed)

    def _paths_for(self, edge: Interval) -> int | None:
        """Return the paths at which the interval of the edge would leave 1 or the worthwhile edge behind."""
        if not 0 < edge.estimate < math.inf:
            return None
        # How many times the bound on that side must come nearer, by 1 / sqrt(paths), for each way out.
        sides = [(edge.estimate, 1.0, edge.low), (1 / edge.estimate, 1 / self._file.worthwhile, 1 / edge.high)]
        factors = [
            max(1.0, math.log(at / bound) / math.log(at / limit)) ** 2
            for at, limit, bound in sides
            if at > limit and bound > 0
        ]
        return self._grown(min(factors)) if factors else None

    def _made(
        self,
        quantity: str,
        scheme: Scheme,
        edge: Interval | None,
        *,
        verdict: Verdict,
        reason: Reason | None,
        needed: int | None,
    ) -> ArmJudgement:
        view = self._views[quantity]
        today = Scheme(kind="alone", narrow=self._file.formats.today)
        fine = self.admission(today, rival=True).standing == "yes" and self._varies(view, today)
        bias = view.bias(scheme.top, self._alpha)
        admitted = None
        if self._file.target is None and math.isfinite(bias.high - bias.low):
            admitted = max(abs(bias.low), abs(bias.high)) * budget_levels(self._file) / BIAS_SHARE
        return ArmJudgement(
            scheme=scheme,
            gain=view.ratio(scheme, today, self._alpha) if fine and edge is not None else None,
            edge=edge,
            bias=bias,
            verdict=verdict,
            reason=reason,
            paths_needed=needed,
            admitted_rmse=admitted,
        )

    def _unseen(self, quantity: str, own: list[Scheme], name: str) -> ArmJudgement | None:
        """Return `undecided` where a yes/no quantity varies but no path yet made a difference between the levels."""
        value = self._views[quantity].tally.values[REFERENCE]
        seen = (self._views[quantity].tally.differences[arm].moments.variance for arm in (REFERENCE, name))
        if not (value.counted and value.moments.variance > 0 and max(seen) < math.inf):
            return None
        return self._made(quantity, own[-1], None, verdict="undecided", reason="budget", needed=None)

    def _refused(self, quantity: str, own: list[Scheme], reason: Reason) -> ArmJudgement:
        usable = reason == "bias"
        bias = self._views[quantity].bias(own[0].top, self._alpha) if usable and own else None
        return ArmJudgement(
            scheme=own[0] if usable and own else None,
            gain=None,
            edge=None,
            bias=bias,
            verdict="does not pay",
            reason=reason,
            paths_needed=None,
            admitted_rmse=None,
        )


def budget_levels(file: AuditFile) -> int:
    """Return over how many levels the bias budget is shared: all, or one where levels are not added up."""
    return len(file.ladder.levels) if file.kernel.coupling == "sum" else 1


def _worst(row: Mapping[Scheme, Interval]) -> Interval:
    """Return the edge over the best competitor: the smallest ratio, and the smallest of each bound."""
    worst = min(row.values(), key=lambda interval: interval.estimate)
    return Interval(
        estimate=worst.estimate,
        low=min(interval.low for interval in row.values()),
        high=min(interval.high for interval in row.values()),
        se=worst.se,
    )
