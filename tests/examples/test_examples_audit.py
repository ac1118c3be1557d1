"""The example of the README, audited as a new user does it."""

import hashlib

from example_files import kernel_of

from narrowgauge.kernel.identity import identity_of
from narrowgauge.record.policy import read_policy


def test_the_reserve_example_says_where_each_format_pays(reserve):
    """The command ends well and names a finest paying level for each format, the option deciding for the narrow two."""
    folder, done = reserve
    assert done.returncode == 0, done.stderr
    words = " ".join(done.stdout.split())
    assert (
        "float16: finest level where it still pays: 4; on level 5 the edge is too small. The quantity option" in words
    )
    assert (
        "bfloat16: finest level where it still pays: 1; on level 2 the edge is too small. The quantity option" in words
    )
    assert "float32: finest level where it still pays: 6 or finer, not extrapolated." in words
    assert done.stderr.startswith("Plan: 7 levels of 2 to 128 steps.")
    assert (folder / "audits" / "reserve" / "audit.json").is_file()
    assert (folder / "audits" / "reserve" / "levels.csv").is_file()


def test_the_reserve_example_has_a_policy(reserve, run):
    """float16 over float32 to level 4, float32 alone beyond, and a fingerprint that the kernel itself has."""
    folder, _ = reserve
    done = run(folder, "policy", "audits/reserve", "--out", "reserve.policy.json")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.endswith("Written to reserve.policy.json\n")
    document = read_policy(folder / "reserve.policy.json")
    found = [(one.scheme, one.narrow, one.wide) for one in document.levels]
    assert found == [("split", "float16", "float32")] * 5 + [("alone", "float32", None)] * 2
    assert {one.verdict for one in document.levels} == {"pays"}
    data = (folder / "audits" / "reserve" / "audit.json").read_bytes()
    assert document.evidence.audit == f"sha256:{hashlib.sha256(data).hexdigest()}"
    kernel = document.kernel
    now = identity_of(kernel_of("reserve"), run=kernel.run, covers=kernel.covers, modules=kernel.modules)
    assert now == kernel.fingerprint
