"""What a policy says of an audit, and where an audit supports none."""

from __future__ import annotations

import hashlib
import math

import pytest
from msgspec import UNSET
from msgspec.structs import fields
from policy_records import AUDIT, KERNEL, LEVELS, changed, judged, paying, policy, run
from scipy import stats

from narrowgauge import __version__
from narrowgauge.errors import PolicyError
from narrowgauge.kernel.identity import identity_of
from narrowgauge.policy.drawup import draw_up, read_audit, write_policy
from narrowgauge.record.branches import MismatchEntry
from narrowgauge.record.canary import CanaryEntry
from narrowgauge.record.canonical import DocumentError
from narrowgauge.record.costs import CostEntry
from narrowgauge.record.draws import DrawsEntry
from narrowgauge.record.lines import FormatLines, LineEntry, LinesEntry, WideningEntry
from narrowgauge.record.policy import ParameterPart, policy_text, read_policy, read_policy_text


class TestContents:
    def test_what_was_audited(self, audited, record):
        """The ladder, the target with its budget, the parameters, and what runs today are those of the audit file."""
        document = policy(record)
        assert (document.written_by, document.today) == (f"narrowgauge {__version__}", "float64")
        ladder = document.ladder
        assert (ladder.horizon, ladder.coarsest_steps, ladder.refinement, ladder.finest) == (1.0, 4, 2, 3)
        assert document.target.rmse == {"end": 0.002, "call": 0.002}
        assert document.target.bias_budget == dict.fromkeys(["end", "call"], 0.25 * 0.002 / 4)
        assert document.domain.parameters == {
            "rate": ParameterPart(fixed=0.05),
            "volatility": ParameterPart(fixed=0.3),
            "strike": ParameterPart(fixed=1.1),
        }
        assert document.cost.source == "given"
        assert document.cost.steps == {"float64": 1.0, "bfloat16": 0.25, "float16": 0.25, "float32": 0.5}
        assert document.finest_paying_level == record.verdict.finest_paying_level

    def test_the_kernel(self, audited, record, tmp_path):
        """Its fingerprint is that of a file of the same text; the raw hash is the audit's."""
        kernel = policy(record).kernel
        path = tmp_path / "model.py"
        path.write_text(f"# a comment\n{KERNEL}", encoding="utf-8")
        found = identity_of(f"{path}:value", run=kernel.run, covers=kernel.covers, modules=kernel.modules)
        assert found == kernel.fingerprint
        assert kernel.raw == f"sha256:{hashlib.sha256(KERNEL.encode()).hexdigest()}"
        assert (kernel.covers, kernel.imports) == ("syntax trees", ["numpy"])
        assert "numpy" in kernel.packages
        assert any("numpy" in one for one in kernel.unseen)

    def test_the_evidence(self, audited, record):
        """The digest of audit.json, the seed, the paths of each level, versions and the class of the machine."""
        evidence = draw_up(record, audited[1]).evidence
        assert (evidence.audit, evidence.seed, evidence.confidence) == (audited[1], 1, 0.99)
        assert evidence.paths == [8192] * 4
        assert evidence.machine.machine == record.provenance["machine"]
        assert evidence.versions["python"] == record.provenance["python"]

    def test_the_levels(self, record):
        """Each has the scheme that serves all quantities, its paths, and the figures of the worst quantity."""
        document = policy(record)
        for one, planned in zip(document.levels, record.verdict.plan.levels, strict=True):
            assert (one.scheme, one.narrow, one.wide, one.draws) == ("split", "float16", "float32", "exact")
            assert (one.rounding, one.verdict, one.reason) == ("nearest", "pays", None)
            assert (one.paths, one.correction_paths) == (planned.paths, planned.correction_paths)
            entries = {name: quantity.levels[one.level] for name, quantity in record.quantities.items()}
            lows = {name: entry.arms["float16"].edge_low for name, entry in entries.items()}
            assert one.decided_by == min(lows, key=lows.__getitem__)
            worst = entries[one.decided_by]
            assert (one.gain, one.edge_low) == (worst.arms["float16"].gain, worst.arms["float16"].edge_low)
            assert one.breakeven_cost_ratio == worst.corrections["float16:float32"].breakeven_cost_ratio
        assert not document.plan.replanned
        assert document.plan.cost == record.verdict.plan.cost

    def test_intervals_of_the_error(self, record):
        """Of the mean by Student's t, of the variance by that of its logarithm, at the confidence of one look."""
        level = record.quantities["call"].levels[2]
        found = policy(record).levels[2].measured["call"].arms["bfloat16"]
        entry = level.arms["bfloat16"]
        reach = stats.t.ppf(1 - 0.01 / 2, 32 * level.blocks - 1)
        assert found.error_mean_high == pytest.approx(entry.error_mean + reach * entry.error_mean_se, rel=1e-12)
        times = math.exp(reach * entry.error_variance_se / entry.error_variance)
        assert found.error_variance_high == pytest.approx(entry.error_variance * times, rel=1e-12)
        assert found.error_variance_low == pytest.approx(entry.error_variance / times, rel=1e-12)
        assert found.effective_size == level.corrections["bfloat16:float64"].effective_size

    def test_the_law(self, record):
        """The three coefficients with their intervals, of the error and of the correction, by quantity and arm."""
        found, entry = policy(record).laws["end"]["float16"], record.quantities["end"].accumulation["float16"]
        assert (found.error.walk, found.error.walk_low) == (entry.error.walk, entry.error.walk_low)
        assert (found.correction.drift_high, found.correction.reason) == (
            entry.correction.drift_high,
            entry.correction.reason,
        )

    def test_defaults_in_use(self, record):
        """Each key that the audit file left out, with the value that stood for it."""
        assert policy(record).assumed["kernel.layout"] == "steps, paths"
        assert policy(record).assumed["target.bias_share"] == 0.25
        assert list(policy(record).assumed) == record.asked["assumed"]

    def test_approximate_draws(self, record):
        """An arm with approximate draws is a format and a kind of draws."""
        arms = {**record.arms, "float16/approximate": changed(record.arms["float16"], "draws", to="approximate")}
        made = changed(record, "arms", to=arms)
        made = changed(made, "verdict", "schemes", 1, "narrow", to="float16/approximate")
        for name, quantity in made.quantities.items():
            level = quantity.levels[1]
            more = {"float16/approximate": changed(level.arms["float16"], "scheme", "narrow", to="float16/approximate")}
            pair = {"float16/approximate:float32": level.corrections["float16:float32"]}
            steps = ("quantities", name, "levels", 1)
            made = changed(made, *steps, "arms", to=level.arms | more)
            made = changed(made, *steps, "corrections", to=level.corrections | pair)
        draws = DrawsEntry(
            approximate="linear", cells=None, intervals=8, degree=1, mean=0.0, variance=1.0, mean_square_error=1e-4
        )
        said = "Approximate draws, on level 1, are those of the audit alone: linear, intervals = 8, degree = 1."
        assert said in policy(changed(made, "draws", to=draws)).cautions
        assert said not in policy(changed(record, "draws", to=draws)).cautions
        one = policy(made).levels[1]
        assert (one.narrow, one.wide, one.draws, one.edge_low) == (
            "float16",
            "float32",
            "approximate",
            min(quantity.levels[1].arms["float16"].edge_low for quantity in record.quantities.values()),
        )


