"""The gate: whether a fresh audit of a kernel still supports its policy; pure, and without numpy.

What writes a verdict down takes the report as `record.gate` has it:

    policy/junit.py     junit_text(report: GateReport) -> str
    policy/sarif.py     sarif_text(report: GateReport) -> str
    policy/summary.py   summary_text(report: GateReport) -> str
    record/gate.py      gate_text(report: GateReport) -> str         the JSON

From Python, `api.gate(audit: Path, *, seed=None, workers=2) -> GateEntry` measures and judges one audit file.
"""
