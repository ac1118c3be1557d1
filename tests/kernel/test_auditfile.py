"""The audit file: what it fills in, and, word for word, what it refuses."""

from __future__ import annotations

import datetime
import json
import pickle
import tomllib
from pathlib import Path

import ml_dtypes
import msgspec
import numpy as np
import pytest
from auditfile_cases import FULL, LEAST, PARAMETER, POSITIVE, altered, read, refusal, refusals
from hypothesis import given
from hypothesis import strategies as st

from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.errors import AuditFileError
from narrowgauge.kernel.auditfile import (
    KernelTable,
    LadderTable,
    most_steps,
    read_audit_file,
)
from narrowgauge.kernel.audittables import RULES, TABLES, CostTable, TableError, shown

DEFAULTS = {
    "kernel.factors": 1,
    "kernel.layout": "steps, paths",
    "kernel.coupling": "sum",
    "kernel.modules": [],
    "kernel.shared": [],
    "kernel.allow": [],
    "ladder.coarsest_steps": 1,
    "ladder.refinement": 2,
    "target.worthwhile": None,
    "formats.today": "float64",
    "formats.narrow": ["float16", "bfloat16", "float32"],
    "formats.wide": ["float32", "float64"],
    "formats.schemes": ["alone", "split"],
    "cost.float64": 1.0,
    "cost.float32": 0.5,
    "cost.float16": 0.25,
    "cost.bfloat16": 0.25,
    "cost.tf32": 0.5,
    "cost.e4m3": 0.125,
    "cost.e5m2": 0.125,
    "cost.draws": 0.0,
    "cost.path": 0.0,
    "sampling.block": 32768,
    "sampling.paths": 32768,
    "sampling.most_paths": 1048576,
    "sampling.confidence": 0.99,
    "sampling.seed": 1,
}
ALL_TABLES = (
    "kernel, library, command, parameters, ladder, target, formats, draws, branches, cost, sampling, domain, lines, "
    "policy, gate"
)
KERNEL_KEYS = "run, takes, factors, layout, coupling, modules, shared, allow, rounds"


