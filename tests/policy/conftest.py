"""One small audit for all tests of this folder."""

import pytest
from policy_records import paying, run


@pytest.fixture(scope="session")
def audited(tmp_path_factory):
    """The record of a small audit, as it was measured, and the digest of its file."""
    return run(tmp_path_factory.mktemp("audited"))


@pytest.fixture(scope="session")
def record(audited):
    """The same record, with verdicts set so that float16 over float32 is used on every level."""
    return paying(audited[0])
