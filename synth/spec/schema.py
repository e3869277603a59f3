"""The JSON Schema of a spec file, made from the tables the reader checks against; a spec to start from."""

from __future__ import annotations

from pathlib import Path

from synth.spec.kinds import Schema
from synth.spec.sheet import SHEET

FILE = Path(__file__).with_name("spec.schema.json")  # shipped for editors; a test keeps it equal


def json_schema() -> Schema:
    """The schema, draft 2020-12."""
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "Spec of a control loop, for compensator synthesis",
        **SHEET.schema(),
    }


def template() -> str:
    """A commented spec to start from; it reads without a fault and can be met."""
    return Path(__file__).with_name("template.toml").read_text(encoding="utf-8")