class TestDefaults:
    def test_smallest_file(self, tmp_path):
        """Every default is filled in and listed as assumed, in order of the file."""
        audit_file = read(tmp_path, LEAST)
        asked = audit_file.asked()
        assert asked["assumed"] == list(audit_file.assumed) == list(DEFAULTS)
        assert asked["target"] is None
        assert audit_file.worthwhile == 1.05
        for key, value in DEFAULTS.items():
            table, name = key.split(".")
            if table != "target":
                assert asked[table][name] == value, key

    def test_nothing_assumed(self, tmp_path):
        """A file with every key assumes nothing, and its values are those that a TOML reader sees."""
        audit_file = read(tmp_path, FULL)
        assert audit_file.assumed == ()
        expected = {**tomllib.loads(FULL), "assumed": []}
        expected["kernel"]["layout"] = "factors, paths, steps"
        del expected["kernel"]["rounds"], expected["cost"]["measured"]  # which no emulated kernel has otherwise
        assert audit_file.asked() == expected
        absent = {"library", "command", "draws", "branches", "domain", "lines", "policy", "gate"}
        assert list(audit_file.asked()) == [*(n for n in ALL_TABLES.split(", ") if n not in absent), "assumed"]
        assert audit_file.worthwhile == 1.0

    def test_target_defaults(self, tmp_path):
        """With a target all of its defaults count as assumed, an undeclared correction as null."""
        audit_file = read(tmp_path, LEAST + "[target]\nrmse = 1e-3")
        assert [key for key in audit_file.assumed if key.startswith("target")] == [
            "target.bias_share",
            "target.worthwhile",
            "target.largest_correction",
        ]
        assert audit_file.asked()["target"] == {
            "rmse": 1e-3,
            "bias_share": 0.25,
            "worthwhile": 1.05,
            "largest_correction": None,
        }

    def test_asked_is_json(self, tmp_path):
        """The document of the file holds nothing but JSON's own types: it reads back equal."""
        for text in (LEAST, FULL):
            asked = read(tmp_path, text).asked()
            assert json.loads(json.dumps(asked, allow_nan=False)) == asked

    def test_asked_is_separate(self, tmp_path):
        """Writing into the document does not reach the audit file."""
        audit_file = read(tmp_path, FULL)
        asked = audit_file.asked()
        asked["parameters"]["rates"][0][0] = 99
        asked["target"]["rmse"]["call"] = 99
        assert audit_file.asked() != asked

    def test_costs_are_storage_bits(self, tmp_path):
        """Without [cost] a step costs what NumPy and ml_dtypes need to store a number, over eight bytes."""
        cost = read(tmp_path, LEAST).cost
        types = {"bfloat16": ml_dtypes.bfloat16, "e4m3": ml_dtypes.float8_e4m3fn, "e5m2": ml_dtypes.float8_e5m2}
        for name in FORMATS:
            dtype = np.dtype(types.get(name, "float32" if name == "tf32" else name))  # TF32 is stored as float32
            assert cost.step(name) == dtype.itemsize / 8
        with pytest.raises(KeyError):
            cost.step("draws")

    def test_costs_only_of_what_is_used(self, tmp_path):
        """With [cost] a format that the audit does not use needs none, and none is assumed for it."""
        formats = '[formats]\nnarrow = ["float16"]\nwide = ["float64"]\n'
        audit_file = read(tmp_path, LEAST + formats + "[cost]\nfloat64 = 1\nfloat16 = 0.3\n")
        assert [key for key in audit_file.assumed if key.startswith("cost")] == ["cost.draws", "cost.path"]
        assert audit_file.cost.step("float16") == 0.3
        with pytest.raises(KeyError):
            audit_file.cost.step("bfloat16")

    def test_tables_and_rules_agree(self):
        """Every key of every table has a row with the words of what it accepts, and no row is left over."""
        keys = [f"{name}.{key}" for name, record in TABLES.items() for key in record.__struct_fields__]
        assert sorted(keys) == sorted(RULES)
        others = {"draws", "approximate_draws", "path", "measured"}
        assert set(FORMATS) == set(CostTable.__struct_fields__) - others

    def test_records_are_frozen(self, tmp_path):
        """Neither the audit file nor a table can be written to."""
        audit_file = read(tmp_path, LEAST)
        for record, name in (
            (audit_file, "source"),
            (audit_file.kernel, "layout"),
            (audit_file.ladder, "finest"),
        ):
            with pytest.raises(AttributeError):
                setattr(record, name, 1)

    def test_pickles(self, tmp_path):
        """An audit file reaches another process unchanged."""
        audit_file = read(tmp_path, FULL)
        assert pickle.loads(pickle.dumps(audit_file)) == audit_file


