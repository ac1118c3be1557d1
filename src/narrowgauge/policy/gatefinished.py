"""A finished audit in place of a fresh one, judged where it is one of the kernel and settings that are there now.

Nothing here imports numpy, nor runs anything of the kernel's.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Final

from msgspec import UnsetType

from narrowgauge.errors import PolicyError
from narrowgauge.kernel.gatetable import plain_tables
from narrowgauge.kernel.identity import identity_beside, identity_of, identity_of_command
from narrowgauge.policy.gate import judge
from narrowgauge.policy.gatefacts import fact
from narrowgauge.policy.gatefile import Held
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.auditreading import read_audit
from narrowgauge.record.gate import Finding, GateEntry

__all__ = ["judge_finished"]

_ANEW = "audit the kernel anew"
# What is judged follows from these, but for their keys in _DRAWN. Of [domain] the box is looked at where its claim
# is judged, and nothing is judged that [lines] asks for.
_TABLES: Final = (
    "kernel",
    "library",
    "command",
    "parameters",
    "ladder",
    "target",
    "formats",
    "draws",
    "branches",
    "cost",
    "sampling",
)
# They say how much is drawn, how long that may take, and from which streams.
_DRAWN: Final = (
    "branches.paths",
    "command.seconds",
    "sampling.block",
    "sampling.paths",
    "sampling.most_paths",
    "sampling.seed",
)
# Functions in files of their own, which a policy's fingerprint does not cover.
_BESIDE: Final = (("draws", "approximate"), ("branches", "low"), ("branches", "correction"), ("branches", "library"))


def judge_finished(held: Held, folder: Path) -> GateEntry:
    """Return the verdict on the finished audit in a folder.

    One of another state of the kernel, or of other settings than the audit file has now, never passes. Raises
    DocumentError where there is no audit.
    """
    record, _ = read_audit(folder)
    given = plain_tables(held.audit)
    settings = list(_otherwise(given, record.asked))
    present = [] if settings else list(_present(held, given, record))
    judged = judge(held.policy, record, stale=held.settings.stale, alone=True, counted=held.settings.watch)
    paths = [level.paths for level in next(iter(record.quantities.values())).levels]
    return held.entry([*settings, *present, *judged], record, seed=None, paths=paths)


def _present(held: Held, given: Mapping[str, Any], record: AuditRecord) -> Iterator[Finding]:
    """Yield a finding where the audit is not one of the kernel that is there now, or nobody can tell."""
    source = record.source
    if isinstance(source, UnsetType):
        return  # the fingerprint, which is not there, is open
    try:
        now = _fingerprint(held, given, record.kernel.run, source.modules)
    except (PolicyError, OSError, SyntaxError, ValueError) as problem:
        yield fact("run", "fails", f"the kernel that is there now cannot be read: {problem}")
        return
    if now != source.fingerprint:
        yield fact("run", "fails", f"the audit is one of another state of the kernel; {_ANEW}")
    own = {record.kernel.run.rpartition(":")[0], "", *source.modules}
    for table, key in _BESIDE:
        named = _table(given, table).get(key)
        if isinstance(named, str) and (named if key == "library" else named.rpartition(":")[0]) not in own:
            what = f"whether {named} is what was audited is not known; the gate without --measured runs it"
            yield fact("run", "undecided", what)


def _fingerprint(held: Held, given: Mapping[str, Any], run: str, modules: list[str]) -> str:
    """Return the fingerprint of the kernel that is there now; PolicyError, OSError, SyntaxError or ValueError."""
    folder, library, command = held.audit.parent, given.get("library"), given.get("command")
    if isinstance(library, dict):
        return identity_of(folder / str(library.get("path")), run=run, covers="bytes", modules=())
    if isinstance(command, dict):
        return identity_of_command(folder, [str(word) for word in command.get("run", [])])
    shared = [str(name) for name in _table(given, "kernel").get("shared", [])]
    return identity_beside(folder, run, modules=modules, shared=shared)


def _otherwise(given: Mapping[str, Any], asked: Mapping[str, object]) -> Iterator[Finding]:
    """Yield a finding for each setting of the audit file that the finished audit had otherwise.

    `given` is the audit file as it stands, `asked` has every default, too, and says which of them were not given.
    """
    listed = asked.get("assumed")
    assumed = listed if isinstance(listed, list) else []
    for name in _TABLES:
        now, then = _table(given, name), _table(asked, name)
        for key in dict.fromkeys([*now, *then]):
            dotted = f"{name}.{key}"
            if dotted in _DRAWN:
                same = True
            elif key in now and (key in then or name == "parameters" or not then):
                same = key in then and _same(now[key], then[key], spaced=dotted == "kernel.layout")
            elif key in now:
                same = True  # it says nothing of such a kernel, as the audit knew
            else:
                same = name != "parameters" and not _was_given(dotted, then[key], given, assumed)
            if not same:
                before, after = _shown(then.get(key)), _shown(now.get(key))
                what = f"{dotted} is not what the audit was made with, {before}, but {after}; {_ANEW}"
                yield fact("settings", "fails", what)


def _was_given(dotted: str, value: object, given: Mapping[str, Any], assumed: list[Any]) -> bool:
    """Return whether a key that the audit file has not stood in the one that was audited."""
    if dotted in assumed or value is None:
        return False
    return not (dotted.startswith("kernel.") and ("library" in given or "command" in given))  # these say what is run


def _same(now: object, then: object, *, spaced: bool = False) -> bool:
    """Return whether two values are the same but for the type of their numbers."""
    if isinstance(now, dict) and isinstance(then, dict):
        return now.keys() == then.keys() and all(_same(now[key], then[key]) for key in now)
    if isinstance(now, list) and isinstance(then, list):
        return len(now) == len(then) and all(_same(*pair) for pair in zip(now, then, strict=True))
    if spaced:
        return str(now).replace(" ", "") == str(then).replace(" ", "")
    return now == then and isinstance(now, bool) == isinstance(then, bool)


def _table(tables: Mapping[str, object], name: str) -> dict[str, Any]:
    table = tables.get(name)
    return table if isinstance(table, dict) else {}


def _shown(value: object) -> str:
    text = "not there" if value is None else str(value)
    return text if len(text) <= 60 else f"{text[:60]} ..."
