"""The tape: what fine and coarse runs draw in each arithmetic, in bits and in distribution, and who asks for what."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import special, stats
from tape_cases import PER_STEP, played, request, tape_of

from narrowgauge.arithmetic.arithmetic import arithmetic_named
from narrowgauge.arithmetic.formats import FORMATS
from narrowgauge.draws.layout import Layout, Request, StepAxis, draws_of, layouts
from narrowgauge.draws.normals import exact_normals
from narrowgauge.draws.quantiles import inverted
from narrowgauge.draws.streams import Purpose, uniforms
from narrowgauge.draws.tape import ArmDraws, TapeError

FALSE_ALARM = 1e-6  # of each statistical test
OF_THEIR_OWN_TYPE = [name for name in FORMATS if name != "tf32"]  # TF32 has none to compare with
AHEAD = Layout(before=1, period=0, after=0, axes=(StepAxis(place=0),))


def summed(parts, form):
    """The sum in order of time, each addition rounded by NumPy's or ml_dtypes' own type of the format."""
    total = parts[0].astype(FORMATS[form].storage)
    for part in parts[1:]:
        total = total + part.astype(FORMATS[form].storage)
        assert total.dtype == FORMATS[form].storage
    return total


@pytest.mark.parametrize("m", [2, 3])
@pytest.mark.parametrize("form", OF_THEIR_OWN_TYPE)
def test_normals_by_step_and_ahead(form, m):
    """Fine draws are the rounded normals of the tape, coarse ones the sum in the format's own type, times 1 / sqrt(M).

    By step or in one block, the numbers are those of one stream of uniforms; and of every arm.
    """
    steps, paths = 2 * m, 64
    z = exact_normals(uniforms(3, Purpose.TRIAL, 0, 0, (steps, paths)))
    storage = FORMATS[form].storage
    arithmetic = arithmetic_named(form)
    expected = [arithmetic.cast(row) for row in z]
    factor = arithmetic.cast(np.array([1 / math.sqrt(m)]))[0].astype(storage)
    sums = [summed(expected[i * m : (i + 1) * m], form) * factor for i in range(2)]
    for layout, fine, coarse in (
        (PER_STEP, [request("normal", (paths,))] * steps, [request("normal", (paths,))] * 2),
        (AHEAD, [request("normal", (steps, paths))], [request("normal", (2, paths))]),
    ):
        tape = tape_of(steps, m, layout)
        played(ArmDraws(tape, arithmetic_named("float64")), fine)  # the reference writes the tape
        first, second = played(ArmDraws(tape, arithmetic), fine, coarse)
        assert np.array_equal(np.reshape(first, (steps, paths)), expected)
        assert np.array_equal(np.reshape(second, (2, paths)).astype(np.float64), np.array(sums).astype(np.float64))


@pytest.mark.parametrize(
    ("axis", "size", "time_last"),
    [
        (StepAxis(place=0), (8, 5), lambda x, n: x.T),
        (StepAxis(place=1), (5, 8), lambda x, n: x),
        (StepAxis(place=2), (3, 5, 8), lambda x, n: x),
        (StepAxis(place=0), (24, 5), lambda x, n: x.reshape(n, 3, 5).transpose(1, 2, 0)),
        (StepAxis(place=0, steps_first=False), (24, 5), lambda x, n: x.reshape(3, n, 5).transpose(0, 2, 1)),
        (StepAxis(place=0), (40,), lambda x, n: x.reshape(n, 5).T),
    ],
)
def test_the_axis_of_the_steps(axis, size, time_last):
    """Draws made ahead are summed along time wherever its axis is, also where it is folded into another."""
    tape = tape_of(8, 4, Layout(before=1, period=0, after=0, axes=(axis,)))
    small = tuple(n // 4 if a == axis.place else n for a, n in enumerate(size))
    arm = ArmDraws(tape, arithmetic_named("float64"))
    (fine,), (coarse,) = played(arm, [request("normal", size)], [request("normal", small)])
    steps = time_last(fine, 8)
    z = steps.reshape(*steps.shape[:-1], 2, 4)
    expected = (((z[..., 0] + z[..., 1]) + z[..., 2]) + z[..., 3]) * 0.5
    assert np.array_equal(time_last(coarse, 2), expected)
    assert coarse.shape == small
    assert coarse.flags["C_CONTIGUOUS"]


def test_requests_outside_the_time_loop_are_the_same():
    """What is drawn once, before or after the time loop, is the same on the fine and the coarse path."""
    layout = Layout(before=1, period=2, after=1, axes=(None, None))
    loop = [request("normal", (6,)), request("exponential", (6,))]
    fine = [request("gamma", (6,), 2.0), *loop * 4, request("normal", (6,))]
    coarse = [request("gamma", (6,), 2.0), *loop * 2, request("normal", (6,))]
    for form in ("float64", "float16"):
        first, second = played(ArmDraws(tape_of(4, 2, layout), arithmetic_named(form)), fine, coarse)
        assert np.array_equal(first[0], second[0])
        assert np.array_equal(first[-1], second[-1])
        assert not np.array_equal(first[1], second[1])


@pytest.mark.parametrize("form", OF_THEIR_OWN_TYPE)
def test_poisson_and_gamma_in_proportion_add_up(form):
    """Draws whose parameter is a rate times the step: the coarse draw is the sum of the fine ones, as its type adds."""
    h, m, n = 0.1, 2, 256
    for name, rate in (("poisson", 7.0), ("gamma", 3.0)):
        fine = [request(name, (n,), rate * h)] * 4
        coarse = [request(name, (n,), rate * (m * h))] * 2
        first, second = played(ArmDraws(tape_of(4), arithmetic_named(form)), fine, coarse)
        for i, total in enumerate(second):
            if name == "poisson":
                assert total.dtype == np.int64
                assert np.array_equal(total, first[2 * i] + first[2 * i + 1])
            else:
                sums = summed(first[2 * i : 2 * i + 2], form)
                assert np.array_equal(total.astype(np.float64), sums.astype(np.float64))


def test_other_parameters_do_not_add_up():
    """A parameter that does not grow with the step, or is an array, gives the quantile of the coarse uniform."""
    n = 256
    z = exact_normals(uniforms(3, Purpose.TRIAL, 0, 0, (2, n)))
    u = special.ndtr((z[0] + z[1]) / math.sqrt(2))
    for name, law in (("poisson", stats.poisson), ("gamma", stats.gamma)):
        _, (same,) = played(
            ArmDraws(tape_of(2), arithmetic_named("float64")),
            [request(name, (n,), 2.0)] * 2,
            [request(name, (n,), 2.0)],
        )
        assert np.allclose(same, law(2.0).ppf(u), rtol=2**-40, atol=0)  # both invert the same function, to 12 digits
        arm = ArmDraws(tape_of(2), arithmetic_named("float64"))
        reader = arm.fine()
        for _ in range(2):
            reader.draw(Request(name=name, size=(n,), parameters=(None,)), (np.full(n, 1.5),))
        reader.finish()
        found = arm.coarse().draw(Request(name=name, size=(n,), parameters=(None,)), (np.full(n, 3.0),))
        assert np.allclose(found, law(3.0).ppf(u), rtol=2**-40, atol=0)


N = 2**15


def coarse_of(name, fine_parameters, coarse_parameters, m=4):
    """2^15 coarse draws of four fine steps."""
    fine, coarse = request(name, (N,), *fine_parameters), request(name, (N,), *coarse_parameters)
    return played(ArmDraws(tape_of(m, m), arithmetic_named("float64")), [fine] * m, [coarse])[1][0]


@pytest.mark.parametrize(
    ("name", "fine", "coarse", "law"),
    [
        ("normal", (), (), stats.norm()),
        ("uniform", (), (), stats.uniform()),
        ("exponential", (), (), stats.expon()),
        ("gamma", (0.25,), (1.0,), stats.gamma(1.0)),
        ("gamma", (0.75,), (0.75,), stats.gamma(0.75)),
        ("gamma", (0.75,), (2.0,), stats.gamma(2.0)),
        ("chisquare", (3.0,), (3.0,), stats.chi2(3.0)),
        ("t", (4.0,), (4.0,), stats.t(4.0)),
    ],
)
def test_coarse_reals_have_their_distribution(name, fine, coarse, law):
    """A coarse draw has the distribution that the coarse run asks for: Kolmogorov's test, false alarm 1e-6.

    Negative control: a sum of gamma draws with the fine parameter, which has the coarse parameter's mean only, fails.
    """
    assert stats.kstest(coarse_of(name, fine, coarse), law.cdf).pvalue > FALSE_ALARM
    wrong = coarse_of("gamma", (0.25,), (1.0,))
    assert stats.kstest(wrong, stats.gamma(1.1).cdf).pvalue < FALSE_ALARM


def pearson(counts, law):
    """The p-value of Pearson's statistic over the values with at least five expected, the rest together."""
    expected = law.pmf(np.arange(counts.max() + 1)) * counts.size
    seen = np.bincount(counts)
    often = expected >= 5
    seen, expected = np.append(seen[often], 0.0), np.append(expected[often], 0.0)
    seen[-1], expected[-1] = counts.size - seen.sum(), max(counts.size - expected.sum(), 1e-300)
    keep = expected >= 1
    return stats.chi2.sf(((seen - expected) ** 2 / np.maximum(expected, 1.0))[keep].sum(), keep.sum() - 1)


