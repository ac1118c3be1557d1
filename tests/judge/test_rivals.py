"""Who competes with whom, the best scheme of a level, and what a level costs."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from judge_cases import NEAR, PATHS, audit, differences, level_tally, quantity

from narrowgauge.judge.asked import coupled, level_costs, rmse_of
from narrowgauge.judge.gain import Scheme
from narrowgauge.judge.schemes import _Court, judge_level

ALPHA = 0.01
SPLIT_ONLY = {"narrow": ["float16"], "wide": ["float64"], "schemes": ["split"]}
ALONE_ONLY = {"narrow": ["float16"], "wide": ["float64"], "schemes": ["alone"]}
ALL = {"narrow": ["float16", "bfloat16", "float32"], "wide": ["float32", "float64"]}


def alone(name):
    return Scheme(kind="alone", narrow=name)


def split(name, wide):
    return Scheme(kind="split", narrow=name, wide=wide)


R64, R32, S32 = alone("float64"), alone("float32"), split("float32", "float64")
SETTINGS = {
    "defaults": (ALL, {"float16": [R64, R32, S32], "bfloat16": [R64, R32, S32], "float32": [R64]}),
    "wide float64": (ALL | {"wide": ["float64"]}, {"float16": [R64], "bfloat16": [R64], "float32": [R64]}),
    "today float32": (
        ALL | {"wide": ["float64"], "today": "float32"},
        {"float16": [R64, R32], "bfloat16": [R64, R32], "float32": [R64]},
    ),
    "today bfloat16": (ALL | {"wide": [], "today": "bfloat16"}, {"float16": [R64], "bfloat16": [R64]}),
    "today float16": (ALL | {"wide": [], "today": "float16"}, {"float16": [R64], "bfloat16": [R64, alone("float16")]}),
    "split only": (ALL | {"schemes": ["split"]}, {"float16": [R64, S32], "float32": [R64]}),
    "alone only": (ALL | {"schemes": ["alone"]}, {"float16": [R64, R32], "float32": [R64]}),
    "wide float32": (ALL | {"wide": ["float32"]}, {"float16": [R64, R32], "float32": [R64]}),
    "nothing wide": (ALL | {"wide": []}, {"float16": [R64], "bfloat16": [R64], "float32": [R64]}),
    "wide float16": (
        ALL | {"wide": ["float16", "float64"]},
        {
            "bfloat16": [R64, alone("float16"), split("float16", "float64")],
            "float16": [R64],
            "float32": [R64],
        },
    ),
}


@pytest.mark.parametrize("setting", SETTINGS)
def test_competitors_are_what_formats_of_more_precision_can_do(setting):
    """float64 alone and a more precise today always; of the others only wide ones of more precision.

    So a format that is only narrow never competes, whatever its cost, and no format with itself.
    """
    formats, wanted = SETTINGS[setting]
    tally = level_tally(quantity(differences(1.0, float16=0.01, bfloat16=0.02, float32=1e-8)))
    court = _Court(tally=tally, file=audit(formats=formats), alpha=ALPHA, views={})
    for name, rivals in wanted.items():
        assert sorted(map(str, court.rivals(name))) == sorted(map(str, rivals))


def test_approximate_draws_compete_with_exact_ones_in_their_format():
    """What a format can do with exact draws is no merit of the approximate ones; what is wider competes as ever."""
    formats = ALL | {"wide": ["float32", "float64"]}
    file = audit(formats=formats, draws={"approximate": "linear", "formats": ["float16"]})
    tally = level_tally(quantity(differences(1.0, float16=0.01, bfloat16=0.02, float32=1e-8)))
    found = _Court(tally=tally, file=file, alpha=ALPHA, views={}).rivals("float16/approximate")
    own = [alone("float16"), split("float16", "float32"), split("float16", "float64")]
    assert sorted(map(str, found)) == sorted(map(str, [R64, R32, S32, *own]))


@pytest.mark.parametrize(
    ("formats", "edge"),
    [
        (ALL, 2.0),
        (ALL | {"wide": ["float64"]}, 4.0),
        (ALL | {"wide": ["float64"], "today": "float32"}, 2.0),
        (ALL | {"schemes": ["split"], "wide": ["float64"]}, 4.0),
    ],
)
def test_the_edge_is_over_the_cheapest_competitor(formats, edge):
    """Without any noise float16 costs 1/4: its edge is 2 over float32 and 4 over float64.

    bfloat16, as cheap and only narrow, is no competitor: against it the edge would be 1.
    """
    tally = level_tally(quantity(differences(1.0, float16=1e-20, bfloat16=1e-20, float32=1e-22)))
    found = judge_level(tally, audit(formats=formats), ALPHA).arms["value"]["float16"]
    # Each R of 1e-20 adds sqrt(1e-20 x 5) once, and twice when squared.
    assert found.edge.estimate == pytest.approx(edge, rel=NEAR + 2 * math.sqrt(5e-20))
    assert found.verdict == "pays"


def test_reference_and_today_are_rivals_however_biased():
    """float32 is biased far beyond its share: as a wide format it is refused, as today's it is a rival."""
    arms = differences(1.0, float16=1e-6)
    tally = level_tally(quantity(arms | {"float32": arms["float64"] + 1.0}))
    formats = {"narrow": ["float16"], "wide": ["float32", "float64"], "schemes": ["alone"]}
    for today, edge in (("float64", 4.0), ("float32", 2.0)):
        file = audit(formats=formats | {"today": today}, target={"rmse": 0.1})
        found = judge_level(tally, file, ALPHA).arms["value"]["float16"]
        assert found.edge.estimate == pytest.approx(edge / (1 + 1e-6), rel=NEAR)
        assert found.gain.estimate == pytest.approx(edge / (1 + 1e-6), rel=NEAR)


