"""The files that a gate writes beside what it prints, looked at before anything is measured."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from narrowgauge.errors import NarrowgaugeError
from narrowgauge.record.canonical import write_atomically
from narrowgauge.record.gate import GateReport, gate_text

__all__ = ["STEP", "STEP_SUMMARY", "GateFileError", "GateFiles"]

STEP_SUMMARY: Final = "GITHUB_STEP_SUMMARY"  # a hosting service names the file of a step's page in it
STEP: Final = ""  # in place of a file: the one that the variable names


class GateFileError(NarrowgaugeError):
    """A file that a gate was asked for cannot be written."""


def _junit(report: GateReport) -> str:
    from narrowgauge.policy.junit import junit_text

    return junit_text(report)


def _sarif(report: GateReport) -> str:
    from narrowgauge.policy.sarif import sarif_text

    return sarif_text(report)


def _summary(report: GateReport) -> str:
    from narrowgauge.policy.summary import summary_text

    return summary_text(report)


_FORMS: Final[Mapping[str, Callable[[GateReport], str]]] = {
    "junit": _junit,
    "sarif": _sarif,
    "summary": _summary,
    "json": gate_text,
}


@dataclass(frozen=True, slots=True)
class GateFiles:
    """What is to be written, by form: "junit", "sarif", "summary" (a file, or STEP) and "json"."""

    asked: Mapping[str, Path]
    step: Path | None

    @classmethod
    def of(cls, asked: Mapping[str, str | None], inputs: Iterable[Path]) -> GateFiles:
        """Return the files that were asked for; GateFileError for one that would overwrite an input, or has no folder.

        `inputs` are the audit files and policies of the gate.
        """
        files: dict[str, Path] = {}
        taken = {path.resolve() for path in inputs}
        for form, given in asked.items():
            if given is None or (form == "summary" and given == STEP):
                continue
            path = Path(given)
            if path.resolve() in taken or path.suffix == ".toml":
                raise GateFileError(
                    f"--{form} {given}: this would overwrite another file of the gate; {_accepted(form)}"
                )
            if path.is_dir() or not path.parent.is_dir():
                what = "this is a folder" if path.is_dir() else f"there is no folder {path.parent}"
                raise GateFileError(f"--{form} {given}: {what}; {_accepted(form)}")
            taken.add(path.resolve())
            files[form] = path
        return cls(files, _step() if asked.get("summary") == STEP else None)

    def write(self, report: GateReport) -> None:
        """Write them all; GateFileError says which one cannot be written."""
        for form, path in self.asked.items():
            _write(path, _FORMS[form](report))
        if self.step is not None:
            _append(self.step, _summary(report))


def _step() -> Path:
    name = os.environ.get(STEP_SUMMARY)
    if not name:
        raise GateFileError(
            f"--summary: the environment variable {STEP_SUMMARY} names no file to append to; accepted: --summary FILE"
        )
    return Path(name)


def _accepted(form: str) -> str:
    return f"accepted: --{form} with a file of its own in a folder that is there"


def _write(path: Path, text: str) -> None:
    try:
        if path.exists() and not path.is_file():  # a pipe or a device is written to, never replaced
            path.write_text(text, encoding="utf-8")
        else:
            write_atomically(path, text)
    except OSError as problem:
        raise GateFileError(f"{path}: cannot be written ({problem.strerror})") from None


def _append(path: Path, text: str) -> None:
    try:
        with path.open("a", encoding="utf-8") as file:  # what earlier steps said stays
            file.write(f"\n{text}")
    except OSError as problem:
        raise GateFileError(f"{path}: cannot be written ({problem.strerror})") from None
