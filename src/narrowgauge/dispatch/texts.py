"""Who asks a value for a plain number: `%` on a text, which writes it down, or anything else.

No number's `%` asks its right operand for a float, that of a text does. What comes of it cannot be marked as a text of
the state, as an f-string is, so the code is looked up for a call around it that would read it again.
"""

from __future__ import annotations

import dis
from functools import cache
from types import CodeType, FrameType
from typing import NamedTuple

from narrowgauge.dispatch.setting import Setting

__all__ = ["READ_BACK", "written_down"]

READ_BACK = (
    "a text that was made of the state becomes a number again, which nobody rounds; "
    "accepted: np.round for a number of digits"
)
_REMAINDERS = frozenset(  # the instructions of `%` and `%=`
    bytes((found.opcode, found.arg or 0))
    for found in dis.get_instructions(compile("a % b; a %= b", "", "exec"))
    if found.opname == "BINARY_OP"
)
_READERS = frozenset("Decimal Fraction complex eval float float64 fromhex fromstring int literal_eval loads".split())  # noqa: SIM905


def written_down(setting: Setting, caller: FrameType) -> bool:
    """Whether the frame that asks for a number applies `%` to a text with a format such as %.3f; that is told.

    It may be the frame of a library that writes down what it is given, such as logging. Raises EscapeError where the
    text is read again by a call around it, such as float('%.3f' % x).
    """
    if caller.f_code.co_code[caller.f_lasti : caller.f_lasti + 2] not in _REMAINDERS:
        return False
    if _is_read(caller.f_code, caller.f_lasti):
        setting.escape(READ_BACK)
    else:
        setting.leave("text")
    return True


class _Span(NamedTuple):
    """Where in the source an instruction's expression begins and ends: line and column."""

    begin: tuple[int, int]
    end: tuple[int, int]


@cache
def _is_read(code: CodeType, offset: int) -> bool:
    """Whether a call around the expression at an offset is one of what makes numbers of texts, by its name."""
    found = [(instruction, _span(instruction)) for instruction in dis.get_instructions(code)]
    here = next((span for instruction, span in found if instruction.offset == offset), None)
    if here is None:  # compiled without columns
        return False
    for call, around in found:
        if around is None or not call.opname.startswith("CALL") or call.offset <= offset:
            continue
        if around.begin <= here.begin and here.end <= around.end:
            names = [
                instruction.argval
                for instruction, span in found
                if instruction.opname.startswith("LOAD_")
                and span
                and span.begin == around.begin
                and span.end < here.begin
            ]
            if names and names[-1] in _READERS:
                return True
    return False


def _span(instruction: dis.Instruction) -> _Span | None:
    places = instruction.positions
    if places is None or places.lineno is None or places.end_lineno is None:
        return None
    if places.col_offset is None or places.end_col_offset is None:
        return None
    return _Span((places.lineno, places.col_offset), (places.end_lineno, places.end_col_offset))
