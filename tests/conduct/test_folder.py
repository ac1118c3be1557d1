"""The audit as a Python call: its arguments, its folder, and its tables."""

from __future__ import annotations

import csv
import hashlib
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
import pytest
from audit_cases import GEOMETRIC, LEAST, audited, file_for, written

import narrowgauge
from narrowgauge import api
from narrowgauge.api import audit, run_audit
from narrowgauge.errors import AuditFolderError, NarrowgaugeError
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.record.canonical import read_strict

OTHERWISE = "accepted: --out with another folder, or --replace"


def not_run(*arguments: object, **options: object) -> NoReturn:
    raise AssertionError("the audit was run")


def refused(file: AuditFile, out: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    """The message of an audit that is refused before anything is run."""
    with monkeypatch.context() as patch:
        patch.setattr(api, "run", not_run)
        with pytest.raises(AuditFolderError) as caught:
            run_audit(file, out)
    assert caught.value.__context__ is None or caught.value.__suppress_context__
    return str(caught.value)


def test_an_audit_writes_its_record_and_its_levels(tmp_path: Path) -> None:
    """The folder is made, and holds the record, one row per quantity, level and arm, and the finished blocks."""
    result = run_audit(file_for(tmp_path, GEOMETRIC), tmp_path / "new" / "deep")
    assert result.folder == tmp_path / "new" / "deep"
    assert result.folder is not None
    assert sorted(path.name for path in result.folder.iterdir()) == ["audit.json", "blocks.sqlite", "levels.csv"]
    with (result.folder / "levels.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert [(row["quantity"], row["level"], row["arm"]) for row in rows] == [
        ("value", str(level), arm) for level in range(3) for arm in ("float64", "bfloat16", "float16", "float32")
    ]
    level = result.record.quantities["value"].levels[1]
    assert float(rows[6]["error_variance"]) == level.arms["float16"].error_variance
    assert rows[4]["error_variance"] == ""  # the reference has no error


def test_without_a_folder_nothing_is_written(tmp_path: Path) -> None:
    """Then the result has no folder, and the audit file's own folder stays as it was."""
    file = file_for(tmp_path, GEOMETRIC)
    before = sorted(tmp_path.iterdir())
    assert run_audit(file, None).folder is None
    assert sorted(tmp_path.iterdir()) == before


def test_the_same_audit_may_be_run_again(tmp_path: Path) -> None:
    """A folder that holds this very audit is taken, and its files are written anew."""
    file = file_for(tmp_path, GEOMETRIC, target={"rmse": "1e-3"}, parameters={})
    run_audit(file, tmp_path / "out")
    first = (tmp_path / "out" / "levels.csv").read_bytes()
    (tmp_path / "out" / "levels.csv").write_text("")
    run_audit(file, tmp_path / "out")
    assert (tmp_path / "out" / "levels.csv").read_bytes() == first


def test_a_folder_that_holds_another_audit_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Other settings, another kernel and another state of its file are told apart; nothing is run or changed."""
    out = tmp_path / "out"
    audited(tmp_path, GEOMETRIC)
    kept = (out / "audit.json").read_bytes()
    other = file_for(tmp_path, GEOMETRIC, sampling={"seed": "2"})
    assert refused(other, out, monkeypatch) == f"{out}: holds another audit (other settings); {OTHERWISE}"
    changed = file_for(tmp_path, GEOMETRIC.replace("0.2", "0.25"))
    message = f"{out}: holds another audit (another kernel, or another state of it); {OTHERWISE}"
    assert refused(changed, out, monkeypatch) == message
    assert (out / "audit.json").read_bytes() == kept
    run_audit(changed, out, replace=True)
    assert (out / "audit.json").read_bytes() != kept


@pytest.mark.parametrize(
    ("data", "problem"),
    [
        (b"", "this is not JSON: Expecting value (line 1, column 1)"),
        (b'{"a": NaN}', "a: NaN is not a finite number"),
    ],
)
def test_a_record_that_cannot_be_read_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, data: bytes, problem: str
) -> None:
    """The reader's own words are passed on, and the file is left alone."""
    out = tmp_path / "out"
    out.mkdir()
    path = out / "audit.json"
    path.write_bytes(data)
    message = f"{out}: holds an audit.json that cannot be read ({path}: {problem}); {OTHERWISE}"
    assert refused(file_for(tmp_path, GEOMETRIC), out, monkeypatch) == message
    assert path.read_bytes() == data


@pytest.mark.parametrize("data", [b"[1, 2]", b"{}", b'{"kernel": "\xff"}', b'{"kernel": {}, "asked": {}}'])
def test_a_document_of_another_kind_is_another_audit(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, data: bytes
) -> None:
    """JSON that is no record of ours, and bytes that are no UTF-8, are not overwritten either."""
    out = tmp_path / "out"
    out.mkdir()
    (out / "audit.json").write_bytes(data)
    message = f"{out}: holds another audit (another kernel, or another state of it); {OTHERWISE}"
    assert refused(file_for(tmp_path, GEOMETRIC), out, monkeypatch) == message


def test_a_folder_that_cannot_be_used(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A file in its place, above it, or a folder in the record's: refused in the system's words before the run."""
    file = file_for(tmp_path, GEOMETRIC)
    taken = tmp_path / "taken"
    taken.touch()
    (tmp_path / "out" / "audit.json").mkdir(parents=True)
    cases = {taken: "File exists", taken / "below": "Not a directory", tmp_path / "out": "Is a directory"}
    for out, words in cases.items():
        assert refused(file, out, monkeypatch) == f"{out}: cannot be used for the results: {words}"


def test_a_file_that_cannot_be_written(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A full disk at the end is an error of the folder, too, and names the file."""

    def full(path: Path, text: str) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(api, "write_atomically", full)
    with pytest.raises(AuditFolderError) as caught:
        run_audit(file_for(tmp_path, GEOMETRIC), tmp_path / "out")
    path = tmp_path / "out" / "audit.json"
    assert str(caught.value) == f"{path}: cannot be written: No space left on device"


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"workers": 0}, "audit: workers = 0 is not accepted; accepted: an integer of 1 or more"),
        ({"workers": 2.0}, "audit: workers = 2.0 is not accepted; accepted: an integer of 1 or more"),
        ({"workers": True}, "audit: workers = True is not accepted; accepted: an integer of 1 or more"),
        (
            {"executor": 7},
            "audit: executor = 7 has no submit; accepted: an executor of concurrent.futures, or one of its kind",
        ),
        ({"resume": True}, "audit: resume = True needs out; accepted: the folder of the audit that was stopped"),
    ],
)
def test_options_that_make_no_sense_are_refused(options: dict[str, Any], message: str) -> None:
    """By name, and before the audit file is looked at."""
    with pytest.raises(NarrowgaugeError) as caught:
        audit("nowhere.toml", **options)
    assert str(caught.value) == message


