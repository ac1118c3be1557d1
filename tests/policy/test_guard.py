"""What running code is told: the rule of a level, what lies outside, and what it costs to ask."""

from __future__ import annotations

import decimal
import fractions
import math
import pickle
import subprocess
import sys
import threading
import time

import ml_dtypes
import msgspec
import numpy as np
import pytest
from guard_cases import EXAMPLE, c_policies, document, questions, with_parameters
from hypothesis import given, settings
from hypothesis import strategies as st

import narrowgauge
from narrowgauge.errors import OutsidePolicyError, PolicyError
from narrowgauge.policy.guard import Policy, Rule
from narrowgauge.record.canonical import DocumentError
from narrowgauge.record.policy import policy_text

AUDITED = {name: one.fixed for name, one in document().domain.parameters.items()}
BOX = {"rate": 0.01, "volatility": (0.1, 0.4)}


def box(**more):
    return Policy(with_parameters(BOX), **more)


def counted(policy):
    return {reason: number for reason, number in policy.fallbacks().items() if number}


class TestRules:
    def test_a_level_has_the_rule_of_the_policy(self):
        """Scheme, formats, draws and the paths of both branches are those of the document, and nothing is outside."""
        policy = Policy.load(EXAMPLE)
        for one in document().levels:
            rule = policy.at(one.level, **AUDITED)
            for name in ("level", "scheme", "narrow", "wide", "draws", "rounding", "paths", "correction_paths"):
                assert getattr(rule, name) == getattr(one, name)
            assert rule.outside is None

    @pytest.mark.parametrize(
        ("name", "kind"),
        [
            ("float64", np.float64),
            ("float32", np.float32),
            ("float16", np.float16),
            ("bfloat16", ml_dtypes.bfloat16),
            ("e4m3", ml_dtypes.float8_e4m3fn),
            ("e5m2", ml_dtypes.float8_e5m2),
        ],
    )
    def test_types_of_numpy(self, name, kind):
        """Each format has the NumPy type that holds exactly its values."""
        rule = Policy.load(EXAMPLE).at(0, **AUDITED)
        asked = msgspec.structs.replace(rule, narrow=name, wide=name)
        assert asked.narrow_dtype == np.dtype(kind)
        assert asked.wide_dtype == np.dtype(kind)
        assert msgspec.structs.replace(rule, wide=None).wide_dtype is None

    def test_tf32_has_no_type(self):
        """NumPy has no type of 19 bits, and a float32 would not round as the policy says."""
        rule = msgspec.structs.replace(Policy.load(EXAMPLE).at(0, **AUDITED), narrow="tf32")
        with pytest.raises(PolicyError, match=r"^tf32 has no NumPy type; accepted: float64, float32"):
            _ = rule.narrow_dtype

    def test_a_kernel_without_parameters(self):
        """The ladder alone decides."""
        policy = Policy(with_parameters({}))
        assert policy.at(0) == policy.at(np.int64(0))
        with pytest.raises(PolicyError, match=r"^policy: unknown parameter 'rate'; accepted: none$"):
            policy.at(0, rate=0.1)

    def test_parameters_may_have_any_name(self):
        """A kernel's parameter called level or self is no obstacle."""
        assert Policy(with_parameters({"level": 1.0, "self": 2.0})).at(0, level=1.0, self=2.0).outside is None


