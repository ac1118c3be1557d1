"""Policies for the tests beside this file: a small one by hand, and any at all, built from the types."""

from __future__ import annotations

import copy
import math
import types
from typing import Annotated, Any, Literal, Union, get_args, get_origin

import msgspec
from hypothesis import strategies as st

from narrowgauge.record.policy import (
    LadderPart,
    LevelPart,
    MeasuredPart,
    ParameterPart,
    PolicyDocument,
)

TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=8)
FINITE = st.floats(allow_nan=False, allow_infinity=False)
WHOLE = st.integers(-(2**63), 2**63 - 1)
SCALARS = st.booleans() | WHOLE | FINITE | TEXTS
PLAIN = SCALARS | st.recursive(st.lists(SCALARS, max_size=3), lambda inner: st.lists(inner, max_size=2), max_leaves=4)
SHA = "sha256:" + "0" * 64

MINIMAL: dict[str, Any] = {
    "schema": "narrowgauge-policy/1",
    "written_by": "narrowgauge 0.1.0",
    "kernel": {
        "run": "reserve.py:value",
        "fingerprint": SHA,
        "covers": "syntax trees",
        "raw": SHA,
        "modules": [],
        "imports": ["numpy"],
        "packages": {"numpy": "2.4.6"},
        "unseen": [],
    },
    "ladder": {"horizon": 1.0, "coarsest_steps": 2, "refinement": 2, "finest": 1},
    "target": {"rmse": {"value": 0.01}, "bias_share": 0.25, "bias_budget": {"value": 0.00125}, "worthwhile": 1.05},
    "domain": {
        "parameters": {"rate": {"fixed": 0.01}, "volatility": {"low": 0.1, "high": 0.4, "scale": "log"}},
        "scenarios": 36,
        "failing_below": 0.089,
        "remarks": [],
    },
    "today": "float64",
    "accumulator": "float64",
    "levels": [],
    "plan": {"cost": 1000.0, "saving": 2.0, "saving_over_reference": 2.0, "replanned": False},
    "finest_paying_level": {
        "float16": {
            "level": 0,
            "cautious": None,
            "possible": 0,
            "extrapolated": False,
            "reason": "edge",
            "decided_by": "value",
        }
    },
    "laws": {},
    "cost": {"source": "given", "steps": {"float64": 1.0}, "draws": 0.0, "approximate_draws": None, "path": 0.0},
    "evidence": {
        "audit": SHA,
        "seed": 1,
        "confidence": 0.99,
        "paths": [32768, 32768],
        "versions": {"python": "3.11.7"},
        "machine": {"system": "Linux", "machine": "x86_64", "vector_features": []},
        "finished": None,
        "allowed_escapes": [{"file": "reserve.py", "line": 41, "count": 1024}],
    },
    "assumed": {"kernel.modules": [], "cost.draws": 0.0},
    "cautions": ["A policy is evidence, not approval."],
}
_LEVEL: dict[str, Any] = {
    "scheme": "split",
    "narrow": "float16",
    "wide": "float32",
    "draws": "exact",
    "rounding": "nearest",
    "paths": 100_000,
    "correction_paths": 1000,
    "verdict": "pays",
    "reason": None,
    "decided_by": "value",
    "gain": 3.9,
    "gain_low": 3.8,
    "gain_high": 4.0,
    "edge": 1.9,
    "edge_low": 1.8,
    "edge_high": 2.0,
    "breakeven_cost_ratio": 0.9,
    "measured": {
        "value": {
            "paths": 32768,
            "mean": 1.0,
            "mean_se": 0.001,
            "variance": 0.04,
            "level_mean": 1.0,
            "level_mean_se": 0.001,
            "level_variance": 0.04,
            "level_variance_se": 0.0001,
            "arms": {},
        }
    },
}


def minimal() -> dict[str, Any]:
    """Return a small policy of two levels as a plain document, new at each call."""
    document = copy.deepcopy(MINIMAL)
    for level in range(2):
        steps = 2 * 2**level
        document["levels"].append({"level": level, "steps": steps, "h": 1.0 / steps, **copy.deepcopy(_LEVEL)})
    return document


