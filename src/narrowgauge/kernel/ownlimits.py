"""What kernels that round for themselves cannot have, and what only they can have."""

from __future__ import annotations

from collections.abc import Mapping

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.kernel.audittables import (
    CommandTable,
    CostTable,
    DrawsTable,
    FormatsTable,
    KernelTable,
    LibraryTable,
    TableError,
    kind_of,
    shown,
)
from narrowgauge.kernel.owntables import OWN_FORMATS

__all__ = ["check_own"]


def check_own(
    kernel: KernelTable,
    *,
    formats: FormatsTable,
    cost: CostTable,
    draws: DrawsTable | None,
    parameters: Mapping[str, object],
    library: LibraryTable | None,
    command: CommandTable | None,
) -> None:
    """Raise TableError for what a kernel that rounds for itself cannot have, or one that is emulated cannot measure."""
    if cost.measured:
        _check_measured(cost, kernel, command)
    if kernel.rounds != "itself":
        return
    if kernel.takes == "rng":
        raise TableError(
            "kernel.takes",
            '"rng" with rounds = "itself": the numbers of a generator reach a kernel in float64, and only the '
            "emulation can round them before they are used",
            '"increments", "normals" or "uniforms"',
        )
    if "paths" not in kernel.layout:
        why = f'{shown(kernel.layout)} names no paths, and a kernel with rounds = "itself" gets all paths in one call'
        raise TableError("kernel.layout", why, "an order of the axes with paths")
    if kernel.allow:
        why = 'with rounds = "itself" there is no emulation that a value could leave'
        raise TableError("kernel.allow", why, "no such key")
    named = {f"formats.{key}": getattr(formats, key) for key in ("narrow", "wide")}
    named = {"formats.today": (formats.today,), **named, "draws.formats": draws.formats if draws else ()}
    for key, names in named.items():
        for name in names:
            if name not in OWN_FORMATS:
                why = f'{shown(name)} has no type of its own, in which a kernel with rounds = "itself" could get draws'
                raise TableError(key, why, ", ".join(OWN_FORMATS))
    if library is not None:
        _check_parameters(library, parameters)


def _check_measured(cost: CostTable, kernel: KernelTable, command: CommandTable | None) -> None:
    """Raise TableError where the times of a kernel say nothing of its costs, or costs are given as well."""
    accepted = "false, and costs of a step"
    if kernel.rounds != "itself":
        why = "true, but the kernel is emulated, which takes other times"
        raise TableError("cost.measured", why, f'{accepted}; or a kernel with rounds = "itself"')
    if command is not None:
        raise TableError("cost.measured", "true, but a command spends its time on starting and on files", accepted)
    for name in FORMATS:
        if getattr(cost, name) is not None:
            raise TableError(f"cost.{name}", "given, though measured = true", "no such key, or measured = false")


def _check_parameters(library: LibraryTable, parameters: Mapping[str, object]) -> None:
    """Raise TableError unless `[library] parameters` names every parameter, and each is made of numbers."""
    known = ", ".join(parameters) or "none, since [parameters] is empty"
    for name in library.parameters:
        if name not in parameters:
            raise TableError("library.parameters", f"{shown(name)} is no key of [parameters]", known)
    for name, value in parameters.items():
        if name not in library.parameters:
            raise TableError("library.parameters", f"{shown(name)} of [parameters] is missing", known)
        if (odd := _not_number(value)) is not None:
            why = f"{shown(odd)} is {kind_of(odd)}, and a library gets float64 numbers"
            raise TableError(f"parameters.{name}", why, "a number, or an array of numbers")


def _not_number(value: object) -> object:
    """Return the first scalar that is no number, or None."""
    if isinstance(value, list):
        return next((odd for one in value if (odd := _not_number(one)) is not None), None)
    return None if isinstance(value, int | float) and not isinstance(value, bool) else value
