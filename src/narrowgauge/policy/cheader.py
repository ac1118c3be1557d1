"""A policy as one C header, for compiled services: the same rules, the same limits, nothing else to link.

C99, and C++ from C++11 on. Numbers are written by Python's shortest repr, which reads back as the same double. Names
and texts of the policy's reach the header as comments, as fields of a struct, and as literals; whatever they hold, it
stays a comment, a field or a literal.
"""

from __future__ import annotations

import hashlib
import re
import textwrap
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path
from typing import Final, get_args

from narrowgauge.errors import PolicyError
from narrowgauge.policy.cfields import Field, comment, fields_of, literal
from narrowgauge.record.canonical import write_atomically
from narrowgauge.record.policy import FormatName, LevelPart, PolicyDocument

__all__ = ["c_header", "write_c_header"]

_WIDTH: Final = 100
_LONGEST = 40  # characters of a prefix; compilers tell 63 of an identifier apart
_FORMATS: tuple[str, ...] = get_args(FormatName)
_ABOUT = (
    "A rule says how to estimate one level: alone in `narrow`, or split between `narrow` and a correction from it to "
    "`wide`, with the paths to plan for each branch. Where `outside` says that the policy does not cover what was "
    "asked, the rule is the reference, float64 alone, with the paths planned for what was audited; beyond the ladder "
    "none are. "
    "C99, or C++ from C++11 on. Compiled with -ffinite-math-only, or -ffast-math, NaN may pass for a number that was "
    "audited."
)


def write_c_header(document: PolicyDocument, path: Path) -> None:
    """Write the header so that the file holds either its old content or all of the new; PolicyError where it cannot."""
    text = c_header(document)
    try:
        write_atomically(path, text)
    except OSError as problem:
        raise PolicyError(f"{path}: cannot be written: {problem.strerror}") from None


def c_header(document: PolicyDocument) -> str:
    """Return a policy as a C header in ASCII; every name in it begins with the kernel's, `reserve_value` for example.

    `PREFIX_at(level, &parameters)` gives the rule of a level, with `outside` where Python's guard would raise or
    answer with the reference. Parameters are fields of `PREFIX_parameters`: numbers as double (as int64_t where a
    double does not hold it), texts, booleans, and arrays of numbers with their count, row by row. Of a NULL pointer the
    first parameter is outside. Raises PolicyError, with the parameter's name, for other arrays and for texts that C
    does not hold.
    """
    prefix = _prefix(document.kernel.run)
    fields = fields_of(document.domain.parameters)
    macro = f"{prefix.upper()}_POLICY_H"
    parts = [
        _title(document),
        [f"#ifndef {macro}", f"#define {macro}"],
        _includes(fields),
        [f"#define {prefix.upper()}_LEVELS {len(document.levels)}u"],
        [f'#define {prefix.upper()}_FINGERPRINT "{document.kernel.fingerprint}"'],
        _types(prefix, fields),
        *([_parameters(prefix, fields)] if fields else []),
        _rules(prefix, document.levels),
        *([_examined(prefix, fields)] if fields else []),
        _at(prefix, bool(fields)),
        [f"#endif /* {macro} */"],
    ]
    return "\n\n".join("\n".join(part) for part in parts) + "\n"


def _prefix(run: str) -> str:
    """Return what every identifier begins with, from the kernel's file and function: no reserved name of C or C++."""
    module, _, function = run.rpartition(":")
    stem = re.split(r"[/.]", re.sub(r"\.(py|so|dylib|dll)$", "", module))[-1]
    words = re.sub(r"[^0-9A-Za-z]+", "_", f"{stem} {function.rpartition('/')[2]}").strip("_")
    prefix = words if words[:1].isalpha() else f"kernel_{words}".rstrip("_")
    if len(prefix) <= _LONGEST:
        return prefix
    return f"{prefix[: _LONGEST - 9].rstrip('_')}_{hashlib.sha256(run.encode()).hexdigest()[:8]}"


def _title(document: PolicyDocument) -> list[str]:
    target = ", ".join(f"{name} {rmse!r}" for name, rmse in document.target.rmse.items())
    lines = [
        *_paragraph(
            f"Precision policy of {document.kernel.run}, written by {document.written_by}. INCLUDE, DO NOT EDIT."
        ),
        *_paragraph(f"Target, root-mean-square error: {target}."),
        "",
        *_paragraph(_ABOUT),
        "",
        *(line for caution in document.cautions for line in _paragraph(caution, "- ")),
    ]
    return ["/*", *(f"   {line}".rstrip() for line in lines), "*/"]


def _paragraph(text: str, first: str = "") -> list[str]:
    return textwrap.wrap(comment(text), _WIDTH - 3, initial_indent=first, subsequent_indent=" " * len(first)) or [""]


def _includes(fields: Sequence[Field]) -> list[str]:
    lines = ["#include <stddef.h>", "#include <stdint.h>"]
    if any(one.kind == "text" for one in fields):
        lines.append("#include <string.h>")
    if any(one.kind == "boolean" for one in fields):
        lines += ["#ifndef __cplusplus", "#include <stdbool.h>", "#endif"]
    return lines


