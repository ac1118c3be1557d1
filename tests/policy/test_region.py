"""For which parameters a policy holds: the audited point, or the box that the scenarios of a domain leave."""

from __future__ import annotations

import pytest
from msgspec.structs import replace
from policy_records import AUDIT, changed, paying, policy, run

from narrowgauge.errors import PolicyError
from narrowgauge.policy.choice import REFERENCE
from narrowgauge.record.audit import AuditRecord
from narrowgauge.record.domain import ClaimedEntry, DomainEntry, DomainLevelEntry, ProofEntry, SideEntry, SpanEntry
from narrowgauge.record.plan import SchemeEntry
from narrowgauge.record.policy import ParameterPart

SIDES = {
    "volatility": SideEntry(low=0.1, high=0.4, scale="log", audited=0.3),
    "strike": SideEntry(low=1.0, high=1.2, scale="linear", audited=1.1),
}
CLAIMED = ClaimedEntry(
    parameters={"volatility": SpanEntry(low=0.1, high=0.35), "strike": SpanEntry(low=1.1, high=1.1)},
    share=0.7266,
    scenarios=30,
    levels=[],
)
PROOF = ProofEntry(confidence=0.95, drawn=32, passed=30, fails_below=0.1835, claimed_fails_below=0.25251)


def with_domain(record: AuditRecord, **fields: object) -> AuditRecord:
    """Return a record whose scenarios tried the audit's own schemes."""
    levels = [
        DomainLevelEntry(
            level=level, scheme=scheme, outcome="passes", reason=None, edge_low=1.2, decided_by=None, arms={}
        )
        for level, scheme in enumerate(record.verdict.schemes)
        if scheme is not None
    ]
    entry = DomainEntry(
        sides=SIDES,
        confidence=0.99,
        path_steps=1,
        share_of_audit=1.0,
        levels=levels,
        claimed=CLAIMED,
        proof=PROOF,
        scenarios=[],
    )
    return replace(record, domain=replace(entry, **fields))


def test_without_a_domain_it_is_the_audited_point(record: AuditRecord) -> None:
    """Every parameter is fixed, and a caution says that nothing else was audited."""
    document = policy(record)
    assert {name: one.fixed for name, one in document.domain.parameters.items()} == record.asked["parameters"]
    assert (document.domain.scenarios, document.domain.failing_below) == (1, None)
    assert any("Nothing was audited beside" in one for one in document.cautions)


def test_the_claimed_box_takes_its_place(record: AuditRecord) -> None:
    """Sides of the box, a side of one value as that value, the rest fixed; what that proves is among the cautions."""
    document = policy(with_domain(record))
    assert document.domain.parameters == {
        "rate": ParameterPart(fixed=0.05),
        "volatility": ParameterPart(low=0.1, high=0.35, scale="log"),
        "strike": ParameterPart(fixed=1.1),
    }
    assert list(document.domain.parameters) == list(record.asked["parameters"])
    assert (document.domain.scenarios, document.domain.failing_below) == (30, 0.25251)
    assert not any("Nothing was audited beside" in one for one in document.cautions)
    assert (
        "The policy was tried in a box of parameters, not everywhere in it: 30 of 32 scenarios drawn from the whole "
        "box pass, so that with 95% confidence less than 25.3% of what is claimed fails."
    ) in document.cautions
    assert "Scenarios that do not pass leave 72.7% of the box that was asked for." in document.cautions


@pytest.mark.parametrize("span", [SpanEntry(low=1.1, high=1.1), SpanEntry(low=1.1, high=1.2)])
def test_without_a_scenario_in_what_is_left_it_is_the_audited_point(record: AuditRecord, span: SpanEntry) -> None:
    """Where all scenarios fail, or what they leave holds none that passes, no box is claimed; a caution says so."""
    sides = {"volatility": SpanEntry(low=0.3, high=0.3), "strike": span}
    document = policy(with_domain(record, claimed=replace(CLAIMED, parameters=sides, share=0.0, scenarios=0)))
    assert {name: one.fixed for name, one in document.domain.parameters.items()} == record.asked["parameters"]
    assert (document.domain.scenarios, document.domain.failing_below) == (1, None)
    assert any(one.endswith("only the audited point is claimed.") for one in document.cautions)
    assert not any("Paths are planned" in one for one in document.cautions)


def test_the_paths_of_a_box_are_those_of_the_audited_point(record: AuditRecord) -> None:
    """A caution says so: another variance has another error, and no scenario was planned for."""
    assert any("planned from the variances at the audited point" in one for one in policy(with_domain(record)).cautions)
    assert not any("planned from the variances at the audited point" in one for one in policy(record).cautions)


def test_a_box_that_passes_whole_says_nothing_of_refusals(record: AuditRecord) -> None:
    """Neither is a share of what fails named that is not known."""
    whole = replace(CLAIMED, share=1.0)
    document = policy(with_domain(record, claimed=whole, proof=replace(PROOF, passed=32, claimed_fails_below=None)))
    assert not any("leave" in one and "box" in one for one in document.cautions)
    assert any(one.endswith("32 of 32 scenarios drawn from the whole box pass.") for one in document.cautions)


def test_a_point_that_fails_itself_gives_no_policy(record: AuditRecord) -> None:
    """There is no box to claim, and the point alone would be claimed against what the scenarios showed."""
    with pytest.raises(PolicyError, match=r"^audit: no policy: the audited point itself does not pass as a scenario"):
        policy(with_domain(record, claimed=None))


def test_a_scheme_that_no_scenario_tried_is_not_claimed(record: AuditRecord) -> None:
    """Where the policy would take another scheme than the scenarios tried it takes the reference, and says so."""
    made = with_domain(paying(record))
    assert policy(made).levels[2].narrow == "float16"
    other = changed(made, "domain", "levels", 2, "scheme", to=SchemeEntry(kind="alone", narrow="float32", wide=None))
    document = policy(other)
    chosen = document.levels[2]
    assert (chosen.scheme, chosen.narrow, chosen.wide) == (REFERENCE.kind, REFERENCE.narrow, REFERENCE.wide)
    assert chosen.reason == "not tried in the domain"
    assert document.levels[1].narrow == "float16"
    assert (
        "Level 2 uses float64 alone: the scheme that pays there is not the one that the scenarios of the domain tried."
        in document.cautions
    )
    assert document.plan.replanned


def test_a_domain_from_audit_to_policy(tmp_path_factory: pytest.TempPathFactory) -> None:
    """A box asked for in an audit file: the policy claims what lies above the volatility at which float16 does not pay.

    Of volatilities from .2 to .4, audited at .3, the corner .2 and a scenario near it are refused on level 3.
    """
    table = """
[domain]
scenarios = 2
paths = 1024
most_paths = 1024

[domain.parameters]
volatility = { low = 0.2, high = 0.4, scale = "log" }
"""
    found, _ = run(tmp_path_factory.mktemp("domain"), AUDIT + table)
    assert found.domain is not None
    part = policy(found).domain.parameters["volatility"]
    assert part == ParameterPart(low=0.3, high=0.4, scale="log")
