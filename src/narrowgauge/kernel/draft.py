"""A first audit file for a kernel, from its source text alone; nothing of it is executed.

A kernel is called as `kernel(draws, h, **parameters)`: the draws, the step size, the parameters by keyword; one that
draws for itself as `kernel(rng, h, steps=..., paths=..., **parameters)`. Its signature gives the parameters, the name
of its first argument what it takes, its body the draws of a step.
"""

from __future__ import annotations

import ast
import json
import re
import tomllib
import warnings
from collections.abc import Iterator
from pathlib import Path, PurePath

import msgspec

from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import bytes_of, most_steps
from narrowgauge.kernel.auditparameters import check_parameter, plain
from narrowgauge.kernel.audittables import TABLES, LadderTable, TableError, check_run, default_layout, dotted
from narrowgauge.kernel.domaintable import domain_lines
from narrowgauge.kernel.draftwords import MEANINGS, VALUES
from narrowgauge.kernel.gatetable import GATE_LINES
from narrowgauge.kernel.linestable import lines_draft

__all__ = ["draft"]

_ACCEPTED = "FILE.py:FUNCTION"

# What an argument of this name takes, in the order in which the rows are tried; names in lower case.
_TAKES_BY_NAME: tuple[tuple[str, re.Pattern[str]], ...] = (
    ("rng", re.compile(r"rng|_?generator|gen|random_?state|.*_rng|.*_generator")),
    ("increments", re.compile(r"d[wb](s|_?\d+|_?t)?|.*increments?|d?brownian")),
    ("normals", re.compile(r"zs?|xis?|eps|epsilons?|.*normals?|.*gaussians?")),
    ("uniforms", re.compile(r"us?|.*uniforms?")),
)
_ELSEWHERE = ("kernel", "library", "command", "domain", "lines")  # written first or last, or in a function's place
_OPTIONAL = ("target", "draws", "branches", "cost")
_INSTEAD = ("draws.intervals", "draws.degree", "branches.library", "branches.symbol")  # not beside what is shown
_COUNTS = ("steps", "paths")  # what a kernel that draws for itself is told
_STEP_NAMES = re.compile(r"h|dt|delta_?t?|.*step(_?size)?|time_?step|tau")


def draft(target: str) -> str:
    """Return the text of an audit file for `FILE.py:FUNCTION`, with every optional key as a comment.

    Raises AuditFileError if there is no such file or function, or the file is not Python.
    """
    try:
        check_run(target)
    except TableError as problem:
        raise AuditFileError(target, "", problem.problem, _ACCEPTED) from None
    file, _, name = target.rpartition(":")
    if not file.endswith(".py"):
        raise AuditFileError(target, "", f'"{file}" is not a .py file', _ACCEPTED)
    function = _function(Path(file), name)
    positional = _positional(function)
    draws = positional[0].arg if positional else ""
    takes = _takes(function, draws)
    factors, layout = _factors(function, draws) if takes != "rng" else (1, "")
    run = f"{PurePath(file).as_posix()}:{name}"
    finest = LadderTable(horizon=1.0, finest=0).finest_within(most_steps(factors))
    values = {**VALUES, "kernel.run": run, "branches.low": run, "ladder.finest": min(8, finest)}
    values["kernel.layout"] = default_layout(factors)
    parameters = _parameter_lines(function, _COUNTS if takes == "rng" else ())
    lines = [
        f"# Audit file for {name}, drafted from its source: check what is guessed, and supply what is to be",
        "# filled in. A key behind a # is optional and shows its default.",
        "",
        "[kernel]",
        *_contract(function, takes),
        _line("kernel.run", values),
        *_takes_lines(function, draws, takes),
        *(_draws_lines(factors, layout, draws, values) if takes != "rng" else ()),
        *(_line(f"kernel.{key}", values) for key in ("coupling", "modules", "shared", "allow", "rounds")),
        "",
        "[parameters]",
        "# Passed to the kernel by keyword; arrays of numbers arrive as float64 NumPy arrays.",
        *parameters,
    ]
    left_out = {"draws", "cost.approximate_draws"} if takes in ("uniforms", "rng") else set()
    for table, record in TABLES.items():
        if table not in {*_ELSEWHERE, *left_out}:
            # These need keys of their own once they are there, so that an empty one is not accepted.
            header = f"# [{table}]" if table in _OPTIONAL else f"[{table}]"
            keys = [f"{table}.{key}" for key in record.__struct_fields__]
            lines += ["", header, *(_line(key, values) for key in keys if key not in left_out)]
    floats = {key: value for key, value in tomllib.loads("\n".join(parameters)).items() if isinstance(value, float)}
    return "\n".join([*lines, *domain_lines(floats), *lines_draft(), "", *GATE_LINES]) + "\n"