class TestOutside:
    @pytest.mark.parametrize("value", [0.0999, 0.4001, math.nan, math.inf, -math.inf, "0.2", None, True, [0.2], 1j])
    def test_what_is_not_in_the_box(self, value):
        """Beyond an end, NaN, or no number: it raises, or the answer is float64 alone with the paths of the level."""
        with pytest.raises(OutsidePolicyError) as caught:
            box().at(1, rate=0.01, volatility=value)
        assert caught.value.reason == "parameter volatility"
        assert str(caught.value) == f"policy: volatility = {value!r} was not audited; accepted: 0.1 to 0.4"
        policy = box(outside="reference")
        rule = policy.at(1, rate=0.01, volatility=value)
        planned = document().levels[1].paths
        assert rule == Rule(
            level=1,
            scheme="alone",
            narrow="float64",
            wide=None,
            draws="exact",
            rounding="nearest",
            paths=planned,
            correction_paths=None,
            outside="parameter volatility",
        )
        assert counted(policy) == {"parameter volatility": 1}

    @pytest.mark.parametrize("value", [0.1, 0.4, 0.25, np.float64(0.4), np.float16(0.25), decimal.Decimal("0.1")])
    def test_what_is_in_the_box(self, value):
        """Both ends belong to it, and a number of any type counts with its own value."""
        assert box().at(1, rate=0.01, volatility=value).outside is None

    @pytest.mark.parametrize(
        ("fixed", "same", "others"),
        [
            (0.01, [0.01, np.float64(0.01), decimal.Decimal("0.01")], [0.010000000000000002, np.float32(0.01), "0.01"]),
            (
                3,
                [3, 3.0, np.int8(3), fractions.Fraction(3), np.array([[3]])],
                [True, 4, math.nan, [3], np.array([3, 3])],
            ),
            (1, [1, 1.0], [True, np.True_]),
            (0.0, [0, -0.0], [False, None, ""]),
            (2**53 + 1, [2**53 + 1, np.int64(2**53 + 1)], [2**53, float(2**53), np.float64(2**53)]),
            (True, [True, np.True_], [1, 1.0, False, "True"]),
            ("euler", ["euler", np.str_("euler")], ["Euler", b"euler", 0, ["euler"]]),
            ([1, 2], [[1, 2], (1.0, 2.0), np.array([1, 2])], [[1], [1, 2, 3], [1, math.nan], np.array([[1, 2]]), 1]),
            ([[0.5], [1.5]], [np.array([[0.5], [1.5]])], [[0.5, 1.5], np.array([0.5, 1.5])]),
            (["a", "b"], [("a", "b")], [["a", "c"], "ab"]),
            ([0.1, 1.0], [[0.1, 1], (0.1, np.float64(1.0))], [[0.1, True], [np.float32(0.1), 1.0]]),
            ([], [[], (), np.zeros(0)], [[0.0], ""]),
        ],
    )
    def test_a_fixed_value(self, fixed, same, others):
        """It is itself in any type that holds it exactly; a boolean is no number, and a text no array."""
        policy = Policy(with_parameters({"x": fixed, "y": 1.0}))
        for value in same:
            assert policy.at(0, x=value, y=1.0).outside is None, value
        for value in others:
            with pytest.raises(OutsidePolicyError, match=r"^policy: x = .* was not audited; accepted: "):
                policy.at(0, x=value, y=1.0)

    def test_an_array_that_holds_itself(self):
        """Only as much is looked at as the policy has."""
        endless = []
        endless.append(endless)
        with pytest.raises(OutsidePolicyError):
            Policy(with_parameters({"x": [[1.0]]})).at(0, x=endless)

    @pytest.mark.parametrize("level", [7, 8, 10**30, np.int64(7)])
    def test_beyond_the_ladder(self, level):
        """It raises, or the answer is float64 alone, for which nobody has planned paths."""
        with pytest.raises(OutsidePolicyError, match=r" is beyond the audited ladder; accepted: 0 to 6$") as caught:
            box().at(level, rate=0.01, volatility=0.2)
        assert caught.value.reason == "level"
        policy = box(outside="reference")
        rule = policy.at(level, rate=0.01, volatility=0.2)
        assert (rule.level, rule.scheme, rule.narrow, rule.wide) == (level, "alone", "float64", None)
        assert (rule.paths, rule.correction_paths, rule.outside) == (None, None, "level")

    def test_every_reason_has_a_counter(self):
        """All reasons are there from the start, and a question with several counts for the first."""
        policy = box(outside="reference")
        assert policy.fallbacks() == {"level": 0, "parameter rate": 0, "parameter volatility": 0}
        policy.at(9, rate=1.0, volatility=1.0)
        policy.at(1, volatility=1.0, rate=1.0)
        policy.at(1, rate=0.01, volatility=0.2)
        assert policy.fallbacks() == {"level": 1, "parameter rate": 1, "parameter volatility": 0}
        policy.fallbacks()["level"] = 7
        assert counted(policy) == {"level": 1, "parameter rate": 1}

    @pytest.mark.parametrize("first", range(7))
    def test_the_first_of_several_is_the_reason(self, first):
        """In the order of the policy, whether a parameter packs to bytes (2, 3.5), is a box, a text or a boolean."""
        audited = {"a": 2, "b": (0.1, 0.4), "c": 3.5, "d": "euler", "e": 2.5, "f": True, "g": 4}
        policy = Policy(with_parameters(audited), outside="reference")
        given = audited | {"b": 0.2}
        assert policy.at(0, **given).outside is None
        for name in list(audited)[first:]:
            given |= {name: "milstein" if name == "d" else 9.0}
            assert policy.at(0, **given).outside == f"parameter {list(audited)[first]}"

    def test_threads_count_together(self, monkeypatch):
        """8 threads with 500 questions each make 4,000, though each addition is cut in two."""
        policy = box(outside="reference")

        class Slow(dict):
            def __getitem__(self, key):
                value = super().__getitem__(key)
                time.sleep(0)  # another thread's turn
                return value

        monkeypatch.setattr(policy, "_fallbacks", Slow(policy.fallbacks()))

        def ask():
            for _ in range(500):
                policy.at(9, rate=0.01, volatility=0.2)

        threads = [threading.Thread(target=ask) for _ in range(8)]
        for one in threads:
            one.start()
        for one in threads:
            one.join()
        assert counted(policy) == {"level": 4000}

    def test_the_error_travels(self):
        """From a worker process it arrives with its reason."""
        found = pickle.loads(pickle.dumps(OutsidePolicyError("text", reason="level")))
        assert (str(found), found.reason) == ("text", "level")