class TestCautions:
    def test_in_every_policy(self, record):
        """It is no approval, the emulation has limits, and nothing was audited beside the point."""
        found = policy(record).cautions
        assert found[0].startswith("A policy is evidence, not approval: it holds for means, not for quantiles")
        assert found[1:3] == record.cautions[1:]
        assert found[3].startswith("Nothing was audited beside the parameters")

    def test_assumed_costs(self, tmp_path):
        """An audit without [cost] gives a policy that says so, and says what stood for it."""
        audit = AUDIT[: AUDIT.index("[cost]")] + AUDIT[AUDIT.index("[sampling]") :].replace("8192", "1024")
        record, digest = run(tmp_path, audit)
        document = draw_up(record, digest)
        assert document.cost.source == "assumed"
        assert document.assumed["cost.float16"] == 0.25
        assert any(one.startswith("The costs of a step were assumed") for one in document.cautions)

    def test_measured_costs(self, record):
        """They are those of the record, and of one machine."""
        entry = CostEntry(cost=0.4, nanoseconds=1.0, fastest=1.0, slowest=1.0, runs=11)
        document = policy(changed(record, "costs", to={"float32": entry}))
        assert (document.cost.source, document.cost.steps["float32"]) == ("measured", 0.4)
        assert any("measured on one machine" in one for one in document.cautions)

    def test_a_false_format(self, record):
        """A kernel that does not round in the format it claims is said once for each arm."""
        entry = CanaryEntry(
            arm="float16",
            quantity="end",
            level=0,
            paths=1024,
            finding="wider",
            like="float32",
            outside=3,
            rounded_once=None,
            rounded_once_small=None,
            error=None,
        )
        found = policy(changed(record, "canary", to=[entry, changed(entry, "quantity", to="call")])).cautions
        assert (
            found.count("In float16 the kernel does not round: what is said of that format is said of what was run.")
            == 1
        )

    def test_branches_that_differ_within_the_budget(self, record):
        """Where a split is used although its branches are not the same bits, that is said; elsewhere it is not."""
        mismatch = {one.name: None for one in fields(MismatchEntry)}
        mismatch |= {"arm": "float16", "level": 1, "splits": "within budget"}
        made = changed(paying(record), "branches", "mismatches", to=[MismatchEntry(**mismatch)])
        assert made.verdict.schemes[1].kind == "split"
        said = "The two branches of the split on level 1 are not the same bits"
        assert [one.startswith(said) for one in policy(made).cautions].count(True) == 1
        for steps, to in ((("splits",), "not concerned"), (("arm",), "bfloat16")):
            other = changed(made, "branches", "mismatches", 0, *steps, to=to)
            assert not any("are not the same bits" in one for one in policy(other).cautions)

    def test_branches_in_other_files(self, record):
        """The fingerprint does not cover a branch in a file of its own."""
        assert not any("branches" in one for one in policy(record).kernel.unseen)
        other = changed(record, "branches", "low", to="fast.py:value")
        assert any("the branches fast.py:value and" in one for one in policy(other).kernel.unseen)

    def test_a_discretisation_error_past_the_target(self, record):
        """The target does not count what the finest level leaves; where that is more it is said."""
        found = policy(changed(record, "quantities", "end", "allocation", "weak_error", to=0.5)).cautions
        assert any(one.startswith("end: the finest level leaves a discretisation error of about 0.5") for one in found)