def _function(path: Path, name: str) -> ast.FunctionDef:
    """Return the last function of that name at the top level of a file."""
    source = str(path)
    data = bytes_of(path, "Python")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # of the user's source text, which is not ours to comment on
            tree = ast.parse(data)
    except SyntaxError as problem:
        key = f"line {problem.lineno}" if problem.lineno else ""
        raise AuditFileError(source, key, f"this is not Python: {problem.msg}") from None
    except (ValueError, RecursionError, MemoryError) as problem:  # zero bytes; nesting the parser gives up at
        raise AuditFileError(source, "", f"this is not Python: {problem}") from None
    functions = {node.name: node for node in _top_level(tree.body) if isinstance(node, ast.FunctionDef)}
    if name not in functions:
        accepted = ", ".join(functions) or "a file with a function at its top level"
        raise AuditFileError(source, "", f'there is no function "{name}" at the top level', accepted)
    return functions[name]


def _top_level(body: list[ast.stmt]) -> Iterator[ast.stmt]:
    """Yield the statements that importing may run, those inside `if`, `try` and `with` too, in their order."""
    waiting = [*reversed(body)]  # a stack of our own: a long chain of elif nests deeper than Python recurses
    while waiting:
        node = waiting.pop()
        yield node
        if isinstance(node, ast.If | ast.Try | ast.With):
            handlers = [statement for handler in getattr(node, "handlers", []) for statement in handler.body]
            inside = (node.body, handlers, getattr(node, "orelse", []), getattr(node, "finalbody", []))
            waiting += reversed([statement for block in inside for statement in block])


def _toml(value: object) -> str:
    """Return a boolean, number, string or array of these as TOML writes it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # JSON's escapes are TOML's, but TOML also wants the delete character escaped.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, list | tuple):
        return f"[{', '.join(_toml(element) for element in value)}]"
    return repr(value)


def _line(key: str, values: dict[str, object], note: str = "") -> str:
    """Return the line of one key: its value, or behind a # its default; then what it means."""
    table, name = key.split(".")
    field = next(field for field in msgspec.structs.fields(TABLES[table]) if field.name == name)
    value = values.get(key, field.default)
    # Where the whole table is optional, its required key is a comment too.
    optional = "" if note or (field.required and table not in _OPTIONAL) else "# " * (1 + (key in _INSTEAD))
    return f"{optional}{name} = {_toml(value)}  # {note or MEANINGS[key]}"


def _contract(function: ast.FunctionDef, takes: str) -> list[str]:
    """Return comments on how the function will be called, and on what stands against that."""
    arguments = function.args
    names = [argument.arg for argument in (*arguments.posonlyargs, *arguments.args)]
    if len(names) < 2 and arguments.vararg is None:
        return [
            f"# {function.name} takes fewer than two arguments by position. A kernel is called with the",
            "# draws, the step size, and the parameters by keyword: write an adapter, and name it in run.",
        ]
    first = names[0] if names else "draws"
    second = names[1] if len(names) > 1 else "h"
    given = [f"{name}=..." for name in _COUNTS if takes == "rng" and name in _named(function)]
    call = ", ".join([first, second, *given, "**parameters"])
    lines = [f"# Called as {function.name}({call}); {second} is the step size."]
    if takes == "rng" and "paths" not in _named(function) and function.args.kwarg is None:
        lines.append(f"# {function.name} takes no number of paths: write an adapter that does, and name it in run.")
    if not _STEP_NAMES.fullmatch(second.lower()):
        lines.append(f"# That {second} is the step size does not show in its name; check.")
    return lines


