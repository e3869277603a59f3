"""What needs no sheet: the structures in words, the spec's schema, a commented spec to start from."""

from __future__ import annotations

import json
import os
from dataclasses import dataclass
from pathlib import Path

from synth.errors import Fault, InputError
from synth.record.files import write_new
from synth.spec import json_schema, template
from synth.structures import REGISTRY


@dataclass(frozen=True, slots=True)
class StructureWords:
    """A structure as `synth structures` tells it."""

    name: str
    formula: str
    words: str
    tuned: tuple[str, ...]
    forms: dict[str, str]


def structures() -> list[StructureWords]:
    """Every structure, simplest first."""
    return [
        StructureWords(s.name, s.formula, s.words, tuple(p.name for p in s.parameters), dict(s.forms))
        for s in REGISTRY.values()
    ]


def schema() -> str:
    """The JSON Schema of a spec file."""
    return json.dumps(json_schema(), indent=2, ensure_ascii=False)


def new(path: str | Path) -> Path:
    """Write a commented spec to a path that does not exist yet."""
    path = Path(path)
    if os.path.lexists(path):
        raise InputError([Fault("this exists already, and nothing is overwritten", file=str(path))])
    try:
        write_new(path, template())
    except FileExistsError:
        raise InputError([Fault("this exists already, and nothing is overwritten", file=str(path))]) from None
    except OSError as trouble:
        raise InputError(
            [Fault(f"cannot be written: {trouble.strerror or trouble}", file=str(path))]
        ) from None
    return path