class TestMistakes:
    @pytest.mark.parametrize("outside", ["raise", "reference"])
    @pytest.mark.parametrize("level", [-1, True, False, np.True_, 1.0, "1", None, math.nan, np.int64(-1)])
    def test_no_level(self, level, outside):
        """A boolean, a negative number, a float: a mistake in the program, which is never answered."""
        with pytest.raises(PolicyError, match=r"^policy: .* is no level; accepted: a whole number from 0$") as caught:
            box(outside=outside).at(level, rate=0.01, volatility=0.2)
        assert not isinstance(caught.value, OutsidePolicyError)

    @pytest.mark.parametrize("outside", ["raise", "reference"])
    @pytest.mark.parametrize("level", [0, 9])
    @pytest.mark.parametrize(
        ("names", "message"),
        [
            (("rate",), "the parameter 'volatility' is missing; accepted: rate, volatility"),
            ((), "the parameter 'rate' is missing; accepted: rate, volatility"),
            (("rate", "volatility", "skew"), "unknown parameter 'skew'; accepted: rate, volatility"),
            (("rate", "skew"), "unknown parameter 'skew'; accepted: rate, volatility"),
        ],
    )
    def test_names(self, names, message, level, outside):
        """A parameter that is unknown or missing is a mistake in the program, too, on whatever level."""
        with pytest.raises(PolicyError) as caught:
            box(outside=outside).at(level, **{name: {"rate": 0.01, "volatility": 0.2}.get(name, 1.0) for name in names})
        assert str(caught.value) == f"policy: {message}"
        assert not isinstance(caught.value, OutsidePolicyError)

    def test_an_unknown_name_in_the_place_of_a_boolean(self):
        """As many names as there should be are not enough."""
        for rate in (0.01, 0.02):
            with pytest.raises(PolicyError, match="unknown parameter 'flags'"):
                Policy(with_parameters({"rate": 0.01, "flag": True})).at(0, rate=rate, flags=1.0)

    def test_a_word_for_outside(self):
        """Anything but the two words is refused."""
        with pytest.raises(
            PolicyError, match=r"^outside = 'ignore' is not accepted; accepted: 'raise' or 'reference'$"
        ):
            Policy.load(EXAMPLE, outside="ignore")