def _types(prefix: str, fields: Sequence[Field]) -> list[str]:
    reasons = ["inside", "outside_level", *(f"outside_parameter_{one.name}" for one in fields)]
    return [
        *_enumeration(prefix, "scheme", ["scheme_alone", "scheme_split"]),
        *_enumeration(prefix, "format", ["format_none", *(f"format_{name}" for name in _FORMATS)]),
        *_enumeration(prefix, "draws", ["draws_exact", "draws_approximate"]),
        "/* Why a rule is the reference: the first that is not as it was audited. */",
        *_enumeration(prefix, "outside", reasons),
        "typedef struct {",
        f"    {prefix}_scheme scheme;",
        f"    {prefix}_format narrow;",
        f"    {prefix}_format wide; /* none where there is no correction branch */",
        f"    {prefix}_draws draws; /* of the narrow branch; a wide one has exact draws */",
        "    const char *rounding;",
        "    uint64_t paths; /* 0: nobody has planned any */",
        "    uint64_t correction_paths; /* 0: no correction branch */",
        f"    {prefix}_outside outside;",
        f"}} {prefix}_rule;",
    ]


def _enumeration(prefix: str, name: str, members: Iterable[str]) -> Iterator[str]:
    yield "typedef enum {"
    listed = [f"    {prefix}_{member}" for member in members]
    yield ",\n".join(listed)
    yield f"}} {prefix}_{name};"
    yield ""


def _parameters(prefix: str, fields: Sequence[Field]) -> list[str]:
    lines = ["/* What the kernel is given. */", "typedef struct {"]
    for one in fields:
        lines += [f"    {declared};" + (f" /* {said} */" if said else "") for declared, said in one.declared()]
    return [*lines, f"}} {prefix}_parameters;"]


def _rules(prefix: str, levels: Sequence[LevelPart]) -> list[str]:
    rows = [line for one in levels for line in _row(prefix, one)]
    return [f"static const {prefix}_rule {prefix}_rules[{len(levels)}] = {{", *rows, "};"]


def _row(prefix: str, one: LevelPart) -> list[str]:
    wide = one.wide or "none"
    return [
        f"    /* level {one.level}: {one.steps} steps */",
        f"    {{{prefix}_scheme_{one.scheme}, {prefix}_format_{one.narrow}, {prefix}_format_{wide},",
        f"     {prefix}_draws_{one.draws}, {literal(one.rounding)}, UINT64_C({one.paths}), "
        f"UINT64_C({one.correction_paths or 0}), {prefix}_inside}},",
    ]


def _examined(prefix: str, fields: Sequence[Field]) -> list[str]:
    lines = []
    if any(one.kind in ("number", "numbers") for one in fields):
        lines += [
            f"static inline int {prefix}_within(double value, double low, double high)",
            "{",
            "    return value >= low && value <= high;",
            "}",
            "",
        ]
    if any(one.kind == "numbers" and one.values for one in fields):
        lines += [
            f"static inline int {prefix}_same(const double *given, size_t count, const double *fixed, size_t expected)",
            "{",
            "    size_t i;",
            "    if (given == NULL || count != expected) return 0;",
            "    for (i = 0; i < count; i++) {",
            f"        if (!{prefix}_within(given[i], fixed[i], fixed[i])) return 0;",
            "    }",
            "    return 1;",
            "}",
            "",
        ]
    for one in fields:
        lines += one.table(prefix)
    lines += [
        "/* Return whether the parameters are as they were audited, or the first that is not; of NULL the first. */",
        f"static inline {prefix}_outside {prefix}_examined(const {prefix}_parameters *given)",
        "{",
        f"    if (given == NULL) return {prefix}_outside_parameter_{fields[0].name};",
        *(f"    if ({one.refused(prefix)}) return {prefix}_outside_parameter_{one.name};" for one in fields),
        f"    return {prefix}_inside;",
        "}",
    ]
    return lines


def _at(prefix: str, asks: bool) -> list[str]:
    given = f", const {prefix}_parameters *given" if asks else ""
    found = f"{prefix}_examined(given)" if asks else f"{prefix}_inside"
    levels = f"{prefix.upper()}_LEVELS"
    return [
        "/* Return the rule of a level: the reference where `outside` is anything but inside. */",
        f"static inline {prefix}_rule {prefix}_at(unsigned level{given})",
        "{",
        f"    {prefix}_rule rule = {{{prefix}_scheme_alone, {prefix}_format_float64, {prefix}_format_none,",
        f'        {prefix}_draws_exact, "nearest", 0, 0, {prefix}_outside_level}};',
        f"    if (level >= {levels}) return rule;",
        f"    rule.outside = {found};",
        f"    if (rule.outside == {prefix}_inside) return {prefix}_rules[level];",
        f"    rule.paths = {prefix}_rules[level].paths;",
        "    return rule;",
        "}",
    ]
