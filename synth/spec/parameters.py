"""[parameters] and [[cases]]: values, tolerances, and operating cases that override them."""

from __future__ import annotations

import re
from typing import Any

from synth.errors import nearest
from synth.model.cases import ParameterRange, case_points
from synth.model.formula import RESERVED
from synth.spec.kinds import is_name
from synth.spec.source import MOST_FAULTS, Node, shortened

MOST_OPERATING = 200

Operating = tuple[tuple[str, dict[str, float]], ...]


def read_parameters(node: Node, read: dict[str, tuple[float, float, float]]) -> tuple[ParameterRange, ...]:
    """The good parameters. Faults: a name that no formula can use."""
    if isinstance(node.value, dict):
        for name in node.value:
            if name in RESERVED:
                node.child(name).fault(
                    f"`{name}` has a meaning of its own in formulas", "another name", given=name
                )
            elif not is_name(name):
                words = "letters, digits and _, not beginning with a digit"
                node.child(name).fault("this name cannot stand in a formula", words, given=name)
    return tuple(ParameterRange(name, *values) for name, values in read.items())


def check_names(node: Node, used: tuple[str, ...], plant: Node) -> None:
    """Every name that the plant uses must be a parameter, and every parameter must be used."""
    known = node.value if isinstance(node.value, dict) else {}
    taken = set(used)
    unused = [name for name in known if name not in taken and is_name(name)]
    undefined = [name for name in used if name not in known]
    words = shortened(", ".join(unused or known), 200) or "[parameters] with a line for it"
    for name in undefined[:MOST_FAULTS]:
        place = _using(plant, name) or plant
        place.fault(f"`{name}` is used here and is no parameter", words, nearest(name, unused), given=name)
    for name in unused[:MOST_FAULTS]:
        near = nearest(name, undefined[:MOST_FAULTS])
        what = f"the parameter `{name}` is not used"
        node.child(name).fault(what, "use it in the plant, or leave it out", near, given=name)
    plant.source.uncounted += len(undefined[MOST_FAULTS:]) + len(unused[MOST_FAULTS:])


def _using(node: Node, name: str) -> Node | None:
    """The first text below a node in which a name stands."""
    if isinstance(node.value, str):
        return node if re.search(rf"(?<!\w){re.escape(name)}(?!\w)", node.value) else None
    keys = (
        node.value
        if isinstance(node.value, dict)
        else range(len(node.value))
        if isinstance(node.value, list)
        else ()
    )
    for key in keys:
        if key in ("input", "output", "valid_to"):
            continue
        found = _using(node.child(key), name)
        if found is not None:
            return found
    return None


def read_cases(
    node: Node,
    read: list[tuple[Node, dict[str, Any]]],
    ranges: tuple[ParameterRange, ...],
    known: tuple[str, ...],
) -> Operating:
    """Operating cases. Faults: names twice or taken, unknown parameters, cases that override nothing."""
    taken = {point.name for point in case_points(ranges)}
    out = []
    if len(read) > MOST_OPERATING:
        node.fault("too many operating cases", f"at most {MOST_OPERATING}", given=str(len(read)))
        return ()
    for case, values in read:
        name = values.get("name")
        if name is not None and not name.strip():
            case.child("name").fault("a case must have a name", "a name of its own")
        elif name in taken:
            case.child("name").fault("there is already a case of this name", "a name of its own")
        elif name is not None:
            taken.add(name)
        assert isinstance(case.value, dict)
        overrides = [key for key in case.value if key != "name"]
        for key in overrides:
            if key not in known:
                child = case.child(key)
                child.fault(
                    f"`{key}` is no parameter", ", ".join(known) or None, nearest(key, known), given=key
                )
        if not overrides:
            case.fault("this case overrides no parameter", ", ".join(known) or None, given=name or "")
        if name is not None:
            out.append((name, {k: v for k, v in values.items() if k in known}))
    return tuple(out)