class TestDerived:
    def test_arms_in_order_of_precision(self, tmp_path):
        """The arms are the formats in use, ordered as their machine epsilons are."""
        audit_file = read(tmp_path, LEAST)
        epsilon = {"bfloat16": ml_dtypes.finfo(ml_dtypes.bfloat16).eps}
        epsilon |= {name: np.finfo(name).eps for name in ("float16", "float32", "float64")}
        assert list(audit_file.arms) == sorted(epsilon, key=lambda name: -float(epsilon[name]))

    def test_arms_in_use(self, tmp_path):
        """The reference and today's format are arms, whatever is narrow or wide."""
        few = read(tmp_path, LEAST + '[formats]\nnarrow = ["bfloat16"]\nwide = []\n')
        assert few.arms == ("bfloat16", "float64")
        today = read(tmp_path, LEAST + '[formats]\nnarrow = ["float16"]\nwide = []\ntoday = "float32"\n')
        assert today.arms == ("float16", "float32", "float64")

    def test_place(self, tmp_path):
        """Paths are relative to the file, and its stem names the results."""
        audit_file = read(tmp_path, LEAST)
        assert audit_file.folder == tmp_path
        assert audit_file.stem == "audit"
        assert audit_file.source == str(tmp_path / "audit.toml")
        assert audit_file.function is None

    def test_relative_path(self, tmp_path, monkeypatch):
        """The folder is absolute also when the file was named from the current folder."""
        (tmp_path / "sub").mkdir()
        (tmp_path / "sub" / "my.toml").write_text(LEAST)
        monkeypatch.chdir(tmp_path)
        audit_file = read_audit_file(Path("sub/my.toml"))
        assert (audit_file.folder, audit_file.stem) == (tmp_path / "sub", "my")

    def test_ladder(self):
        """Level l has n_0 M^l steps of size T / (n_0 M^l)."""
        ladder = LadderTable(horizon=2.0, coarsest_steps=3, refinement=4, finest=2)
        assert list(ladder.levels) == [0, 1, 2]
        assert [ladder.steps(level) for level in ladder.levels] == [3, 12, 48]
        assert [ladder.step_size(level) for level in ladder.levels] == [2 / 3, 2 / 12, 2 / 48]

    @given(st.integers(1, 5000), st.integers(1, 50), st.integers(2, 9))
    def test_finest_within(self, factors, coarsest, refinement):
        """The finest level that fits is the last of which 1,024 paths need at most 2^22 draws."""
        ladder = LadderTable(horizon=1.0, coarsest_steps=coarsest, refinement=refinement, finest=0)
        finest = ladder.finest_within(most_steps(factors))
        draws = [ladder.steps(level) * factors * 1024 for level in range(finest + 2)]
        assert all(count <= 2**22 for count in draws[:-1])
        assert draws[-1] > 2**22

    def test_one_level(self, tmp_path):
        """A ladder of one level is accepted: it is plain Monte Carlo."""
        assert list(read(tmp_path, altered("finest = 8", "finest = 0")).ladder.levels) == [0]

    def test_finest_that_fits(self, tmp_path):
        """The finest level that a refusal names is itself accepted."""
        assert read(tmp_path, altered("finest = 8", "finest = 12")).ladder.steps(12) == 4096

    @pytest.mark.parametrize(
        ("factors", "given", "layout"),
        [
            (1, "paths,steps", "paths, steps"),
            (2, " factors ,steps, paths", "factors, steps, paths"),
            (2, None, "steps, factors, paths"),
        ],
    )
    def test_layouts(self, tmp_path, factors, given, layout):
        """A layout is any order of the axes that the draws have, and is stored in one spelling."""
        lines = f'"increments"\nfactors = {factors}' + (f'\nlayout = "{given}"' if given else "")
        assert read(tmp_path, altered('"increments"', lines)).kernel.layout == layout


