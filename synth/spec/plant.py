"""[plant]: exactly one form, and everything that can be said against it before its parameters have values."""

from __future__ import annotations

from typing import Any

from synth.errors import nearest
from synth.model import forms
from synth.model.forms import FormError, PlantForm
from synth.model.formula import FormulaError
from synth.spec.sheet import FORMS
from synth.spec.source import Node
from synth.spec.spec import Signal

_KEYS = tuple(key for needed, _ in FORMS.values() for key in needed)
_WORDS = "transfer; numerator and denominator; gain, zeros and poles; or A, B, C and D"


def read_plant(node: Node, read: dict[str, Any]) -> PlantForm | None:
    """The plant as written, or None with the faults noted."""
    if not isinstance(node.value, dict):
        return None
    form = _form_of(node)
    if form is None:
        return None
    needed, optional = FORMS[form]
    missing = [key for key in needed if not node.has(key)]
    for key in missing:
        node.missing(key, f"beside {', '.join(k for k in needed if k != key)}")
    present = [key for key in (*needed, *optional) if node.has(key)]
    if missing or any(key not in read for key in present):
        return None
    try:
        return _built(form, read)
    except FormError as error:
        place_of(node, error).fault(error.message)
    except FormulaError as error:
        node.fault(error.message, None, error.repaired, given=error.excerpt())
    return None


def signal(read: dict[str, Any], key: str) -> Signal:
    """`input` or `output`."""
    values = read.get(key, {})
    return Signal(values.get("name", ""), values.get("unit", ""))


def place_of(node: Node, error: FormError | FormulaError) -> Node:
    """Where in [plant] an error about its values belongs."""
    if isinstance(error, FormError):
        return _at(node, error.key or _fallback(node, error.message))
    if node.has("transfer"):
        return node.child("transfer")
    for key, value in node.value.items() if isinstance(node.value, dict) else ():
        found = _holding(node.child(key), value, error.text)
        if found is not None:
            return found
    return node


def _form_of(node: Node) -> str | None:
    """The one form whose keys are there."""
    found = [form for form, (needed, _) in FORMS.items() if any(node.has(key) for key in needed)]
    if node.has("zeros") and "roots" not in found:
        found.append("roots")
    if node.has("D") and "matrices" not in found:
        found.append("matrices")
    if len(found) == 1:
        if found[0] == "formula" and node.has("dead_time"):
            node.child("dead_time").fault(
                "in a formula, dead time is a factor", 'write exp(-theta*s) in "transfer"'
            )
        return found[0]
    if not found:
        near = None
        if isinstance(node.value, dict):
            near = next((n for n in (nearest(str(k), _KEYS) for k in node.value) if n), None)
        node.fault("the plant is not stated", f"exactly one of: {_WORDS}", near, given=None)
        return None
    keys = [
        k for form in found for k in (*FORMS[form][0], *FORMS[form][1]) if node.has(k) and k != "dead_time"
    ]
    node.fault(
        "the plant is stated in more than one form", f"exactly one of: {_WORDS}", given=", ".join(keys)
    )
    return None


def _built(form: str, read: dict[str, Any]) -> PlantForm:
    dead_time = read.get("dead_time", 0.0)
    if form == "formula":
        return forms.FormulaForm(read["transfer"])
    if form == "coefficients":
        return forms.from_coefficients(_values(read["numerator"]), _values(read["denominator"]), dead_time)
    if form == "roots":
        return forms.from_roots(
            read["gain"], _values(read.get("zeros", [])), _values(read["poles"]), dead_time
        )
    a = [_values(row) for _, row in read["A"]]
    return forms.from_matrices(a, read["B"], read["C"], read.get("D", 0.0), dead_time)


def _values(pairs: list[tuple[Node, Any]]) -> list[Any]:
    return [value for _, value in pairs]


def _fallback(node: Node, message: str) -> str:
    """Where a fault of the plant as a whole is shown: the first key of its form."""
    keys = [key for needed, _ in FORMS.values() for key in needed if node.has(key)]
    named = [key for key in keys if key in message.split()]
    return (named or keys or [""])[0]


def _at(node: Node, key: str | None) -> Node:
    """The node of a form's key, such as "poles[2]" or "A[0][1]", or the nearest that the file has."""
    if not key:
        return node
    name, *indices = key.replace("]", "").split("[")
    if not node.has(name):
        return node
    child = node.child(name)
    for index in indices:
        if (*child.path, int(index)) not in child.source.spans:
            break
        child = child.child(int(index))
    return child


def _holding(node: Node, value: object, text: str) -> Node | None:
    if value == text:
        return node
    if isinstance(value, list):
        for element in node.elements():
            found = _holding(element, element.value, text)
            if found is not None:
                return found
    return None
