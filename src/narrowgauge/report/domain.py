"""What trying the verdict in a box of parameters takes, and what came of it, in words and a table."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING

from rich.text import Text

from narrowgauge.record.domain import (
    ClaimedEntry,
    DomainEntry,
    DomainLevelEntry,
    ProofEntry,
    ScenarioEntry,
    SideEntry,
    SpanEntry,
)
from narrowgauge.report.layout import Ruled
from narrowgauge.report.tables import REFUSED, UNSETTLED
from narrowgauge.report.wording import (
    NONE,
    clean,
    count,
    duration,
    figure,
    joined,
    levels_named,
    million,
    percent,
    scheme_words,
    setting_value,
    shown_edge,
)

if TYPE_CHECKING:
    from narrowgauge.conduct.run import Plan
    from narrowgauge.kernel.auditfile import AuditFile

__all__ = [
    "box_table",
    "deciding",
    "domain_notes",
    "domain_summary",
    "domain_table",
    "lost_table",
    "passing_table",
    "planned_domain",
    "refused_corners",
    "scenarios_asked",
    "scenarios_counted",
]

_SHOWN = 5  # scenarios that do not pass
_STYLES = {"passes": "bold cyan", "undecided": "magenta", "refused": "yellow"}


def planned_domain(plan: Plan) -> str:
    """Return how many scenarios follow the audit itself, and what they take beside it; "" without [domain]."""
    one = plan.domain
    if one is None:
        return ""
    share = percent(one.path_steps / plan.path_steps)
    words = f" Then {_counted(one.drawn, one.corners)} of [domain], {count(one.paths)} paths a level: "
    words += f"{million(one.path_steps)} steps, {share} of the first look, {duration(one.seconds)}."
    if one.most_paths > one.paths:
        words += (
            f" What stays undecided there goes on to at most {count(one.most_paths)} paths; if all did, that would "
        )
        words += f"be {million(one.most_path_steps)} steps, {duration(one.most_seconds)}."
    if one.kept:
        there = "1 look at a scenario is" if one.kept == 1 else f"{count(one.kept)} looks at scenarios are"
        words += f" {there} there from before."
    return words


def scenarios_asked(file: AuditFile) -> Text:
    """Return how many scenarios an audit of this file would try; it has a table [domain]."""
    from narrowgauge.conduct.scenarios import scenarios_of  # SciPy is needed for them alone

    scenarios, domain = scenarios_of(file), file.domain
    assert domain is not None  # the caller has seen to it
    drawn = sum(scenario.drawn for scenario in scenarios)
    text = Text("\nScenarios: ", style="bold")
    words = f"{_counted(drawn, len(scenarios) - drawn)} of [domain] would be tried, with {count(domain.paths)} paths a "
    return text.append(f"{words}level, and up to {count(domain.most_paths)} where that decides nothing.", "not bold")


def scenarios_counted(number: int) -> str:
    """Return a number of scenarios in words."""
    return "1 scenario" if number == 1 else f"{count(number)} scenarios"


def domain_notes(domain: DomainEntry) -> list[str]:
    """Return the box, what became of the scenarios, which do not pass, what is claimed, and what that proves."""
    before, after = domain_summary(domain)
    lost = _not_passing(domain)
    notes = [*before, *(_lost(one) for one in lost[:_SHOWN])]
    if len(lost) > _SHOWN:
        rest = len(lost) - _SHOWN
        notes.append(f"{count(rest)} more {'does' if rest == 1 else 'do'} not pass; audit.json has them all.")
    return [*notes, *after]


def domain_summary(domain: DomainEntry) -> tuple[list[str], list[str]]:
    """Return the box and what became of the scenarios; and what is claimed, and what that proves."""
    drawn = sum(one.kind == "drawn" for one in domain.scenarios)
    passed = sum(one.outcome == "passes" for one in domain.scenarios)
    box = joined(_side(clean(name), side) for name, side in domain.sides.items())
    share = percent(domain.share_of_audit, (0.0, 1.0))
    before = [
        f"The schemes of the verdict were tried at other parameters: {box}. On levels where the verdict is open, the "
        "reference alone was.",
        f"Of {_counted(drawn, len(domain.scenarios) - drawn)}, {count(passed)} "
        f"{'passes' if passed == 1 else 'pass'}, {_outcomes(_not_passing(domain))}. They took {share} of the steps of "
        "the audit itself.",
    ]
    return before, [_claim(domain.claimed, domain.sides), _proof(domain.proof, domain.claimed)]


def _not_passing(domain: DomainEntry) -> list[ScenarioEntry]:
    return [one for one in domain.scenarios if one.outcome != "passes"]


def refused_corners(domain: DomainEntry) -> list[str]:
    """Return the corners that are refused, with their parameters."""
    return [_named(one) for one in domain.scenarios if one.kind == "corner" and one.outcome == "refused"]


def box_table(domain: DomainEntry) -> Ruled:
    """Return, parameter by parameter, where the audit was made, what was tried and what is claimed."""
    headings = ("audited at", "tried from", "tried to", "claimed from", "claimed to")
    table = Ruled(("parameter", "words"), *((name, "number") for name in headings), ("scale", "words"))
    for name, side in domain.sides.items():
        claimed = None if domain.claimed is None else domain.claimed.parameters.get(name)
        low = high = NONE
        if claimed is not None:
            low, high = _claimed_end(claimed.low, side, 1), _claimed_end(claimed.high, side, -1)
        cells = (clean(name), *map(setting_value, (side.audited, side.low, side.high)), low, high, side.scale)
        table.add_row(*map(Text, cells))
    return table


def _claimed_end(value: float, side: SideEntry, inwards: int) -> str:
    """Return an end as the audit file writes it where it is one of the file's, else rounded inwards."""
    return setting_value(value) if value in (side.low, side.high, side.audited) else _end(value, inwards)


