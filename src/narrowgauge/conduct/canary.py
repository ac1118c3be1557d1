"""The canary: whether a kernel that rounds for itself really rounds in the format that it claims, seen from outside.

The kernel of a format f is held against the kernel of every wider format on the same draws, those of f, which a wider
format has all. A kernel that only stores in f what it computes in a wider format gives the wider results, rounded once.
The same is tried on draws that shrink to nothing by powers of two: where a state in f loses additions, one in a wider
format still moves. What a kernel does between two roundings of its state cannot be seen from outside: a wider
intermediate inside an expression, a product fused into a sum, or an approximate function give other roundings, in the
same places and of the same size. That takes an emulated source to compare with.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS, Format
from narrowgauge.draws.coarsen import Draws, fine_draws, inside
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.raised import kept_apart
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.measure.calls import Caller, Quantities
from narrowgauge.record.canary import CanaryEntry, Finding

__all__ = ["MOST_STEPS", "Canary"]

MOST_STEPS = 64  # of a path on the level of the canary, the finest such: enough for roundings to add up
# Results of a wider format rounded once agree in all but the few paths where two wider formats round to two sides. A
# state that is rounded in f at every step agrees where its errors cancel, in well under nine paths of ten. Results that
# a wider format has in f anyway, such as a payoff of 0, tell nothing and are left out; so many others are needed.
_ALIKE, _TELLING = 0.99, 32
_PARTS = 7  # draws of one path in the shrinking ones: as many parts of the largest
_FEW = 5  # values of a quantity that counts something, such as a yes/no payoff: rounding rarely shows in it
# Rounding a result once errs by a third of u |P| or so in the median; a kernel in f errs by more.
_TOO_EXACT = 0.05
# The error of a format is about u: one that is nearer than this to that of a format with 8 bits less is not its own.
_NOT_ITS_OWN, _BITS_APART = 1 / 16, 8

Doubles = npt.NDArray[np.float64]
_Shares = Mapping[str, float | None]


@dataclass(frozen=True, slots=True)
class _Runs:
    """One kind of draws of one arm: what the arm gives on them, and what every wider one gives."""

    own: Quantities
    wider: dict[str, Quantities]

    def shares(self, quantity: str, form: Format | None, names: Sequence[str]) -> _Shares:
        """Return, for each of these wider arms, how often its result is the arm's own, rounded to `form` if given."""
        return {name: _share(self.own[quantity], self.wider[name][quantity], form) for name in names}


class Canary:
    """Canary runs of all arms, `callers` by arm, on the draws of one block of one level."""

    def __init__(self, file: AuditFile, draws: Draws, level: int, callers: Mapping[str, Caller]) -> None:
        self._file, self._draws, self._level = file, draws, level
        self._callers = {arm: callers[arm] for arm in sorted(callers, key=_precision)}

    def entries(self) -> list[CanaryEntry]:
        """Return what every arm shows, quantity by quantity, least precise first; arms that raise are left out."""
        runs: dict[str, tuple[_Runs, _Runs]] = {}
        for arm in self._callers:
            with kept_apart(self._level, arm):  # an arm that raises is left out: the measurement keeps what it raises
                runs[arm] = self._runs(arm)
        if REFERENCE not in runs:  # it runs on usual draws, and raises on the shrinking ones of the canary alone
            return []
        found: dict[tuple[str, str], CanaryEntry] = {}
        for quantity in runs[REFERENCE][0].own:
            errors = {
                arm: _median_error(one.own[quantity], one.wider[REFERENCE][quantity])
                for arm, (one, _) in runs.items()
                if arm != REFERENCE
            }
            true = list(runs)  # a wider format that is a narrower one in truth is nothing to be held against
            for arm in reversed(runs):
                entry = found[arm, quantity] = self._entry(arm, quantity, runs[arm], errors, true)
                if entry.finding == "narrower":
                    true.remove(arm)
        return [found[arm, quantity] for arm in runs for quantity in runs[REFERENCE][0].own]

    def _runs(self, arm: str) -> tuple[_Runs, _Runs]:
        drawn = fine_draws(self._draws, arithmetic_named(arm))
        wider = [name for name in self._callers if FORMATS[name].includes(FORMATS[arm]) and name != arm]

        def on(given: npt.NDArray[np.floating]) -> _Runs:
            return _Runs(self._given(arm, given), {name: self._given(name, given) for name in wider})

        return on(drawn), on(self._shrinking(arm, drawn.shape))

    def _entry(
        self, arm: str, quantity: str, runs: tuple[_Runs, _Runs], errors: Mapping[str, float], true: Sequence[str]
    ) -> CanaryEntry:
        form, (usual, small) = FORMATS[arm], runs
        values = usual.own[quantity]
        names = [name for name in usual.wider if name in true]
        once, once_small = usual.shares(quantity, form, names), small.shares(quantity, form, names)
        outside = int(np.count_nonzero(~_same(_rounded(values, form), values)))
        error = errors.get(arm, math.nan)
        reference = usual.wider.get(REFERENCE, usual.own)[quantity]
        finding, like = self._narrower(arm, values, errors, counts=_whole(reference))
        if finding is None:
            exact = usual.shares(quantity, None, names)
            finding, like = _finding((once, once_small, exact), outside, error / form.unit_roundoff)
        return CanaryEntry(
            arm=arm,
            quantity=quantity,
            level=self._level,
            paths=values.size,
            finding=finding,
            like=like,
            outside=outside,
            rounded_once=_largest(once),
            rounded_once_small=_largest(once_small),
            error=error / form.unit_roundoff if math.isfinite(error) else None,
        )

    def _narrower(
        self, arm: str, values: Doubles, errors: Mapping[str, float], *, counts: bool
    ) -> tuple[Finding | None, str | None]:
        """Return whether results have, or err like, a narrower format, and which; None where nothing says so.

        Of a quantity that `counts`, whole numbers in every format, nothing can be told.
        """
        if np.unique(values[np.isfinite(values)]).size <= _FEW or counts:
            return "unknown", None
        narrower = [name for name in self._callers if FORMATS[arm].includes(FORMATS[name]) and name != arm]
        within = [name for name in narrower if _same(_rounded(values, FORMATS[name]), values).all()]
        if within:
            return "narrower", within[0]
        far = [
            name
            for name, error in errors.items()
            if _precision(arm) - _precision(name) >= _BITS_APART
            and error >= _TOO_EXACT * FORMATS[name].unit_roundoff
            and errors.get(arm, 0.0) > error * _NOT_ITS_OWN
        ]
        if far:
            return "narrower", min(far, key=lambda name: abs(math.log(errors[arm] / errors[name])))
        return None, None

    def _given(self, arm: str, drawn: npt.NDArray[np.floating]) -> Quantities:
        """Run one arm on carriers of another, all of whose values it has."""
        carrier = FORMATS[arm].carrier
        return self._callers[arm].on_array(np.array(drawn, carrier), self._level)

    def _shrinking(self, arm: str, shape: tuple[int, ...]) -> npt.NDArray[np.floating]:
        """Return draws that are alike in every step and factor, of either sign, from usual ones down to nothing.

        They differ from step to step, since a number added to itself a power of two times needs no rounding.
        """
        form, paths = FORMATS[arm], shape[-1]
        bits = form.precision + 6.0
        sizes = np.exp2(-bits * np.arange(paths) / paths) * np.where(np.arange(paths) % 2, -1.0, 1.0)
        takes, arithmetic = self._draws.takes, arithmetic_named(arm)
        if takes == "increments":
            sizes *= math.sqrt(self._file.ladder.step_size(self._level))
        parts = 1.0 - np.arange(math.prod(shape[:-1])).reshape(*shape[:-1], 1) % _PARTS / (_PARTS + 1)
        drawn = arithmetic.cast(0.5 + 0.5 * sizes * parts if takes == "uniforms" else sizes * parts)
        return inside(drawn, arithmetic) if takes == "uniforms" else drawn