def _takes(function: ast.FunctionDef, draws: str) -> str:
    """Return what a kernel takes by the name of its first argument, or as it asks for the number of paths; else ""."""
    if "paths" in _named(function):
        return "rng"
    return next((takes for takes, names in _TAKES_BY_NAME if names.fullmatch(draws.lower())), "")


def _named(function: ast.FunctionDef) -> set[str]:
    """Return the names of the arguments after the first two that can be given by keyword."""
    return {argument.arg for argument in (*_positional(function)[2:], *function.args.kwonlyargs)}


def _positional(function: ast.FunctionDef) -> list[ast.arg]:
    return [*function.args.posonlyargs, *function.args.args]


def _takes_lines(function: ast.FunctionDef, draws: str, takes: str) -> list[str]:
    by = "as it takes paths" if takes == "rng" and "paths" in _named(function) else f"by the name of {draws}"
    note = f"{by}; {MEANINGS['kernel.takes']}" if takes else "guessed; check"
    return [_line("kernel.takes", {"kernel.takes": takes or "increments"}, note)]


def _draws_lines(factors: int, layout: str, draws: str, values: dict[str, object]) -> list[str]:
    guessed = f"guessed from how {draws} is taken apart; check"
    return [
        _line("kernel.factors", {"kernel.factors": factors}, guessed)
        if factors > 1
        else _line("kernel.factors", values, "") + "; nothing in the source shows more",
        _line("kernel.layout", {"kernel.layout": layout}, guessed) if layout else _line("kernel.layout", values),
    ]


def _parameter_lines(function: ast.FunctionDef, left_out: tuple[str, ...]) -> list[str]:
    """Return a line for each argument after the first two: its default, or a comment that asks for one."""
    arguments = function.args
    positional = _positional(function)
    padding: list[ast.expr | None] = [None] * (len(positional) - len(arguments.defaults))
    pairs = [*zip(positional, [*padding, *arguments.defaults], strict=True)][2:]
    pairs += zip(arguments.kwonlyargs, arguments.kw_defaults, strict=True)
    lines = []
    for argument, default in pairs:
        key = dotted(argument.arg)
        if argument.arg in left_out:
            continue
        if argument in arguments.posonlyargs:
            lines.append(f"# {key} cannot be passed by keyword: the kernel needs an adapter")
        elif default is None:
            lines.append(f"# {key} = ...  # no default in the signature: fill in")
        elif (value := _literal(argument.arg, default)) is not None:
            lines.append(f"{key} = {_toml(value)}")
        else:
            lines.append(f"# {key} = ...  # default in the signature: {_source(default)}; fill in, or leave out")
    if arguments.kwarg:
        lines.append(f"# further names are accepted, in **{arguments.kwarg.arg}")
    return lines


def _literal(name: str, default: ast.expr) -> object:
    """Return a default that TOML can say as it is, otherwise None."""
    try:
        value = plain(ast.literal_eval(default))
        check_parameter(name, value)
        _toml(value).encode("utf-8")
    except (ValueError, TypeError, RecursionError):  # TableError and UnicodeEncodeError are ValueErrors
        return None
    return value


def _source(default: ast.expr) -> str:
    """Return the source of an expression on one line, of characters that a comment may hold."""
    try:
        source = " ".join(ast.unparse(default).split())
    except RecursionError:
        return "a long expression"
    text = "".join(character if character.isprintable() else "?" for character in source)
    return text if len(text) <= 60 else text[:57] + "..."


