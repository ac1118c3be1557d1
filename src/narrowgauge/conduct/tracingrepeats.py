"""Whether NumPy itself gives other bits for the same values in another shape or layout."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator, Sequence
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from narrowgauge.conduct.tracing import Kept, Key, Operation, Trace

__all__ = ["Layout", "laid_out", "repeated"]

Layout = Literal["C", "Fortran", "strided", "reversed"]
Array = npt.NDArray[Any]

_MOST_SPELLINGS = 4096
_APART = 4  # values of other rows between two of a row, in memory


def repeated(trace: Trace, number: int, *, paths: int | None = None, layout: Layout | None = None) -> bool | None:
    """Whether NumPy differs from itself in operation `number` of a trace, in another batch size or memory layout.

    The operation runs on the kept values in plain NumPy, on as many columns as the run had, the kept ones in turn, and
    on `paths` columns, or with operands laid out anew; True where a path has other bits. None where the operation is
    not one that NumPy can be asked to repeat: of an emulated run that is one whose bits plain NumPy does not give.
    """
    operation = trace.operations[number]
    if not operation.results or operation.results[0].axis is None:
        return None
    before = [_restored(trace, kept, trace.paths) for kept in operation.operands]
    call = operation.call or _call_of(trace, operation, before)
    if call is None:
        return None
    count = trace.paths if paths is None else paths
    after = [_restored(trace, kept, count) for kept in operation.operands]
    if layout is not None:
        after = [laid_out(array, layout) for array in after]
    one, other = (_first_result(call, operands, operation) for operands in (before, after))
    columns = range(min(trace.paths, count, len(trace.kept)))
    axis = operation.results[0].axis
    return one.take(columns, axis).tobytes() != other.take(columns, axis).tobytes()


def laid_out(array: Array, layout: Layout) -> Array:
    """Return the values of an array in a memory layout: its last axis in order, apart, or from the end to the front."""
    if array.ndim == 0:
        return array
    if layout == "reversed":
        front: Array = np.ascontiguousarray(array[..., ::-1])
        return front[..., ::-1]
    if layout == "strided":
        wide: Array = np.zeros((*array.shape[:-1], 2 * array.shape[-1]), array.dtype)
        wide[..., ::2] = array
        return wide[..., ::2]
    if layout == "Fortran" and array.ndim == 1:  # a row of an array of steps and paths
        rows: Array = np.zeros((_APART, array.size), array.dtype, order="F")
        rows[0] = array
        return rows[0, :]
    return np.asfortranarray(array) if layout == "Fortran" else np.ascontiguousarray(array)


def _restored(trace: Trace, kept: Kept, paths: int) -> Array:
    """Return an operand of the run with `paths` paths, those that were kept in turn."""
    if kept.axis is None:
        length = kept.shape[-1] if kept.shape else 1
        rows = [np.broadcast_to(trace.rows[key], length) for key in kept.keys]
        return np.array(rows, np.float64).reshape(kept.shape).astype(kept.dtype)
    others = kept.shape[: kept.axis] + kept.shape[kept.axis + 1 :]
    columns = np.arange(paths) % len(trace.kept)
    rows = [trace.values(key)[columns] for key in kept.keys]
    array = np.array(rows, np.float64).reshape(*others, paths).astype(kept.dtype)
    return np.ascontiguousarray(np.moveaxis(array, -1, kept.axis))


def _first_result(call: Callable[..., Any], operands: Sequence[Array], operation: Operation) -> Array:
    """Return what an operation gives, as the run held it; NaN is NaN."""
    with np.errstate(all="ignore"):
        result = call(*operands)
        array = np.array(result[0] if isinstance(result, tuple) else result).astype(operation.results[0].dtype)
    if array.dtype.kind == "f":
        array[np.isnan(array)] = np.nan
    return array


def _call_of(trace: Trace, operation: Operation, operands: Sequence[Array]) -> Callable[..., Any] | None:
    """Return the call of NumPy's that gives an emulated operation's bits on the kept paths."""
    wanted, axis = operation.results[0], operation.results[0].axis
    for call in itertools.islice(_spellings(operation, operands), _MOST_SPELLINGS):
        try:
            found = _first_result(call, operands, operation)
        except (TypeError, ValueError, IndexError):  # it does not take such operands
            continue
        if found.shape == wanted.shape and axis is not None and _rows_of(trace, found, axis) == wanted.keys:
            return call
    return None


def _rows_of(trace: Trace, array: Array, axis: int) -> tuple[Key, ...] | None:
    """Return the rows of an array whose columns are the kept paths in turn."""
    probe = Trace(len(trace.kept))
    kept = probe.keep(array.take(range(len(trace.kept)), axis))
    return None if kept is None or kept.axis is None else kept.keys


def _spellings(operation: Operation, operands: Sequence[Array]) -> Iterator[Callable[..., Any]]:
    """Yield the calls that an emulated operation can have been: the observer is not told axes and subscripts."""
    if operation.name == "einsum":
        for text in _subscripts([array.shape for array in operands], operation.results[0].shape):
            yield _einsum(text)
        return
    function: Any = np
    for name in operation.name.split("."):
        function = getattr(function, name, None)
    if not callable(function):
        return
    yield function
    if len(operands) == 1:
        for axis in range(operands[0].ndim):
            yield _along(function, axis=axis)
            yield _along(function, axis=axis, keepdims=True)


def _einsum(text: str) -> Callable[..., Any]:
    return lambda *operands: np.einsum(text, *operands)


def _along(function: Callable[..., Any], **further: Any) -> Callable[..., Any]:
    return lambda *operands: function(*operands, **further)


def _subscripts(shapes: Sequence[tuple[int, ...]], result: tuple[int, ...]) -> Iterator[str]:
    """Yield what np.einsum can have been told for operands and a result of these shapes, without repeated letters."""
    lengths = [length for shape in shapes for length in shape]
    ends = list(itertools.accumulate(map(len, shapes)))

    def labelled(done: list[int], sizes: list[int]) -> Iterator[tuple[list[int], list[int]]]:
        if len(done) == len(lengths):
            yield done, sizes
            return
        start = max((end for end in ends if end <= len(done)), default=0)
        for label, size in enumerate(sizes):
            if size == lengths[len(done)] and label not in done[start:]:
                yield from labelled([*done, label], sizes)
        yield from labelled([*done, len(sizes)], [*sizes, lengths[len(done)]])

    for labels, sizes in labelled([], []):
        text = "".join(chr(97 + label) for label in labels)
        parts = ",".join(text[start:end] for start, end in zip([0, *ends], ends, strict=False))
        for kept in itertools.permutations(range(len(sizes)), len(result)):
            if tuple(sizes[label] for label in kept) == result:
                yield parts + "->" + "".join(chr(97 + label) for label in kept)
