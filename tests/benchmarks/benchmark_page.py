"""The table of the benchmarks in Markdown, made from what the JSON holds."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from benchmark_figures import Asked, Figure, Section

__all__ = ["TITLES", "page", "shown"]

# What each benchmark is, in the order of the page: a title, and what was measured in turn with what.
TITLES: dict[str, tuple[str, str]] = {
    "kernel": (
        "Kernel alone",
        "Draws already rounded; only the kernel is timed, 16 steps. In each round plain float64 and all formats of the "
        "emulation run in turn, with NumPy's own float16 and ml_dtypes' bfloat16. Columns are paths a block.",
    ),
    "uncompiled": (
        "Kernel alone, without numba",
        "The same in a process with NARROWGAUGE_COMPILED=0, where NumPy does the roundings.",
    ),
    "audit": (
        "The whole audit, and its draws",
        "In each round a plain run, the audit with one worker, and the making of its draws in three stages. The plain "
        "run makes the same draws once, runs fine and coarse path of each level in plain NumPy and keeps mean and "
        "variance of their difference.",
    ),
    "watch": (
        "A run that looks at every number",
        "Fine paths alone, 256 of 64 steps, looked at as an audit looks at ranges and lost additions when it has "
        "measured: in each round plain NumPy in float64, then each format without the watch and with it.",
    ),
    "workers": ("Workers", "In each round the audit with one worker, with two processes, and with two dask workers."),
    "memory": ("Memory", "In each round a process for each number of paths."),
    "start": ("Start-up", "In each round both commands."),
    "policy": (
        "A question to a policy",
        "In each round each kind of question in turn, with the least that a program would do by hand.",
    ),
}


def page(document: Mapping[str, Any]) -> str:
    """Return the page of a document of benchmarks."""
    sections = {name: Section.read(document["benchmarks"][name]) for name in TITLES if name in document["benchmarks"]}
    parts = [
        "# Benchmarks",
        "Every figure is a ratio of two things that were measured in turn in one run (A B A B ...): the median over\n"
        "the rounds and, in brackets, the quartiles of the ratios of single rounds. Below 1 the first one is faster,\n"
        "or smaller; a unit marks the few figures that are no ratio. Threads of libraries are pinned to one.\n\n"
        "Made by `python tests/benchmarks/run.py`; the figures in full are in benchmarks.json.",
        _made_with(document["made_with"]),
        "## What was asked",
        _asked(sections),
    ]
    for name, section in sections.items():
        title, text = TITLES[name]
        rounds = sorted({figure.rounds for figure in section.figures})
        parts += [f"## {title}", f"{text} Rounds: {', '.join(map(str, rounds)) or 'none'}."]
        parts += _tables(section.figures)
        if section.notes:
            parts.append("\n".join(f"- {note}" for note in section.notes))
    return "\n\n".join(parts) + "\n"


def shown(value: float, asked: Asked | None = None) -> str:
    """Return a value in three digits, or as many more as it takes to stay on its side of the bound."""
    for digits in range(3, 18):
        text = f"{value:.{digits}g}"
        if asked is None or asked.met(float(text)) == asked.met(value):
            break
    number = float(text)
    return f"{number:,.0f}" if abs(number) >= 100 and number.is_integer() else text


def _made_with(made_with: Mapping[str, Any]) -> str:
    packages = ", ".join(f"{name} {version}" for name, version in made_with["packages"].items())
    return (
        f"Machine class: {made_with['system']} on {made_with['machine']}, {made_with['processors']} processors, "
        f"level-2 cache {made_with['cache']}, vector features {' '.join(made_with['vector_features'])}. "
        f"Versions: Python {made_with['python']}, {packages}."
    )


def _asked(sections: Mapping[str, Section]) -> str:
    rows = []
    for name, section in sections.items():
        for figure in section.figures:
            if figure.asked is not None:
                what = f"{figure.what} over {figure.over}" if figure.over else figure.what
                where = ", ".join(_places(figure))
                met = "yes" if figure.asked.met(figure.value) else "no"
                rows.append([TITLES[name][0], what, where, _cell(figure), _bound(figure), met])
    return _table(["benchmark", "what over what", "where", "measured", "asked", "met"], rows)


def _tables(figures: Sequence[Figure]) -> list[str]:
    """Return a table with a column a block of what has blocks, and one with a row a figure of what has not."""
    blocks = sorted({figure.block for figure in figures if figure.block is not None})
    cells: dict[tuple[str, ...], dict[int | None, str]] = {}
    for figure in figures:
        key = (figure.kernel or "", figure.what, figure.over)
        cells.setdefault(key, {})[figure.block] = _cell(figure)
    wide = [[*key, *(row.get(block, "") for block in blocks)] for key, row in cells.items() if None not in row]
    narrow = [[*key, row[None]] for key, row in cells.items() if None in row]
    head = ["kernel", "what", "over"]
    made = [_table([*head, *(f"{block:,}" for block in blocks)], wide)] if wide else []
    return made + ([_table([*head, "measured"], narrow)] if narrow else [])


def _places(figure: Figure) -> list[str]:
    return [place for place in (figure.kernel, f"{figure.block:,} paths" if figure.block else None) if place]


def _cell(figure: Figure) -> str:
    unit = f" {figure.unit}" if figure.unit else ""
    return f"{shown(figure.value, figure.asked)}{unit} [{shown(figure.low)}, {shown(figure.high)}]"


def _bound(figure: Figure) -> str:
    assert figure.asked is not None  # by the caller
    return f"{figure.asked.sense} {figure.asked.bound:g} {figure.unit}".strip()


def _table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines)
