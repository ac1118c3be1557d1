"""From tallies and judgements to the record of an audit."""

from __future__ import annotations

import math

import msgspec
import numpy as np

from narrowgauge.conduct.entries import (
    correction_entry,
    finite,
    interval_fields,
    judged_fields,
    law_entry,
    mean_of,
    mean_se_of,
    raised_entry,
    reference_entry,
    scheme_entry,
    variance_of,
    variance_se_of,
)
from narrowgauge.conduct.plans import allocation_entry, common_plan_entry
from narrowgauge.conduct.run import Outcome
from narrowgauge.conduct.separated import separation_entry
from narrowgauge.conduct.stepcosts import with_costs
from narrowgauge.judge.accumulation import (
    AccumulationFit,
    LawPoint,
    SignalDecay,
    agreement,
    fit,
    sentence,
    signal_decay,
    usable,
)
from narrowgauge.judge.finest import Beyond, FinestLevel, finest_on_ladder, over_quantities
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.intervals import binomial_upper, jackknife, means, variances
from narrowgauge.judge.schemes import BIAS_SHARE, LEAST_EFFECTIVE_SIZE, budget_levels
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.measure.arms import REFERENCE, arms_of
from narrowgauge.measure.tally import LevelTally
from narrowgauge.record.audit import (
    SCHEMA,
    AccumulationEntry,
    AgreementEntry,
    ArithmeticEntry,
    ArmEntry,
    AuditRecord,
    BestEntry,
    DecidedEntry,
    FinestEntry,
    KernelEntry,
    LevelEntry,
    OrdersEntry,
    QuantityEntry,
    RulesEntry,
    SeparationEntry,
    TelescopingEntry,
    VerdictEntry,
)

__all__ = ["CAUTIONS", "OWN_CAUTION", "account"]

CAUTIONS = (
    "A verdict is evidence, not approval: it holds for means, not for quantiles or nested expectations, of the audited "
    "kernel at the audited parameters, sample and cost table.",
    "The emulation rounds each operation as IEEE-style arithmetic does and does not know a vendor's fused or "
    "approximate instructions.",
    "Results that feed prices, margins, limits, forecasts or safety decisions go through the model validation and "
    "change control that the organisation and its local rules require.",
)

OWN_CAUTION = (
    "The kernel rounds for itself and was taken at its word: the verdict holds for the code, the compiler and the "
    "machine that ran it."
)

_SOUND = 3.3  # standard errors within which the reference's levels must telescope


def account(file: AuditFile, outcome: Outcome, kernel: KernelEntry, provenance: dict[str, object]) -> AuditRecord:
    """Return the record of an audit."""
    file = with_costs(file, outcome.costs)
    names = list(outcome.tallies[0].quantities)
    quantities = {name: _Quantity(file, outcome, name).entry() for name in names}
    finest = {
        arm: over_quantities({name: _finest_of(quantities[name].finest_paying_level[arm]) for name in names})
        for arm in file.narrow
    }
    judged = sorted(outcome.judgements.items())
    sound = all(
        level.telescoping is None or level.telescoping.sound for entry in quantities.values() for level in entry.levels
    )
    own = file.kernel.rounds == "itself"
    return AuditRecord(
        schema=SCHEMA,
        kernel=kernel,
        asked=file.asked(),
        rules=RulesEntry(
            telescoping_se=_SOUND,
            least_effective_size=LEAST_EFFECTIVE_SIZE,
            worthwhile=file.worthwhile,
            bias_share=BIAS_SHARE if file.target is None else file.target.bias_share,
            levels_sharing=budget_levels(file),
        ),
        arms={
            arm.name: ArithmeticEntry(
                format=arm.format,
                rounding="the kernel's own" if own else "nearest",
                subnormals=None if own else "kept",
                fused=None if own else False,
                draws=arm.draws,
                widened=[],
            )
            for arm in map(Arm.named, arms_of(file.arms))
        },
        quantities=quantities,
        verdict=VerdictEntry(
            sound=sound,
            finest_paying_level={
                arm: DecidedEntry(
                    level=one.level,
                    cautious=one.cautious,
                    possible=one.possible,
                    extrapolated=one.extrapolated,
                    reason=one.reason,
                    decided_by=one.decided_by,
                )
                for arm, one in finest.items()
            },
            schemes=[None if one.joint is None else scheme_entry(one.joint) for _, one in judged],
            plan=common_plan_entry(file, outcome),
        ),
        reach=outcome.trial.reach,
        branches=outcome.branches,
        range=outcome.trial.range,
        canary=msgspec.UNSET if outcome.trial.canary is None else outcome.trial.canary,
        costs=outcome.costs or msgspec.UNSET,
        cautions=[OWN_CAUTION if own and caution == CAUTIONS[1] else caution for caution in CAUTIONS],
        provenance=provenance,
        draws=outcome.draws or msgspec.UNSET,
    )


