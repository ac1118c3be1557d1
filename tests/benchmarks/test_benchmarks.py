"""The benchmarks run from end to end and write well-formed files; nothing here is about speed."""

import json
import math
import subprocess
import sys
from pathlib import Path

import pytest
import run
from alternating import alternated, ratios
from benchmark_figures import Section, at_least, at_most, figure_of
from benchmark_page import TITLES, page, shown

PROGRAM = Path(run.__file__)


@pytest.fixture(scope="module")
def quick(tmp_path_factory):
    """The folder of a quick run of everything."""
    folder = tmp_path_factory.mktemp("benchmarks")
    command = [sys.executable, str(PROGRAM), "--quick", "--out", str(folder)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return folder


@pytest.fixture
def document(quick):
    return json.loads((quick / "benchmarks.json").read_text(encoding="utf-8"))


def test_every_benchmark_gives_finite_figures(document):
    """Median and quartiles of every figure are finite, positive and in order, and every benchmark has some."""
    assert list(document["benchmarks"]) == list(run.BENCHMARKS) == list(TITLES)
    for name, section in document["benchmarks"].items():
        assert section["figures"] or section["notes"], name
        for figure in section["figures"]:
            values = [figure[key] for key in ("low", "value", "high")]
            assert all(math.isfinite(value) and value > 0 for value in values), (name, figure)
            assert values == sorted(values)
            assert figure["rounds"] >= 1
            assert figure["what"]


def test_every_kernel_format_and_block_is_there(document):
    """Four kernels, four formats and both blocks, with numba or without it."""
    for name in ("kernel", "uncompiled"):
        figures = document["benchmarks"][name]["figures"]
        found = {(f["kernel"], f["what"], f["block"]) for f in figures if f["over"] == "plain float64"}
        assert len(found) == 4 * 4 * 2


def test_the_page_shows_what_the_file_holds(quick, document):
    """The page is made from the file alone; it has each benchmark's title, and neither a date nor a path."""
    text = (quick / "benchmarks.md").read_text(encoding="utf-8")
    assert text == page(document)
    for title, _ in TITLES.values():
        assert f"## {title}\n" in text
    assert document["made_with"].keys().isdisjoint({"finished", "seconds"})
    assert str(PROGRAM.parents[2]) not in text + json.dumps(document)


def test_tasks_take_turns():
    """After one round that does not count every round runs all tasks in order."""
    order = []
    seconds = alternated({"A": lambda: order.append("A"), "B": lambda: order.append("B")}, rounds=3)
    assert "".join(order) == "AB" + 3 * "AB"
    assert [len(found) for found in seconds.values()] == [3, 3]


def test_a_figure_is_the_median_of_the_ratios_of_the_rounds():
    """Not the ratio of the medians, which mixes rounds: here that would be 2."""
    figure = figure_of(ratios([1.0, 2.0, 30.0], [1.0, 0.5, 10.0]), "a", "b")
    assert (figure.low, figure.value, figure.high) == (2.0, 3.0, 3.5)


@pytest.mark.parametrize(
    ("value", "asked", "text"),
    [
        (1.2004, at_most(1.2), "1.2004"),
        (1.2, at_most(1.2), "1.2"),
        (1.1996, at_most(1.2), "1.2"),
        (1.6999, at_least(1.7), "1.6999"),
        (499.7, at_most(500.0), "500"),
        (500.3, at_most(500.0), "500.3"),
        (0.012345, None, "0.0123"),
        (12345.0, None, "12,300"),
    ],
)
def test_a_shown_number_stays_on_its_side_of_the_bound(value, asked, text):
    """Three digits, or as many more as it takes."""
    assert shown(value, asked) == text


@pytest.fixture
def made_up(monkeypatch):
    """Two benchmarks that measure nothing: their figures count the runs."""
    runs = []

    def counted(size):
        runs.append(size)
        return Section(figures=[figure_of([float(len(runs))], "this", "that", asked=at_most(1.0))])

    monkeypatch.setattr(run, "BENCHMARKS", {"kernel": counted, "start": counted})
    monkeypatch.setattr(run.os, "environ", dict(run.os.environ))


def values_in(folder):
    document = json.loads((folder / "benchmarks.json").read_text(encoding="utf-8"))
    return {name: section["figures"][0]["value"] for name, section in document["benchmarks"].items()}


def test_a_named_benchmark_leaves_the_others_as_they_are(made_up, tmp_path):
    """The second run measures one of the two."""
    run.main(["--out", str(tmp_path)])
    run.main(["start", "--out", str(tmp_path)])
    assert values_in(tmp_path) == {"kernel": 1.0, "start": 3.0}


def test_figures_of_other_versions_are_not_kept(made_up, tmp_path, monkeypatch, capsys):
    """A file that was made with something else begins anew, and says so."""
    run.main(["--out", str(tmp_path)])
    made_with = {**run._made_with(), "python": "0.0"}
    monkeypatch.setattr(run, "_made_with", lambda: made_with)
    run.main(["start", "--out", str(tmp_path)])
    assert values_in(tmp_path) == {"start": 3.0}
    assert "begins anew" in capsys.readouterr().out


def test_a_bound_that_is_missed_is_shown_as_missed(made_up, tmp_path):
    """The first figure keeps its bound of 1, the second does not."""
    run.main(["--out", str(tmp_path)])
    rows = [line for line in (tmp_path / "benchmarks.md").read_text(encoding="utf-8").splitlines() if "<= 1" in line]
    assert [row.split(" | ")[-1] for row in rows] == ["yes |", "no |"]


def test_a_figure_that_is_not_finite_is_not_written(made_up, tmp_path, monkeypatch):
    """JSON has no NaN."""
    section = Section(figures=[figure_of([math.nan], "this", "that")])
    monkeypatch.setitem(run.BENCHMARKS, "kernel", lambda size: section)
    with pytest.raises(ValueError, match="JSON"):
        run.main(["--out", str(tmp_path)])


@pytest.mark.parametrize("arguments", [["speed"], ["--quick"]])
def test_a_wrong_call_is_refused(arguments, capsys):
    """An unknown name, and a quick run that would overwrite the report."""
    with pytest.raises(SystemExit):
        run.main(arguments)
    assert "accepted: kernel" in capsys.readouterr().err or arguments == ["--quick"]
