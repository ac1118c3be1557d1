"""What a question to a policy takes, beside the least that a program would do by hand: a table and comparisons.

The policy is that of the reserve example, with 12 parameters, as it is and with five of them in boxes.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import msgspec
import numpy as np
from alternating import alternated, ratios
from benchmark_figures import Section, at_most, figure_of
from benchmark_sizes import Size

from narrowgauge.policy.guard import Policy, Rule
from narrowgauge.record.policy import ParameterPart, PolicyDocument, read_policy

__all__ = ["policy_questions"]

POLICY = Path(__file__).parents[2] / "examples" / "policy" / "reserve.policy.json"
BY_HAND = "a table of the levels, and 12 comparisons"
BOXES, LEVEL = 5, 3
ASKED = 2e-6  # seconds


def policy_questions(size: Size) -> Section:
    """Return each kind of question over the comparisons by hand, and what it takes in seconds."""
    document = read_policy(POLICY)
    audited = {name: part.fixed for name, part in document.domain.parameters.items()}
    beside = audited | {"rate": 1.0}
    policy, boxes = Policy(document), Policy(_with_boxes(document))
    falling = Policy(document, outside="reference")
    by_hand, numpys = _by_hand(document), {name: np.float64(value) for name, value in audited.items()}
    tasks: dict[str, Callable[[], object]] = {
        BY_HAND: lambda: by_hand(LEVEL, **audited),
        "a question": lambda: policy.at(LEVEL, **audited),
        f"a question, {BOXES} parameters in boxes": lambda: boxes.at(LEVEL, **audited),
        "a question with NumPy's float64": lambda: policy.at(LEVEL, **numpys),
        "an answer with the reference, beyond the ladder": lambda: falling.at(99, **audited),
        "an answer with the reference, the last parameter outside": lambda: falling.at(LEVEL, **beside),
    }
    seconds = alternated(tasks, size.rounds, size.least)
    section = Section()
    for name in tasks:
        if name != BY_HAND:
            section.figures.append(figure_of(ratios(seconds[name], seconds[BY_HAND]), name, BY_HAND))
    for name in tasks:
        asked = at_most(None if name == BY_HAND else ASKED)
        section.figures.append(figure_of(seconds[name], name, "", unit="s", asked=asked))
    return section


def _by_hand(document: PolicyDocument) -> Callable[..., Rule]:
    policy = Policy(document)
    audited = {name: part.fixed for name, part in document.domain.parameters.items()}
    rules = {one.level: policy.at(one.level, **audited) for one in document.levels}

    def rule(level: int, **parameters: object) -> Rule:
        for name, value in audited.items():
            if parameters[name] != value:
                raise ValueError(name)
        return rules[level]

    return rule


def _with_boxes(document: PolicyDocument) -> PolicyDocument:
    parameters = dict(document.domain.parameters)
    for name in list(parameters)[:BOXES]:
        value = parameters[name].fixed
        assert isinstance(value, float)
        parameters[name] = ParameterPart(low=value - 0.1, high=value + 0.1, scale="linear")
    return msgspec.structs.replace(document, domain=msgspec.structs.replace(document.domain, parameters=parameters))