def lost_table(domain: DomainEntry) -> Ruled:
    """Return the scenarios that do not pass, the refused before the undecided: where, how and why."""
    table = Ruled(
        ("scenario", "words"), ("parameters", "words"), ("outcome", "unbroken"), ("levels", "words"), ("why", "words")
    )
    for one in sorted(_not_passing(domain), key=lambda one: one.outcome != "refused"):
        levels = [level.level for level in one.levels if level.outcome == one.outcome]
        words = ", ".join(map(str, levels)) or NONE
        why = f"the kernel cannot do it: {clean(one.message)}" if one.message is not None else _scenario_why(one)
        outcome = Text(one.outcome, style=_STYLES[one.outcome])
        table.add_row(Text(_name(one)), Text(_values(one)), outcome, Text(words), Text(why))
    return table


def passing_table(domain: DomainEntry) -> Ruled:
    """Return the scenarios that pass, each with the lowest edge of a format that it recommends."""
    table = Ruled(("scenario", "words"), ("parameters", "words"), ("lowest edge", "number"), ("on level", "number"))
    for one in domain.scenarios:
        if one.outcome != "passes":
            continue
        edges = [(level.edge_low, level.level) for level in one.levels if level.edge_low is not None]
        edge, level = min(edges, default=(None, None))
        shown = NONE if level is None else str(level)
        table.add_row(*map(Text, (_name(one), _values(one), shown_edge(edge, (1.0,)), shown)))
    return table


def domain_table(domain: DomainEntry) -> Ruled:
    """Return, level by level, the scheme that was tried, the worst of it, and the scenario that decides."""
    table = Ruled(
        ("level", "number"),
        ("scheme", "words"),
        ("lowest edge\nof its format", "number"),
        ("worst outcome", "words"),
        ("decided by", "words"),
    )
    for level in domain.levels:
        edge = NONE if level.edge_low is None else shown_edge(level.edge_low, (1.0,))
        by = _name(domain.scenarios[level.decided_by - 1]) if level.decided_by is not None else NONE
        outcome = Text(_outcome(level), style=_STYLES[level.outcome])
        table.add_row(Text(str(level.level)), Text(scheme_words(level.scheme)), Text(edge), outcome, Text(by))
    return table


def deciding(domain: DomainEntry) -> list[str]:
    """Return the parameters of the scenarios that decide a level."""
    numbers = sorted({level.decided_by for level in domain.levels if level.decided_by is not None})
    return [_named(domain.scenarios[number - 1]) for number in numbers]


def _outcome(level: DomainLevelEntry) -> str:
    return level.outcome if level.reason is None else f"{level.outcome}: {_why(level.outcome, level.reason)}"


