"""Sums, products and means of a format with a stated order: the arithmetic of the route `accumulated`.

Order: along the axis, first to last; several axes as one in C order. Accumulator: the format itself, so that each
partial result is rounded. A mean is the sum divided by the count, a variance the sum of the squared deviations from
the mean divided by the count less `ddof`. Everything takes and gives carriers of a 16-bit format.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from narrowgauge.arithmetic.arithmetic import Arithmetic

__all__ = [
    "average", "axes_of", "convolve", "correlate", "cumulative", "fold", "fronted", "mean", "running", "sequential",
    "trace", "trapezoid", "variance",
]  # fmt: skip

_NARROW = 64  # columns from which a loop over rows in the carrier is the faster way

Carrier = Any  # an array or a scalar of the carrier's type
Axis = int | tuple[int, ...] | None


def fronted(values: Carrier, axis: Axis) -> Carrier:
    """Return the values with the axes of a reduction made one, in C order, and put in front."""
    values = np.asarray(values)
    axes = axes_of(values.ndim, axis)
    rest = tuple(size for place, size in enumerate(values.shape) if place not in axes)
    count = int(np.prod([values.shape[place] for place in axes], dtype=int))
    return np.moveaxis(values, axes, range(len(axes))).reshape(count, *rest)


def axes_of(ndim: int, axis: Axis) -> tuple[int, ...]:
    """Return the axes of a reduction in ascending order; NumPy's error for one that is not there."""
    if axis is None:
        return tuple(range(ndim))
    return tuple(sorted(np.lib.array_utils.normalize_axis_tuple(axis, ndim)))


def running(arithmetic: Arithmetic, ufunc: np.ufunc, front: Carrier) -> Carrier:
    """Return all partial results along the first axis."""
    form = arithmetic.format
    stored = bool(arithmetic.direct) and form.name != "tf32"  # which is stored as float32, and no type computes in it
    if stored and ufunc in (np.add, np.multiply) and front.ndim and front[:1].size < _NARROW:
        # the storage type's own operation rounds each partial result as the loop below does, at a tenth of its cost
        return ufunc.accumulate(front.astype(form.storage), axis=0).astype(form.carrier)
    partial = np.array(front, form.carrier)
    for place in range(1, len(partial)):
        partial[place] = arithmetic.apply(ufunc, [partial[place - 1], partial[place]])
    return partial


def fold(arithmetic: Arithmetic, ufunc: np.ufunc, front: Carrier) -> Carrier:
    """Return the last partial result along the first axis; of no values the ufunc's identity, as NumPy does."""
    form = arithmetic.format
    if len(front) == 0:
        if ufunc.identity is None:
            raise ValueError(f"zero-size array to reduction operation {ufunc.__name__} which has no identity")
        return np.full(front.shape[1:], ufunc.identity, form.carrier)[()]
    if front[0].size < _NARROW:
        return running(arithmetic, ufunc, front)[-1][()]
    total = front[0].copy()
    for row in front[1:]:
        total = arithmetic.apply(ufunc, [total, row])
    return total[()]


def sequential(
    arithmetic: Arithmetic,
    ufunc: np.ufunc,
    values: Carrier,
    *,
    axis: Axis = None,
    keepdims: bool = False,
    initial: Carrier = None,
    where: Any = True,
) -> Carrier:
    """Return a sum or product; `initial` comes first, values that `where` leaves out change nothing."""
    values = np.asarray(values)
    if where is not True:
        # -0 is what leaves every sum as it is, also -0
        values = np.where(where, values, values.dtype.type(-0.0 if ufunc is np.add else 1.0))
    front = fronted(values, axis)
    if initial is not None:
        front = np.concatenate([np.full((1, *front.shape[1:]), initial, front.dtype), front])
    total = fold(arithmetic, ufunc, front)
    return _kept(total, values.shape, axis) if keepdims else total


def _kept(total: Carrier, shape: tuple[int, ...], axis: Axis) -> Carrier:
    axes = axes_of(len(shape), axis)
    return np.reshape(total, [1 if place in axes else size for place, size in enumerate(shape)])


def _divided(arithmetic: Arithmetic, total: Carrier, count: Any) -> Carrier:
    number = arithmetic.cast(count) if isinstance(count, np.ndarray) else arithmetic.constant(count)
    return arithmetic.apply(np.divide, [total, number])


def mean(
    arithmetic: Arithmetic, values: Carrier, *, axis: Axis = None, keepdims: bool = False, where: Any = True
) -> Carrier:
    """Return the sum divided by the count."""
    total = sequential(arithmetic, np.add, values, axis=axis, keepdims=keepdims, where=where)
    if where is True:
        return _divided(arithmetic, total, _count(np.shape(values), axis))
    chosen = np.broadcast_to(where, np.broadcast_shapes(np.shape(where), np.shape(values)))
    counts = np.sum(chosen, axis=axis, keepdims=keepdims)
    return _divided(arithmetic, total, np.asarray(counts))[()]


def _count(shape: tuple[int, ...], axis: Axis) -> int:
    return int(np.prod([shape[place] for place in axes_of(len(shape), axis)], dtype=int))


