"""The study of lines on a terminal: the source with shares at its right, the sets worth widening, and the hint."""

from __future__ import annotations

import made_records as made
import pytest
from msgspec.structs import replace
from rendering import HOSTILE, flat, numbers, rendered
from rich.cells import cell_len

from narrowgauge.record.lines import (
    FormatLines,
    LineEntry,
    LinesEntry,
    PartShare,
    PaysEntry,
    QuantityLines,
    ShareEntry,
    SourceLine,
    SumEntry,
    WhatIfEntry,
    WideningEntry,
)
from narrowgauge.record.linetable import line_rows, lines_csv
from narrowgauge.report.text import audit_text, verdict_text

SOURCE = (
    "def value(dW, h, rate):",
    "    S = np.ones(dW.shape[1])",
    "    for dw in dW:",
    "        move = S * (rate * h + 0.2 * dw)",
    "        S = S + move",
    "    return np.maximum(S - 1.0, 0.0)",
)
SHARES = {"line 4": 0.063, "line 5": 0.914, "line 6": 0.0004, "draws": 0.021, "step size": 0.0002, "constants": 0.0}


def share(value):
    spread = {"_low": 0.99, "": 1.0, "_high": 1.01}
    fields = {f"{name}{end}": value * times for name in ("alone", "saved", "share") for end, times in spread.items()}
    return ShareEntry(**fields)


def widening(*parts, level, step_cost=0.25, operations=0.0, possible=None):
    return WideningEntry(
        parts=list(parts), operations=operations, step_cost=step_cost, level=level, possible=possible or level,
        gain=1.08, gain_low=1.05, gain_high=1.11, edge=1.08, edge_low=1.05, edge_high=1.11,
    )  # fmt: skip


def lines_entry(file="kernel.py", source=SOURCE):
    parts = []
    for key in SHARES:
        kind, _, number = key.partition(" ")
        line = int(number) if kind == "line" else None
        role = {4: "step", 5: "state", 6: "payoff"}.get(line)
        where = {"file": file if line else None, "line": line, "role": role}
        parts.append(LineEntry(kind="line" if line else key, operations=0.125, **where))
    quantity = QuantityLines(
        error=SumEntry(variance=1e-7, total=share(0.9986), reason=None),
        correction=None,
        parts=[PartShare(part=n, error=share(value), correction=None) for n, value in enumerate(SHARES.values())],
    )
    study = FormatLines(
        level=3, steps=8, paths=16384, wide="float32", parts=parts, quantities={"value": quantity},
        plain=widening(level=2),
        widenings=[widening(1, level=4, operations=0.125, step_cost=0.28125, possible=5)],
        what_ifs=None, reason=None,
    )  # fmt: skip
    lines = [SourceLine(file=file, line=n, text=text) for n, text in enumerate(source, 1)]
    return LinesEntry(formats={"float16": study}, source=lines, reason=None)


def record(**changes):
    return replace(made.audit_record(), lines=lines_entry(**changes))