def test_an_executor_has_workers_of_its_own() -> None:
    """So that a number of them beside it is refused."""
    with ThreadPoolExecutor(1) as executor, pytest.raises(NarrowgaugeError) as caught:
        audit("nowhere.toml", workers=2, executor=executor)
    message = "audit: workers = 2 and an executor, which has workers of its own; accepted: one of the two"
    assert str(caught.value) == message


def brownian(dW: Any, h: float, *, volatility: float) -> Any:
    x = np.ones_like(dW[0])
    for n in range(dW.shape[0]):
        x = x + volatility * x * dW[n]
    return {"end": x}


def mapping(run: object) -> dict[str, Any]:
    return {
        "kernel": {"run": run, "takes": "increments"},
        "parameters": {"volatility": 0.2},
        "ladder": {"horizon": 1.0, "finest": 1},
        "sampling": {"block": 1024, "paths": 1024, "most_paths": 1024},
    }


@pytest.mark.parametrize("quiet", [True, False])
def test_an_audit_of_a_function(tmp_path: Path, quiet: bool, capsys: pytest.CaptureFixture[str]) -> None:
    """A mapping with a function is audited like a file, with a fingerprint; off a terminal nothing is printed."""
    result = audit(mapping(brownian), out=tmp_path / "out", quiet=quiet)
    assert result.record.kernel.run == f"{__name__}:brownian"
    assert result.record.kernel.fingerprint.startswith("sha256:")
    document = read_strict((tmp_path / "out" / "audit.json").read_text("utf-8"), "audit.json")
    assert document == result.record.document()
    assert list(result.record.quantities) == ["end"]
    assert capsys.readouterr() == ("", "")
    assert narrowgauge.audit is audit


def test_an_audit_of_a_file_by_its_path(tmp_path: Path) -> None:
    """Path or text, the kernel is found beside the file; its fingerprint is the SHA-256 of its source."""
    file_for(tmp_path, GEOMETRIC)
    first, second = (audit(path, quiet=True) for path in (tmp_path / "audit.toml", str(tmp_path / "audit.toml")))
    assert first.record.kernel == second.record.kernel
    assert first.record.kernel.run == LEAST["kernel"]["run"].strip('"')
    data = written(tmp_path, GEOMETRIC).read_bytes()
    assert first.record.kernel.fingerprint == "sha256:" + hashlib.sha256(data).hexdigest()


def test_the_tables_are_made_from_the_record(tmp_path: Path) -> None:
    """Levels, accumulation and lines are data frames of the record's own figures."""
    result = audited(tmp_path, GEOMETRIC)
    assert result.levels.shape[0] == 3 * 4
    levels = result.levels
    (gain,) = levels.loc[(levels["level"] == 2) & (levels["arm"] == "float16"), "gain"]
    assert gain == result.record.quantities["value"].levels[2].arms["float16"].gain
    assert set(zip(result.accumulation["arm"], result.accumulation["law"], strict=True)) == {
        (arm, law) for arm in ("float16", "bfloat16", "float32") for law in ("error", "correction")
    }
    lines = result.lines
    assert result.record.reach is not None
    assert lines["count"].sum() == result.record.reach.operations
    assert set(lines["line"]) <= {4, 6}


def growing(by: float) -> Any:
    def value(dW: Any, h: float, volatility: float) -> Any:
        return by + volatility * dW[0]

    return value


def test_another_function_of_the_same_name_is_another_audit(tmp_path: Path) -> None:
    """Two closures that differ in a value only: the second does not replace what the first left."""
    audit(mapping(growing(0.2)), out=tmp_path / "out", quiet=True)
    before = (tmp_path / "out" / "audit.json").read_bytes()
    with pytest.raises(AuditFolderError) as caught:
        audit(mapping(growing(0.9)), out=tmp_path / "out", quiet=True)
    assert "holds another audit (another kernel, or another state of it)" in str(caught.value)
    assert (tmp_path / "out" / "audit.json").read_bytes() == before
