"""What the canary of a kernel that rounds for itself shows, and what it cannot show."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from narrowgauge.record.canary import CanaryEntry
from narrowgauge.report.wording import clean, count, figure, joined, percent

__all__ = ["CANNOT_SHOW", "HELD_AGAINST", "canary_alarms", "canary_lines"]

HELD_AGAINST = "The kernel rounds for itself, and was held against wider and narrower formats on the same draws."
CANNOT_SHOW = (
    "From outside it shows whether the state is rounded in the format, and how results err. It cannot show whether "
    "every operation is rounded: wider intermediates inside an expression, fused products and approximate functions "
    "give other roundings of the same size. An emulated source of the same kernel, compared path by path, shows those."
)
_UNSOUND = ("result only", "wider", "narrower")


def canary_lines(entries: Sequence[CanaryEntry]) -> list[str]:
    """Return one line for each arm and finding, quantities that show the same together."""
    if not entries:
        return ["Not tried: in float64 the kernel raises on draws that shrink to nothing."]
    return [f"{clean(arm)}, {words}." for arm, words in _grouped(entries)]


def canary_alarms(entries: Iterable[CanaryEntry]) -> list[str]:
    """Return a line for each arm that does not round in the format it claims."""
    return [f"{clean(arm)}, {words}." for arm, words in _grouped([e for e in entries if e.finding in _UNSOUND])]


def _grouped(entries: Sequence[CanaryEntry]) -> Iterable[tuple[str, str]]:
    for arm in dict.fromkeys(entry.arm for entry in entries):
        words: dict[str, list[str]] = {}
        for entry in entries:
            if entry.arm == arm:
                words.setdefault(_words(entry), []).append(clean(entry.quantity))
        for said, names in words.items():
            yield arm, f"{joined(names)}: {said}"


def _words(entry: CanaryEntry) -> str:
    said = {
        "rounds": "rounded on the way",
        "result only": f"computed in {entry.like}, of which only the result is rounded",
        "wider": f"computed in {entry.like or 'a wider format'} and not rounded",
        "narrower": f"computed in {entry.like}, or with errors of its size",
        "unknown": "not to be told, since these results hardly show any rounding",
    }[entry.finding]
    if entry.arm == "float64" and entry.finding == "unknown":
        return "the reference, in none of the narrower formats"
    if entry.finding == "rounds" and entry.rounded_once is not None:
        said += f": {percent(1.0 - entry.rounded_once)} of the results are not those of a wider format rounded once"
        if entry.rounded_once_small is not None:
            said += f", {percent(1.0 - entry.rounded_once_small)} on draws that shrink to nothing"
        said += "" if entry.error is None else f"; median error {figure(entry.error, 2)} u"
    if entry.outside and entry.finding != "wider":
        said += f"; {count(entry.outside)} results are not in the format, so that their last operations were wider"
    return said
