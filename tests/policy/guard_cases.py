"""Policies and questions for the guard and the C header: the example's policy with other parameters and levels."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import msgspec
from hypothesis import strategies as st

from narrowgauge.record.policy import ParameterPart, PolicyDocument, read_policy

EXAMPLE = Path(__file__).parents[2] / "examples" / "policy" / "reserve.policy.json"
# Names that mean something to C, C++, their preprocessor or their comments; the policy's reader takes any text.
HOSTILE = [
    *["rate", "a_count", "a", "double", "class", "typename", "restrict", "bool", "true", "linux", "unix", "NULL", "I"],
    *["_Complex", "a__b", "A", "\u03c3", "\u03c32", "x" * 300, "level", "self", "rule", "given", "i", "inside", "at"],
    *["*/ int x; /*", "/*", "a\nb", "#define x", "??/", "??/\n*/", "\\", "\\\n", '"', "a b", "", "1", "%d", "\x1b"],
]
FORMATS = ["float64", "float32", "float16", "bfloat16", "tf32", "e4m3", "e5m2"]
NUMBERS = st.floats(allow_nan=False, allow_infinity=False)
DOUBLES = NUMBERS | st.sampled_from([0.0, -0.0, 5e-324, 2.0**-1022, 1.7976931348623157e308, -1e300, 0.1, 50.0])
WHOLE = st.integers(-(2**63), 2**63 - 1) | st.sampled_from([0, 1, 2**53, 2**53 + 1, -(2**63), 2**63 - 1])
TEXTS = st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=6) | st.sampled_from(
    HOSTILE
)


def document() -> PolicyDocument:
    """Return the policy of the reserve example."""
    return read_policy(EXAMPLE)


def with_parameters(parameters: dict[str, Any], **more: Any) -> PolicyDocument:
    """Return a policy with these parameters: a pair is a box, a ParameterPart itself, anything else the one value."""
    base = document()
    parts = {name: _part(value) for name, value in parameters.items()}
    domain = msgspec.structs.replace(base.domain, parameters=parts)
    return msgspec.structs.replace(base, domain=domain, **more)


def _part(value: Any) -> ParameterPart:
    if isinstance(value, tuple):
        return ParameterPart(low=value[0], high=value[1], scale="linear")
    return value if isinstance(value, ParameterPart) else ParameterPart(fixed=value)


@st.composite
def boxes(draw: st.DrawFn) -> tuple[float, float]:
    low = draw(st.floats(-1e300, 1e300))
    return low, draw(st.floats(math.nextafter(low, math.inf), 1.7e308))


ARRAYS = st.integers(0, 3).flatmap(
    lambda columns: (
        st.lists(DOUBLES, max_size=4)
        | st.lists(st.lists(DOUBLES, min_size=columns, max_size=columns), min_size=1, max_size=3)
    )
)


@st.composite
def c_policies(draw: st.DrawFn) -> PolicyDocument:
    """Return a policy that a C header can hold, with hostile names wherever a name is written down."""
    names = draw(st.lists(st.sampled_from(HOSTILE) | TEXTS, max_size=6, unique=True))
    kinds = boxes() | DOUBLES | WHOLE | st.booleans() | TEXTS | ARRAYS
    base = with_parameters({name: draw(kinds) for name in names})
    levels, finest = [], draw(st.integers(0, len(base.levels) - 1))
    for one in base.levels[: finest + 1]:
        narrow, wide = draw(st.permutations(FORMATS))[:2]
        split = draw(st.booleans())
        levels.append(
            msgspec.structs.replace(
                one,
                scheme="split" if split else "alone",
                narrow=narrow,
                wide=wide if split else None,
                draws=draw(st.sampled_from(["exact", "approximate"])),
                rounding=draw(TEXTS | st.just("nearest")),
                paths=draw(st.integers(1, 2**53)),
                correction_paths=draw(st.integers(1, 2**53)) if split else None,
            )
        )
    run = draw(st.sampled_from(["reserve.py:value", "a.b:c", "./inflow --x", ":", "3d.py:π", "int", *HOSTILE]))
    return msgspec.structs.replace(
        base,
        levels=levels,
        ladder=msgspec.structs.replace(base.ladder, finest=finest),
        evidence=msgspec.structs.replace(base.evidence, paths=base.evidence.paths[: finest + 1]),
        kernel=msgspec.structs.replace(base.kernel, run=run),
        written_by=draw(st.sampled_from(HOSTILE)),
        cautions=draw(st.lists(st.sampled_from(HOSTILE) | TEXTS, max_size=3)),
    )


@st.composite
def questions(draw: st.DrawFn, made: PolicyDocument) -> tuple[int, dict[str, Any]]:
    """Return a level and parameters: about half of the time all as they were audited, else up to three that are not."""
    level = draw(st.integers(0, len(made.levels) + 1))
    parameters = {name: draw(_near(part)) for name, part in made.domain.parameters.items()}
    if parameters and draw(st.booleans()):
        for name in draw(st.lists(st.sampled_from(list(parameters)), min_size=1, max_size=3, unique=True)):
            parameters[name] = draw(_far(made.domain.parameters[name]))
    return level, parameters


def _near(part: ParameterPart) -> st.SearchStrategy[Any]:
    """Return values that were audited."""
    if part.fixed is not None:
        return st.just(part.fixed)
    return st.sampled_from([part.low, part.high]) | st.floats(part.low, part.high)


def _far(part: ParameterPart) -> st.SearchStrategy[Any]:
    """Return values of the same kind, most of which were not audited."""
    fixed = part.fixed
    if isinstance(fixed, bool):
        return st.booleans()
    if isinstance(fixed, str):
        return TEXTS
    if isinstance(fixed, list):
        return _other_arrays(fixed)
    if isinstance(fixed, int) and int(float(fixed)) != fixed:
        return st.sampled_from([fixed - 1 if fixed > 0 else fixed + 1, 0]) | WHOLE
    ends = [part.low, part.high] if fixed is None else [float(fixed)]
    near = [math.nextafter(end, way) for end in ends for way in (-math.inf, math.inf)]
    return st.sampled_from([*near, math.nan, math.inf, -math.inf, 0.0, -0.0]) | st.floats()


def _other_arrays(fixed: list[Any]) -> st.SearchStrategy[Any]:
    """Return arrays of the same nesting: cut by a row, longer by one, or with NaN in the first place."""
    if not fixed:
        return st.just([1.0])
    if isinstance(fixed[0], list):
        return st.sampled_from([fixed[:-1], [*fixed, fixed[0]]]) if fixed[0] else st.just(fixed)
    return st.sampled_from([fixed[:-1], [*fixed, 1.0], [math.nan, *fixed[1:]], [fixed[0] + 1.0, *fixed[1:]]])
