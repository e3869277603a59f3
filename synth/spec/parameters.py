"""[parameters] and [[cases]]: values, tolerances, and operating cases that override them."""

from __future__ import annotations

from typing import Any

from synth.errors import nearest
from synth.model.cases import ParameterRange, case_points
from synth.model.formula import RESERVED
from synth.spec.kinds import is_name
from synth.spec.source import Node

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
    for name in used:
        if name not in known:
            words = ", ".join(known) if known else f"[parameters] with {name} = ..."
            plant.fault(f"`{name}` is used here and is no parameter", words, nearest(name, known), given=name)
    for name in known:
        if name not in used and is_name(name):
            words = "use it in the plant, or leave it out"
            node.child(name).fault(
                f"the parameter `{name}` is not used", words, nearest(name, used), given=name
            )


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
