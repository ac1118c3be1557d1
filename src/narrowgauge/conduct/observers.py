"""What is noted of a trial run, line by line: operations, decisions, what leaves, constants that a format lacks."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Literal, NamedTuple

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic, arithmetic_named
from narrowgauge.dispatch.setting import Place, Route, Setting, Way

__all__ = ["Constants", "Finding", "Kind", "Notes", "judged"]

Kind = Literal["zero", "infinite", "subnormal", "moved"]
Line = Place | None  # None: outside the user's modules, where array parameters are rounded


class Finding(NamedTuple):
    """What becomes of a constant that the format cannot take well: `ulps` is how far it moves, in its own ulps."""

    kind: Kind
    became: float
    ulps: float


def judged(constant: float, arithmetic: Arithmetic) -> Finding | None:
    """Return what is wrong with a finite constant in an arithmetic: 0, infinite, subnormal, or moved too far.

    Too far is more than half an ulp of the constant itself, 2^(e - p + 1) for 2^e <= |c| < 2^(e + 1), as if exponents
    had no bounds. Rounding to nearest goes that far only where the format's exponents end.
    """
    form = arithmetic.format
    if constant == 0.0 or not math.isfinite(constant):
        return None
    became = float(arithmetic.constant(constant))
    ulps = math.ldexp(abs(constant - became), form.precision - math.frexp(constant)[1])
    if became == 0.0:
        return Finding("zero", 0.0, ulps)
    if math.isinf(became):
        return Finding("infinite", became, ulps)
    if abs(became) < form.min_normal:
        return Finding("subnormal", became, ulps)
    return Finding("moved", became, ulps) if ulps > 0.5 else None


class Constants:
    """Constants of which some arm makes something else, by arm, line and kind: how often each value was met."""

    def __init__(self, arms: Sequence[str]) -> None:
        self._arithmetics = {arm: arithmetic_named(arm) for arm in arms}
        forms = [arithmetic.format for arithmetic in self._arithmetics.values()]
        # Between these every arm rounds a constant to a normal number, at most half an ulp away.
        self._least = max((form.min_normal for form in forms), default=0.0)
        self._most = min((form.max_finite for form in forms), default=math.inf)
        self.found: dict[tuple[str, Line, Kind], Counter[float]] = {}

    def note(self, setting: Setting, constant: Any) -> None:
        """Take note of a plain number, or of every element of a plain array."""
        outliers = dict(self._outliers(constant))
        if not outliers:
            return
        place = setting.where()
        for arm, arithmetic in self._arithmetics.items():
            for number, count in outliers.items():
                finding = judged(number, arithmetic)
                if finding is not None:
                    self.found.setdefault((arm, place, finding.kind), Counter())[number] += count

    def add(self, other: Constants) -> None:
        """Add what another run of the same arm met."""
        for key, values in other.found.items():
            self.found.setdefault(key, Counter()).update(values)

    def fill_in(self, other: Constants) -> None:
        """Add the values that another arm's run alone met, since its control flow went elsewhere."""
        for key, values in other.found.items():
            known = self.found.setdefault(key, Counter())
            known.update({number: count for number, count in values.items() if number not in known})

    def finding(self, arm: str, constant: float) -> Finding:
        """Return what an arm makes of a constant that was found there."""
        found = judged(constant, self._arithmetics[arm])
        assert found is not None  # or it would not have been kept
        return found

    def _outliers(self, constant: Any) -> Iterator[tuple[float, int]]:
        """Yield the numbers that an arm might not hold, with how often each occurs."""
        if not isinstance(constant, np.ndarray):
            try:
                number = float(constant)
            except OverflowError:  # an integer past float64, of which plain NumPy makes no number either
                return
            if number != 0.0 and not self._least <= abs(number) <= self._most:
                yield number, 1
            return
        if constant.dtype.kind not in "iuf":
            return
        size = np.abs(constant.astype(np.float64))
        outside = (size != 0.0) & ((size < self._least) | (size > self._most)) & np.isfinite(size)
        if outside.any():
            values, counts = np.unique(constant[outside], return_counts=True)
            yield from zip(map(float, values), map(int, counts), strict=True)


class Notes:
    """An observer of one run, told apart by line: `ways` counts what left the emulation by the way that it took."""

    def __init__(self, arms: Sequence[str]) -> None:
        self.operations: Counter[tuple[Line, str, Route]] = Counter()
        self.decisions: Counter[Line] = Counter()
        self.affirmed: Counter[Line] = Counter()
        self.ways: Mapping[Way, Counter[Line]] = {"escape": Counter(), "integer": Counter(), "text": Counter()}
        self.constants = Constants(arms)

    def saw(self, setting: Setting, operation: str, route: Route, operands: Sequence[Any], result: Any) -> None:
        """Count one operation."""
        self.operations[setting.where(), operation, route] += 1

    def met(self, setting: Setting, constant: Any) -> None:
        """Note a constant if an arm cannot take it well."""
        self.constants.note(setting, constant)

    def decided(self, setting: Setting, answer: bool) -> None:
        """Count one decision, and whether it was true."""
        place = setting.where()
        self.decisions[place] += 1
        self.affirmed[place] += answer

    def left(self, setting: Setting, way: Way) -> None:
        """Count one value that left."""
        self.ways[way][setting.where()] += 1