def _factors(function: ast.FunctionDef, draws: str) -> tuple[int, str]:
    """Return the guessed number of draws per step, and their layout where it is not the default."""
    finder = _Finder(draws)
    try:
        for statement in function.body:
            finder.visit(statement)
    except RecursionError:  # an expression of hundreds of terms; what was seen before it still counts
        pass
    for axis, layout in ((1, ""), (2, "steps, paths, factors"), (0, "factors, steps, paths")):
        count = finder.counts.get(axis, 1)
        # A constant first index next to a loop over steps is one of the steps.
        if 1 < count <= most_steps(1) and not (axis == 0 and finder.by_step):
            return count, layout
    return 1, ""


class _Finder(ast.NodeVisitor):
    """Collects how a function takes its draws apart, in order of the source.

    `counts` has, by axis of the array, the largest number of factors seen there; `by_step` says whether the
    first axis is also walked through or indexed by a variable, so that it is the axis of steps.
    """

    def __init__(self, draws: str) -> None:
        self.draws, self.rows = {draws}, set[str]()
        self.counts: dict[int, int] = {}
        self.by_step = False

    def visit_For(self, node: ast.For) -> None:
        """Meet a loop, whose target may take rows apart."""
        self._walk(node.target, node.iter)
        self.generic_visit(node)

    def visit_comprehension(self, node: ast.comprehension) -> None:
        """Meet the loop of a comprehension."""
        self._walk(node.target, node.iter)
        self.generic_visit(node)

    def visit_Assign(self, node: ast.Assign) -> None:
        """Meet an assignment, which may take apart or rename the draws or one of their rows."""
        for target in node.targets:
            if self._is_draws(node.value):
                self._take(target, axis=0, names=self.draws)
            elif self._is_row(node.value):
                self._take(target, axis=1, names=self.rows)
        self.generic_visit(node)

    def visit_Subscript(self, node: ast.Subscript) -> None:
        """Meet an index into the draws or one of their rows."""
        places = node.slice.elts if isinstance(node.slice, ast.Tuple) else [node.slice]
        constants = [_constant(place) for place in places]
        if self._is_row(node.value):
            self._count(1, constants[0])
        elif self._is_draws(node.value):
            ellipsis = isinstance(places[0], ast.Constant) and places[0].value is Ellipsis
            self.by_step |= constants[0] is None and not (ellipsis or isinstance(places[0], ast.Slice))
            for axis, constant in enumerate(constants):
                self._count(axis + 3 - len(places) if ellipsis else axis, constant)
        self.generic_visit(node)

    def _walk(self, target: ast.expr, iterated: ast.expr) -> None:
        if self._is_draws(iterated):
            self.by_step = True
            self._take(target, axis=1, names=self.rows)
        elif isinstance(iterated, ast.Call) and isinstance(iterated.func, ast.Name) and isinstance(target, ast.Tuple):
            sources: list[ast.expr | None] = list(iterated.args)
            if iterated.func.id == "enumerate":
                sources = [None, *sources[:1]]
            elif iterated.func.id != "zip":
                return
            for source, inner in zip(sources, target.elts, strict=False):
                if source is not None:
                    self._walk(inner, source)

    def _take(self, target: ast.expr, *, axis: int, names: set[str]) -> None:
        if isinstance(target, ast.Name):
            names.add(target.id)
        elif isinstance(target, ast.Tuple | ast.List):
            starred = any(isinstance(element, ast.Starred) for element in target.elts)
            self._count(axis, None if starred else len(target.elts) - 1)

    def _count(self, axis: int, largest_index: int | None) -> None:
        if largest_index is not None:
            self.counts[axis] = max(self.counts.get(axis, 1), largest_index + 1)

    def _is_draws(self, node: ast.expr) -> bool:
        return isinstance(node, ast.Name) and node.id in self.draws

    def _is_row(self, node: ast.expr) -> bool:
        if isinstance(node, ast.Subscript):
            single = not isinstance(node.slice, ast.Tuple | ast.Slice)
            return single and _constant(node.slice) is None and self._is_draws(node.value)
        return isinstance(node, ast.Name) and node.id in self.rows


def _constant(node: ast.expr) -> int | None:
    """Return a constant index of 0 or more, otherwise None."""
    value = node.value if isinstance(node, ast.Constant) else None
    return value if isinstance(value, int) and not isinstance(value, bool) else None
