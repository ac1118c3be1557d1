"""The published JSON Schema (2020-12) of a policy, made from its types.

It lies beside this module as policy.schema.json; a test holds it against what the types say. What no schema of a single
value says, such as that levels go up by one, the strict reader checks.
"""

from __future__ import annotations

from pathlib import Path

import msgspec

from narrowgauge.record.canonical import canonical_text
from narrowgauge.record.policy import SCHEMA, PolicyDocument

__all__ = ["PUBLISHED", "schema_text"]

PUBLISHED = Path(__file__).with_name("policy.schema.json")


def schema_text() -> str:
    """Return the schema as canonical text."""
    (whole,), parts = msgspec.json.schema_components([PolicyDocument], ref_template="#/$defs/{name}")
    name = whole["$ref"]
    schema = {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "$id": f"urn:{SCHEMA.replace('/', ':')}",
        "title": "Precision policy of narrowgauge",
        "$ref": name,
        "$defs": parts,
    }
    return canonical_text(msgspec.to_builtins(schema))