def _why(outcome: str, reason: str) -> str:
    if reason == "reference":
        return "the reference does not run"
    return (REFUSED if outcome == "refused" else UNSETTLED).get(reason, reason)


def _counted(drawn: int, corners: int) -> str:
    ends = "1 corner" if corners == 1 else f"{count(corners)} corners"
    return f"{count(drawn)} drawn scenarios and {ends}"


def _outcomes(lost: Iterable[ScenarioEntry]) -> str:
    words = [one.outcome for one in lost]
    refused, undecided = words.count("refused"), words.count("undecided")
    parts = [
        f"{count(number)} {'is' if number == 1 else 'are'} {word}"
        for number, word in ((refused, "refused"), (undecided, "undecided"))
        if number
    ]
    return joined(parts) or "none fails"


def _named(scenario: ScenarioEntry) -> str:
    return f"{_name(scenario)} ({_values(scenario)})"


def _values(scenario: ScenarioEntry) -> str:
    return ", ".join(f"{clean(name)} = {figure(value, 4)}" for name, value in scenario.parameters.items())


def _name(scenario: ScenarioEntry) -> str:
    return f"{'scenario' if scenario.kind == 'drawn' else 'corner'} {scenario.number}"


def _lost(scenario: ScenarioEntry) -> str:
    """Return one scenario that does not pass, with its parameters, and why."""
    levels = [one.level for one in scenario.levels if one.outcome == scenario.outcome]
    where = f" on {levels_named(levels)}" if levels else ""
    name = _named(scenario)
    if scenario.message is not None:
        return f"{name} is refused, the kernel cannot do it: {clean(scenario.message)}."
    return f"{name} is {scenario.outcome}{where}: {_scenario_why(scenario)}."


def _scenario_why(scenario: ScenarioEntry) -> str:
    return _why(scenario.outcome, scenario.reason or "budget")


def _side(name: str, side: SideEntry) -> str:
    audited = f"audited at {setting_value(side.audited)}"
    return f"{name} from {setting_value(side.low)} to {setting_value(side.high)} ({side.scale}, {audited})"


def _claim(claimed: ClaimedEntry | None, sides: Mapping[str, SideEntry]) -> str:
    if claimed is None:
        return "Nothing is claimed: a scenario at the audited point itself does not pass."
    if all((one.low, one.high) == (sides[name].low, sides[name].high) for name, one in claimed.parameters.items()):
        return "The verdict is claimed for the whole box."
    if not claimed.scenarios:
        return (
            "The verdict is claimed for the audited point alone: no scenario that passes lies in what the others leave "
            "of the box."
        )
    box = joined(_span(clean(name), one) for name, one in claimed.parameters.items())
    lie = f"{scenarios_counted(claimed.scenarios)} {'lies' if claimed.scenarios == 1 else 'lie'} in it."
    where = f"{percent(claimed.share)} of the box in the coordinates of its scales" if claimed.share else "no more"
    return (
        f"The verdict is claimed for {box}: {where}. It is the largest box that holds the audited point and, of the "
        f"scenarios, only ones that pass; {lie}"
    )


def _span(name: str, one: SpanEntry) -> str:
    """Return what is claimed of one side, its ends rounded inwards."""
    return f"{name} from {_end(one.low, 1)} to {_end(one.high, -1)}"


def _end(value: float, inwards: int) -> str:
    shown = (figure(value, digits) for digits in range(4, 17))
    return next((text for text in shown if inwards * (float(text.replace(",", "")) - value) >= 0), repr(value))


def _proof(proof: ProofEntry, claimed: ClaimedEntry | None) -> str:
    """Return what the drawn scenarios prove of the box; an upper bound is rounded up."""
    words = f"With {100.0 * proof.confidence:.10g}% confidence less than {_up(proof.fails_below)} of the box fails: "
    words += f"{count(proof.passed)} of {count(proof.drawn)} drawn scenarios pass. "
    words += "Scrambled Sobol points are taken for independent ones here, and corners do not count."
    if claimed is not None and claimed.share < 1.0 and proof.claimed_fails_below is not None:
        words += f" Of what is claimed that is less than {_up(proof.claimed_fails_below)}."
    return words


def _up(share: float) -> str:
    """Return a share in per cent with two decimals, rounded up."""
    return f"{math.ceil(share * 10_000.0) / 100:.2f}%"