class _Quantity:
    """The account of one quantity."""

    def __init__(self, file: AuditFile, outcome: Outcome, name: str) -> None:
        self._file, self._outcome, self._name = file, outcome, name
        self._levels = sorted(outcome.tallies)
        self._arms = arms_of(file.arms)
        self._views = {level: outcome.judgements[level].views[name] for level in self._levels}

    def entry(self) -> QuantityEntry:
        """Return everything about the quantity."""
        decay = self._decay()
        errors = {arm: self._law(arm, "errors") for arm in self._arms[1:]}
        corrections = {arm: self._law(arm, "corrections") for arm in self._arms[1:]}
        walks = agreement(errors)
        ladder = [(level, self._file.ladder.steps(level)) for level in self._levels]
        by_step = math.log2(self._file.ladder.refinement)  # of a level, which is what the decay is told by
        order = decay.beta / by_step if decay else None
        orders = OrdersEntry(level_variance=finite(order), level_mean=self._mean_order())
        return QuantityEntry(
            levels=[self._level(level) for level in self._levels],
            accumulation={
                arm: AccumulationEntry(
                    error=law_entry(errors[arm]),
                    correction=law_entry(corrections[arm]),
                    sentence=sentence(errors[arm], arm, ladder),
                )
                for arm in errors
                if Arm.named(arm).exact
            },
            agreement=AgreementEntry(agrees=walks["agrees"], spread=finite(walks["spread"]), reason=walks["reason"]),
            orders=orders,
            finest_paying_level={
                arm: self._finest(arm, errors[arm], corrections[arm], decay) for arm in self._file.narrow
            },
            allocation=allocation_entry(self._file, self._outcome, self._name, self._weak_error(orders.level_mean)),
            separation=self._separation(),
        )

    def _tally(self, level: int) -> LevelTally:
        return self._outcome.tallies[level]

    def _level(self, level: int) -> LevelEntry:
        tally, view, ladder = self._tally(level), self._views[level], self._file.ladder
        return LevelEntry(
            level=level,
            steps=ladder.steps(level),
            h=ladder.step_size(level),
            paths=tally.paths,
            blocks=tally.blocks,
            telescoping=self._telescoping(level),
            reference=reference_entry(tally, view),
            arms={arm: self._arm(level, arm) for arm in self._arms},
            corrections={f"{a}:{b}": correction_entry(view, a, b) for a, b in view.tally.corrections},
            best=self._best(level),
        )

    def _telescoping(self, level: int) -> TelescopingEntry | None:
        """Compare the coarse path of this level with the fine path one level below, in the reference."""
        coarse = self._tally(level).quantities[self._name].coarse
        if coarse is None or level == 0:
            return None
        below = self._tally(level - 1).quantities[self._name].values[REFERENCE].moments
        if coarse.total < 2 or below.total < 2:
            return TelescopingEntry(difference=None, se=None, sound=True)
        difference = coarse.average - below.average
        se = math.sqrt(coarse.variance / coarse.total + below.variance / below.total)
        if not math.isfinite(difference + se):  # a variance past float64
            return TelescopingEntry(difference=finite(difference), se=None, sound=True)
        return TelescopingEntry(difference=difference, se=se, sound=abs(difference) <= _SOUND * se)

    def _arm(self, level: int, arm: str) -> ArmEntry:
        tally = self._tally(level)
        series = tally.quantities[self._name]
        raised = tally.raised.get(arm)
        error = series.errors.get(arm)
        difference = series.differences.get(arm)
        nonfinite = max(s.nonfinite for s in (series.values[arm], difference)) if difference is not None else 0
        judged = self._outcome.judgements[level].arms[self._name].get(arm)
        kept = difference.moments.total + difference.nonfinite if difference is not None else 0
        return ArmEntry(
            error_mean=mean_of(error),
            error_mean_se=mean_se_of(error),
            error_variance=variance_of(error),
            error_variance_se=variance_se_of(error),
            level_variance=variance_of(difference),
            level_kurtosis=finite(difference.moments.kurtosis) if difference is not None else None,
            nonfinite=nonfinite,
            nonfinite_bound=binomial_upper(nonfinite, kept, 0.01) if kept else None,
            raised=raised_entry(raised),
            **judged_fields(judged),
        )

    def _best(self, level: int) -> BestEntry | None:
        scheme = self._outcome.judgements[level].best[self._name]
        view = self._views[level]
        if scheme is None:
            return None
        today = Scheme(kind="alone", narrow=self._file.formats.today)
        gain = None
        if today.narrow in view.tally.differences and math.isfinite(view.logarithm(today)[0]):
            gain = view.ratio(scheme, today, self._outcome.alpha)
        return BestEntry(
            kind=scheme.kind,
            narrow=scheme.narrow,
            wide=scheme.wide,
            **interval_fields("gain", gain),
            bias=finite(view.bias(scheme.top, self._outcome.alpha).estimate),
        )

    def _law(self, arm: str, which: str) -> AccumulationFit:
        """Fit the law to the error or to the correction of an arm; E decides which levels are usable for both.

        It is a law of rounding alone: that of an arm with approximate draws is not fitted.
        """
        named = Arm.named(arm)
        if not named.exact:
            return AccumulationFit(reason="approximate draws")
        errors = [p for level in self._levels if (p := self._point(level, arm, "errors")) is not None]
        fine = usable(errors)
        confidence = 1 - self._outcome.alpha
        u = named.form.unit_roundoff
        if which == "errors":
            return fit(fine, u, confidence=confidence)
        points = [p for one in fine if (p := self._point(one.level, arm, "corrections")) is not None]
        return fit(points, u, leave_out_coarsest=True, confidence=confidence)

    def _separation(self) -> SeparationEntry | msgspec.UnsetType:
        if self._file.draws is None:
            return msgspec.UNSET
        tallies = {level: self._tally(level).quantities[self._name] for level in self._levels}
        return separation_entry(self._file, tallies, self._outcome.alpha)

    def _point(self, level: int, arm: str, which: str) -> LawPoint | None:
        tally = self._tally(level).quantities[self._name]
        series = tally.errors.get(arm) if which == "errors" else tally.corrections.get((arm, REFERENCE))
        if series is None or series.nonfinite or series.moments.total < 2:
            return None
        return LawPoint(
            level=level,
            steps=self._file.ladder.steps(level),
            variance=series.moments.variance,
            se=jackknife(variances(series), 0.05).se,
            dof=series.moments.count.size - 1,
            mean=series.moments.average,
            value_variance=tally.values[REFERENCE].moments.variance,
        )

    def _decay(self) -> SignalDecay | None:
        series = {level: self._views[level].tally.differences[REFERENCE] for level in self._levels}
        return signal_decay(
            self._levels,
            [one.moments.variance for one in series.values()],
            [jackknife(variances(one), 0.05).se for one in series.values()],
        )

    def _mean_order(self) -> float | None:
        """Return the order of |mean D_l| in h over the four finest levels, where each mean is known to a half."""
        finest = [level for level in self._levels if level > 0][-4:]
        found = [jackknife(means(self._views[level].tally.differences[REFERENCE]), 0.05) for level in finest]
        if len(finest) < 4 or any(abs(one.estimate) <= 2 * one.se for one in found):
            return None
        logarithms = np.log([abs(one.estimate) for one in found]) / math.log(self._file.ladder.refinement)
        return finite(-float(np.polyfit(finest, logarithms, 1)[0]))

    def _finest(
        self, arm: str, error: AccumulationFit, correction: AccumulationFit, decay: SignalDecay | None
    ) -> FinestEntry:
        last = self._views[self._levels[-1]].tally.values[REFERENCE].moments.variance
        beyond = Beyond(correction=correction, error=error, decay=decay, value_variance=last)
        judged = [self._outcome.judgements[level] for level in self._levels]
        found = finest_on_ladder(judged, self._name, arm, file=self._file, beyond=beyond, alpha=self._outcome.alpha)
        return FinestEntry(
            level=found.level,
            cautious=found.cautious,
            possible=found.possible,
            extrapolated=found.extrapolated,
            reason=found.reason,
        )

    def _weak_error(self, mean_order: float | None) -> float | None:
        """Return |mean D_L| / (M^alpha - 1), what remains of the discretisation beyond the finest level."""
        if mean_order is None or mean_order <= 0:
            return None
        last = self._views[self._levels[-1]].tally.differences[REFERENCE].moments.average
        return finite(abs(last) / (self._file.ladder.refinement**mean_order - 1))


def _finest_of(entry: FinestEntry) -> FinestLevel:
    return FinestLevel(
        level=entry.level,
        cautious=entry.cautious,
        possible=entry.possible,
        extrapolated=entry.extrapolated,
        reason=entry.reason,
    )
