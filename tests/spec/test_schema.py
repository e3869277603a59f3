"""The JSON Schema: shipped as made, true to the reader on the shipped sheets and on bad ones."""

import json
import re
import tomllib
from pathlib import Path

import pytest

from synth.loop.quantities import QUANTITIES
from synth.spec import json_schema, parse_spec, template
from synth.spec.schema import FILE
from synth.structures import REGISTRY

SHEETS = sorted((Path(__file__).parents[2] / "specs").glob("*.toml"))
TYPES = {"string": str, "array": list, "object": dict, "number": (int, float), "integer": int}


def complaints(value, schema, path=""):
    """What the schema holds against a value: the part of JSON Schema that ours uses."""
    unknown = set(schema) - {
        "$schema", "title", "description", "examples", "type", "properties", "required",
        "additionalProperties", "items", "minItems", "anyOf", "enum", "pattern", "minimum", "maximum",
    }  # fmt: skip
    assert not unknown, unknown
    if "anyOf" in schema and all(complaints(value, option, path) for option in schema["anyOf"]):
        return [f"{path}: none of the kinds"]
    kinds = schema.get("type", list(TYPES))
    kinds = [kinds] if isinstance(kinds, str) else kinds
    if isinstance(value, bool) or not isinstance(value, tuple(t for k in kinds for t in _types(k))):
        return [f"{path}: not {kinds}"]
    found = []
    if "enum" in schema and value not in schema["enum"]:
        found.append(f"{path}: not one of the names")
    if "pattern" in schema and not re.search(schema["pattern"], value):
        found.append(f"{path}: not like {schema['pattern']}")
    if (
        not schema.get("minimum", -1e999)
        <= (value if isinstance(value, int) else 0)
        <= schema.get("maximum", 1e999)
    ):
        found.append(f"{path}: out of range")
    if isinstance(value, list):
        if len(value) < schema.get("minItems", 0):
            found.append(f"{path}: too short")
        for i, item in enumerate(value):
            found += complaints(item, schema.get("items", {}), f"{path}[{i}]")
    if isinstance(value, dict):
        found += [f"{path}: lacks {key}" for key in schema.get("required", ()) if key not in value]
        for key, item in value.items():
            inner = schema.get("properties", {}).get(key, schema.get("additionalProperties", {}))
            found += (
                [f"{path}: unknown {key}"] if inner is False else complaints(item, inner, f"{path}.{key}")
            )
    return found


def _types(kind):
    types = TYPES[kind]
    return types if isinstance(types, tuple) else (types,)


def test_the_shipped_file_is_the_schema():
    assert json.loads(FILE.read_text(encoding="utf-8")) == json_schema()


def test_it_names_every_quantity_and_structure():
    properties = json_schema()["properties"]
    assert list(properties["requirements"]["properties"]) == [k for k, q in QUANTITIES.items() if q.listed]
    assert properties["search"]["properties"]["structures"]["items"]["enum"] == list(REGISTRY)
    for key, row in QUANTITIES.items():
        if row.listed:
            bound = properties["requirements"]["properties"][key]["anyOf"][0]["properties"]
            assert set(bound) == {"min", "max", "cases", *row.options}


@pytest.mark.parametrize("path", SHEETS, ids=lambda p: p.stem)
def test_the_shipped_sheets_pass(path):
    assert complaints(tomllib.loads(path.read_text(encoding="utf-8")), json_schema()) == []


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        ("overshoot        =", "overshot        =", ".requirements: unknown overshot"),
        ('max = "10 %"', "max = 10", ".requirements.overshoot: none of the kinds"),
        ('max = "10 %"', 'max = "10"', ".requirements.overshoot: none of the kinds"),
        ("[requirements]", "[requirement]", ": lacks requirements"),
        ('revision = "A"', "revision = 1", ".revision: not ['string']"),
        ("step = 1.0", 'step = "1"', ".reference.step: not ['number']"),
        ('tolerance = "20 %"', 'tolerance = "20"', ".parameters.T: none of the kinds"),
    ],
)
def test_bad_sheets_do_not(old, new, complaint):
    text = template()
    assert complaints(tomllib.loads(text), json_schema()) == []
    assert old in text
    assert complaint in complaints(tomllib.loads(text.replace(old, new)), json_schema())


def test_the_template_reads_and_so_do_its_lines_that_are_switched_off():
    assert parse_spec(template()).cases.names[0] == "nominal"
    lines = template().split("\n")
    from_here = next(i for i, line in enumerate(lines) if line.startswith("[requirements]"))
    on = [re.sub(r"^# (?=[\w\[])", "", line) for line in lines[from_here:]]
    cases = [re.sub(r"^# (?=name|T  |\[\[cases)", "", line) for line in lines[:from_here]]
    spec = parse_spec("\n".join(cases + on))
    assert spec.cases.names[-1] == "two plates"
    assert spec.prefer is not None
    assert spec.search.structures == ("PI", "PID", "lead-lag")
    assert spec.bounds[-1].id == "rise_time.max"


@pytest.mark.parametrize("key", ["numerator", "gain", "A"])
def test_the_other_forms_of_the_template_read(key):
    lines = template().split("\n")
    start = next(i for i, line in enumerate(lines) if line.startswith(f"# {key} ="))
    parts = [part.strip() for part in lines[start][2:].split("    ") if "=" in part]
    transfer = next(i for i, line in enumerate(lines) if line.startswith("transfer"))
    lines[transfer : transfer + 1] = parts
    used = [name for name in ("K", "T", "theta") if re.search(rf'"[^"]*\b{name}\b[^"]*"', "\n".join(parts))]
    kept = [line for line in lines if not re.match(r"(K|T|theta) +=", line) or line.split()[0] in used]
    assert len(parse_spec("\n".join(kept)).bounds) == 8