def _finding(shares: tuple[_Shares, _Shares, _Shares], outside: int, error: float) -> tuple[Finding, str | None]:
    """Return what shares of the wider results come to, rounded on both kinds of draws and exact; `error` is in u."""
    once, once_small, exact = shares
    alike = [name for name in once if _alike(exact[name])]
    if alike and outside:
        return "wider", max(alike, key=lambda name: (exact[name] or 0.0, _precision(name)))
    alike = [name for name in once if _alike(once[name]) and _alike(once_small[name])]
    if alike:
        return "result only", max(alike, key=lambda name: once[name] or 0.0)
    if not once or None in once.values() or any(_alike(once[name]) and once_small[name] is None for name in once):
        return "unknown", None
    if error < _TOO_EXACT:
        return ("wider", None) if outside else ("unknown", None)
    return "rounds", None


def _precision(arm: str) -> int:
    return FORMATS[arm].precision


def _whole(values: Doubles) -> bool:
    return bool(np.all(values[np.isfinite(values)] % 1.0 == 0.0))


def _rounded(values: Doubles, form: Format) -> Doubles:
    with np.errstate(all="ignore"):
        return arithmetic_named(form.name).cast(values).astype(np.float64)


def _same(here: Doubles, there: Doubles) -> npt.NDArray[np.bool_]:
    return np.asarray((here == there) | (np.isnan(here) & np.isnan(there)))


def _share(values: Doubles, wide: Doubles, form: Format | None = None) -> float | None:
    """Return in which share of paths a result is the wider one, rounded once to `form` if that is given.

    Paths whose wide result needs no rounding, and that agree, are left out; None where too few are left.
    """
    expected = wide if form is None else _rounded(wide, form)
    found = values if form is None else _rounded(values, form)
    agree = _same(found, expected)
    telling = ~agree | (np.ones_like(agree) if form is None else ~_same(expected, wide))
    return float(np.mean(agree[telling])) if np.count_nonzero(telling) >= _TELLING else None


def _alike(share: float | None) -> bool:
    return share is not None and share >= _ALIKE


def _largest(shares: _Shares) -> float | None:
    return max((share for share in shares.values() if share is not None), default=None)


def _median_error(values: Doubles, reference: Doubles) -> float:
    """Return the median of |P - P_ref| / |P_ref|, over paths where that can be told; NaN if there are none."""
    with np.errstate(all="ignore"):
        relative = np.abs(values - reference) / np.abs(reference)
    known = relative[np.isfinite(relative)]
    return float(np.median(known)) if known.size else math.nan
