"""[requirements] and [prefer]: bounds in the units of the table of quantities."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from synth.errors import nearest
from synth.loop.quantities import QUANTITIES, Measure, Side
from synth.requirements import Bound, numbered
from synth.spec.sheet import PREFER, bound_table
from synth.spec.source import Node
from synth.spec.spec import Preference

Part = tuple[Measure, Side, float, tuple[str, ...] | None]
SIDES: tuple[Side, ...] = ("min", "max")


def read_bounds(node: Node, read: dict[str, Any], case_names: Sequence[str]) -> tuple[Bound, ...]:
    """Every bound, in the order of the file. Faults: none at all, no limit, unknown cases, contradictions."""
    if isinstance(node.value, dict) and not node.value:
        node.fault("there are no requirements", 'at least one bound, such as overshoot = { max = "10 %" }')
    parts: list[Part] = []
    for key, pairs in read.items():
        found: list[tuple[Node, Part]] = []
        for bound, values in pairs:
            assert isinstance(bound.value, dict)
            cases = _cases(bound.child("cases"), values.get("cases"), case_names)
            measure = _measure(key, values)
            known = all(name in bound_table(QUANTITIES[key]).fields for name in bound.value)
            if known and not any(bound.has(side) for side in SIDES):
                bound.fault("this bound has no limit", "min = ... or max = ...")
            for side in bound.value:
                if side in SIDES and side in values:
                    _check_reach(bound.child(side), key, side, values[side])
                    found.append((bound, (measure, side, values[side], cases)))
        _check_contradictions(found, case_names)
        parts += [part for _, part in found]
    return numbered(parts)


def read_preference(node: Node, read: dict[str, Any]) -> Preference | None:
    """What to improve, or None."""
    named = [(key, side) for key, side in (("minimise", "min"), ("maximise", "max")) if node.has(key)]
    if len(named) == 2:
        node.fault("one quantity can be preferred, not two", "minimise or maximise")
    if not named and set(node.value if isinstance(node.value, dict) else ()) <= set(PREFER.fields):
        node.fault("[prefer] names no quantity", 'minimise = "..." or maximise = "..."')
    reserve = read.get("reserve", 0.0) / 100.0
    for key, side in named:
        if key in read:
            return Preference(Measure(read[key]), "min" if side == "min" else "max", reserve)
    return None


def _measure(key: str, values: dict[str, Any]) -> Measure:
    options: dict[str, Any] = {}
    if "band" in values:
        options["band"] = values["band"] / 100.0
    if "below" in values:
        options["below"] = values["below"]
    if "span" in values:
        options["span"] = values["span"]
    return Measure(key, **options)


def _cases(node: Node, pairs: list[tuple[Node, str]] | None, known: Sequence[str]) -> tuple[str, ...] | None:
    if pairs is None:
        return None
    if not pairs:
        node.fault("a bound that is judged on no case says nothing", ", ".join(known))
    for element, name in pairs:
        if name not in known:
            shown = ", ".join(known[:12]) + (", ..." if len(known) > 12 else "")
            element.fault("there is no plant case of this name", shown, nearest(name, known))
    return tuple(dict.fromkeys(name for _, name in pairs))


def _check_reach(node: Node, key: str, side: str, limit: float) -> None:
    """Limits that no loop can reach by the meaning of the quantity."""
    most = {"damping_ratio": 1.0, "phase_margin": 180.0}.get(key)
    if most is not None and side == "min" and limit > most:
        unit = QUANTITIES[key].unit
        node.fault(
            f"the {QUANTITIES[key].name} is never above {most:g} {unit}".rstrip(),
            f"at most {most:g} {unit}".rstrip(),
        )


def _check_contradictions(found: list[tuple[Node, Part]], known: Sequence[str]) -> None:
    """A min above a max of one measure, on a case that both are judged on."""
    for low_node, (measure, side, low, low_cases) in found:
        if side != "min":
            continue
        for high_node, (other, other_side, high, high_cases) in found:
            if other_side != "max" or other != measure or low <= high:
                continue
            if not set(low_cases or known) & set(high_cases or known):
                continue
            given = f"min = {low_node.source.written((*low_node.path, 'min'))}"
            given += f", max = {high_node.source.written((*high_node.path, 'max'))}"
            words = f"min at most max; they are {low:.6g} and {high:.6g} {measure.row.unit}".rstrip()
            high_node.fault("the bounds contradict each other: min stands above max", words, given=given)
