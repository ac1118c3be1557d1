"""Products of arrays summed over shared axes, and the two factorisations that kernels use, with a stated order.

A contraction is stated by a label for each axis, as in Einstein's notation. For each result the labels that are summed
run in the order in which they appear, the last one fastest; the operands are multiplied left to right, each product and
each partial sum is rounded to the format. `cholesky` goes column by column and `solve` eliminates with row exchange
(the largest pivot), then substitutes backwards: every operation is one of the format.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic
from narrowgauge.dispatch.folds import fold

__all__ = ["PLANS", "Contraction", "cholesky", "contract", "einsum", "solve"]

_LETTERS = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"


@dataclass(frozen=True, slots=True)
class Contraction:
    """What is multiplied, the labels of its axes, and the labels of the result's axes in order."""

    operands: Sequence[Any]
    labels: Sequence[Sequence[int]]
    result: Sequence[int]

    @property
    def summed(self) -> list[int]:
        """The labels that are summed, in the order in which they appear."""
        seen = dict.fromkeys(label for labels in self.labels for label in labels)
        return [label for label in seen if label not in self.result]

    def length(self, label: int) -> int:
        """Length of the axes of a label; an axis of length one is repeated."""
        sizes = [
            size
            for operand, labels in zip(self.operands, self.labels, strict=True)
            for size, own in zip(np.shape(operand), labels, strict=True)
            if own == label
        ]
        wide = {size for size in sizes if size != 1}
        if len(wide) > 1:
            raise ValueError(f"operands do not match: axes of lengths {sorted(wide)} were to be one")
        return wide.pop() if wide else 1


def contract(arithmetic: Arithmetic, plan: Contraction) -> Any:
    """Return a contraction of carriers of a 16-bit format."""
    summed = plan.summed
    lengths = [plan.length(label) for label in summed]
    shape = [plan.length(label) for label in plan.result]
    aligned = [
        _aligned(operand, labels, [*summed, *plan.result])
        for operand, labels in zip(plan.operands, plan.labels, strict=True)
    ]
    count, size = int(np.prod(lengths, dtype=int)), int(np.prod(shape, dtype=int))
    if count == 0:
        return np.zeros(shape, arithmetic.format.carrier)[()]
    if not summed:
        return np.broadcast_to(_product(arithmetic, aligned), shape).copy()[()]
    if count > size:  # few results of long sums: all products at once
        products = np.broadcast_to(_product(arithmetic, aligned), [*lengths, *shape])
        return fold(arithmetic, np.add, products.reshape(count, *shape))
    total: Any = None
    for place in itertools.product(*map(range, lengths)):
        term = _product(arithmetic, [operand[_at(place, operand.shape)] for operand in aligned])
        total = term if total is None else arithmetic.apply(np.add, [total, term])
    return np.broadcast_to(total, shape).copy()[()]


def _aligned(operand: Any, labels: Sequence[int], order: Sequence[int]) -> Any:
    """Return an operand with one axis for each label of `order`, of length one where it has no such label."""
    operand = np.asarray(operand)
    if len(set(labels)) < len(labels):
        unique = list(dict.fromkeys(labels))
        operand, labels = np.einsum(operand, list(labels), unique), unique  # a view of the diagonal
    own = [label for label in order if label in labels]
    operand = operand.transpose([labels.index(label) for label in own])
    return operand.reshape([operand.shape[own.index(label)] if label in own else 1 for label in order])


def _at(place: tuple[int, ...], shape: tuple[int, ...]) -> tuple[int, ...]:
    return tuple(0 if size == 1 else step for step, size in zip(place, shape, strict=False))


def _product(arithmetic: Arithmetic, operands: Sequence[Any]) -> Any:
    product = operands[0]
    for operand in operands[1:]:
        product = arithmetic.apply(np.multiply, [product, operand])
    return product


def _labels(ndim: int, start: int = 0) -> list[int]:
    return list(range(start, start + ndim))


