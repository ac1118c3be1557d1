"""A finished audit that is judged: only of the kernel, and of the settings, that are there now."""

import hashlib
import tomllib
from types import SimpleNamespace

import pytest
from policy_records import AUDIT, KERNEL, policy

from narrowgauge.api import run_audit
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.policy.drawup import draw_up, read_audit, write_policy
from narrowgauge.policy.gatefile import held_to
from narrowgauge.policy.gatefinished import _fingerprint, _otherwise, _present, judge_finished
from narrowgauge.record.canonical import canonical_text


@pytest.fixture(scope="module")
def held(record):
    return policy(record)


def finished(record, held, folder, audit):
    """The verdict on a finished audit beside an audit file."""
    (folder / "model.py").write_text(KERNEL, encoding="utf-8")
    (folder / "audit.toml").write_text(audit, encoding="utf-8")
    write_policy(held, folder / "audit.policy.json")
    (folder / "out").mkdir()
    (folder / "out" / "audit.json").write_text(canonical_text(record.document()), encoding="utf-8")
    return judge_finished(held_to(folder / "audit.toml"), folder / "out")


def test_a_finished_audit_of_the_settings_that_the_file_has_is_judged(record, held, tmp_path):
    """Whatever numbers are written as."""
    entry = finished(record, held, tmp_path, AUDIT.replace("horizon = 1.0", "horizon = 1"))
    assert entry.verdict != "fail"


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (("strike = 1.1", "strike = 1.2"), "parameters.strike is not what the audit was made with, 1.1, but 1.2;"),
        (("strike = 1.1", ""), "parameters.strike is not what the audit was made with, 1.1, but not there;"),
        (("strike = 1.1", "strike = 1.1\nfee = 2"), "parameters.fee is not what"),
        (("finest = 3", "finest = 4"), "ladder.finest is not what"),
        (("coarsest_steps = 4\n", ""), "ladder.coarsest_steps is not what"),
        (("call = 0.002", "call = 0.001"), "target.rmse is not what"),
        (('schemes = ["split"]', ""), "formats.schemes is not what"),
        (("draws = 0.125", "draws = 0.25"), "cost.draws is not what"),
        (('takes = "increments"', 'takes = "normals"'), "kernel.takes is not what"),
        (("model.py:value", "other.py:value"), "kernel.run is not what"),
        (("[ladder]", '[draws]\napproximate = "constant"\n[ladder]'), "draws.approximate is not what"),
        (("[ladder]", '[branches]\nlow = "model.py:value"\n[ladder]'), "branches.low is not what"),
    ],
)
def test_a_finished_audit_of_other_settings_than_the_file_has_now_fails(record, held, tmp_path, change, said):
    """It says nothing of what would run today."""
    old, new = change
    assert AUDIT.count(old) == 1
    entry = finished(record, held, tmp_path, AUDIT.replace(old, new))
    assert entry.verdict == "fail"
    failing = [one.message for one in entry.findings if one.state == "fails"]
    assert [one.startswith(said) for one in failing] == [True], failing
    assert failing[0].endswith("; audit the kernel anew")


MORE = """
[draws]
approximate = "constant"
cells = 64

[branches]
low = "model.py:value"
"""


@pytest.mark.parametrize("more", ["", MORE, MORE.replace("cells = 64\n", "")])
@pytest.mark.parametrize("cost", [True, False])
def test_an_audit_file_is_what_its_own_audit_was_made_with(tmp_path, more, cost):
    """Whether keys are given or not: defaults are no difference."""
    text = AUDIT + more
    if not cost:
        text = text[: text.index("[cost]")] + text[text.index("[sampling]") :]
    (tmp_path / "audit.toml").write_text(text, encoding="utf-8")
    assert list(_otherwise(tomllib.loads(text), read_audit_file(tmp_path / "audit.toml").asked())) == []


BOTH = MORE + 'allow = "within budget"\npaths = 4096\n'


@pytest.mark.parametrize(
    ("key", "said"),
    [
        (
            'allow = "within budget"\n',
            ["branches.allow is not what the audit was made with, within budget, but not there"],
        ),
        ("cells = 64\n", ["draws.cells is not what the audit was made with, 64, but not there"]),
        (
            'low = "model.py:value"\n',
            ["branches.low is not what the audit was made with, model.py:value, but not there"],
        ),
        ("confidence = 0.95\n", ["sampling.confidence is not what the audit was made with, 0.95, but not there"]),
        ("paths = 4096\n", []),
    ],
)
def test_a_key_that_was_taken_out_of_a_table_is_noticed(tmp_path, key, said):
    """But for what says how much is drawn."""
    text = AUDIT + "confidence = 0.95\n" + BOTH
    assert text.count(key) == 1
    (tmp_path / "audit.toml").write_text(text, encoding="utf-8")
    asked = read_audit_file(tmp_path / "audit.toml").asked()
    assert list(_otherwise(tomllib.loads(text), asked)) == []
    left = _otherwise(tomllib.loads(text.replace(key, "")), asked)
    assert [one.message.partition(";")[0] for one in left] == said


