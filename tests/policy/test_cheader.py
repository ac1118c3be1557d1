"""The C header of a policy: it compiles without a warning as C and as C++, and says what the guard says."""

from __future__ import annotations

import math
import re
import shutil
import subprocess
from pathlib import Path
from typing import Any, get_args

import msgspec
import pytest
from guard_cases import HOSTILE, c_policies, document, questions, with_parameters
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from narrowgauge.errors import PolicyError
from narrowgauge.policy.cfields import comment, fields_of, literal
from narrowgauge.policy.cheader import c_header, write_c_header
from narrowgauge.policy.guard import Policy, Rule
from narrowgauge.record.policy import FormatName, ParameterPart, PolicyDocument

WARNINGS = [
    "-Wall",
    "-Wextra",
    "-Wpedantic",
    "-Wconversion",
    "-Wsign-conversion",
    "-Wshadow",
    "-Wfloat-equal",
    "-Werror",
]
COMPILERS = {"C99": ["gcc", "-std=c99"], "C++11": ["g++", "-std=c++11", "-Wold-style-cast", "-Wuseless-cast"]}
FORMATS = get_args(FormatName)


def built(folder: Path, language: str, text: str, *flags: str) -> Path:
    """Compile a program that includes p.h, with every warning an error; skips without the compiler."""
    compiler, *own = COMPILERS[language]
    if shutil.which(compiler) is None:
        pytest.skip(f"{compiler} is not installed")
    source, program = folder / ("p.c" if compiler == "gcc" else "p.cpp"), folder / "p"
    source.write_text(text, encoding="ascii")
    command = [compiler, *own, *WARNINGS, *flags, "-o", str(program), str(source)]
    done = subprocess.run(command, check=False, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr[:3000]
    return program


def prefix_of(header: str) -> str:
    """Return the header's prefix, in the writing of its identifiers."""
    found = re.search(r"^static const (\w+)_rule ", header, re.MULTILINE)
    assert found is not None
    return found[1]


def number(value: float) -> str:
    if math.isnan(value):
        return "NAN"
    return repr(float(value)) if math.isfinite(value) else "INFINITY" if value > 0 else "-INFINITY"


def program(made: PolicyDocument, header: str, asked: list[tuple[int, dict[str, Any]]]) -> str:
    """Return a program that prints the answer to each question, one a line; it includes the header twice."""
    prefix = prefix_of(header)
    lines = ["#include <inttypes.h>", "#include <math.h>", "#include <stdio.h>", '#include "p.h"', '#include "p.h"']
    lines += [f"static void show({prefix}_rule rule)", "{", "    const char *at;"]
    lines += ['    printf("%d %d %d %d %d ", rule.scheme, rule.narrow, rule.wide, rule.draws, rule.outside);']
    lines += ['    printf("%" PRIu64 " %" PRIu64 " -", rule.paths, rule.correction_paths);']
    lines += ['    for (at = rule.rounding; *at; at++) printf("%02x", *at & 255);', '    printf("\\n");', "}"]
    lines += ["int main(void)", "{"]
    for level, parameters in asked:
        lines += ["    {", *(f"        {line}" for line in _question(prefix, made, level, parameters)), "    }"]
    return "\n".join([*lines, "    return 0;", "}"]) + "\n"


def _question(prefix: str, made: PolicyDocument, level: int, parameters: dict[str, Any]) -> list[str]:
    fields = fields_of(made.domain.parameters)
    if not fields:
        return [f"show({prefix}_at({level}u));"]
    before, lines = [], [f"{prefix}_parameters given;"]
    for place, one in enumerate(fields):
        value = parameters[one.parameter]
        if one.kind == "numbers":
            flat = flattened(value)
            before.append(f"static const double array_{place}[] = {{{', '.join(map(number, flat)) or '0.0'}}};")
            lines += [f"given.{one.name} = array_{place};", f"given.{one.counted} = {len(flat)};"]
        else:
            lines.append(f"given.{one.name} = {_scalar(one.kind, value)};")
    return [*before, *lines, f"show({prefix}_at({level}u, &given));"]


def _scalar(kind: str, value: Any) -> str:
    if kind == "text":
        return literal(value)
    if kind == "boolean":
        return "true" if value else "false"
    if kind == "whole":
        return f"-INT64_C({2**63 - 1}) - 1" if value == -(2**63) else f"INT64_C({value})"
    return number(value)


def flattened(value: Any) -> list[float]:
    return [number for one in value for number in flattened(one)] if isinstance(value, list) else [float(value)]


def expected(made: PolicyDocument, level: int, parameters: dict[str, Any]) -> str:
    """Return the line that the guard's answer is."""
    rule: Rule = Policy(made, outside="reference").at(level, **parameters)
    reasons = [None, "level", *(f"parameter {name}" for name in made.domain.parameters)]
    return (
        f"{['alone', 'split'].index(rule.scheme)} {FORMATS.index(rule.narrow) + 1} "
        f"{0 if rule.wide is None else FORMATS.index(rule.wide) + 1} {['exact', 'approximate'].index(rule.draws)} "
        f"{reasons.index(rule.outside)} {rule.paths or 0} {rule.correction_paths or 0} -{rule.rounding.encode().hex()}"
    )


def answers(folder: Path, language: str, made: PolicyDocument, asked: list[tuple[int, dict[str, Any]]]) -> list[str]:
    """Return what the compiled header answers."""
    write_c_header(made, folder / "p.h")
    made_program = built(folder, language, program(made, c_header(made), asked))
    return subprocess.run([made_program], check=True, capture_output=True, text=True).stdout.splitlines()


@pytest.mark.parametrize("language", COMPILERS)
@settings(
    max_examples=15,
    phases=[Phase.explicit, Phase.generate],
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(data=st.data())
def test_the_compiled_header_answers_as_the_guard_does(tmp_path, language, data):
    """40 questions each to generated policies with hostile names: on every level, as audited, at limits and beyond."""
    made = data.draw(c_policies())
    asked = [data.draw(questions(made)) for _ in range(40)]
    assert answers(tmp_path, language, made, asked) == [expected(made, *one) for one in asked]


@pytest.mark.parametrize("language", COMPILERS)
def test_the_policy_of_the_example(tmp_path, language):
    """Every level with the audited parameters, with each of them a bit off, and one level more."""
    made = document()
    audited = {name: part.fixed for name, part in made.domain.parameters.items()}
    asked = [(level, audited) for level in range(8)]
    for name, value in audited.items():
        asked += [(1, audited | {name: math.nextafter(value, way)}) for way in (-math.inf, math.inf)]
    found = answers(tmp_path, language, made, asked)
    assert found == [expected(made, *one) for one in asked]
    assert {line.split()[4] for line in found} == set(map(str, range(len(audited) + 2)))


SERVICE = """
#include "p.h"

int main(void)
{
    const reserve_value_parameters given = {0.01, 0.2, "euler", true};
    const reserve_value_rule rule = reserve_value_at(1u, &given);
    if (rule.outside != reserve_value_inside) return 1;
    if (rule.scheme != reserve_value_scheme_split || rule.narrow != reserve_value_format_float16) return 2;
    if (rule.wide != reserve_value_format_float32 || rule.draws != reserve_value_draws_exact) return 3;
    if (reserve_value_at(RESERVE_VALUE_LEVELS, &given).outside != reserve_value_outside_level) return 4;
    if (reserve_value_at(1u, NULL).outside != reserve_value_outside_parameter_rate) return 5;
    if (reserve_value_at(1u, NULL).narrow != reserve_value_format_float64) return 6;
    return 0;
}
"""


@pytest.mark.parametrize("language", COMPILERS)
@pytest.mark.parametrize("flags", [["-O0"], ["-O2"], ["-O2", "-DNDEBUG", "-march=native"]])
def test_a_service(tmp_path, language, flags):
    """What a service writes: names as the README shows them."""
    write_c_header(with_parameters({"rate": 0.01, "volatility": (0.1, 0.4), "s": "euler", "b": True}), tmp_path / "p.h")
    assert subprocess.run([built(tmp_path, language, SERVICE, *flags)], check=False).returncode == 0


def test_names_that_system_headers_define(tmp_path):
    """What is included before it may define names of parameters in lower case."""
    names = ["errno", "complex", "imaginary", "noreturn", "assert", "stdin", "signbit"]
    write_c_header(with_parameters(dict.fromkeys(names, 1.5)), tmp_path / "p.h")
    headers = ["assert", "complex", "errno", "math", "stdio", "stdnoreturn"]
    included = "".join(f"#include <{name}.h>\n" for name in headers)
    built(tmp_path, "C99", included + '#include "p.h"\nint main(void) { return 0; }\n')


@pytest.mark.parametrize("language", COMPILERS)
def test_a_header_that_nobody_asks(tmp_path, language):
    """Included and not used it gives no warning either, and two of other kernels live beside it."""
    made = with_parameters({"x": 1.0, "flag": True, "name": "a", "curve": [1.0, 2.0]})
    write_c_header(made, tmp_path / "p.h")
    write_c_header(
        msgspec.structs.replace(made, kernel=msgspec.structs.replace(made.kernel, run="b:c")), tmp_path / "q.h"
    )
    built(tmp_path, language, '#include "p.h"\n#include "q.h"\nint main(void) { return 0; }\n')


@pytest.mark.parametrize(
    ("run", "prefix"),
    [
        ("reserve.py:value", "reserve_value"),
        ("models/reserve.py:value", "reserve_value"),
        ("rounded.so:value", "rounded_value"),
        ("package.module:function", "module_function"),
        ("./inflow", "inflow"),
        ("3d.py:π", "kernel_3d"),
        ("__a__.py:_b_", "a_b"),
        ("*/:??/", "kernel"),
    ],
)
def test_identifiers_begin_with_the_kernels_name(run, prefix):
    """File and function, without what C and C++ keep for themselves: double underscores and leading ones."""
    made = document()
    made = msgspec.structs.replace(made, kernel=msgspec.structs.replace(made.kernel, run=run))
    assert prefix_of(c_header(made)) == prefix


def test_long_names_stay_apart():
    """Of kernels that differ past what a compiler looks at, the prefixes differ and are short."""
    made = document()
    found = set()
    for end in "ab":
        kernel = msgspec.structs.replace(made.kernel, run=f"{'x' * 300}.py:{'y' * 300}{end}")
        found.add(prefix_of(c_header(msgspec.structs.replace(made, kernel=kernel))))
    assert len(found) == 2
    assert {len(one) for one in found} == {40}


@pytest.mark.parametrize("text", [*HOSTILE, "*/", "/*/", "*" * 3 + "/", "????/"])
def test_a_comment_holds_anything(text):
    """It is printable ASCII on one line, with nothing that ends a comment, begins one, or is a trigraph."""
    found = f"/{comment(text)}/"[1:-1]
    assert found.isascii()
    assert not found or found.isprintable()
    assert not re.search(r"\*/|/\*|\?\?|\\", found)


def test_numbers_read_back_as_they_are():
    """Every double is written so that reading it gives the same, and is no whole number in C."""
    values = [0.1, 5e-324, 1.7976931348623157e308, 1e22, 50, -0.0, 2.0**-1022, 1 / 3]
    for value in values:
        (field,) = fields_of({"x": ParameterPart(fixed=value)})
        assert float(field.low) == value
        assert math.copysign(1, float(field.low)) == math.copysign(1, value)
        assert "." in field.low or "e" in field.low


@pytest.mark.parametrize(
    ("value", "problem"),
    [
        (["a", "b"], "an array of something else than numbers that a double holds"),
        ([True], "an array of something else than numbers that a double holds"),
        ([2**53 + 1], "an array of something else than numbers that a double holds"),
        ([[1.0], [1.0, 2.0]], "an array whose rows differ in length"),
        ([1.0, [1.0]], "an array whose rows differ in length"),
        ("a\0b", "the text holds a zero byte"),
        ("x" * 5000, "the text has more than 4095 bytes"),
    ],
)
def test_what_c_is_not_given(value, problem):
    """Refused by the parameter's name, with what is accepted."""
    with pytest.raises(PolicyError) as caught:
        c_header(with_parameters({"curve": value}))
    assert str(caught.value).startswith(
        f"policy: domain.parameters.curve: {problem}; accepted in a C header: numbers, "
    )


def test_no_folder(tmp_path):
    """Where it cannot be written there is a message."""
    with pytest.raises(PolicyError, match=r"p\.h: cannot be written: No such file or directory$"):
        write_c_header(document(), tmp_path / "none" / "p.h")