def _dot(a: Any, b: Any) -> Contraction:
    first, second = _labels(a.ndim), _labels(b.ndim, a.ndim)
    if a.ndim == 0 or b.ndim == 0:
        return Contraction((a, b), (first, second), [*first, *second])
    second[max(b.ndim - 2, 0)] = first[-1]
    _same(a.shape[-1], b.shape[max(b.ndim - 2, 0)])
    return _over(a, b, first, second, [first[-1]])


def _inner(a: Any, b: Any) -> Contraction:
    first, second = _labels(a.ndim), _labels(b.ndim, a.ndim)
    if a.ndim == 0 or b.ndim == 0:
        return Contraction((a, b), (first, second), [*first, *second])
    _same(a.shape[-1], b.shape[-1])
    second[-1] = first[-1]
    return _over(a, b, first, second, [first[-1]])


def _vdot(a: Any, b: Any) -> Contraction:
    return _inner(a.ravel(), b.ravel())


def _tensordot(a: Any, b: Any, axes: Any = 2) -> Contraction:
    if isinstance(axes, (int, np.integer)):
        ours, theirs = list(range(a.ndim - axes, a.ndim)), list(range(axes))
    else:
        ours, theirs = (list(np.atleast_1d(part)) for part in axes)
    first, second = _labels(a.ndim), _labels(b.ndim, a.ndim)
    for one, other in zip(ours, theirs, strict=True):
        _same(a.shape[one], b.shape[other])
        second[other] = first[one]
    return _over(a, b, first, second, [first[one] for one in ours])


def _batched(first: int, second: int) -> Callable[[Any, Any], Contraction]:
    """Return the plan of a product of stacks, whose operands have `first` and `second` axes of their own."""

    def plan(a: Any, b: Any) -> Contraction:
        own = [min(a.ndim, first), min(b.ndim, second)] if first == second == 2 else [first, second]
        if 0 in own or a.ndim < own[0] or b.ndim < own[1]:
            raise ValueError("an operand of a matrix product does not have enough dimensions")
        wide = max(a.ndim - own[0], b.ndim - own[1])
        shared, row, column = wide, wide + 1, wide + 2
        ends = [[row, shared][-own[0] :], [shared, column][: own[1]]]
        stacks = [list(range(wide - (a.ndim - own[0]), wide)), list(range(wide - (b.ndim - own[1]), wide))]
        _same(a.shape[-1], b.shape[-own[1]])
        result = [*range(wide), *([row] if own[0] > 1 else []), *([column] if own[1] > 1 else [])]
        return Contraction((a, b), (stacks[0] + ends[0], stacks[1] + ends[1]), result)

    return plan


def _over(a: Any, b: Any, first: list[int], second: list[int], summed: Sequence[int]) -> Contraction:
    result = [label for label in (*first, *second) if label not in summed]
    return Contraction((a, b), (first, second), result)


def _same(one: int, other: int) -> None:
    if one != other:
        raise ValueError(f"shapes not aligned: {one} values are to be multiplied with {other}")


PLANS: dict[str, Callable[..., Contraction]] = {
    "dot": _dot,
    "inner": _inner,
    "vdot": _vdot,
    "tensordot": _tensordot,
    "matmul": _batched(2, 2),
    "vecdot": _batched(1, 1),
    "matvec": _batched(2, 1),
    "vecmat": _batched(1, 2),
}


def einsum(text: str, operands: Sequence[Any]) -> Contraction:
    """Return the plan of np.einsum's text; ValueError where it does not fit the operands."""
    given, arrow, result = text.replace(" ", "").partition("->")
    parts = given.split(",")
    if len(parts) != len(operands):
        raise ValueError(f"{len(operands)} operands for {len(parts)} parts of {text!r}")
    free = [letter for letter in _LETTERS if letter not in text]
    spread = [
        max(np.ndim(operand) - len(part.replace("...", "")), 0)
        for operand, part in zip(operands, parts, strict=True)
        if "..." in part
    ]
    dots = free[: max(spread, default=0)]
    written = []
    for operand, part in zip(operands, parts, strict=True):
        named = part.replace("...", "")
        extra = np.ndim(operand) - len(named)
        if extra < 0 or (extra and "..." not in part):
            raise ValueError(f"{part!r} of {text!r} does not fit an operand of {np.ndim(operand)} axes")
        written.append(part.replace("...", "".join(dots[len(dots) - extra :])))
    if arrow:
        result = result.replace("...", "".join(dots))
    else:  # Einstein's convention: letters that stand once, in alphabetical order
        letters = "".join(written)
        once = sorted(letter for letter in set(letters) if letters.count(letter) == 1 and letter not in dots)
        result = "".join(dots) + "".join(once)
    unknown = set(result) - set("".join(written))
    if unknown or not set("".join(written)) <= set(_LETTERS):
        raise ValueError(f"{text!r} does not state a sum of products")
    labels = [[_LETTERS.index(letter) for letter in part] for part in written]
    return Contraction(list(operands), labels, [_LETTERS.index(letter) for letter in result])