class TestRefused:
    @pytest.mark.parametrize(("change", "message"), refusals())
    def test_in_these_words(self, tmp_path, change, message):
        """Each wrong value, missing key and unknown name is refused where it stands, word for word."""
        old, arrow, new = change.partition(" ->")
        text = altered(old, new.strip()) if arrow else f"{LEAST}{change}\n"
        assert refusal(tmp_path, text) == message

    def test_beyond_float64(self, tmp_path):
        """An integer past the largest float64 is refused where a number is wanted, and not written out."""
        message = f"ladder.horizon: an integer of more than 60 digits is beyond float64; accepted: {POSITIVE}"
        assert refusal(tmp_path, altered("1.0", f"1{'0' * 400}")) == message

    def test_deep_arrays(self, tmp_path):
        """An array nested deeper than is accepted is refused at the place where it is."""
        message = f"parameters.a{'[0]' * 32}: nested more than 32 deep; accepted: {PARAMETER}"
        assert refusal(tmp_path, f"{LEAST}[parameters]\na = {'[' * 33}{']' * 33}") == message

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            ("", "kernel: the table is missing; accepted: a table [kernel] with run and takes"),
            ("[kernel]", "ladder: the table is missing; accepted: a table [ladder] with horizon and finest"),
            ("kernel = 1", f"kernel: 1 is an integer; accepted: a table with keys of {KERNEL_KEYS}"),
            (
                "[kernel]\nrun = =",
                "this is not TOML: Invalid value (at line 2, column 7); accepted: TOML in UTF-8",
            ),
            (LEAST.encode("utf-16"), "line 1 is not UTF-8 (byte 0xff); accepted: TOML in UTF-8"),
            (b"[kernel]\r\n# caf\xe9\n", "line 2 is not UTF-8 (byte 0xe9); accepted: TOML in UTF-8"),
        ],
    )
    def test_not_an_audit_file(self, tmp_path, text, message):
        """A file of another kind is refused with the line where that shows."""
        assert refusal(tmp_path, text) == message

    def test_nested_without_end(self, tmp_path):
        """A file that nests past what the TOML reader can follow is refused, not a crash."""
        text = f"a = {'[' * 100_000}"
        assert refusal(tmp_path, text) == "arrays or tables are nested too deeply; accepted: TOML in UTF-8"

    def test_too_many_digits(self, tmp_path):
        """A number that Python will not convert is refused, not a crash."""
        assert refusal(tmp_path, f"a = 1{'0' * 5000}").startswith("this is not TOML: ")

    def test_no_file(self, tmp_path):
        """A path without a file is refused in these words."""
        with pytest.raises(AuditFileError) as caught:
            read_audit_file(tmp_path / "none.toml")
        message = f"{tmp_path / 'none.toml'}: there is no such file; accepted: the path of a TOML file"
        assert str(caught.value) == message
        assert caught.value.exit_code == 2

    def test_folder(self, tmp_path):
        """A folder is refused in these words."""
        with pytest.raises(AuditFileError) as caught:
            read_audit_file(tmp_path)
        assert str(caught.value) == f"{tmp_path}: this is a folder; accepted: the path of a TOML file"

    def test_unreadable(self, tmp_path, monkeypatch):
        """A file that the system does not let us read is refused with the system's reason."""

        def denied(path):
            raise PermissionError(13, "Permission denied", str(path))

        path = tmp_path / "audit.toml"
        monkeypatch.setattr(Path, "read_bytes", denied)
        with pytest.raises(AuditFileError) as caught:
            read_audit_file(path)
        message = f"{path}: cannot be read (Permission denied); accepted: the path of a TOML file"
        assert str(caught.value) == message

    def test_byte_order_mark(self, tmp_path):
        """A byte order mark before UTF-8 is not held against the file."""
        assert read(tmp_path, b"\xef\xbb\xbf" + LEAST.encode()).kernel.takes == "increments"

    def test_without_a_file(self):
        """A table made in Python is held against the same bounds as one that was read."""
        with pytest.raises(TableError) as caught:
            LadderTable(horizon=1.0, refinement=1, finest=3)
        assert str(caught.value) == "ladder.refinement: 1 is not accepted; accepted: an integer of 2 or more"
        assert KernelTable(run="a.py:f", takes="normals", factors=2).layout == "steps, factors, paths"

    def test_wording_of_the_converter_unknown(self, tmp_path, monkeypatch):
        """Should the converter word its messages otherwise one day, its words are shown and nothing fails."""

        def convert(*_):
            raise msgspec.ValidationError("wrong somehow")

        monkeypatch.setattr(msgspec, "convert", convert)
        message = f"kernel: wrong somehow; accepted: a table with keys of {KERNEL_KEYS}"
        assert refusal(tmp_path, LEAST) == message

    def test_long_values_are_cut(self):
        """A message shows the start of a long text only."""
        assert shown("x" * 100) == '"' + "x" * 56 + "..."
        assert shown(datetime.datetime(2020, 1, 31, 12)) == "2020-01-31T12:00:00"
