"""Documents as text: one canonical writer, one atomic way onto the disk, one strict reader.

What the writer accepts, the reader gives back equal: JSON (RFC 8259) of finite numbers, without duplicate
keys, nested at most 64 deep.
"""

from __future__ import annotations

import json
import math
import os
import re
import secrets
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import NoReturn

from narrowgauge.errors import NarrowgaugeError

__all__ = ["DocumentError", "below", "canonical_text", "read_strict", "write_atomically"]

_DEEPEST = 64
_LARGEST = 64 * 2**20
_BARE = re.compile(r"[A-Za-z0-9_/-]+")


class DocumentError(NarrowgaugeError):
    """A document cannot be read: `source` is the file, `path` leads into it ("" for the whole)."""

    def __init__(self, source: str, path: str, problem: str) -> None:
        self.source, self.path, self.problem = source, path, problem
        super().__init__(f"{source}: {path}: {problem}" if path else f"{source}: {problem}")


def canonical_text(document: object) -> str:
    """Return a document as JSON text: keys as inserted, indented by two spaces, a newline at the end.

    Numbers are written by Python's shortest repr, which reads back as the same float64; text is not escaped
    beyond what JSON requires. Tuples are written as arrays. Raises ValueError for NaN, infinities, unpaired
    surrogates and nesting past 64, TypeError for what is not exactly one of JSON's types, NumPy's scalars
    and subclasses among them; both name the path into the document.
    """
    _check_writable(document, "", 0)
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def write_atomically(path: Path, text: str) -> None:
    """Write text as UTF-8 so that `path` holds either its old content or all of the new, whatever happens.

    Raises OSError, and UnicodeEncodeError before anything is written.
    """
    data = text.encode("utf-8")
    temporary = path.parent / f".narrowgauge-{secrets.token_hex(8)}.tmp"
    try:
        # Unlike tempfile, open grants the permissions that the user's umask leaves.
        with temporary.open("xb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.replace(temporary, path)
    except BaseException:  # an interrupt, too, must not leave the temporary behind
        temporary.unlink(missing_ok=True)
        raise


def read_strict(text: str, source: str, largest: int | None = None) -> object:
    """Return the document in JSON text; DocumentError says what is wrong, and at which path.

    Refused are duplicate keys, NaN and infinities (also as a number too large for float64), unpaired
    surrogates, nesting past 64, and text of more than `largest` bytes in UTF-8 (64 MiB).
    """
    size = len(text) if text.isascii() else len(text.encode("utf-8", "surrogatepass"))
    if size > (most := _LARGEST if largest is None else largest):
        problem = f"the document has {size} bytes, at most {most} are accepted"
        raise DocumentError(source, "", problem)
    try:
        document = _parsed(text, source)
    except ValueError:  # an integer with more digits than Python converts
        document = _parsed(text, source, _integer)
    _check_read(document, source, "", 0)
    return document


def _parsed(text: str, source: str, parse_int: Callable[[str], object] | None = None) -> object:
    """Return what the text holds; some problems are left as marks: only the walk over the whole knows their path."""
    try:
        return json.loads(text, object_pairs_hook=_object, parse_constant=_Constant, parse_int=parse_int)
    except RecursionError:
        raise DocumentError(source, "", f"nested more than {_DEEPEST} deep") from None
    except json.JSONDecodeError as problem:
        where = f"line {problem.lineno}, column {problem.colno}"
        raise DocumentError(source, "", f"this is not JSON: {problem.msg} ({where})") from None


class _Constant:
    """Stands in a document where the text has NaN, Infinity or -Infinity."""

    def __init__(self, name: str) -> None:
        self.name = name


class _TooLong:
    """Stands in a document where the text has an integer with more digits than Python converts."""

    def __init__(self, digits: int) -> None:
        self.digits = digits


class _Duplicate:
    """Stands in a document where an object has a key twice."""

    def __init__(self, key: str) -> None:
        self.key = key


def _object(pairs: list[tuple[str, object]]) -> object:
    document = dict(pairs)
    if len(document) == len(pairs):
        return document
    seen: set[str] = set()
    for key, _ in pairs:
        if key in seen:
            break
        seen.add(key)
    return _Duplicate(key)


def _integer(text: str) -> object:
    try:
        return int(text)
    except ValueError:
        return _TooLong(len(text.lstrip("-")))


def below(path: str, step: str | int) -> str:
    """Return the path of an element, such as quantities.value.levels[3].gain; unusual keys are quoted."""
    if isinstance(step, int):
        return f"{path}[{step}]"
    key = step if _BARE.fullmatch(step) else json.dumps(step)
    return f"{path}.{key}" if path else key


def _elements(value: object) -> Iterable[tuple[str | int, object]]:
    if isinstance(value, dict):
        return value.items()
    return enumerate(value) if isinstance(value, list | tuple) else ()


def _paired(text: str) -> bool:
    """Return whether text has no unpaired surrogate, which UTF-8 cannot hold."""
    return text.isascii() or not any("\ud800" <= character <= "\udfff" for character in text)


def _check_writable(value: object, path: str, depth: int) -> None:
    where = path or "the document"
    if type(value) not in (dict, list, tuple, str, int, float, bool, type(None)):
        kind = f"{type(value).__module__}.{type(value).__qualname__}"
        raise TypeError(f"{where}: {kind} is not a type of JSON")
    if isinstance(value, dict | list | tuple) and depth >= _DEEPEST:
        raise ValueError(f"{where}: nested more than {_DEEPEST} deep")
    if isinstance(value, float) and not math.isfinite(value):
        raise ValueError(f"{where}: {value} is not a finite number")
    if isinstance(value, str) and not _paired(value):
        raise ValueError(f"{where}: the text has an unpaired surrogate")
    for step, element in _elements(value):
        if isinstance(value, dict) and type(step) is not str:
            raise TypeError(f"{where}: the key {step!r} is of type {type(step).__name__}, not str")
        if isinstance(step, str) and not _paired(step):
            raise ValueError(f"{where}: the key {json.dumps(step)} has an unpaired surrogate")
        _check_writable(element, below(path, step), depth + 1)


def _check_read(value: object, source: str, path: str, depth: int) -> None:
    def refuse(problem: str) -> NoReturn:
        raise DocumentError(source, path, problem)

    if isinstance(value, dict | list) and depth >= _DEEPEST:
        refuse(f"nested more than {_DEEPEST} deep")
    if isinstance(value, _Duplicate):
        refuse(f"the key {json.dumps(value.key)} stands more than once")
    if isinstance(value, _Constant):
        refuse(f"{value.name} is not a finite number")
    if isinstance(value, _TooLong):
        refuse(f"this cannot be read: an integer of {value.digits} digits")
    if isinstance(value, float) and not math.isfinite(value):
        refuse("the number is too large for float64")
    if isinstance(value, str) and not _paired(value):
        refuse("the text has an unpaired surrogate")
    for step, element in _elements(value):
        if isinstance(step, str) and not _paired(step):
            refuse(f"the key {json.dumps(step)} has an unpaired surrogate")
        _check_read(element, source, below(path, step), depth + 1)