@pytest.mark.parametrize(("fine", "coarse"), [(0.6, 2.4), (2.4, 2.4), (1.0, 2.4)])
def test_coarse_counts_have_their_distribution(fine, coarse):
    """Coarse Poisson counts, summed or by inversion, have the coarse rate: Pearson's test, false alarm 1e-6.

    Negative control: a rate that is off by 5% fails.
    """
    counts = coarse_of("poisson", (fine,), (coarse,))
    assert pearson(counts, stats.poisson(2.4)) > FALSE_ALARM
    assert pearson(counts, stats.poisson(2.4 * 1.05)) < FALSE_ALARM


def test_a_run_gets_its_own_copy():
    """What a kernel writes into its draws reaches neither the next run nor the coarse path."""
    tape, one = tape_of(2), request("normal", (4,))
    arm = ArmDraws(tape, arithmetic_named("float64"))
    (first, _), _ = played(arm, [one] * 2)
    kept = first.copy()
    first[:] = 7.0
    (again, second), (coarse,) = played(arm, [one] * 2, [one])
    assert np.array_equal(again, kept)
    assert np.array_equal(coarse, (kept + second) * (1 / math.sqrt(2)))


class TestOtherRequests:
    @pytest.mark.parametrize(
        ("coarse", "words"),
        [
            ([("normal", (4,))] * 3, "more often than its fine path, which asked 2 times"),
            ([("normal", (4,))], "asked 1 times for random numbers where its fine path asked 2 times"),
            ([("normal", (5,))], r"request 0 for random numbers is normal\(\), size \(5,\) where its fine path has"),
            ([("uniform", (4,))], r"request 0 for random numbers is uniform\(\), size \(4,\) where its fine path"),
        ],
    )
    def test_in_the_coarse_run(self, coarse, words):
        """A coarse run that asks for other draws than the layout has is told which request."""
        arm = ArmDraws(tape_of(4), arithmetic_named("float16"))
        with pytest.raises(TapeError, match=words):
            played(arm, [request("normal", (4,))] * 4, [request(*one) for one in coarse])

    def test_in_the_fine_run(self):
        """A fine run that does not keep to the layout has no coarse one."""
        arm = ArmDraws(tape_of(4), arithmetic_named("float64"))
        with pytest.raises(TapeError, match=r"asked 3 times .* where runs of other numbers of steps let expect 4"):
            played(arm, [request("normal", (4,))] * 3, [request("normal", (4,))])

    def test_plain_parameters(self):
        """Plain parameters must agree, those of the state need not."""
        tape = tape_of(1)
        played(ArmDraws(tape, arithmetic_named("float64")), [request("gamma", (4,), 2.0)])
        reader = ArmDraws(tape, arithmetic_named("float16")).fine()
        with pytest.raises(TapeError, match=r"is gamma\(3.0\), size \(4,\) where the reference has gamma\(2.0\), size"):
            reader.draw(request("gamma", (4,), 3.0), (3.0,))
        reader.draw(Request(name="gamma", size=(4,), parameters=(None,)), (np.full(4, 3.0),))