def variance(
    arithmetic: Arithmetic,
    values: Carrier,
    *,
    axis: Axis = None,
    ddof: float = 0,
    keepdims: bool = False,
    root: bool = False,
) -> Carrier:
    """Return the variance, or with `root` the standard deviation."""
    centre = mean(arithmetic, values, axis=axis, keepdims=True)
    apart = arithmetic.apply(np.subtract, [np.asarray(values), centre])
    squares = arithmetic.apply(np.multiply, [apart, apart])
    total = sequential(arithmetic, np.add, squares, axis=axis, keepdims=keepdims)
    result = _divided(arithmetic, total, max(_count(np.shape(values), axis) - ddof, 0))
    return arithmetic.apply(np.sqrt, [result]) if root else result


def average(
    arithmetic: Arithmetic,
    values: Carrier,
    *,
    axis: Axis = None,
    weights: Carrier = None,
    returned: bool = False,
    keepdims: bool = False,
) -> Any:
    """Return the sum of products with the weights divided by the sum of the weights, and that sum if `returned`."""
    values = np.asarray(values)
    if weights is None:
        result = mean(arithmetic, values, axis=axis, keepdims=keepdims)
        total: Any = np.full(np.shape(result), arithmetic.constant(_count(values.shape, axis)), values.dtype)[()]
        return (result, total) if returned else result
    weights = np.asarray(weights)
    if weights.shape != values.shape:
        axes = axes_of(values.ndim, axis)
        if axis is None or weights.shape != tuple(values.shape[place] for place in axes):
            raise ValueError("Shape of weights must be consistent with shape of a along specified axis.")
        weights = weights.reshape([size if place in axes else 1 for place, size in enumerate(values.shape)])
        weights = np.broadcast_to(weights, values.shape)
    total = sequential(arithmetic, np.add, weights, axis=axis, keepdims=keepdims)
    products = arithmetic.apply(np.multiply, [values, weights])
    above = sequential(arithmetic, np.add, products, axis=axis, keepdims=keepdims)
    result = arithmetic.apply(np.divide, [above, total])
    return (result, total) if returned else result


def cumulative(
    arithmetic: Arithmetic, ufunc: np.ufunc, values: Carrier, *, axis: int | None = None, include_initial: bool = False
) -> Carrier:
    """Return the partial results along an axis, of the flat array without one."""
    values = np.asarray(values)
    if axis is None:
        values, axis = values.ravel(), 0
    front = np.moveaxis(values, axis, 0)
    if include_initial:
        front = np.concatenate([np.full((1, *front.shape[1:]), ufunc.identity, front.dtype), front])
    return np.moveaxis(running(arithmetic, ufunc, front), 0, axis)


def trace(arithmetic: Arithmetic, values: Carrier, *, offset: int = 0, axis1: int = 0, axis2: int = 1) -> Carrier:
    """Return the sum along a diagonal."""
    return sequential(arithmetic, np.add, np.diagonal(values, offset, axis1, axis2), axis=-1)


def convolve(arithmetic: Arithmetic, a: Carrier, v: Carrier, *, mode: Any = "full") -> Carrier:
    """Return the convolution; each value is summed along the shorter operand, first to last."""
    longer, shorter = np.atleast_1d(a), np.atleast_1d(v)
    if longer.ndim > 1 or shorter.ndim > 1:
        raise ValueError("object too deep for desired array")
    if len(longer) == 0 or len(shorter) == 0:
        raise ValueError("a convolution of no values")
    if len(shorter) > len(longer):
        longer, shorter = shorter, longer
    full = np.zeros(len(longer) + len(shorter) - 1, longer.dtype)
    for place, one in enumerate(shorter):
        part = full[place : place + len(longer)]
        part[...] = arithmetic.apply(np.add, [part, arithmetic.apply(np.multiply, [longer, one])])
    return full[_cut(mode, len(longer), len(shorter))]


def correlate(arithmetic: Arithmetic, a: Carrier, v: Carrier, *, mode: Any = "valid") -> Carrier:
    """Return the correlation of two real sequences, as the convolution with the second one reversed."""
    a, v = np.atleast_1d(a), np.atleast_1d(v)
    if len(v) > len(a):  # as NumPy: of the exchanged operands, and backwards
        return convolve(arithmetic, v, a[::-1], mode=mode)[::-1]
    return convolve(arithmetic, a, v[::-1], mode=mode)


def _cut(mode: Any, longer: int, shorter: int) -> slice:
    if mode in ("full", 2):
        return slice(None)
    if mode in ("same", 1):
        start = shorter - shorter // 2 - 1
        return slice(start, start + longer)
    if mode in ("valid", 0):
        return slice(shorter - 1, longer)
    raise ValueError(f"mode must be one of 'valid', 'same', or 'full' (got {mode!r})")


def trapezoid(
    arithmetic: Arithmetic, values: Carrier, x: Carrier = None, dx: Carrier = 1.0, *, axis: int = -1
) -> Carrier:
    """Return the sum along an axis of width * (next + this) / 2, each of the three rounded."""
    front = np.moveaxis(np.asarray(values), axis, -1)
    width = dx
    if x is not None:
        x = np.asarray(x)
        x = x if x.ndim == 1 else np.moveaxis(x, axis, -1)
        width = arithmetic.apply(np.subtract, [x[..., 1:], x[..., :-1]])
    sums = arithmetic.apply(np.add, [front[..., 1:], front[..., :-1]])
    pieces = arithmetic.apply(np.divide, [arithmetic.apply(np.multiply, [width, sums]), arithmetic.constant(2.0)])
    return sequential(arithmetic, np.add, pieces, axis=-1)
