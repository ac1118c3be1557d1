"""In a narrow format every number that comes out of a supported operation is one of the format's."""

from __future__ import annotations

import corpus
import numpy as np
import pytest
from kernel_runs import NARROW, call, unheld

from narrowgauge.dispatch.array import wrap


@pytest.mark.parametrize("form", NARROW)
@pytest.mark.parametrize("name", corpus.SOURCES)
def test_every_idiom_gives_values_of_the_format(name, form):
    """Results, and the draws that the kernel wrote into, are wrapped, in the format's carrier, and rounded."""
    result, setting, draws = call(corpus.source(name), form, *corpus.draws())
    assert setting.faults == []
    assert unheld([result, draws], setting) == []


@pytest.mark.parametrize("form", NARROW)
def test_a_plain_condition_is_not_rounded(form):
    """np.where asks a plain condition for its truth: 1e-60 is true in a format that has no such number."""
    text = "import numpy as np\ndef kernel(x):\n    return np.where([1e-60, 0.0], x, 0.25)\n"
    result, _, _ = call(text, form, np.array([0.5]))
    assert list(result) == [0.5, 0.25]


def test_a_value_that_is_not_the_formats_is_found():
    """Negative control: a wrong carrier, an unrounded number and a raw float are told apart from the rest."""
    result, setting, _ = call("def kernel(x):\n    return x\n", "float16", np.array([0.3]))
    assert unheld([result, 3, "text", np.arange(2)], setting) == []
    for wrong in (0.3, np.array([0.3]), wrap(np.float32([0.3]), setting), wrap(np.float64(0.5), setting)):
        assert unheld([wrong], setting) != []


@pytest.mark.parametrize("form", [*NARROW, "float64"])
def test_what_was_never_written_is_nan(form):
    """np.empty and np.empty_like hold NaN, which no later operation hides, in place of whatever lay in memory."""
    text = "import numpy as np\ndef kernel(x):\n    return np.empty((2, 3)), np.empty_like(x)\n"
    result, _, _ = call(text, form, np.array([0.5]))
    assert all(np.isnan(made).all() for made in result)
