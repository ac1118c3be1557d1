"""The tables `[policy]` and `[gate]` of an audit file, and `[tool.narrowgauge]` of a project; no numpy.

They say nothing of what an audit measures, so that a record does not hold them. The gate reads them by themselves:
judging a finished audit needs nothing else of the file.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, Literal

from narrowgauge.errors import AuditFileError

__all__ = [
    "GATE_LINES",
    "GateSettings",
    "audit_files_of",
    "gate_settings",
    "plain_tables",
    "project_file",
    "refusal_of",
]

_PATHS, _MOST = 8192, 2**40  # of a level at the first look, and the most that can be asked for
_PROJECT = "pyproject.toml"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Row:
    """What one key accepts, in words and as a test."""

    accepted: str
    holds: Callable[[Any], bool]


def _count(value: object) -> bool:
    return type(value) is int and 1 <= value <= _MOST


_ROWS: Final = {
    "policy.file": _Row(accepted="the path of a policy, relative to the audit file", holds=lambda v: type(v) is str),
    "gate.stale": _Row(accepted='"note" or "fail"', holds=lambda v: v in ("note", "fail")),
    "gate.paths": _Row(accepted=f"an integer from 1 to {_MOST}", holds=_count),
    "gate.most_paths": _Row(accepted=f"an integer from gate.paths to {_MOST}", holds=_count),
    "gate.watch": _Row(accepted="a boolean", holds=lambda v: type(v) is bool),
}
# What a draft says of them.
GATE_LINES: Final = (
    "[policy]",
    '# file = "audit.policy.json"  # what the gate holds the kernel to; default: the name of this file, .policy.json',
    "",
    "[gate]",
    '# stale = "note"  # what a kernel is that changed and still holds, or "fail"',
    f"# paths = {_PATHS}  # paths of a level at the gate's first look",
    "# most_paths = 1048576  # the most that a level gets; the default is sampling.most_paths",
    "# watch = false  # true: lost additions and subnormals are counted and held to the policy's, too",
)
_TABLES = tuple(dict.fromkeys(key.partition(".")[0] for key in _ROWS))


@dataclass(frozen=True, slots=True, kw_only=True)
class GateSettings:
    """Where the policy stands, and how the gate is held.

    `stale` says what a policy is whose kernel changed and still holds. A level gets `paths` at the first look, twice
    that at the next, up to `most_paths` (None: sampling.most_paths, or `paths` where that is less). With `watch` every
    number of a few paths is looked at, for the shares of lost additions and of subnormals.
    """

    policy: Path
    stale: Literal["note", "fail"] = "note"
    paths: int = _PATHS
    most_paths: int | None = None
    watch: bool = False


def refusal_of(raw: Mapping[str, object]) -> tuple[str, str, str] | None:
    """Return the first key of the two tables that is not accepted, what is wrong with it and what is, or None."""
    for name in _TABLES:
        table = raw.get(name, {})
        keys = [key.partition(".")[2] for key in _ROWS if key.startswith(f"{name}.")]
        if not isinstance(table, dict):
            return name, f"{table!r} is no table", f"a table with keys of {', '.join(keys)}"
        for key, value in table.items():
            dotted = f"{name}.{key}"
            if dotted not in _ROWS:
                like = difflib.get_close_matches(key, keys, n=1)
                return dotted, "unknown key" + (f', perhaps "{like[0]}" is meant' if like else ""), ", ".join(keys)
            if not _ROWS[dotted].holds(value):
                return dotted, f"{value!r} is not accepted", _ROWS[dotted].accepted
    gate: Any = raw.get("gate", {})
    least = gate.get("paths", _PATHS)
    if gate.get("most_paths", least) < least:
        return "gate.most_paths", f"{gate['most_paths']} is below gate.paths", f"an integer of {least} or more"
    return None


def gate_settings(path: Path) -> GateSettings:
    """Return what an audit file says of its gate; AuditFileError says what is wrong with it, and where."""
    source = str(path)
    raw = plain_tables(path)
    refusal = refusal_of(raw)
    if refusal is not None:
        raise AuditFileError(source, *refusal)
    policy, gate = raw.get("policy", {}), raw.get("gate", {})
    file = policy.get("file", f"{path.stem}.policy.json")
    return GateSettings(policy=path.parent / file, **gate)


def project_file(folder: Path) -> Path | None:
    """Return the nearest pyproject.toml in a folder or above it that has a table [tool.narrowgauge]."""
    for place in (folder, *folder.parents):
        path = place / _PROJECT
        if path.is_file() and isinstance(plain_tables(path).get("tool", {}).get("narrowgauge"), dict):
            return path
    return None


def audit_files_of(project: Path) -> list[Path]:
    """Return the audit files that [tool.narrowgauge] names, relative to its folder; AuditFileError if it is wrong."""
    table = plain_tables(project)["tool"]["narrowgauge"]
    key, accepted = "tool.narrowgauge", 'audits = ["path/of/audit.toml", ...]'
    unknown = next((name for name in table if name != "audits"), None)
    if unknown is not None:
        raise AuditFileError(str(project), f"{key}.{unknown}", "unknown key", accepted)
    names = table.get("audits")
    if not isinstance(names, list) or not names or not all(type(name) is str for name in names):
        raise AuditFileError(str(project), f"{key}.audits", f"{names!r} is not accepted", accepted)
    return [project.parent / name for name in names]


def plain_tables(path: Path) -> dict[str, Any]:
    """Return what a TOML file holds, unchecked; AuditFileError where it cannot be read, or is none."""
    try:
        return tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except FileNotFoundError:
        raise AuditFileError(str(path), "", "there is no such file", "the path of a TOML file") from None
    except OSError as problem:
        raise AuditFileError(str(path), "", f"cannot be read ({problem.strerror})", "the path of a TOML file") from None
    except (ValueError, RecursionError) as problem:  # no TOML, or no UTF-8
        raise AuditFileError(str(path), "", f"this is not TOML: {problem}", "TOML in UTF-8") from None