class TestSource:
    def test_bars_and_figures_stand_right_of_the_lines_that_matter(self):
        """Lines below a hundredth have neither; the draws follow the source; nothing stands at its left."""
        text = rendered(audit_text(record(), None))
        block = text[text.index("Lines of float16") :]
        assert "share of error variance\n" in block
        assert "        move = S * (rate * h + 0.2 * dw)              #                    6.30%\n" in block
        assert "        S = S + move                                  ##################   91.4%\n" in block
        assert "    return np.maximum(S - 1.0, 0.0)\n" in block
        assert "(the draws)" in block
        assert "(the step size)" not in block

    def test_what_widening_buys(self):
        """Each set says which lines, how far, with which gain, and what is charged."""
        text = flat(audit_text(record(), None), 120)
        assert "float16 as it is pays to level 2, with a gain of 1.08 (1.05 to 1.11) there" in text
        assert (
            "with kernel.py:5 (the state) in float32 it pays to level 4, perhaps to level 5, with a gain of 1.08 "
            "(1.05 to 1.11) there; 12.5% of the operations are charged at the wide cost, a step costs 0.281"
        ) in text

    @pytest.mark.parametrize("name", ["carried errors", "stochastic rounding"])
    def test_what_ifs_that_need_an_addition_to_the_state_are_missed_aloud(self, name):
        """Where the study saw no such addition it has no entry of theirs."""
        entry = record()
        study = entry.lines.formats["float16"]
        figures = {field: getattr(study.plain, field) for field in PaysEntry.__struct_fields__}
        asked = replace(study, what_ifs=[WhatIfEntry(name=name, **figures)])
        lines = replace(entry.lines, formats={"float16": asked})
        text = flat(audit_text(replace(entry, lines=lines), None), 120)
        assert f"with {name} it pays to level 2" in text
        missed = "no addition x = x + e was seen whose result the next step starts from" in text
        assert missed == ("carried" not in name)

    @pytest.mark.parametrize(("possible", "words"), [(None, ""), (3, " for sure, perhaps to level 3")])
    def test_a_level_that_is_undecided_is_not_called_refuted(self, possible, words):
        """The study may end with an open verdict, as the audit may."""
        entry = record()
        study = entry.lines.formats["float16"]
        open_one = replace(study, plain=replace(study.plain, level=None, possible=possible))
        lines = replace(entry.lines, formats={"float16": open_one})
        text = flat(audit_text(replace(entry, lines=lines), None), 120)
        assert f"- float16 as it is pays on no level{words} - with" in text

    def test_a_quantity_without_shares_gives_way_to_one_that_has_some(self):
        """A yes/no quantity that decides may never change: the shares of another one stand at the source then."""
        entry = record()
        study = entry.lines.formats["float16"]
        nothing = SumEntry(variance=None, total=None, reason="no error that varies")
        shares = study.quantities["value"]
        both = {"value": replace(shares, error=nothing, parts=[]), "other": shares}
        lines = replace(entry.lines, formats={"float16": replace(study, quantities=both)})
        text = flat(audit_text(replace(entry, lines=lines), None), 120)
        assert "from 16,384 paths of every run; for other, others in lines.csv. A share is" in text
        neither = dict.fromkeys(both, both["value"])
        lines = replace(entry.lines, formats={"float16": replace(study, quantities=neither)})
        text = flat(audit_text(replace(entry, lines=lines), None), 120)
        assert "for value, others in lines.csv. No shares: no error that varies." in text

    def test_how_nearly_shares_add_up_is_said(self):
        """The total stands beside the level and the paths."""
        text = flat(audit_text(record(), None), 120)
        assert "On level 3, 8 steps, from 16,384 paths of every run." in text
        assert "all together they are 0.999 of the error variance (alone 0.999, saved 0.999)" in text

    @pytest.mark.parametrize("width", [30, 40, 60, 80, 120])
    def test_width(self, width):
        """No line is longer than the terminal is wide."""
        assert max(cell_len(line) for line in rendered(audit_text(record(), None), width).split("\n")) <= width

    @pytest.mark.parametrize("width", [40, 60, 80])
    def test_no_number_is_broken(self, width):
        """The numbers of a narrow terminal are those of a wide one."""
        narrow, wide = (numbers(rendered(audit_text(record(), None), columns)) for columns in (width, 400))
        assert set(narrow) == set(wide)

    def test_hostile_source(self):
        """What stands in a source line, or in the name of a file, moves nothing on a terminal."""
        text = rendered(audit_text(record(file=HOSTILE, source=(HOSTILE,) * 6), None))
        assert "\x1b" not in text
        assert "\u202e" not in text

    def test_what_stopped_the_study_is_said(self):
        """Where there is no study its reason stands in its place."""
        stopped = replace(made.audit_record(), lines=LinesEntry(formats={}, source=[], reason="kernel.py:4: no"))
        assert "Which lines cost the accuracy was not found out: kernel.py:4: no" in flat(audit_text(stopped, None))


class TestHint:
    def test_where_a_format_ends_early(self):
        """One line says how to find out more, in the long and in the short text; no longer once it was found out."""
        words = "The option --lines finds out which lines cost float16 and bfloat16 their accuracy."
        for text in (audit_text, verdict_text):
            assert words in flat(text(made.audit_record(), None), 200)
            assert words not in flat(text(record(), None), 200)


class TestTable:
    def test_rows(self):
        """One row per part, with the shares of the error; a correction that does not exist is empty."""
        rows = line_rows(record())
        assert [(row["kind"], row["line"]) for row in rows][:4] == [
            ("line", 4),
            ("line", 5),
            ("line", 6),
            ("draws", None),
        ]
        assert rows[1]["error_share"] == 0.914
        assert rows[1]["role"] == "state"
        assert rows[1]["correction_share"] is None
        assert line_rows(made.audit_record()) == []

    def test_csv(self):
        """lines.csv has a header and the same rows."""
        first, second, *_ = lines_csv(record()).split("\n")
        assert first.startswith("format,quantity,level,steps,paths,kind,file,line,role,operations,error_alone,")
        assert second.startswith("float16,value,3,8,16384,line,kernel.py,4,step,0.125,0.063,")