def test_a_level_is_settled_when_no_format_is_undecided():
    """One undecided format of one quantity is enough for another look."""
    judgement = judge_level(level_tally(quantity(differences(1.0, float16=0.001))), audit(formats=SPLIT_ONLY), ALPHA)
    assert judgement.settled
    open_one = replace(judgement.arms["value"]["float16"], verdict="undecided")
    arms = {"value": judgement.arms["value"], "other": {"float16": open_one}}
    assert not replace(judgement, arms=arms).settled


def test_the_best_scheme_is_the_cheapest_that_may_be_used():
    """Without a target float16 alone; with one, that its bias breaks, the next cheapest; float64 if all are biased."""
    arms = differences(1.0, float16=1e-3, float32=1e-12)
    arms["float16"] = arms["float16"] + 0.5
    tally = level_tally(quantity(arms))

    def best(**tables):
        return judge_level(tally, audit(**tables), ALPHA).best["value"]

    target = {"rmse": 0.4}
    assert best(formats=ALL | {"narrow": ["float16"]}) == alone("float16")
    # float32 alone costs 1/2, the split over it (sqrt(1.001 / 4) + sqrt(.001 x 3/4))^2 = .28.
    assert best(formats=ALL | {"narrow": ["float16"]}, target=target) == split("float16", "float32")
    assert best(formats=ALL | {"narrow": ["float16"], "schemes": ["alone"]}, target=target) == alone("float32")
    assert best(formats=ALONE_ONLY, target=target) == alone("float64")
    still = level_tally(quantity(dict.fromkeys(("float64", "float16"), np.ones(PATHS))))
    assert judge_level(still, audit(formats=SPLIT_ONLY), ALPHA).best["value"] is None


def test_costs_of_a_level_count_both_paths_and_the_draws_of_the_fine_one():
    """Level 2 of refinement 4 from 3 steps: 48 + 12 steps, 2 x 48 draws; 48 steps where levels are not coupled."""
    tables = {"ladder": {"coarsest_steps": 3, "refinement": 4}, "cost": {"float64": 1.0, "float32": 0.5, "draws": 0.1}}
    formats = {"narrow": ["float32"]}
    sums = audit(finest=2, kernel={"factors": 2}, formats=formats, **tables)
    none = audit(finest=2, kernel={"factors": 2, "coupling": "none"}, formats=formats, **tables)
    assert (level_costs(sums, 2).steps, level_costs(sums, 2).draws, level_costs(sums, 0).steps) == (60, 96, 3)
    assert (level_costs(none, 2).steps, level_costs(none, 2).draws) == (48, 96)
    assert [coupled(sums, level) for level in range(3)] == [False, True, True]
    assert not coupled(none, 2)
    assert level_costs(sums, 2).path("float32") == pytest.approx(60 * 0.5 + 96 * 0.1, rel=NEAR)


def test_the_target_of_a_quantity():
    """One figure for all, one by name, or none."""
    assert rmse_of(audit(), "a") is None
    assert rmse_of(audit(target={"rmse": 2.0}), "a") == 2.0
    by_name = audit(target={"rmse": {"a": 1.0}})
    assert (rmse_of(by_name, "a"), rmse_of(by_name, "b")) == (1.0, None)