@pytest.mark.parametrize(("confidence", "states"), [(0.95, ["fails"]), (0.99, [])])
def test_what_says_how_much_is_drawn_may_change_and_the_confidence_may_not(tmp_path, confidence, states):
    """Of [sampling] all else, and how long a command may take; the audit had the default."""
    text = AUDIT + BOTH
    (tmp_path / "audit.toml").write_text(text, encoding="utf-8")
    now = tomllib.loads(text.replace("8192", "16384").replace("4096", "1024"))
    now["sampling"] |= {"seed": 2, "confidence": confidence}
    asked = read_audit_file(tmp_path / "audit.toml").asked()
    command = {"run": ["kernel"], "seconds": 60.0}
    found = _otherwise(now | {"command": command | {"seconds": 90.0}}, asked | {"command": command})
    assert [one.state for one in found] == states


PACKAGE = {
    "models/__init__.py": "",
    "models/paths.py": "from models.rates import more\n" + KERNEL.replace("rate * h", "more(rate) * h"),
    "models/rates.py": "def more(rate):\n    return 1.0 * rate\n",
}  # fmt: skip


def test_a_kernel_in_a_package_is_known_again_with_its_modules(tmp_path):
    """By the name of its module; a helper that was changed since is another state."""
    for name, text in PACKAGE.items():
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).write_text(text, encoding="utf-8")
    audit = tmp_path / "audit.toml"
    run = 'run = "models.paths:value"\nmodules = ["models.rates"]'
    audit.write_text(AUDIT.replace('run = "model.py:value"', run), encoding="utf-8")
    run_audit(read_audit_file(audit), tmp_path / "out")
    write_policy(draw_up(*read_audit(tmp_path / "out")), tmp_path / "audit.policy.json")
    assert judge_finished(held_to(audit), tmp_path / "out").verdict != "fail"
    (tmp_path / "models" / "rates.py").write_text("def more(rate):\n    return 2.0 * rate\n", encoding="utf-8")
    assert of_another_state(audit)
    (tmp_path / "models" / "rates.py").unlink()
    (one,) = [one for one in judge_finished(held_to(audit), tmp_path / "out").findings if one.state == "fails"]
    assert "there is no module 'models.rates'" in one.message


def of_another_state(audit):
    found = [
        one.message for one in judge_finished(held_to(audit), audit.parent / "out").findings if one.state == "fails"
    ]
    return found == ["the audit is one of another state of the kernel; audit the kernel anew"]


def test_a_library_and_a_command_are_known_by_their_bytes(tmp_path):
    """Of a command the files beside the audit file count, as they do when it is audited."""
    held = SimpleNamespace(audit=tmp_path / "audit.toml")
    file = tmp_path / "kernel"
    found = []
    for content in (b"one", b"two"):
        file.write_bytes(content)
        library = _fingerprint(held, {"library": {"path": "kernel"}}, "kernel:value", [])
        assert library == f"sha256:{hashlib.sha256(content).hexdigest()}"
        found.append(_fingerprint(held, {"command": {"run": ["sh", "kernel"]}}, "sh kernel", []))
    assert found[0] != found[1]


def test_a_library_that_is_gone_fails(tmp_path, record):
    """Nobody can run it."""
    held = SimpleNamespace(audit=tmp_path / "audit.toml")
    (one,) = _present(held, {"library": {"path": "kernel.so"}}, record)
    assert (one.check, one.state) == ("run", "fails")
    assert "kernel.so" in one.message


@pytest.mark.parametrize(
    ("function", "named", "states"),
    [
        ("draws.approximate", "constant", []),
        ("draws.approximate", "model.py:cheap", []),
        ("draws.approximate", "cheap.py:cheap", ["undecided"]),
        ("branches.low", "model.py:value", []),
        ("branches.correction", "pair.py:value", ["undecided"]),
    ],
)
def test_a_function_of_which_nobody_knows_what_it_was_is_undecided(tmp_path, record, function, named, states):
    """The fingerprint is of the kernel's own file."""
    (tmp_path / "model.py").write_text(KERNEL, encoding="utf-8")
    held = SimpleNamespace(audit=tmp_path / "audit.toml")
    table, _, key = function.partition(".")
    given = {"kernel": {"run": "model.py:value"}, table: {key: named}}
    assert [one.state for one in _present(held, given, record)] == states
