"""Reports of gates, made for tests of what writes them down. INVENTED DATA."""

from hypothesis import strategies as st

from narrowgauge.record.gate import CHECKS, Finding, GateEntry, Place, report_of
from narrowgauge.record.policy import MachinePart

HOSTILE = "a\x00b\x1b[31m\x0c\ud800\ufffe\u202e]]> & <b>|`*_[x](http://y) {0} \\ \r\n&#0; www.z.org @you #1 $x$ :)"
WRITTEN_BY = "narrowgauge 0.1.0"


def finding(state="holds", check="gain", **known):
    """A finding with figures, of level 2 unless `known` says otherwise."""
    figures = {"estimate": 1.75, "low": 1.5, "high": 2.0, "limit": 1.25, "compared": "its gain, at least the limit"}
    place = {"level": 2, "quantity": "option", "arm": "float16", "message": f"level 2: its {check} is 1.75"}
    return Finding(**{"check": check, "state": state, **place, **figures, **known})


def entry(*findings, **known):
    """The verdict on one audit file, as the findings have it."""
    states = {one.state for one in findings}
    verdict = "fail" if "fails" in states else "inconclusive" if "undecided" in states else "pass"
    machine = MachinePart(system="Linux", machine="x86_64", vector_features=["AVX2"])
    usual = {
        "audit": "models/reserve.toml",
        "policy": "models/reserve.policy.json",
        "kernel": "reserve.py:value",
        "place": Place(file="models/reserve.py", line=25),
        "verdict": verdict,
        "findings": list(findings),
        "seed": 7,
        "paths": [4096, 8192],
        "policy_machine": machine,
        "machine": machine,
        "same_machine": True,
        "renew": "narrowgauge policy models/reserve.toml",
    }
    return GateEntry(**{**usual, **known})


def report(*entries):
    return report_of(entries, WRITTEN_BY)


def every_state():
    """A report on four audit files: of each verdict one, and one that passes with a note."""
    fails = finding("fails", message="level 2: its gain is 1.1 (1 to 1.2), at least 1.25 is accepted", stages=2)
    placed = finding("fails", "escapes", level=None, quantity=None, arm=None, limit=None, estimate=None, low=None)
    placed = replace(
        placed, high=None, compared=None, message="a value escapes", place=Place(file="models/a.py", line=3)
    )
    waits = finding("undecided", "bias", message="level 2: its bias is open", paths_needed=40960)
    note = finding("note", "fingerprint", level=None, message="the kernel has changed since")
    return report(
        entry(finding(), finding(check="edge"), audit="models/good.toml"),
        entry(fails, placed, waits, finding(level=3), audit="models/bad.toml"),
        entry(waits, finding(), audit="models/open.toml"),
        entry(note, finding(), audit="models/noted.toml"),
    )


def replace(one, **changes):
    return type(one)(**{name: changes.get(name, getattr(one, name)) for name in one.__struct_fields__})


# Surrogates and what is no character included: messages are made of what kernels raise, names of what disks hold.
TEXT = st.text(st.characters(codec=None), max_size=30) | st.just(HOSTILE)
# Names of files on a disk: their bytes need not be UTF-8, and then stand as surrogates of one range.
FILES = st.text(st.characters(codec="utf-8") | st.characters(min_codepoint=0xDC80, max_codepoint=0xDCFF), min_size=1)
PLACES = st.builds(Place, file=FILES, line=st.integers(1, 10**6))
FINDINGS = st.builds(
    finding,
    state=st.sampled_from(["fails", "undecided", "note", "holds"]),
    check=st.sampled_from(list(CHECKS)),
    level=st.none() | st.integers(0, 12),
    quantity=st.none() | TEXT,
    arm=st.none() | TEXT,
    message=TEXT,
    place=st.none() | PLACES,
)
REPORTS = st.lists(
    st.lists(FINDINGS, max_size=6).flatmap(
        lambda found: st.builds(
            lambda audit, kernel, place: entry(*found, audit=audit, kernel=kernel, place=place), TEXT, TEXT, PLACES
        )
    ),
    max_size=3,
).map(lambda entries: report(*entries))
