"""A function of a split emulated as a compiler may have computed it, on paths on which two branches differ.

Hundreds of manners may have to be tried, so none is run in vain: a run tells what was asked of its manner, and one that
would answer the same gives the same bits; and what fails on a few paths is not run on all.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from narrowgauge.conduct.tracing import MOST_PATHS
from narrowgauge.dispatch.looser import LooserSetting, Manner
from narrowgauge.dispatch.setting import Place
from narrowgauge.errors import NarrowgaugeError
from narrowgauge.judge.branches import Doubles, differs
from narrowgauge.measure.branchruns import Branch, BranchError, BranchSource, Given

__all__ = ["Case", "Emulation", "Run"]

_MOST_DIFFERING = 192  # of the paths that are followed; the rest agree
_MOST_OF_EACH = 1024  # paths that differ, and that agree, which an explanation has to give
_FEW_OF_EACH = 32  # of these, which it has to give first


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """A function of a split in one format on one level; `wide` is the other format, `rows` as a kernel of one path."""

    source: BranchSource
    arm: str
    wide: str | None
    level: int
    rows: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """Paths of a block, of which the first `differing` have other results; `level` is that of the path, fine or coarse.

    Some that agree are among them: what explains the others must leave these alone.
    """

    level: int
    draws: Given
    low: Doubles
    correction: Doubles
    differing: int

    @classmethod
    def of(cls, level: int, draws: Given, low: Doubles, correction: Doubles) -> Case:
        """Return the case of a block, whose results differ on some path."""
        differ = differs(low, correction)
        first = np.flatnonzero(differ)[:_MOST_OF_EACH]
        chosen = np.concatenate([first, np.flatnonzero(~differ)[:_MOST_OF_EACH]])
        return cls(
            level=level, draws=draws.of(chosen), low=low[chosen], correction=correction[chosen], differing=first.size
        )

    def followed(self) -> Given:
        """Return the draws of the paths of which all results are kept, to find where the branches part."""
        first = min(self.differing, _MOST_DIFFERING)
        further = range(self.differing, min(self.low.size, self.differing + MOST_PATHS - first))
        return self.draws.of([*range(first), *further])

    def first(self, number: int) -> list[int]:
        """Return so many paths that differ and as many that agree, or all there are of either."""
        agreeing = range(self.differing, min(self.low.size, self.differing + number))
        return [*range(min(self.differing, number)), *agreeing]


@dataclass(frozen=True, slots=True)
class _Done:
    """A manner that was run, what was asked of it, and whether it gave what was wanted."""

    manner: Manner
    of_two: frozenset[Place | None]
    crossed: bool
    gave: bool

    def answers_for(self, other: Manner) -> bool:
        """Return whether another manner takes the same way, to the last bit."""
        mine = self.manner
        return (
            (mine.kind, mine.wide, mine.only) == (other.kind, other.wide, other.only)
            and mine.last & self.of_two == other.last & self.of_two
            and (mine.across == other.across or (mine.across and not self.crossed))
        )


class Emulation:
    """A function on the paths of a case, emulated in one manner after the other.

    `own` is what it gave itself, `wanted` what the other function gave, which a manner is to explain.
    """

    def __init__(self, run: Run, case: Case, quantity: str, *, own: Doubles, wanted: Doubles) -> None:
        self._run, self._quantity = run, quantity
        self._draws, self._wanted = Given(case.draws.narrow, None), wanted
        few = case.first(_FEW_OF_EACH)
        self._few, self._wanted_few = self._draws.of(few), wanted[few]
        self._done: list[_Done] = []
        self._usual = run.source.python and self._equals(None, self._draws, own)
        # Where other paths have a say in a path, few of them tell nothing of all.
        self._screens = self._usual and len(few) < wanted.size and self._equals(None, self._few, own[few])

    def lines_of_two(self) -> list[Place | None]:
        """Return the lines that add two products, of which a compiler may fuse either."""
        if not self._usual:
            return []
        manner = Manner("fused", across=True)
        found, setting = self._emulated(manner, self._draws)
        if found is None or setting is None:
            return []
        self._keep(manner, setting, gave=not differs(found, self._wanted).any())
        return list(setting.of_two)

    def gives(self, manner: Manner) -> bool:
        """Return whether the function emulated in a manner gives what is wanted on every path."""
        if not self._usual:
            return False
        known = next((done for done in self._done if done.answers_for(manner)), None)
        if known is not None:
            return known.gave
        if self._screens and not self._equals(manner, self._few, self._wanted_few):
            return False
        return self._equals(manner, self._draws, self._wanted)

    def _equals(self, manner: Manner | None, draws: Given, wanted: Doubles) -> bool:
        found, setting = self._emulated(manner, draws)
        gave = found is not None and not differs(found, wanted).any()
        if manner is not None and setting is not None and not (gave and draws is self._few):
            self._keep(manner, setting, gave=gave)
        return gave

    def _keep(self, manner: Manner, setting: LooserSetting, *, gave: bool) -> None:
        self._done.append(_Done(manner, frozenset(setting.of_two), setting.crossed, gave))

    def _emulated(self, manner: Manner | None, draws: Given) -> tuple[Doubles | None, LooserSetting | None]:
        """Return the results in a manner, or as usual; None where it cannot be emulated so, which explains nothing."""
        setting = None
        try:
            branch = Branch(self._run.source.emulated(), self._run.arm, rows=self._run.rows, manner=manner)
            setting = branch.copy.setting
            found = branch.on(draws, self._run.level).get(self._quantity)
        except (BranchError, NarrowgaugeError):
            found = None
        return found, setting if isinstance(setting, LooserSetting) else None
