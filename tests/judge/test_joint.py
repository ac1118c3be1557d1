"""One scheme for several quantities: the admissible one that is least bad for the quantity it suits worst."""

from __future__ import annotations

import math

import numpy as np
import pytest
from judge_cases import COSTS, NEAR, PATHS, audit, differences, level_tally, quantity, uneven

from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import judge_level

ALPHA = 0.01
FORMATS = {"narrow": ["float16", "float32"], "wide": ["float32", "float64"]}


def alone(name):
    return Scheme(kind="alone", narrow=name)


def split(name, wide):
    return Scheme(kind="split", narrow=name, wide=wide)


def judged(quantities, **tables):
    file = audit(formats=FORMATS | tables.pop("formats", {}), cost=_costs(), **tables)
    return judge_level(level_tally(quantities), file, ALPHA)


def _costs():
    return {name: COSTS.step(name) for name in ("float64", "float32", "float16", "bfloat16")}


def cost(scheme, noise16, noise32):
    """S^2 at V = 1 and independent noises, in closed form."""
    noise = {"float64": 0.0, "float32": noise32, "float16": noise16}
    s = math.sqrt((1 + noise[scheme.narrow]) * COSTS.step(scheme.narrow))
    if scheme.wide is not None:
        both = COSTS.step(scheme.narrow) + COSTS.step(scheme.wide)
        s += math.sqrt((noise[scheme.narrow] + noise[scheme.wide]) * both)
    return s**2


SCHEMES = [
    alone("float64"),
    alone("float32"),
    alone("float16"),
    split("float16", "float32"),
    split("float16", "float64"),
    split("float32", "float64"),
]


@pytest.mark.parametrize("schemes", [["split"], ["alone", "split"]])
@pytest.mark.parametrize("noises", [(1e-6, 0.3), (1e-4, 0.02), (0.05, 0.4), (0.5, 0.5), (1e-6, 1e-6)])
def test_the_joint_scheme_is_the_least_bad_of_a_brute_force_search(noises, schemes):
    """Two quantities of V = 1 whose float16 noise differs: least worst ratio of S^2 to each one's own best."""
    found = judged(
        {name: quantity(differences(1.0, float16=r, float32=1e-9)) for name, r in zip("ab", noises, strict=True)},
        formats={"schemes": schemes},
    )
    allowed = [s for s in SCHEMES if s.wide is not None or s.narrow == "float64" or "alone" in schemes]
    costs = {s: [cost(s, r, 1e-9) for r in noises] for s in allowed}
    least = [min(column) for column in zip(*costs.values(), strict=True)]
    wanted = min(allowed, key=lambda s: max(c / m for c, m in zip(costs[s], least, strict=True)))
    assert found.joint == wanted
    assert [found.best[name] for name in "ab"] == [min(allowed, key=lambda s, k=k: costs[s][k]) for k in range(2)]


def test_it_may_be_the_best_of_neither():
    """The quiet one wants float16 over float64, the loud one float32 over float64; float16 over float32 serves both."""
    noises = {"quiet": 1e-6, "loud": 0.1}
    quantities = {name: quantity(differences(1.0, float16=r, float32=1e-4)) for name, r in noises.items()}
    found = judged(quantities, formats={"schemes": ["split"]})
    assert found.best == {"quiet": split("float16", "float64"), "loud": split("float32", "float64")}
    assert found.joint == split("float16", "float32")

    def worst(scheme):
        return max(cost(scheme, r, 1e-4) / cost(found.best[name], r, 1e-4) for name, r in noises.items())

    assert worst(found.joint) < min(worst(scheme) for scheme in found.best.values())


def test_for_one_quantity_it_is_the_best():
    """Whatever is best; and with a second one like it."""
    for r in (1e-6, 0.01, 0.9):
        one = quantity(differences(1.0, float16=r, float32=1e-9))
        alike = {"a": one, "b": quantity(differences(1.0, float16=r, float32=1e-9))}
        for quantities in ({"a": one}, alike):
            found = judged(quantities)
            assert found.joint == found.best["a"] is not None


def test_it_is_admissible_for_all():
    """float16 alone is best for a by far, but shifts the mean of b: with a target it serves neither."""
    steady = differences(1.0, float16=1e-9, float32=1e-9)
    moved = {name: values + (0.5 * uneven(0.0) if name == "float16" else 0.0) for name, values in steady.items()}
    quantities = {"a": quantity(steady), "b": quantity(moved)}
    assert judged(quantities).joint == alone("float16")
    found = judged(quantities, target={"rmse": {"a": 0.1, "b": 0.1}})
    assert found.joint is not None
    assert found.joint.top != "float16"
    assert found.joint == found.best["a"] == found.best["b"]


def test_a_quantity_that_does_not_vary_has_no_say():
    """It has no best scheme and needs no path; where none varies there is no joint scheme."""
    still = quantity(dict.fromkeys(("float64", "float16", "float32"), np.ones(PATHS)))
    noisy = quantity(differences(1.0, float16=0.9, float32=1e-9))
    found = judged({"still": still, "noisy": noisy})
    assert found.best["still"] is None
    assert found.joint == found.best["noisy"]
    assert judged({"still": still}).joint is None
    assert judged({"still": still, "too": still}).joint is None


def test_the_closed_form_of_the_costs_is_that_of_the_views():
    """What the search above compares is S^2 as the judgement has it."""
    found = judged({"a": quantity(differences(1.0, float16=0.3, float32=0.01))})
    for scheme in SCHEMES:
        wanted = cost(scheme, 0.3, 0.01)
        assert math.exp(found.views["a"].logarithm(scheme)[0]) == pytest.approx(wanted, rel=4 * NEAR)
