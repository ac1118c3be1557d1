"""Around a gate: the policy that an audit file names, and where its kernel stands; no numpy."""

from __future__ import annotations

import ast
import re
import shlex
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import msgspec

from narrowgauge.errors import AuditFileError, DispatchError, KernelError
from narrowgauge.kernel.gatetable import GateSettings, audit_files_of, gate_settings, project_file
from narrowgauge.policy.gate import verdict_of
from narrowgauge.policy.gatefacts import fact
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.gate import Finding, GateEntry, Place
from narrowgauge.record.policy import MachinePart, PolicyDocument, read_policy

__all__ = ["Held", "audit_files", "held_to", "stopped"]

_ROOTS = (".git", "pyproject.toml")  # what lies at the root of a repository, the surer sign first


@dataclass(frozen=True, slots=True, kw_only=True)
class Held:
    """An audit file with the policy that its kernel is held to, and the settings of the gate."""

    audit: Path
    settings: GateSettings
    policy: PolicyDocument
    root: Path

    def entry(
        self, findings: Sequence[Finding], record: AuditRecord | None, *, seed: int | None, paths: Sequence[int] = ()
    ) -> GateEntry:
        """Return the verdict on the audit file; `record` is the last one that was measured, if one was."""
        here = None if record is None else _machine_of(record)
        return GateEntry(
            audit=self._shown(self.audit),
            policy=self._shown(self.settings.policy),
            kernel=self.policy.kernel.run,
            place=self.place(),
            verdict=verdict_of(findings),
            findings=[self._placed(one) for one in findings],
            seed=seed,
            paths=list(paths),
            policy_machine=self.policy.evidence.machine,
            machine=here,
            same_machine=None if here is None else here == self.policy.evidence.machine,
            renew=f"narrowgauge policy {shlex.quote(self._shown(self.audit))}",
        )

    def place(self) -> Place:
        """Return where the kernel's function stands; line 1 of the audit file where it is not a file of Python."""
        target, _, name = self.policy.kernel.run.rpartition(":")
        inside = target if target.endswith(".py") else f"{target.replace('.', '/')}.py"
        for path in (self.audit.parent / inside, self.audit.parent / inside.removesuffix(".py") / "__init__.py"):
            if target and path.is_file():
                return Place(file=self._shown(path), line=_line_of(path, name))
        return Place(file=self._shown(self.audit), line=1)

    def _placed(self, finding: Finding) -> Finding:
        """Return a finding whose place is relative to the repository: a record has it from the audit file's folder."""
        if finding.place is None:
            return finding
        path = self.audit.parent / finding.place.file
        place = self.place() if not path.is_file() else Place(file=self._shown(path), line=max(1, finding.place.line))
        return msgspec.structs.replace(finding, place=place)

    def _shown(self, path: Path) -> str:
        full = path.resolve()
        return full.relative_to(self.root).as_posix() if full.is_relative_to(self.root) else full.name


def audit_files(given: Sequence[str]) -> list[Path]:
    """Return the audit files that were named, or those of [tool.narrowgauge] in the nearest pyproject.toml."""
    if given:
        return [Path(name) for name in given]
    project = project_file(Path.cwd())
    if project is None:
        raise AuditFileError(
            "gate",
            "",
            "no audit file was named, and no pyproject.toml from here upwards has a table [tool.narrowgauge]",
            'AUDIT.toml, or [tool.narrowgauge] with audits = ["path/of/audit.toml"]',
        )
    return audit_files_of(project)


def held_to(audit: Path) -> Held:
    """Return what an audit file is held to; AuditFileError or DocumentError where a file is missing or wrong."""
    settings = gate_settings(audit)
    if not settings.policy.is_file():
        what, accepted = f"there is no policy {settings.policy}", f"one made by narrowgauge policy {audit}"
        raise AuditFileError(str(audit), "policy.file", what, accepted)
    return Held(audit=audit, settings=settings, policy=read_policy(settings.policy), root=_root_of(audit))


def stopped(problem: KernelError | DispatchError) -> Finding:
    """Return the finding of a gate that the kernel stopped: it raised, ended its process, or let a value leave."""
    text = str(problem)
    # Where a message knows the line it begins with it, behind level and arm.
    found = re.match(r"(?:level \d+(?:, arm \S+)?: )?([^\s:][^:\n]*):([1-9]\d*): ", text)
    place = None if found is None else Place(file=found[1], line=int(found[2]))
    return fact("escapes" if isinstance(problem, DispatchError) else "run", "fails", text, place=place)


def _machine_of(record: AuditRecord) -> MachinePart:
    known: dict[str, Any] = record.provenance
    return MachinePart(
        system=str(known.get("system", "")),
        machine=str(known.get("machine", "")),
        vector_features=[str(one) for one in known.get("vector_features", [])],
    )


def _root_of(audit: Path) -> Path:
    """Return the folder that paths are relative to: of the repository, else the current one, else the audit file's."""
    folder = audit.resolve().parent
    for name in _ROOTS:
        for place in (folder, *folder.parents):
            if (place / name).exists():
                return place
    here = Path.cwd().resolve()
    return here if folder.is_relative_to(here) else folder


def _line_of(path: Path, name: str) -> int:
    try:
        tree = ast.parse(path.read_bytes())
    except (OSError, SyntaxError, ValueError):
        return 1
    found = [one.lineno for one in tree.body if isinstance(one, ast.FunctionDef) and one.name == name]
    return found[-1] if found else 1