class TestRefusals:
    @pytest.mark.parametrize(
        ("steps", "to", "reason"),
        [
            (("asked", "target"), None, "the audit file has no [target]"),
            (("verdict", "sound"), False, "the levels do not fit together"),
            (
                ("quantities", "call", "levels", 2, "reference", "nonfinite"),
                7,
                "the reference is not finite: call, level 2, 7 of 8192 paths",
            ),
            (
                ("verdict", "plan", "reason"),
                "levels that are not coupled do not add up",
                "no paths are planned: levels",
            ),
            (("verdict", "schemes", 1), None, "no paths are planned: a level without a finite scheme"),
            (("source",), UNSET, "the audit does not say what its kernel was"),
        ],
    )
    def test_no_policy(self, record, steps, to, reason):
        """Where the audit supports no policy there is none, and the message begins with the audit and says why."""
        with pytest.raises(PolicyError) as caught:
            policy(changed(record, *steps, to=to), source="audits/reserve")
        assert str(caught.value).startswith(f"audits/reserve: no policy: {reason}")
        assert caught.value.exit_code == 2

    @pytest.mark.parametrize(
        ("steps", "to", "message"),
        [
            (("quantities", "end", "levels", 1, "arms"), {}, "audit: the record is not whole: it lacks float16"),
            (("arms",), {}, "audit: the record is not whole: it lacks float16"),
            (("asked", "ladder"), {"horizon": "long"}, "audit: the record cannot be used: Expected `float`, got `str`"),
            (("source", "fingerprint"), "none", "audit: the record cannot be used: Expected `str` matching regex"),
        ],
    )
    def test_a_record_that_contradicts_itself(self, record, steps, to, message):
        """A record that somebody has changed by hand is a message, not a traceback."""
        with pytest.raises(PolicyError) as caught:
            policy(changed(record, *steps, to=to))
        assert str(caught.value).startswith(message)


