"""Draws of a kernel that takes one path a call: the columns of the rows that a kernel of whole blocks is given."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from tape_cases import PER_STEP, played, request, tape_of

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.draws.columns import Columns
from narrowgauge.draws.layout import Request
from narrowgauge.draws.streams import Purpose, UniformStream
from narrowgauge.draws.tape import ArmDraws, Tape, TapeError


def test_paths_of_a_tape_keep_to_their_columns():
    """Path by path the draws are the columns of the rows; a path may stop early, and none need be long enough."""
    stream = UniformStream(3, Purpose.TRIAL, 0, 0)
    tape = Tape(stream, paths=3, steps=4, refinement=2, layout=PER_STEP, singly=True)
    whole = played(
        ArmDraws(tape_of(4), arithmetic_named("float16")), [request("normal", (3,))] * 4, [request("normal", (3,))] * 2
    )
    arm = ArmDraws(tape, arithmetic_named("float16"))
    columns = Columns(arm.fine(), 3)
    for path, count in enumerate((1, 3, 2)):  # the fourth step is no path's
        columns.begin(path)
        for step in range(count):
            assert columns.draw(request("normal", ()), ()) == whole[0][step][path]
    columns.finish()
    assert len(tape.requests) == 3
    columns = Columns(arm.coarse(), 3)
    for path in (2, 0, 1):
        columns.begin(path)
        assert [columns.draw(request("normal", ()), ()) for _ in range(2)] == [row[path] for row in whole[1]]
        with pytest.raises(TapeError, match="more often than its fine path, which asked 2 times"):
            columns.draw(request("normal", ()), ())
    columns.begin(0)
    with pytest.raises(TapeError, match="request 0 for random numbers is uniform"):
        columns.draw(request("uniform", ()), ())


def test_each_path_has_parameters_of_its_own():
    """Draws with a parameter that differs from path to path are the quantiles of the path's own uniform."""
    means = (2.0, 5.0, 2.0, 0.5)
    tape = Tape(UniformStream(3, Purpose.TRIAL, 0, 0), paths=4, steps=2, layout=PER_STEP, singly=True)
    columns = Columns(ArmDraws(tape, arithmetic_named("float64")).fine(), 4)
    found = []
    for path, mean in enumerate(means):
        columns.begin(path)
        found.append(columns.draw(request("poisson", (), mean), (mean,)))
    u = UniformStream(3, Purpose.TRIAL, 0, 0).take((4,))
    assert found == list(stats.poisson.ppf(u, means))
    assert tape.requests == [Request(name="poisson", size=(4,), parameters=(None,))]


def test_each_path_has_a_table_of_its_own():
    """A table of probabilities that differs from path to path is read with the path's own uniform."""
    tables = ([0.3, 1.0], [0.9, 1.0], [0.3, 1.0], [0.0, 1.0])
    tape = Tape(UniformStream(3, Purpose.TRIAL, 0, 0), paths=4, steps=2, layout=PER_STEP, singly=True)
    columns = Columns(ArmDraws(tape, arithmetic_named("float64")).fine(), 4)
    found = []
    for path, table in enumerate(tables):
        columns.begin(path)
        found.append(columns.draw(request("choice", ()), (np.array(table),)))
    u = UniformStream(3, Purpose.TRIAL, 0, 0).take((4,))
    assert found == [np.searchsorted(table, one, side="right") for table, one in zip(tables, u, strict=True)]
