"""From a plain document to its type; what does not fit is located by the keys that lead to it."""

from __future__ import annotations

import json
import types
from pathlib import Path
from typing import Annotated, Any, TypeVar, Union, get_args, get_origin

import msgspec
from msgspec import inspect

from narrowgauge.record.canonical import DocumentError, below

__all__ = ["converted", "shown", "text_of"]

_Kind = TypeVar("_Kind")
_SHOWN = 60  # characters of a value in a message


def text_of(path: Path, largest: int) -> str:
    """Return what a file holds as text; DocumentError where it cannot be read, is larger, or is not UTF-8."""
    source = str(path)
    try:
        with path.open("rb") as file:
            data = file.read(largest + 1)
    except FileNotFoundError:
        raise DocumentError(source, "", "there is no such file") from None
    except (OSError, ValueError) as problem:  # ValueError: a path with a null byte
        reason = getattr(problem, "strerror", None) or str(problem)
        raise DocumentError(source, "", f"cannot be read ({reason})") from None
    if len(data) > largest:
        raise DocumentError(source, "", f"the document has more than {largest} bytes, at most {largest} are accepted")
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError as problem:
        line = data.count(b"\n", 0, problem.start) + 1
        what = f"line {line} is not UTF-8 (byte 0x{data[problem.start]:02x})"
        raise DocumentError(source, "", what) from None


def converted(document: object, kind: type[_Kind], source: str) -> _Kind:
    """Return a document as its type; DocumentError names the first place that does not fit, and what is accepted."""
    try:
        return msgspec.convert(document, kind)
    except msgspec.ValidationError:
        path, problem = _located(document, kind, "")
        raise DocumentError(source, path, problem) from None


def shown(value: object) -> str:
    """Return a value of a document for a message: short, on one line, without control characters."""
    if isinstance(value, dict | list):
        return "an object" if isinstance(value, dict) else "an array"
    # Numbers of more digits than Python converts to text were refused when the document was read.
    text = json.dumps(value)
    return text if len(text) <= _SHOWN else f"{text[:_SHOWN]} ..."


def _located(value: object, kind: Any, path: str) -> tuple[str, str]:
    """Return the path of the first place in a value that does not fit its type, and what is wrong with it."""
    shape = _shape(kind, value)
    for step, element, inner in _inside(shape, value):
        if _problem(element, inner):
            return _located(element, inner, below(path, step))
    if isinstance(shape, type) and issubclass(shape, msgspec.Struct) and isinstance(value, dict):
        return path, _struct_problem(value, shape)
    return path, f"{shown(value)} is not accepted; accepted: {_accepted(inspect.type_info(kind))}"


def _shape(kind: Any, value: object) -> Any:
    """Return the type that leads further into a value: of a union the member that holds objects or arrays."""
    if get_origin(kind) is Annotated:
        return _shape(get_args(kind)[0], value)
    if get_origin(kind) in (Union, types.UnionType):
        shapes = [_shape(one, value) for one in get_args(kind)]
        wanted = list if isinstance(value, list) else dict
        return next((one for one in shapes if _holds(one) is wanted), kind)
    return kind


def _holds(shape: Any) -> type | None:
    if get_origin(shape) in (list, dict):
        return list if get_origin(shape) is list else dict
    return dict if isinstance(shape, type) and issubclass(shape, msgspec.Struct) else None


def _inside(shape: Any, value: object) -> list[tuple[str | int, object, Any]]:
    """Return the elements of a value with their steps and types, as far as its type is met."""
    if get_origin(shape) is list and isinstance(value, list):
        return [(place, element, get_args(shape)[0]) for place, element in enumerate(value)]
    if get_origin(shape) is dict and isinstance(value, dict):
        return [(key, element, get_args(shape)[1]) for key, element in value.items()]
    if isinstance(shape, type) and issubclass(shape, msgspec.Struct) and isinstance(value, dict):
        fields = msgspec.structs.fields(shape)
        return [(one.name, value[one.name], one.type) for one in fields if one.name in value]
    return []


def _problem(value: object, kind: Any) -> str:
    try:
        msgspec.convert(value, kind)
    except msgspec.ValidationError as problem:
        return str(problem)
    return ""


def _struct_problem(value: dict[str, object], shape: type[msgspec.Struct]) -> str:
    """Return what is wrong with an object whose known keys fit: unknown or missing ones, or how they go together."""
    names = [one.name for one in msgspec.structs.fields(shape)]
    for key in value:
        if key not in names:
            return f"unknown key {shown(key)}; accepted: {', '.join(names)}"
    for one in msgspec.structs.fields(shape):
        if one.required and one.name not in value:
            return f"the key {shown(one.name)} is missing"
    return _problem(value, shape)


def _accepted(info: inspect.Type) -> str:
    """Return in words what a type accepts."""
    if isinstance(info, inspect.Metadata):
        return _accepted(info.type)
    if isinstance(info, inspect.UnionType):
        return " or ".join(dict.fromkeys(_accepted(one) for one in info.types))
    if isinstance(info, inspect.LiteralType):
        return ", ".join(shown(one) for one in info.values)
    if isinstance(info, inspect.IntType | inspect.FloatType):
        name = "a whole number" if isinstance(info, inspect.IntType) else "a number"
        limits = (("above", info.gt), ("of at least", info.ge), ("below", info.lt), ("of at most", info.le))
        bounds = [f"{word} {limit}" for word, limit in limits if limit is not None]
        return " ".join([name, " and ".join(bounds)]).strip()
    if isinstance(info, inspect.StrType):
        return "text" if info.pattern is None else f"text of the form {info.pattern}"
    if isinstance(info, inspect.ListType | inspect.DictType):
        name = "an array" if isinstance(info, inspect.ListType) else "an object"
        return f"{name} of at least {info.min_length}" if info.min_length else name
    words = {inspect.BoolType: "true or false", inspect.NoneType: "null"}
    return words.get(type(info), "an object")