class TestFiles:
    def test_an_audit_reads_back(self, audited, tmp_path):
        """The digest is that of the file; another schema, or what is no audit, is refused with the path."""
        record, digest = audited
        text = policy_text(draw_up(record, digest))
        (tmp_path / "audit.json").write_text(text, encoding="utf-8")
        with pytest.raises(DocumentError) as caught:
            read_audit(tmp_path)
        what = '"narrowgauge-policy/1" is not known to this version; accepted: "narrowgauge-audit/1"'
        assert str(caught.value) == f"{tmp_path}/audit.json: schema: {what}"

    def test_a_policy_is_written_whole(self, record, tmp_path):
        """What is written reads back equal, in place of what was there; no folder is a message."""
        document, path = policy(record), tmp_path / "p.json"
        path.write_text("old", encoding="utf-8")
        write_policy(document, path)
        assert read_policy(path) == document
        with pytest.raises(PolicyError, match=r"p\.json: cannot be written: No such file or directory$"):
            write_policy(document, tmp_path / "none" / "p.json")

    def test_the_measured_audit_reads_back(self, audited):
        """An audit as it was measured, whatever its verdicts, has a policy that reads back equal."""
        document = draw_up(*audited)
        assert read_policy_text(policy_text(document), "p.json") == document
        assert len(document.levels) == len(LEVELS)


def test_an_unjudged_arm_has_no_verdict(record):
    """An arm that is only wide is written down as it was measured, without a verdict."""
    made = judged(record, 0, "bfloat16", None)
    assert policy(made).levels[0].measured["end"].arms["bfloat16"].verdict is None


def test_shares_of_lost_additions_and_subnormals(record):
    """Those of the levels whose numbers were looked at; on the others a policy says nothing of them."""
    watched = record.range.watched
    assert watched is not None
    seen = {one.level: one.arms for one in watched.levels}
    assert 0 < len(seen) < len(record.quantities["end"].levels)
    for level in policy(record).levels:
        for name, arm in level.measured["end"].arms.items():
            if level.level not in seen:
                assert (arm.lost_additions, arm.subnormals) == (UNSET, UNSET)
                continue
            lost = seen[level.level][name].lost
            assert lost.share is not None
            found = arm.lost_additions
            assert (found.share, found.low, found.high) == (lost.share, lost.share_low, lost.share_high)
            assert found.operations == lost.of > 0
            assert arm.subnormals.share == seen[level.level][name].below.share


class TestAdvice:
    def test_without_a_study_there_is_none(self, record):
        """The part is left out, of the text as well."""
        document = policy(record)
        assert document.advice is UNSET
        assert '"advice"' not in policy_text(document)

    def test_widened_lines_are_advice_with_the_hash_of_their_source(self, record):
        """Lines in the order of the source, whether draws are wide, and what the study found of the set."""
        figures = {"gain": 1.5, "gain_low": 1.4, "gain_high": 1.6, "edge": 0.5, "edge_low": 0.4, "edge_high": 0.6}
        widening = WideningEntry(parts=[2, 1, 0], operations=0.25, step_cost=0.3125, level=2, possible=3, **figures)
        parts = [
            LineEntry(kind="line", file="model.py", line=8, role="payoff", operations=0.125),
            LineEntry(kind="draws", file=None, line=None, role=None, operations=0.0625),
            LineEntry(kind="line", file="model.py", line=7, role="state", operations=0.0625),
        ]
        study = FormatLines(
            level=3, steps=32, paths=1024, wide="float32", parts=parts, quantities={}, plain=None,
            widenings=[widening], what_ifs=None, reason=None,
        )  # fmt: skip
        made = changed(record, "lines", to=LinesEntry(formats={"float16": study}, source=[], reason=None))
        (advice,) = policy(made).advice
        assert advice.source == policy(made).kernel.raw
        assert [(one.file, one.line) for one in advice.lines] == [("model.py", 7), ("model.py", 8)]
        assert (advice.narrow, advice.wide, advice.draws) == ("float16", "float32", True)
        assert (advice.operations, advice.step_cost, advice.level) == (0.25, 0.3125, 2)
        assert (advice.gain, advice.gain_low, advice.gain_high) == (1.5, 1.4, 1.6)
        text = policy_text(policy(made))
        assert policy_text(read_policy_text(text, "p.json")) == text
        assert [one.narrow for one in policy(made).levels] == [one.narrow for one in policy(record).levels]
