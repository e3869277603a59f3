"""A spec file to a Spec, or every fault of it at once."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

from synth.errors import Fault, InputError
from synth.model.cases import ParameterRange, PlantCases, case_points
from synth.model.forms import FormError, PlantForm
from synth.model.formula import FormulaError
from synth.spec.parameters import Operating, check_names, read_cases, read_parameters
from synth.spec.plant import place_of, read_plant, signal
from synth.spec.requirements import read_bounds, read_preference
from synth.spec.sheet import SHEET
from synth.spec.source import Node, Source, check_size, load
from synth.spec.spec import SearchSettings, Spec
from synth.structures import REGISTRY


def read_spec(path: str | Path) -> Spec:
    """Read a spec file. Raises InputError with all the faults of the file."""
    text, _ = load(path)
    return parse_spec(text, str(path))


def parse_spec(text: str, file: str = "spec.toml") -> Spec:
    """Read the text of a spec. Raises InputError with all its faults, each with line and key."""
    check_size(len(text), file)
    try:
        data = text.encode("utf-8")
    except UnicodeEncodeError:
        raise InputError([Fault("the text is not valid Unicode", file=file)]) from None
    source = Source.of(text, file)
    root = source.root
    read = SHEET.read(root) or {}

    parameters = root.child("parameters")
    ranges = read_parameters(parameters, read.get("parameters", {}))
    known = tuple(parameters.value) if isinstance(parameters.value, dict) else ()
    operating = read_cases(root.child("cases"), read.get("cases", []), ranges, known)
    points = case_points(ranges, operating)
    bounds = read_bounds(root.child("requirements"), read.get("requirements", {}), [p.name for p in points])
    prefer = read_preference(root.child("prefer"), read["prefer"]) if "prefer" in read else None

    search = _search(root.child("search"), read.get("search", {}))

    plant_node, plant_read = root.child("plant"), read.get("plant", {})
    form = read_plant(plant_node, plant_read)
    if form is not None:
        check_names(parameters, form.names, plant_node)
    cases = None
    # a plant with a faulty value would only repeat that fault in other words
    if form is not None and len(ranges) == len(known) and set(form.names) <= set(known):
        cases = _built(plant_node, form, ranges, operating)
    source.stop()
    assert form is not None
    assert cases is not None
    return Spec(
        file=file,
        text=text,
        sha256=hashlib.sha256(data).hexdigest(),
        title=read.get("title", Path(file).stem),
        revision=read.get("revision", ""),
        form=form,
        ranges=ranges,
        operating=operating,
        cases=cases,
        valid_to=plant_read.get("valid_to"),
        input=signal(plant_read, "input"),
        output=signal(plant_read, "output"),
        reference_step=read.get("reference", {}).get("step", 1.0),
        bounds=bounds,
        prefer=prefer,
        search=search,
    )


def _built(
    node: Node, form: PlantForm, ranges: tuple[ParameterRange, ...], operating: Operating
) -> PlantCases | None:
    """The plant cases, or None with a fault that names the case."""
    try:
        return PlantCases.build(form, ranges, operating)
    except (FormulaError, FormError) as error:
        message, given = error.message, None
        if error.case is not None:
            point = case_points(ranges, operating)[error.case]
            if point.kind != "nominal":
                message += f" (in the case {point.name})"
        if isinstance(error, FormulaError):
            given = error.excerpt()
        place_of(node, error).fault(message, given=given)
        return None


def _search(node: Node, read: dict[str, Any]) -> SearchSettings:
    named = read.get("structures")
    if named == []:
        node.child("structures").fault("no structure is named", ", ".join(REGISTRY))
    structures = tuple(dict.fromkeys(name for _, name in named)) if named else None
    return SearchSettings(structures, read.get("budget", "normal"), read.get("seed", 0))
