"""The share of each line is found, and the lines worth a wider format are."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from audit_cases import GEOMETRIC, audited, file_for

from narrowgauge.api import run_audit
from narrowgauge.conduct.lines import LineStudy, line_study, studied
from narrowgauge.errors import AuditFileError, WorkerError
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.linestable import with_lines
from narrowgauge.kernel.loading import find_kernel
from narrowgauge.measure.task import Bench
from narrowgauge.measure.workers import Workers
from narrowgauge.record.lines import FormatLines


def study(file: Any, form: str = "float16", finest: int | None = None) -> FormatLines:
    """Return the study of one format, as an audit would run it once it knows how far the format pays."""
    task = LineStudy(finest={form: finest}, factors=file.kernel.factors, coupled=True)
    return task(Bench(file, find_kernel(file))).formats[form]


def by_line(found: FormatLines, which: str = "error", quantity: str = "value") -> dict[Any, Any]:
    """Return the shares by line, or by kind of input."""
    parts = found.quantities[quantity].parts
    return {found.parts[one.part].line or found.parts[one.part].kind: getattr(one, which) for one in parts}


def noisy(dW: Any, h: float) -> Any:
    """Values near 6 are rounded to a multiple of 2^-8 in float16, those below 2 to one of 2^-10 or less.

    So the line of the former adds a variance of (2^-8)^2 / 12 in each step, and the sum at most a sixteenth of it while
    |x| < 2, which holds for 95% of the paths at the end and for more before; the draws add (2^-13)^2 / 12 or less.
    """
    x = np.zeros(dW.shape[1])
    for dw in dW:
        moved = (dw + 6.0) - 6.0
        x = x + moved
    return x


NOISY = noisy.__code__.co_firstlineno + 8


def noisy_file(seed: int) -> Any:
    return audit_file_from(
        {
            "kernel": {"run": noisy, "takes": "increments"},
            "ladder": {"horizon": 1.0, "finest": 4},
            "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024, "seed": seed},
            "lines": {"level": 4, "paths": 1024, "search": False},
        }
    )


def test_a_noisy_line_is_found_in_each_of_a_hundred_seeds() -> None:
    """A line that causes at least 90% of the error by construction has at least 90% of it, within its interval."""
    for seed in range(100):
        shares = by_line(study(noisy_file(seed)))
        assert max(shares, key=lambda line: shares[line].share) == NOISY, seed
        assert shares[NOISY].share_high >= 0.9, seed
        assert shares[NOISY].share > 0.85, seed
        assert all(shares[line].share < 0.15 for line in shares if line != NOISY), seed


def linear(dW: Any, h: float, pull: float) -> Any:
    """A mean-reverting process, linear in its state and its draws."""
    x = np.full(dW.shape[1], 1.0)
    for dw in dW:
        drift = pull * h * x
        shock = 0.4 * dw
        x = x + (shock - drift)
    return x


def linear_file(level: int, seed: int = 1) -> Any:
    return audit_file_from(
        {
            "kernel": {"run": linear, "takes": "increments"},
            "parameters": {"pull": 0.7},
            "ladder": {"horizon": 1.0, "finest": 8},
            "sampling": {"seed": seed},
            "lines": {"level": level, "paths": 65536, "search": False},
        }
    )


@pytest.mark.parametrize(("level", "alone"), [(2, 0.10), (4, 0.10), (6, 0.02), (8, 0.02)])
@pytest.mark.parametrize("which", ["error", "correction"])
def test_the_shares_of_a_linear_kernel_add_up(level: int, alone: float, which: str) -> None:
    """The means to 1 within 3%, the alone shares within 10% with few steps and 2% with 64 and more; seed 1."""
    total = getattr(study(linear_file(level)).quantities["value"], which).total
    assert total.share == pytest.approx(1.0, abs=0.03)
    assert total.alone == pytest.approx(1.0, abs=alone)


def test_without_a_rounded_line_the_shares_would_not_add_up() -> None:
    """Negative control: the shares of all parts but the largest miss the whole by more than any tolerance above."""
    shares = by_line(study(linear_file(4)))
    largest = max(shares, key=lambda line: shares[line].share)
    assert sum(one.share for line, one in shares.items() if line != largest) < 0.9


class TestAudit:
    def test_an_audit_that_asks_for_lines_has_them(self, tmp_path: Path) -> None:
        """The record, lines.csv and the data frame hold the same shares; a later audit leaves no lines.csv."""
        lines = {"formats": '["bfloat16"]', "level": "2", "paths": "1024", "what_ifs": "true"}
        result = audited(tmp_path, GEOMETRIC, lines=lines)
        assert result.record.lines is not None
        assert list(result.record.lines.formats) == ["bfloat16"]
        found = result.record.lines.formats["bfloat16"]
        assert [(part.kind, part.line, part.role) for part in found.parts] == [
            ("line", 6, "state"),
            ("draws", None, None),
            ("step size", None, None),
            ("constants", None, None),
        ]
        assert sum(part.operations for part in found.parts) == pytest.approx(1.0)
        source = {line.line: line.text for line in result.record.lines.source}
        assert source[6] == "        x = x + 0.05 * h * x + 0.2 * x * dW[n]"
        assert list(source) == [4, 5, 6, 7]
        assert found.what_ifs is not None
        names = ["stochastic rounding", "fused products", "flushed subnormals", "carried errors", "wide increments"]
        assert [one.name for one in found.what_ifs] == names
        table = result.shares
        assert list(table["kind"]) == [part.kind for part in found.parts]
        assert table["error_share"].tolist() == [part.error.share for part in found.quantities["value"].parts]
        with (tmp_path / "out" / "lines.csv").open(encoding="utf-8") as file:
            assert sum(1 for _ in file) == 1 + len(table)
        audited(tmp_path, GEOMETRIC)
        assert not (tmp_path / "out" / "lines.csv").exists()

    def test_the_study_is_the_same_in_a_worker(self, tmp_path: Path) -> None:
        """A worker process gives the same figures as this one."""
        lines = {"formats": '["float16"]', "paths": "1024"}
        here = run_audit(file_for(tmp_path, GEOMETRIC, lines=lines), None)
        there = run_audit(file_for(tmp_path, GEOMETRIC, lines=lines), None, workers=Workers(number=2))
        assert here.record.lines is not None
        assert here.record.lines == there.record.lines

    def test_without_formats_those_that_stop_paying_are_studied(self, tmp_path: Path) -> None:
        """A format that pays to the end of the ladder is not asked about; nor is there a study where all do."""
        cheap = {"float64": "1.0", "float32": "0.9", "float16": "0.89", "bfloat16": "0.001"}
        lines = {"paths": "1024", "search": "false"}
        found = audited(tmp_path, GEOMETRIC, cost=cheap, lines=lines).record
        ending = [form for form, one in found.verdict.finest_paying_level.items() if (one.level or -1) < 2]
        assert found.lines is not None
        assert list(found.lines.formats) == ending
        assert 0 < len(ending) < 3

    def test_a_kernel_that_draws_for_itself_has_lines_too(self, tmp_path: Path) -> None:
        """Its draws are one part like those that a kernel is handed."""
        source = """
            import numpy as np

            def value(rng, h, steps, paths):
                x = np.ones(paths)
                for _ in range(steps):
                    x = x + 0.2 * x * rng.normal(0.0, np.sqrt(h), paths)
                return x
        """
        kernel = {"takes": '"rng"'}
        found = audited(
            tmp_path, source, kernel=kernel, lines={"formats": '["float16"]', "paths": "1024", "level": "2"}
        )
        assert found.record.lines is not None
        total = found.record.lines.formats["float16"].quantities["value"].error.total
        assert total is not None
        assert total.share == pytest.approx(1.0, abs=0.1)

    def test_a_kernel_that_works_on_groups_of_paths_has_lines_too(self, tmp_path: Path) -> None:
        """Where a few paths are too few for the kernel, a small block of them is looked at."""
        source = """
            import numpy as np

            def value(dW, h):
                if dW.shape[1] < 64:
                    raise ValueError("groups of 64 paths")
                return np.exp(0.2 * dW.sum(axis=0))
        """
        found = audited(tmp_path, source, lines={"formats": '["float16"]', "paths": "1024"}).record.lines
        assert found is not None
        assert found.reason is None
        parts = found.formats["float16"].parts
        assert [part.line for part in parts][:1] == [6]
        assert sum(part.operations for part in parts) == pytest.approx(1.0)

    def test_what_raises_in_a_run_is_said(self, tmp_path: Path) -> None:
        """A kernel that raises where a line is rounded has no shares, and the reason is its exception."""
        source = """
            import numpy as np

            def value(dW, h):
                x = 1.0 + dW[0] * 1e-5
                if (x == 1.0).all():
                    raise ValueError("nothing moves")
                return x
        """
        found = audited(tmp_path, source, lines={"formats": '["float16"]', "paths": "1024"}).record
        assert found.lines is not None
        study_of = found.lines.formats["float16"]
        assert study_of.quantities == {}
        assert study_of.reason == "a run raised ValueError: nothing moves"


def test_what_stops_a_study_costs_no_audit(tmp_path: Path) -> None:
    """A worker that is past its time limit in the study is said, and the rest of the record is there."""
    file = file_for(tmp_path, GEOMETRIC, lines={"formats": '["float16"]'})

    class Stopped:
        def call(self, task: Any, name: str) -> Any:
            raise WorkerError(f"{name}: no worker is left")

    record = run_audit(file, None).record
    engine: Any = Stopped()
    found = studied(line_study(file, record), engine)
    assert found is not None
    assert (found.formats, found.reason) == ({}, "the study of the lines: no worker is left")
    assert studied(None, engine) is None


def test_a_study_of_nothing_says_so(tmp_path: Path) -> None:
    """Where every format pays to the end and none is named there is a reason in place of a study."""
    cheap = {"float64": "1.0", "float32": "0.01", "float16": "0.001", "bfloat16": "0.001"}
    found = audited(
        tmp_path, GEOMETRIC, formats={"narrow": '["float32"]', "wide": "[]"}, cost=cheap, lines={}
    ).record.lines
    assert found is not None
    assert found.reason == "every narrow format pays to the end of the ladder, and lines.formats names none"
    assert not (tmp_path / "out" / "lines.csv").exists()


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ({"paths": "512"}, "lines.paths: 512 is not accepted; accepted: an integer of 1024 or more"),
        ({"level": "3"}, "lines.level: 3 is beyond ladder.finest; accepted: an integer from 0 to 2"),
        (
            {"formats": '["tf32"]'},
            'lines.formats: "tf32" is not among formats.narrow; accepted: float16, bfloat16, float32',
        ),
        (
            {"formats": '["float16"]', "wide": '"bfloat16"'},
            'lines.wide: "bfloat16" is not more precise than "float16"; accepted: a format more precise than those of '
            "lines.formats",
        ),
        ({"colour": "1"}, "lines.colour: unknown key; accepted: formats, level, paths, search, what_ifs, wide"),
    ],
)
def test_what_the_table_refuses(tmp_path: Path, lines: dict[str, str], message: str) -> None:
    """Each wrong key is refused with what is accepted."""
    with pytest.raises(AuditFileError) as caught:
        file_for(tmp_path, GEOMETRIC, lines=lines)
    assert str(caught.value).endswith(message)


def test_a_kernel_that_rounds_for_itself_has_no_lines(tmp_path: Path) -> None:
    """Neither by the table nor by the option: the audit sees none of its operations."""
    words = 'lines: with rounds = "itself" the audit does not see the lines of the kernel; accepted: no such table'
    kernel = {"rounds": '"itself"'}
    with pytest.raises(AuditFileError, match=words):
        file_for(tmp_path, GEOMETRIC, kernel=kernel, lines={"paths": "1024"})
    with pytest.raises(AuditFileError, match=words):
        with_lines(file_for(tmp_path, GEOMETRIC, kernel=kernel))


def test_the_option_is_an_empty_table(tmp_path: Path) -> None:
    """`--lines` asks for what `[lines]` without keys asks for, and leaves a table that is there as it is."""
    assert with_lines(file_for(tmp_path, GEOMETRIC)) == file_for(tmp_path, GEOMETRIC, lines={})
    given = file_for(tmp_path, GEOMETRIC, lines={"paths": "2048"})
    assert with_lines(given) is given
