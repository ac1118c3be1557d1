"""`rounds = "itself"`, `[library]` and `[command]` in the audit file; refusals word for word are in refusals.txt."""

from __future__ import annotations

import pickle

import pytest
from auditfile_cases import LEAST, read, refusal

from narrowgauge.kernel.auditfile import audit_file_from

LIBRARY = """
[kernel]
takes = "increments"
[library]
path = "lib/reserve.so"
symbol = "value"
parameters = ["fee", "rates"]
outputs = ["option"]
[parameters]
rates = [[1, 2.5], [3, 4]]
fee = 2
[ladder]
horizon = 1.0
finest = 2
"""
COMMAND = """
[kernel]
takes = "normals"
layout = "paths, steps"
[command]
run = ["./reserve", "--fast"]
outputs = ["option"]
[parameters]
name = "call"
[ladder]
horizon = 1.0
finest = 2
"""


def test_a_library_stands_for_the_function(tmp_path):
    """Its path and symbol are what messages and the record call the kernel; what it rounds is not assumed."""
    file = read(tmp_path, LIBRARY)
    assert (file.kernel.run, file.kernel.rounds) == ("lib/reserve.so:value", "itself")
    assert file.foreign
    asked = file.asked()
    assert asked["library"] == {
        "path": "lib/reserve.so",
        "symbol": "value",
        "parameters": ["fee", "rates"],
        "outputs": ["option"],
    }
    assert "command" not in asked
    assert not {"kernel.run", "kernel.rounds", "library.parameters"} & set(file.assumed)
    assert not [key for key in file.assumed if key.startswith("command")]


def test_a_command_stands_for_the_function(tmp_path):
    """The words of the command name it, and its time limit has a default that counts as assumed."""
    file = read(tmp_path, COMMAND)
    assert (file.kernel.run, file.kernel.rounds) == ("./reserve --fast", "itself")
    assert file.command.seconds == 60.0
    assert "command.seconds" in file.assumed
    assert "library" not in file.asked()


def test_an_emulated_kernel_is_not_foreign(tmp_path):
    """Nor is a Python function that rounds for itself: this process may run it."""
    mapping = {"kernel": {"run": "a.py:f", "takes": "normals"}, "ladder": {"horizon": 1.0, "finest": 1}}
    assert not audit_file_from(mapping).foreign
    mapping["kernel"]["rounds"] = "itself"
    assert not audit_file_from(mapping).foreign
    assert audit_file_from(mapping).kernel.rounds == "itself"


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (
            '[kernel]\ntakes = "increments"',
            '[kernel]\ntakes = "increments"\nrounds = "emulated"',
            'kernel.rounds: "emulated", but [library] cannot be emulated; accepted: "itself"',
        ),
        (
            '[kernel]\ntakes = "increments"',
            '[kernel]\ntakes = "increments"\nmodules = ["plant"]',
            "kernel.modules: [library] is no Python, of which modules could be copied; accepted: no such key",
        ),
        (
            "[parameters]",
            '[command]\nrun = ["a"]\noutputs = ["x"]\n[parameters]',
            "command: [library] is there, too; accepted: one of the two",
        ),
        ("fee = 2", "fees = 2", 'library.parameters: "fee" is no key of [parameters]; accepted: rates, fees'),
        (
            "fee = 2",
            "fee = 2\nrate = 1",
            'library.parameters: "rate" of [parameters] is missing; accepted: rates, fee, rate',
        ),
        (
            "fee = 2",
            'fee = "two"',
            'parameters.fee: "two" is a string, and a library gets float64 numbers; '
            "accepted: a number, or an array of numbers",
        ),
        (
            "fee = 2",
            "fee = [[true]]",
            "parameters.fee: true is a boolean, and a library gets float64 numbers; "
            "accepted: a number, or an array of numbers",
        ),
        (
            "fee = 2\n",
            'fee = 2\n[formats]\ntoday = "e4m3"\n',
            'formats.today: "e4m3" has no type of its own, in which a kernel with rounds = "itself" could get draws; '
            "accepted: float16, bfloat16, float32, float64",
        ),
        (
            "fee = 2\n",
            'fee = 2\n[draws]\napproximate = "linear"\nformats = ["tf32"]\n',
            'draws.formats: "tf32" has no type of its own, in which a kernel with rounds = "itself" could get draws; '
            "accepted: float16, bfloat16, float32, float64",
        ),
    ],
)
def test_what_a_library_cannot_have(tmp_path, old, new, message):
    """Keys of another kind of kernel, parameters that do not fit, and formats without a type are refused."""
    assert LIBRARY.count(old) == 1
    assert refusal(tmp_path, LIBRARY.replace(old, new)) == message


def test_a_command_is_not_timed(tmp_path):
    """Its time goes into starting and into files."""
    assert refusal(tmp_path, COMMAND + "[cost]\nmeasured = true\n") == (
        "cost.measured: true, but a command spends its time on starting and on files; "
        "accepted: false, and costs of a step"
    )


def test_measured_costs_need_none_in_the_file(tmp_path):
    """No format's cost is asked for; those of a draw and of a path stay the file's."""
    file = read(tmp_path, LIBRARY + "[cost]\nmeasured = true\ndraws = 0.5\n")
    assert (file.cost.measured, file.cost.float64, file.cost.draws) == (True, None, 0.5)
    assert file.costs is file.cost


def test_keys_of_its_own_are_asked_of_no_other(tmp_path):
    """An emulated kernel's record has neither `rounds` nor `measured`, and is what it was before there were any."""
    asked = read(tmp_path, LEAST).asked()
    assert "rounds" not in asked["kernel"]
    assert "measured" not in asked["cost"]
    asked = read(tmp_path, LIBRARY).asked()
    assert (asked["kernel"]["rounds"], asked["cost"]["measured"]) == ("itself", False)
    assert "cost.measured" in asked["assumed"]


def test_pickles(tmp_path):
    """An audit file with a library is the same after a journey."""
    file = read(tmp_path, LIBRARY)
    assert pickle.loads(pickle.dumps(file)) == file