class TestKernel:
    @pytest.fixture
    def folder(self, tmp_path):
        """A folder with the example's kernel and its policy."""
        text = (EXAMPLE.parents[1] / "reserve" / "reserve.py").read_text(encoding="utf-8")
        (tmp_path / "reserve.py").write_text(text, encoding="utf-8")
        (tmp_path / "p.json").write_bytes(EXAMPLE.read_bytes())
        return tmp_path

    def test_the_audited_kernel(self, folder):
        """It is known by its file, formatted as it may be; nothing of it is run."""
        path = folder / "reserve.py"
        path.write_text("# said before\n" + path.read_text(encoding="utf-8"), encoding="utf-8")
        assert Policy.load(folder / "p.json", kernel=f"{path}:value").document == document()

    def test_another_kernel(self, folder):
        """One error, which says what the fingerprint covers."""
        path = folder / "reserve.py"
        path.write_text(path.read_text(encoding="utf-8").replace("0.0)", "0.5)"), encoding="utf-8")
        with pytest.raises(PolicyError) as caught:
            Policy.load(str(folder / "p.json"), kernel=f"{path}:value")
        text = str(caught.value)
        assert text.startswith(
            f"{folder}/p.json: kernel: this is another kernel than reserve.py:value, which was audited, or it has "
            "changed since: its fingerprint is sha256:"
        )
        assert document().kernel.fingerprint in text
        assert "of the syntax trees of the function's file and of no other module, where formatting" in text

    def test_what_cannot_be_compared(self, folder):
        """The message begins with the policy, too."""
        with pytest.raises(PolicyError, match=r"p\.json: kernel: the kernel is no Python function; accepted: "):
            Policy.load(folder / "p.json", kernel=len)

    def written(self, folder, run):
        """Return the path of a policy of a kernel that is known by its bytes."""
        kernel = msgspec.structs.replace(document().kernel, run=run, covers="bytes", modules=[])
        text = policy_text(msgspec.structs.replace(document(), kernel=kernel))
        (folder / "p.json").write_text(text, encoding="utf-8")
        return folder / "p.json"

    @pytest.mark.parametrize("run", ["./inflow", "inflow", "python3 inflow.py --scale 1:2"])
    def test_a_command(self, folder, run):
        """It has no file of its own to compare: that is said, not that it is another kernel."""
        path = self.written(folder, run)
        with pytest.raises(PolicyError) as caught:
            Policy.load(path, kernel=folder / "reserve.py")
        assert str(caught.value) == (
            f"{path}: kernel: the policy's kernel is the command {run}, which cannot be compared; accepted: no kernel, "
            "and narrowgauge gate to see whether the policy still holds"
        )
        assert Policy.load(path).document.kernel.run == run

    def test_a_library(self, folder):
        """It has one: the hash of its bytes says whether it is another, and that there is none is said."""
        path = self.written(folder, "rounded.so:value")
        with pytest.raises(PolicyError, match=r"p\.json: kernel: this is another kernel than rounded\.so:value, which"):
            Policy.load(path, kernel=folder / "reserve.py")
        with pytest.raises(PolicyError, match=r"p\.json: kernel: the kernel cannot be read: .*none\.so: No such file"):
            Policy.load(path, kernel=folder / "none.so")

    def test_no_policy(self, folder):
        """What is wrong with the file is the reader's message."""
        with pytest.raises(DocumentError, match=r"none\.json: there is no such file$"):
            Policy.load(folder / "none.json")


def test_it_is_the_packages():
    """narrowgauge.Policy is the guard."""
    assert narrowgauge.Policy is Policy


def test_nothing_heavy_is_imported():
    """A policy is loaded, compared and asked without numpy, pandas or scipy; numpy comes with the first type."""
    code = f"""
import sys
from narrowgauge import Policy
policy = Policy.load({str(EXAMPLE)!r}, kernel={str(EXAMPLE.parents[1] / "reserve" / "reserve.py") + ":value"!r})
rule = policy.at(0, **{AUDITED!r})
assert not {{"numpy", "pandas", "scipy", "ml_dtypes"}} & set(sys.modules), sys.modules.keys()
assert str(rule.narrow_dtype) == rule.narrow
assert "numpy" in sys.modules
assert not {{"pandas", "scipy"}} & set(sys.modules)
"""
    done = subprocess.run([sys.executable, "-c", code], check=False, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr


@settings(max_examples=300)
@given(st.data())
def test_the_quick_way_and_the_slow_one_agree(data):
    """The answer for plain values is that of the examination of each parameter, whatever the policy."""
    made = data.draw(c_policies())
    level, parameters = data.draw(questions(made))
    quick, slow = Policy(made, outside="reference"), Policy(made, outside="reference")
    assert quick.at(level, **parameters) == slow._examined(level, parameters)