def run_of(steps, *, before=(), step=(), after=()):
    """The requests of a run: sizes may hold a function of the steps."""
    made = [*before, *step * steps, *after]
    return [
        Request(name=name, size=tuple(n(steps) if callable(n) else n for n in size), parameters=())
        for name, size in made
    ]


def runs_of(**parts):
    """Runs of 2, 4 and 8 steps."""
    return {steps: run_of(steps, **parts) for steps in (2, 4, 8)}


def same(n):
    """An axis as long as the steps."""
    return n


A, B = ("normal", (9,)), ("poisson", (9,))


class TestLayouts:
    @pytest.mark.parametrize(
        ("parts", "expected"),
        [
            ({"step": (A,)}, [Layout(before=0, period=1, after=0, axes=())]),
            ({"step": (A, B, A)}, [Layout(before=0, period=3, after=0, axes=())]),
            ({"before": (B,), "step": (A,)}, [Layout(before=1, period=1, after=0, axes=(None,))]),
            ({"step": (A,), "after": (B,)}, [Layout(before=0, period=1, after=1, axes=(None,))]),
            (
                {"before": (("normal", (same, 9)),), "step": (B,)},
                [Layout(before=1, period=1, after=0, axes=(StepAxis(place=0),))],
            ),
            (
                {"before": (("normal", (9, same)), ("uniform", (2, same, 9)))},
                [Layout(before=2, period=0, after=0, axes=(StepAxis(place=1), StepAxis(place=1)))],
            ),
            (
                {"before": (("normal", (lambda n: 9 * n,)),)},
                [
                    Layout(before=1, period=0, after=0, axes=(StepAxis(place=0),)),
                    Layout(before=1, period=0, after=0, axes=(StepAxis(place=0, steps_first=False),)),
                ],
            ),
            (
                {"before": (A,), "step": (A,)},
                [
                    Layout(before=1, period=1, after=0, axes=(None,)),
                    Layout(before=0, period=1, after=1, axes=(None,)),
                ],
            ),
        ],
    )
    def test_known(self, parts, expected):
        """Requests by step, ahead, and once are told apart; where two layouts fit both are given, likeliest first."""
        assert layouts(runs_of(**parts)) == expected

    @pytest.mark.parametrize(
        ("parts", "reason"),
        [
            (
                {"before": (("normal", (lambda n: n + 1, 9)),)},
                "axis 0 of a size is no multiple of the steps (3 with 2, 5 with 4, 9 with 8)",
            ),
            (
                {"before": (("normal", (same, same)),)},
                "more than one axis of normal(), size (2, 2) grows with the steps",
            ),
            ({"before": (A,)}, "no request and no size grows with the steps"),
            ({"step": (("normal", (same,)),)}, None),
        ],
    )
    def test_unknown(self, parts, reason):
        """Where the requests show no order of time the reason is given."""
        found = layouts(runs_of(**parts))
        assert isinstance(found, str)
        assert reason is None or found == reason

    def test_uneven(self):
        """Counts that do not grow evenly, or steps that differ among themselves, have no layout."""
        runs = runs_of(step=(A,))
        runs[8] = runs[8][:-1]
        assert layouts(runs) == (
            "the number of requests does not grow evenly with the steps (2 with 2, 4 with 4, 7 with 8)"
        )
        runs = runs_of(step=(A,))
        runs[8][5] = Request(name="uniform", size=(9,))
        assert layouts(runs) == "with 8 steps the requests of step 5 are not those of step 0"

    def test_counts_of_draws(self):
        """The draws of a run are the product of each size, added up."""
        assert draws_of([Request(name="normal", size=(3, 4)), Request(name="normal", size=())]) == 13


@pytest.mark.parametrize("name", ["pareto", "power", "weibull"])
def test_a_shape_that_is_not_positive_is_refused(name: str) -> None:
    """Their formulas give numbers for such shapes too; NumPy refuses them."""
    with pytest.raises(ValueError, match=f"^parameters outside those of {name}$"):
        inverted(name, np.array([0.3, 0.7]), (-1.0,))