def built(kind: Any) -> st.SearchStrategy[Any]:
    """Return a strategy for any value of a type of the document."""
    if kind is ParameterPart:
        return parameters()
    if kind is LevelPart or kind is PolicyDocument:
        raise TypeError("its fields go together: policies() makes it")
    if isinstance(kind, type) and issubclass(kind, msgspec.Struct):
        return st.builds(kind, **{one.name: built(one.type) for one in msgspec.structs.fields(kind)})
    origin, inner = get_origin(kind), get_args(kind)
    if origin is Annotated:
        return _bounded(*inner)
    if origin is Literal:
        return st.sampled_from(inner)
    if origin in (Union, types.UnionType):
        return PLAIN | st.none() if bool in inner else st.one_of([built(one) for one in inner])
    if origin is list:
        return st.lists(built(inner[0]), max_size=3)
    if origin is dict:
        return st.dictionaries(TEXTS, built(inner[1]), max_size=2)
    simple = {str: TEXTS, int: WHOLE, float: FINITE, bool: st.booleans(), type(None): st.none()}
    return st.just(msgspec.UNSET) if kind is msgspec.UnsetType else simple[kind]


def _bounded(kind: Any, meta: msgspec.Meta) -> st.SearchStrategy[Any]:
    if meta.pattern is not None:
        return st.text("0123456789abcdef", min_size=64, max_size=64).map("sha256:{}".format)
    if meta.min_length is not None:
        return st.dictionaries(TEXTS, built(get_args(kind)[1]), min_size=meta.min_length, max_size=2)
    if kind is int:
        return st.integers(meta.ge, 2**70 if meta.le is None else meta.le)
    low = meta.ge if meta.gt is None else meta.gt
    return st.floats(low, meta.le, exclude_min=meta.gt is not None, allow_nan=False, allow_infinity=False)


@st.composite
def parameters(draw: st.DrawFn) -> ParameterPart:
    """Return one parameter, fixed or in a range."""
    if draw(st.booleans()):
        return ParameterPart(fixed=draw(PLAIN))
    scale = draw(st.sampled_from(["linear", "log"]))
    low = draw(st.floats(5e-324 if scale == "log" else -1e300, 1e300))
    return ParameterPart(low=low, high=draw(st.floats(math.nextafter(low, math.inf), 1.7e308)), scale=scale)


@st.composite
def levels(draw: st.DrawFn, level: int, steps: int, names: list[str]) -> LevelPart:
    """Return one level of a ladder, with a figure for each quantity."""
    own = {"level", "steps", "scheme", "narrow", "wide", "correction_paths", "measured"}
    fields = {one.name: draw(built(one.type)) for one in msgspec.structs.fields(LevelPart) if one.name not in own}
    wide = draw(st.none() | st.sampled_from(["float32", "float64"]))
    return LevelPart(
        level=level,
        steps=steps,
        scheme="alone" if wide is None else "split",
        narrow=draw(st.sampled_from(["float16", "bfloat16", "e4m3"])),
        wide=wide,
        correction_paths=None if wide is None else draw(st.integers(1, 2**53)),
        measured={name: draw(built(MeasuredPart)) for name in names},
        **fields,
    )


@st.composite
def policies(draw: st.DrawFn) -> PolicyDocument:
    """Return any policy at all."""
    own = {"schema", "ladder", "target", "levels", "evidence"}
    kinds = {one.name: one.type for one in msgspec.structs.fields(PolicyDocument)}
    names = draw(st.lists(TEXTS, min_size=1, max_size=2, unique=True))
    finest, refinement = draw(st.integers(0, 2)), draw(st.integers(2, 2**10))
    ladder = LadderPart(
        horizon=draw(st.floats(5e-324, 1.7e308)),
        coarsest_steps=draw(st.integers(1, 2**30)),
        refinement=refinement,
        finest=finest,
    )
    positive = st.floats(5e-324, 1.7e308)
    target = draw(built(kinds["target"]))
    evidence = draw(built(kinds["evidence"]))
    paths = draw(st.lists(st.integers(1, 2**53), min_size=finest + 1, max_size=finest + 1))
    return PolicyDocument(
        schema="narrowgauge-policy/1",
        ladder=ladder,
        target=msgspec.structs.replace(
            target,
            rmse={name: draw(positive) for name in names},
            bias_budget={name: draw(positive) for name in names},
        ),
        levels=[draw(levels(one, ladder.coarsest_steps * refinement**one, names)) for one in range(finest + 1)],
        evidence=msgspec.structs.replace(evidence, paths=paths),
        **{name: draw(built(kind)) for name, kind in kinds.items() if name not in own},
    )
