"""The plan of an audit in words, and a bar that follows it on a terminal."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from types import TracebackType
from typing import TYPE_CHECKING

from rich.console import Console
from rich.text import Text

from narrowgauge.report.domain import planned_domain, scenarios_counted
from narrowgauge.report.wording import count, duration, levels_named, million

if TYPE_CHECKING:
    from rich.progress import Progress as Bar
    from rich.progress import TaskID

    from narrowgauge.conduct.run import Plan

__all__ = ["Progress", "planned_text"]


def planned_text(plan: Plan) -> Text:
    """Return how many paths and steps an audit takes, at its first look and at most, and about how long."""
    steps = [level.steps for level in plan.levels]
    first = _between(level.paths_first_look for level in plan.levels)
    most = _between(level.paths_most for level in plan.levels)
    ladder = (
        f"{count(len(steps))} levels of {_between(steps)} steps" if len(steps) > 1 else f"1 level of {steps[0]} steps"
    )
    text = Text("Plan: ", style="bold")
    words = f"{ladder}. The first look takes {first} paths a level: {million(plan.path_steps)} steps of paths in all "
    words += f"arms together, {duration(plan.seconds)}."
    if plan.most_path_steps > plan.path_steps:
        words += f" Levels that stay undecided go on to at most {most} paths; if all did, that would be "
        words += f"{million(plan.most_path_steps)} steps, {duration(plan.most_seconds)}."
    if plan.kept:
        there = "1 block is" if plan.kept == 1 else f"{count(plan.kept)} blocks are"
        words += f" {there} there from before and will not be run again."
    return text.append(words + planned_domain(plan), style="not bold")


class Progress:
    """Watches an audit: shows its plan, then on a terminal a bar for each look that vanishes when it is over.

    Use it as a context manager. With `quiet` the plan is not shown. `console` is standard error unless given.
    """

    def __init__(self, *, quiet: bool = False, console: Console | None = None) -> None:
        self._quiet = quiet
        self._console = console or Console(stderr=True, markup=False, highlight=False, emoji=False)
        self._bar: Bar | None = None
        self._task: TaskID | None = None

    def __enter__(self) -> Progress:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, traceback: TracebackType | None
    ) -> None:
        self._stop()

    def planned(self, plan: Plan) -> None:
        """Show the plan."""
        if not self._quiet:
            self._console.print(planned_text(plan))

    def look(self, number: int, looks: int, levels: Sequence[int], path_steps: int) -> None:
        """Begin the bar of a look at these levels, which takes so many path steps."""
        self._begin(f"look {number} of {looks}, {levels_named(levels)}", path_steps)

    def scenarios(self, number: int, looks: int, scenarios: int, path_steps: int) -> None:
        """Begin the bar of a look at so many scenarios."""
        self._begin(f"look {number} of {looks}, {scenarios_counted(scenarios)}", path_steps)

    def _begin(self, words: str, path_steps: int) -> None:
        self._stop()
        if not self._console.is_terminal:
            return
        # Imported here because nothing else needs it.
        from rich.progress import BarColumn, TaskProgressColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as Bar

        self._bar = Bar(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=24),
            TaskProgressColumn(markup=False),
            TimeRemainingColumn(compact=True),
            console=self._console,
            transient=True,
            redirect_stdout=False,  # what a kernel prints goes where it always goes
            redirect_stderr=False,
        )
        self._task = self._bar.add_task(words, total=path_steps)
        self._bar.start()

    def advanced(self, steps: int) -> None:
        """Move the bar on by so many path steps."""
        if self._bar is not None and self._task is not None:
            self._bar.advance(self._task, steps)

    def _stop(self) -> None:
        if self._bar is not None:
            self._bar.stop()
        self._bar = self._task = None


def _between(numbers: Iterable[int]) -> str:
    found = sorted(numbers)
    return count(found[0]) if found[0] == found[-1] else f"{count(found[0])} to {count(found[-1])}"
