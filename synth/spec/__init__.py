"""The sheet: a spec file read whole, every fault of it at once."""

from synth.spec.reader import parse_spec, read_spec
from synth.spec.schema import json_schema, template
from synth.spec.spec import Preference, SearchSettings, Signal, Spec

__all__ = [
    "Preference",
    "SearchSettings",
    "Signal",
    "Spec",
    "json_schema",
    "parse_spec",
    "read_spec",
    "template",
]
