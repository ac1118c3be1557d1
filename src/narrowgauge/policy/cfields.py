"""The parameters of a policy as fields of a C struct: their names, their types, and how each is compared."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from narrowgauge.errors import PolicyError
from narrowgauge.record.policy import ParameterPart

__all__ = ["Field", "comment", "fields_of", "literal"]

_ACCEPTED = "accepted in a C header: numbers, booleans, texts, and arrays of numbers with rows of one length"
_LONGEST_TEXT = 4095  # bytes that every C99 compiler takes in a literal
# Not to be the name of a field: keywords of C and C++, and what compilers and system headers define in lower case.
_WORDS = """
    alignas alignof and and_eq asm atomic_cancel atomic_commit atomic_noexcept auto bitand bitor bool break case catch
    char char8_t char16_t char32_t class co_await co_return co_yield compl concept const const_cast consteval constexpr
    constinit continue contract_assert decltype default delete do double dynamic_cast else enum explicit export extern
    false float for friend goto i386 if inline int linux long mutable namespace near far new noexcept not not_eq nullptr
    offsetof operator or or_eq private protected public reflexpr register reinterpret_cast requires restrict return
    short signed sizeof static static_assert static_cast struct switch synchronized template this thread_local throw
    true try typedef typeid typename typeof typeof_unqual union unix unsigned using virtual void volatile wchar_t
    while xor xor_eq
    complex errno hyper imaginary interface noreturn small
"""
_TAKEN = frozenset(_WORDS.split())
_PLAIN_NAME = re.compile(r"[a-z][a-z0-9]*(_[a-z0-9]+)*")
_UNSAFE_IN_COMMENT = re.compile(r"\*(?=/)|/(?=\*)|\?(?=\?)|\\|[^\x20-\x7e]")
_UNSAFE_IN_LITERAL = re.compile(rb'["\\?]|[^\x20-\x7e]')

Kind = Literal["number", "whole", "boolean", "text", "numbers"]


def comment(text: str) -> str:
    """Return text that ends no comment and begins none: ASCII, on one line, anything else as <U+XXXX>."""
    return _UNSAFE_IN_COMMENT.sub(lambda met: f"<U+{ord(met[0]):04X}>", text)


def literal(text: str) -> str:
    """Return a text as a C literal of its bytes in UTF-8, in ASCII."""
    data = _UNSAFE_IN_LITERAL.sub(lambda met: b"\\%03o" % met[0][0], text.encode("utf-8"))
    return f'"{data.decode("ascii")}"'


@dataclass(frozen=True, slots=True, kw_only=True)
class Field:
    """One parameter: `name` is the field's, `counted` that of an array's count; bounds and values as C literals."""

    parameter: str
    name: str
    kind: Kind
    low: str = ""
    high: str = ""
    values: Sequence[str] = ()
    counted: str = ""
    shape: Sequence[int] = ()

    def declared(self) -> Iterator[tuple[str, str]]:
        """Yield the members of the struct, each with what is to be said of it: its parameter, where that differs."""
        said = comment(self.parameter) if self.name != self.parameter else ""
        if self.kind == "numbers":
            shape = f"{' x '.join(map(str, self.shape))} numbers, row by row"
            yield f"const double *{self.name}", f"{said}: {shape}" if said else shape
            yield f"size_t {self.counted}", f"how many numbers {self.name} has"
        else:
            types = {"number": "double ", "whole": "int64_t ", "boolean": "bool ", "text": "const char *"}
            yield f"{types[self.kind]}{self.name}", said

    def table(self, prefix: str) -> list[str]:
        """Return the table of an array's values, or nothing."""
        if not self.values:
            return []
        rows = [f"    {value}," for value in self.values]
        return [f"static const double {prefix}_values_{self.name}[{len(rows)}] = {{", *rows, "};", ""]

    def refused(self, prefix: str) -> str:
        """Return a condition in C that is true where the parameter is not as it was audited."""
        given = f"given->{self.name}"
        if self.kind == "number":
            return f"!{prefix}_within({given}, {self.low}, {self.high})"
        if self.kind == "whole":
            return f"{given} != {self.low}"
        if self.kind == "boolean":
            return f"!{given}" if self.low == "true" else given
        if self.kind == "text":
            return f"{given} == NULL || strcmp({given}, {self.low}) != 0"
        if not self.values:
            return f"given->{self.counted} != 0"
        values = f"{prefix}_values_{self.name}"
        return f"!{prefix}_same({given}, given->{self.counted}, {values}, {len(self.values)})"