def cholesky(arithmetic: Arithmetic, a: Any, *, upper: bool = False) -> Any:
    """Return the triangular factor of (..., n, n) matrices; NumPy's error where a pivot is not positive."""
    a = np.asarray(a)
    _square(a)
    size = a.shape[-1]
    factor = np.zeros(a.shape, a.dtype)
    source = np.swapaxes(a, -1, -2) if upper else a
    for column in range(size):
        below = np.array(source[..., column:, column])
        for done in range(column):
            product = arithmetic.apply(np.multiply, [factor[..., column:, done], factor[..., column, done, None]])
            below = arithmetic.apply(np.subtract, [below, product])
        if not (below[..., 0] > 0).all():
            raise np.linalg.LinAlgError("Matrix is not positive definite")
        pivot = np.asarray(arithmetic.apply(np.sqrt, [below[..., :1]]))
        factor[..., column, column] = pivot[..., 0]
        if column + 1 < size:
            factor[..., column + 1 :, column] = arithmetic.apply(np.divide, [below[..., 1:], pivot])
    return np.swapaxes(factor, -1, -2) if upper else factor


def solve(arithmetic: Arithmetic, a: Any, b: Any) -> Any:
    """Return x with a @ x = b for (..., n, n) matrices; NumPy's error where a pivot is zero."""
    a, b = np.asarray(a), np.asarray(b)
    _square(a)
    single = b.ndim == 1  # as NumPy 2: a stack of vectors is not told from a matrix
    right = b[:, None] if single else b
    _same(a.shape[-1], right.shape[-2])
    stack = np.broadcast_shapes(a.shape[:-2], right.shape[:-2])
    matrices = np.broadcast_to(a, stack + a.shape[-2:]).reshape(-1, *a.shape[-2:])
    columns = np.broadcast_to(right, stack + right.shape[-2:]).reshape(-1, *right.shape[-2:])
    pairs = zip(matrices, columns, strict=True)
    found = np.array([_solved(arithmetic, one.copy(), other.copy()) for one, other in pairs], a.dtype)
    found = found.reshape(stack + right.shape[-2:])
    return found[..., 0] if single else found


def _solved(arithmetic: Arithmetic, a: Any, b: Any) -> Any:
    size = len(a)
    for step in range(size):
        pivot = step + int(np.argmax(np.abs(a[step:, step])))
        if a[pivot, step] == 0:
            raise np.linalg.LinAlgError("Singular matrix")
        a[[step, pivot]], b[[step, pivot]] = a[[pivot, step]], b[[pivot, step]]
        if step + 1 < size:
            ratio = arithmetic.apply(np.divide, [a[step + 1 :, step, None], a[step, step]])
            for rows in (a, b):
                product = arithmetic.apply(np.multiply, [ratio, rows[step]])
                rows[step + 1 :] = arithmetic.apply(np.subtract, [rows[step + 1 :], product])
    for step in reversed(range(size)):
        for later in range(step + 1, size):
            product = arithmetic.apply(np.multiply, [b[later], a[step, later]])
            b[step] = arithmetic.apply(np.subtract, [b[step], product])
        b[step] = arithmetic.apply(np.divide, [b[step], a[step, step]])
    return b


def _square(a: Any) -> None:
    if a.ndim < 2 or a.shape[-1] != a.shape[-2]:
        raise np.linalg.LinAlgError("Last 2 dimensions of the array must be square")
