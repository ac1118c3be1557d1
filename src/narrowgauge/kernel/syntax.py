"""A fingerprint of what Python code says, whatever it looks like: a hash of its syntax trees.

Trees are written down by names of nodes and by fields that hold something; constants by type and exact value.
Positions, comments, docstrings and the kind of a string's quotes do not count, so that formatting changes nothing. What
versions of Python name differently is left out or made equal, so that each of them from 3.11 on gives the same digest
for the same source. Only the standard library is needed.
"""

from __future__ import annotations

import ast
import hashlib
import sys
import warnings
from collections.abc import Iterator, Mapping

__all__ = ["imported_names", "syntax_digest", "tree_words"]

_FORM = "narrowgauge-syntax/1"
# `ctx` follows from where a node stands; `str` is an interpolation's own text, spaces included.
_LEFT_OUT = frozenset({"ctx", "str", "type_comment", "type_ignores"})
_WITH_DOCSTRING = (ast.Module, ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)


def syntax_digest(own: bytes, name: str, listed: Mapping[str, bytes]) -> str:
    """Return "sha256:" and the digest of a function's file, of the function's name in it, and of further modules.

    Sources are bytes, `listed` by name of the module. One that is no Python for the running version counts by its
    bytes.
    """
    total = hashlib.sha256()
    for word in (_FORM, name, *_source_words(own)):
        _add(total, word)
    for module in sorted(listed):
        for word in ("module", module, *_source_words(listed[module])):
            _add(total, word)
    return f"sha256:{total.hexdigest()}"


def imported_names(source: bytes) -> set[str]:
    """Return the top-level names of what a source imports, without the standard library and relative imports."""
    tree = _parsed(source)
    found: set[str] = set()
    for node in () if tree is None else ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name.partition(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            found.add(node.module.partition(".")[0])
    return found - sys.stdlib_module_names


def tree_words(tree: ast.AST) -> Iterator[str]:
    """Yield a syntax tree as words from which it could be built again, but for what does not count.

    Without recursion: a long sum is as deep as it has terms.
    """
    waiting: list[object] = [tree]
    while waiting:
        value = waiting.pop()
        if isinstance(value, _Word):
            yield value
        elif isinstance(value, ast.Constant):
            yield "Constant"
            yield _constant(value.value)
        elif isinstance(value, ast.AST):
            yield type(value).__name__
            waiting.append(_Word("end"))
            for field, inside in reversed(list(_fields(value))):
                waiting += [inside, _Word(f".{field}")]
        elif isinstance(value, list):
            yield f"list {len(value)}"
            waiting += reversed(value)
        else:
            yield _constant(value)


class _Word(str):
    """A word that stands for itself among nodes and values that are still to be written down."""

    __slots__ = ()


def _fields(node: ast.AST) -> Iterator[tuple[str, object]]:
    """Yield the fields of a node that hold something and count, by name: their order is the version's."""
    for field in sorted(node._fields):
        value = getattr(node, field, None)
        if field == "body" and isinstance(node, _WITH_DOCSTRING):
            value = _undocumented(node.body)
        elif field == "values" and isinstance(node, ast.JoinedStr):
            value = _joined(node.values)
        elif field == "format_spec" and isinstance(value, ast.JoinedStr) and not _joined(value.values):
            value = None
        if field not in _LEFT_OUT and value is not None and value != []:
            yield field, value


def _undocumented(body: list[ast.stmt]) -> list[ast.stmt]:
    first = body[0] if body else None
    if isinstance(first, ast.Expr) and isinstance(first.value, ast.Constant) and isinstance(first.value.value, str):
        return body[1:]
    return body


def _joined(values: list[ast.expr]) -> list[ast.expr]:
    """Return the parts of an f-string; how its plain text is cut into constants differs between versions of Python."""
    parts: list[ast.expr] = []
    for value in values:
        if isinstance(value, ast.Constant) and isinstance(value.value, str):
            before = parts[-1] if parts else None
            if isinstance(before, ast.Constant) and isinstance(before.value, str):
                parts[-1] = ast.Constant(before.value + value.value)
            elif value.value:
                parts.append(value)
        else:
            parts.append(value)
    return parts


def _constant(value: object) -> str:
    """Return the type and the exact value of a constant; a huge integer has no limit of digits in base 16."""
    kind = type(value).__name__
    if isinstance(value, int):  # True and False among them, which their type tells apart
        return f"{kind} {value:x}"
    if isinstance(value, float):
        return f"{kind} {value.hex()}"
    if isinstance(value, complex):
        return f"{kind} {value.real.hex()} {value.imag.hex()}"
    if isinstance(value, bytes):
        return f"{kind} {value.hex()}"
    return f"{kind} {value}"


def _source_words(source: bytes) -> Iterator[str]:
    tree = _parsed(source)
    if tree is None:
        yield f"bytes {hashlib.sha256(source).hexdigest()}"
    else:
        yield from tree_words(tree)


def _parsed(source: bytes) -> ast.Module | None:
    """Return the syntax tree of a source, None for what the running version does not take."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # of a doubtful escape in a string
            return ast.parse(source)
    except (SyntaxError, ValueError, RecursionError, MemoryError):  # MemoryError: brackets nested too deeply
        return None


def _add(total: hashlib._Hash, word: str) -> None:
    data = word.encode("utf-8", "surrogatepass")
    total.update(b"%d " % len(data))
    total.update(data)