def fields_of(parameters: Mapping[str, ParameterPart]) -> list[Field]:
    """Return the fields of the parameters, in their order; PolicyError names one that C cannot be given."""
    taken: set[str] = set()
    return [_field(parameter, part, taken) for parameter, part in parameters.items()]


def _field(parameter: str, part: ParameterPart, taken: set[str]) -> Field:
    name, fixed = _name(parameter, taken), part.fixed
    if fixed is None:
        return Field(parameter=parameter, name=name, kind="number", low=_double(part.low), high=_double(part.high))
    if isinstance(fixed, bool):
        return Field(parameter=parameter, name=name, kind="boolean", low="true" if fixed else "false")
    if isinstance(fixed, str):
        if "\0" in fixed or len(fixed.encode("utf-8")) > _LONGEST_TEXT:
            what = "holds a zero byte" if "\0" in fixed else f"has more than {_LONGEST_TEXT} bytes"
            raise _refused(parameter, f"the text {what}")
        return Field(parameter=parameter, name=name, kind="text", low=literal(fixed))
    if isinstance(fixed, list):
        counted = _name(f"{name}_count", taken)
        values, shape = _flat(parameter, fixed), _shape(parameter, fixed)
        return Field(parameter=parameter, name=name, kind="numbers", values=values, counted=counted, shape=shape)
    if isinstance(fixed, int) and not _is_double(fixed):
        low = "INT64_MIN" if fixed == -(2**63) else f"INT64_C({fixed})"
        return Field(parameter=parameter, name=name, kind="whole", low=low)
    return Field(parameter=parameter, name=name, kind="number", low=_double(fixed), high=_double(fixed))


def _name(parameter: str, taken: set[str]) -> str:
    """Return the name of a field: the parameter's where C, C++ and their headers leave it alone, else one near it."""
    if _PLAIN_NAME.fullmatch(parameter) and len(parameter) <= 63 and parameter not in _TAKEN:
        found = parameter
    else:
        found = f"p_{re.sub(r'[^0-9A-Za-z]+', '_', parameter).strip('_')[:48]}".rstrip("_")
    number, wanted = 2, found
    while found in taken:
        found, number = f"{wanted}_{number}", number + 1
    taken.add(found)
    return found


def _double(value: float | None) -> str:
    """Return a number as a literal of the double that it is."""
    return repr(math.nan if value is None else float(value))


def _is_double(value: int | float) -> bool:
    return int(float(value)) == value if isinstance(value, int) else True


def _flat(parameter: str, value: object) -> list[str]:
    """Return all numbers of an array, row by row."""
    if isinstance(value, list):
        return [number for one in value for number in _flat(parameter, one)]
    if isinstance(value, bool) or not isinstance(value, int | float) or not _is_double(value):
        raise _refused(parameter, "an array of something else than numbers that a double holds")
    return [_double(value)]


def _shape(parameter: str, value: list[object]) -> tuple[int, ...]:
    rows = [one for one in value if isinstance(one, list)]
    shapes = {_shape(parameter, one) for one in rows}
    if rows and (len(rows) < len(value) or len(shapes) > 1):
        raise _refused(parameter, "an array whose rows differ in length")
    return (len(value), *(shapes.pop() if shapes else ()))


def _refused(parameter: str, problem: str) -> PolicyError:
    return PolicyError(f"policy: domain.parameters.{parameter}: {problem}; {_ACCEPTED}")
