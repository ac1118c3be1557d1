"""Kernels as source text, run under plain NumPy and in an arithmetic, and what came out compared bit for bit."""

from __future__ import annotations

import math
import textwrap

import numpy as np

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.dispatch.array import Array
from narrowgauge.dispatch.copies import copy_module, new_setting
from narrowgauge.dispatch.exact import Exact
from narrowgauge.dispatch.scalar import Scalar
from narrowgauge.dispatch.setting import Wrapped

NARROW = ("float16", "bfloat16", "float32")
FILE = "nowhere/kernel.py"


def module_of(source, form=None, observer=None, name="kernel"):
    """The module of a source text, under plain NumPy or stand-ins, and its setting."""
    setting = None if form is None else new_setting(arithmetic_named(form), observer)
    code = compile(textwrap.dedent(source), FILE, "exec", dont_inherit=True)
    return copy_module(code, name, setting), setting


def owned(value, setting):
    """A plain float array as the draws of a run: a copy, rounded; other values as they are."""
    if setting is None:
        return value.copy("K") if isinstance(value, np.ndarray) else value
    if isinstance(value, np.ndarray) and value.dtype == np.float64:
        carrier = np.empty_like(value, setting.arithmetic.format.carrier)  # keeps the layout
        carrier[...] = setting.arithmetic.cast(value)
        return Array(carrier, setting)
    return value


def call(source, form, *arguments, observer=None):
    """Run `kernel` of a source text on draws; what it returned, its setting, and the draws afterwards."""
    module, setting = module_of(source, form, observer)
    own = [owned(argument, setting) for argument in arguments]
    with np.errstate(all="ignore"):
        result = module.kernel(*own)
    return result, setting, own


def same(plain, wrapped):
    """Whether a plain result and one out of the float64 arithmetic agree in type, layout and every bit."""
    if isinstance(plain, dict):
        return plain.keys() == wrapped.keys() and all(same(plain[key], wrapped[key]) for key in plain)
    if isinstance(plain, (list, tuple)):
        alike = type(plain) is type(wrapped) and len(plain) == len(wrapped)
        return alike and all(same(one, other) for one, other in zip(plain, wrapped, strict=True))
    there = wrapped._carrier if isinstance(wrapped, Wrapped) else wrapped
    if isinstance(plain, str):  # a text of the state knows where it comes from
        return isinstance(there, str) and plain == there
    if type(plain) is not type(there):
        return False
    if isinstance(plain, np.ndarray):
        if (plain.dtype, plain.shape) != (there.dtype, there.shape) or (plain.size and plain.strides != there.strides):
            return False
        if plain.dtype.kind == "f":  # the sign of a NaN is nobody's promise
            here, there = (np.where(np.isnan(array), np.nan, array) for array in (plain, there))
            return here.tobytes() == there.tobytes()
        return plain.tobytes() == there.tobytes()
    if isinstance(plain, (float, np.floating)):
        return np.float64(plain).tobytes() == np.float64(there).tobytes() or (math.isnan(plain) and math.isnan(there))
    return bool(plain == there)


def values_of(result):
    """Every value in a nest of results."""
    if isinstance(result, dict):
        return values_of(list(result.values()))
    if isinstance(result, (list, tuple)):
        return [value for item in result for value in values_of(item)]
    return [result]


def unheld(result, setting):
    """The values in a nest of results that are not the format's: raw floats, wrong carriers, unrounded numbers."""
    form = setting.arithmetic.format
    found = []
    for value in values_of(result):
        if isinstance(value, (Array, Scalar)):
            carrier = np.asarray(value._carrier)
            if value._setting is not setting or carrier.dtype != form.carrier or not setting.arithmetic.holds(carrier):
                found.append(value)
        elif not isinstance(value, Exact) and (
            isinstance(value, float) or getattr(getattr(value, "dtype", None), "kind", "i") not in "iub"
        ):
            found.append(value)
    return found
