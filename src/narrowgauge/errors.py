"""The errors that a user's input can cause: one class for each thing that can go wrong, each with its exit code.

A message says, in this order: where (the call, or the path into the file), what is wrong with the value,
what is accepted, and, where it helps, what to do.
"""

from __future__ import annotations

__all__ = [
    "AuditFileError",
    "AuditFolderError",
    "DispatchError",
    "EscapeError",
    "KernelError",
    "NarrowgaugeError",
    "OutsidePolicyError",
    "PolicyError",
    "RaisedElsewhereError",
    "RefusedError",
    "SettingsMixedError",
    "WorkerError",
    "said",
]

_LONGEST = 8192  # characters of a message that somebody else wrote


def said(problem: BaseException) -> str:
    """Return the text of an exception, whatever its class makes of it: a plain string of some thousand characters."""
    try:
        text = "".join([str(problem)])  # no subclass of str, which another process may not know
    except BaseException:  # the text of a kernel's own exception is made by the kernel's code
        return "(its text cannot be made)"
    return text if len(text) <= _LONGEST else f"{text[:_LONGEST]} ... (cut, of {len(text):,} characters)"


class NarrowgaugeError(Exception):
    """Base of all errors that are the input's fault and not the program's; ends with exit code 2."""

    exit_code = 2


class AuditFileError(NarrowgaugeError):
    """The audit file cannot be used.

    `source` is the file (or "audit" for a mapping handed over from Python), `key` the path into it.
    """

    def __init__(self, source: str, key: str, problem: str, accepted: str = "") -> None:
        self.source, self.key, self.problem, self.accepted = source, key, problem, accepted
        where = f"{source}: {key}" if key else source
        super().__init__(f"{where}: {problem}" + (f"; accepted: {accepted}" if accepted else ""))


class AuditFolderError(NarrowgaugeError):
    """The folder for the results cannot be used, or holds another audit."""


class KernelError(NarrowgaugeError):
    """The kernel raised in the reference, returned the wrong thing, or does not reproduce plain NumPy.

    `level` and `arm` name the run. The kernel's own exception, if there is one, is `__cause__`.
    """

    def __init__(self, message: str, *, level: int | None = None, arm: str | None = None) -> None:
        self.level, self.arm = level, arm
        place = "" if level is None else f"level {level}" + (f", arm {arm}" if arm else "") + ": "
        super().__init__(place + message)


class WorkerError(NarrowgaugeError):
    """The workers cannot do the work: a process, an executor or a cluster fails, or finds another kernel."""


class PolicyError(NarrowgaugeError):
    """No policy can be drawn up from an audit, or a policy does not cover what is asked of it."""


class OutsidePolicyError(PolicyError):
    """A level or a parameter is not what was audited; `reason` is "level", or "parameter" and its name."""

    def __init__(self, message: str, *, reason: str = "") -> None:
        self.reason = reason
        super().__init__(message)


class RaisedElsewhereError(Exception):
    """What a kernel raised in another process, as the cause of a KernelError; `text` is its traceback."""

    def __init__(self, text: str) -> None:
        self.text = text
        super().__init__(text)


class DispatchError(NarrowgaugeError):
    """Base of what stops a kernel inside the emulated arithmetic; recorded in the run when it is made.

    NumPy swallows TypeError and ValueError in places, and a kernel may swallow anything: the setting keeps
    each of these, so that a swallowed one still fails the run.
    """


class EscapeError(DispatchError):
    """A number was about to leave the emulated arithmetic unseen."""


class RefusedError(DispatchError):
    """An operation, argument or type that the emulated arithmetic does not offer."""


class SettingsMixedError(DispatchError):
    """Arrays of two different runs met in one operation."""
