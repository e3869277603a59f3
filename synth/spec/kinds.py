"""What may stand at a key: each kind reads a value, says in words what is allowed, and gives its JSON Schema.

A kind's `read` returns None where the value is wrong, having noted the fault; it never raises.
"""

from __future__ import annotations

import re
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

from synth.errors import nearest
from synth.loop.quantities import Dimension
from synth.model.formula import RESERVED, Formula, FormulaError, parse
from synth.spec import units
from synth.spec.source import Node

Schema = dict[str, Any]
_NUMBER_PATTERN = r"^\s*[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\s*"
TEXT = {"type": "string"}
NUMBER = {"type": "number"}


class Kind(ABC):
    """What may stand at a key."""

    @abstractmethod
    def read(self, node: Node) -> Any:
        """The value, or None with a fault noted."""

    @abstractmethod
    def schema(self) -> Schema:
        """JSON Schema of the kind."""


@dataclass(frozen=True, slots=True)
class Field:
    """A key of a table: its kind, what it means, and whether it must be there."""

    kind: Kind
    doc: str
    required: bool = False


class Text(Kind):
    """Any text."""

    def read(self, node: Node) -> str | None:
        """See Kind."""
        if isinstance(node.value, str):
            return node.value
        node.fault("this must be a text", 'a text in quotes, such as "B"')
        return None

    def schema(self) -> Schema:
        """See Kind."""
        return dict(TEXT)


@dataclass(frozen=True, slots=True)
class Measured(Kind):
    """A number of a dimension, with the unit that the dimension demands. `rule` gives a complaint or None."""

    dimension: Dimension
    rule: Callable[[float], str | None] = lambda value: None

    def read(self, node: Node) -> float | None:
        """See Kind."""
        try:
            value = units.measured(node.value, self.dimension)
        except units.UnitFault as fault:
            node.fault(fault.what, fault.allowed, fault.nearest)
            return None
        complaint = self.rule(value)
        if complaint is not None:
            node.fault(complaint, units.allowed(self.dimension))
            return None
        return value

    def schema(self) -> Schema:
        """See Kind."""
        names = units.UNITS[self.dimension]
        if not names:
            return dict(NUMBER)
        pattern = _NUMBER_PATTERN + f"({'|'.join(re.escape(n) for n in names)})\\s*$"
        return {**TEXT, "pattern": pattern, "examples": [units.sample(self.dimension).strip('"')]}


class Span(Kind):
    """Two levels of a rise, "10-90 %"."""

    def read(self, node: Node) -> tuple[float, float] | None:
        """See Kind."""
        try:
            return units.span(node.value)
        except units.UnitFault as fault:
            node.fault(fault.what, fault.allowed, fault.nearest)
            return None

    def schema(self) -> Schema:
        """See Kind."""
        return {**TEXT, "pattern": r"^\s*[\d.]+\s*%?\s*(-|–|to)\s*[\d.]+\s*%\s*$", "examples": ["0-100 %"]}


@dataclass(frozen=True, slots=True)
class Choice(Kind):
    """One of some names."""

    names: tuple[str, ...]
    what: str

    def read(self, node: Node) -> str | None:
        """See Kind."""
        if isinstance(node.value, str):
            for name in self.names:
                if name.casefold() == node.value.casefold():
                    return name
        near = nearest(node.value, self.names) if isinstance(node.value, str) else None
        node.fault(f"unknown {self.what}", ", ".join(self.names), near)
        return None

    def schema(self) -> Schema:
        """See Kind."""
        return {**TEXT, "enum": list(self.names)}


@dataclass(frozen=True, slots=True)
class Whole(Kind):
    """A whole number from `least` up."""

    least: int
    most: int

    def read(self, node: Node) -> int | None:
        """See Kind."""
        value = node.value
        if isinstance(value, int) and not isinstance(value, bool) and self.least <= value <= self.most:
            return value
        node.fault("this must be a whole number", f"a whole number from {self.least} to {self.most}")
        return None

    def schema(self) -> Schema:
        """See Kind."""
        return {"type": "integer", "minimum": self.least, "maximum": self.most}


@dataclass(frozen=True, slots=True)
class Expression(Kind):
    """A number, or a formula of one; with `in_s` a formula in s, which must be a text."""

    in_s: bool = False

    def read(self, node: Node) -> float | Formula | None:
        """See Kind."""
        words = (
            "a formula in s, in quotes" if self.in_s else "a number, or a formula of the parameters in quotes"
        )
        if isinstance(node.value, str):
            return formula(node, self.in_s)
        if self.in_s:
            node.fault("the transfer function must be a formula", f'{words}, such as "K / (s + 1)"')
            return None
        return number(node, words)

    def schema(self) -> Schema:
        """See Kind."""
        return dict(TEXT) if self.in_s else {"type": ["number", "string"]}


class Root(Kind):
    """A zero or a pole: a number, a complex one as text, or a formula of a real one."""

    def read(self, node: Node) -> complex | Formula | None:
        """See Kind."""
        if not isinstance(node.value, str):
            return number(node, 'a number, a complex one such as "-2+5j", or a formula in quotes')
        compact = re.sub(r"\s+", "", node.value).replace("i", "j")
        if re.fullmatch(r"[-+\d.eEj]*\d\.?j", compact):
            try:
                root = complex(compact)
            except ValueError:
                node.fault("this is no complex number", 'a complex number such as "-2+5j"')
                return None
            if abs(root) < 1e300:
                return root
            node.fault("the number is not finite", 'a complex number such as "-2+5j"')
            return None
        return formula(node, False)

    def schema(self) -> Schema:
        """See Kind."""
        return {"type": ["number", "string"]}


class DeadTime(Kind):
    """A time with its unit, or a formula of the parameters."""

    def read(self, node: Node) -> float | Formula | None:
        """See Kind."""
        words = 'a time with its unit, such as "2 ms", or a formula of the parameters such as "theta"'
        if isinstance(node.value, str) and not re.match(
            r"\s*[+-]?[\d.]+([eE][+-]?\d+)?\s*[^-+*/^\s]*\s*$", node.value
        ):
            return formula(node, False)
        value = Measured("time", lambda t: "a dead time cannot be below 0" if t < 0.0 else None)
        if isinstance(node.value, str):
            return value.read(node)
        node.fault("a dead time must carry its unit", words)
        return None

    def schema(self) -> Schema:
        """See Kind."""
        return dict(TEXT)


@dataclass(frozen=True, slots=True)
class Many(Kind):
    """A list, read as (node, value) pairs; with `single` one alone may stand without brackets."""

    of: Kind
    words: str
    single: bool = False

    def read(self, node: Node) -> list[tuple[Node, Any]] | None:
        """See Kind."""
        if not isinstance(node.value, list):
            if self.single:
                value = self.of.read(node)
                return None if value is None else [(node, value)]
            node.fault("this must be a list", self.words)
            return None
        if not node.value and self.single:
            node.fault("the list is empty", self.words)
        pairs = [(element, self.of.read(element)) for element in node.elements()]
        return None if any(v is None for _, v in pairs) else pairs

    def schema(self) -> Schema:
        """See Kind."""
        array = {"type": "array", "items": self.of.schema()}
        return {"anyOf": [self.of.schema(), {**array, "minItems": 1}]} if self.single else array


class Vector(Kind):
    """n numbers or formulas: flat, or as a matrix of one row or one column. Reads a flat list."""

    def read(self, node: Node) -> list[float | Formula] | None:
        """See Kind."""
        if not isinstance(node.value, list):
            node.fault("this must be a list", "n numbers, or formulas of the parameters in quotes, in [ ]")
            return None
        out: list[float | Formula | None] = []
        for element in node.elements():
            inner = element.elements() if isinstance(element.value, list) else [element]
            out.extend(Expression().read(entry) for entry in inner)
        good = [value for value in out if value is not None]
        return good if len(good) == len(out) else None

    def schema(self) -> Schema:
        """See Kind."""
        entry = Expression().schema()
        row = {"type": "array", "items": entry}
        return {"anyOf": [row, {"type": "array", "items": row}]}


class Direct(Kind):
    """One number or formula, which may stand in the brackets of a 1 × 1 matrix."""

    def read(self, node: Node) -> float | Formula | None:
        """See Kind."""
        while isinstance(node.value, list) and len(node.value) == 1:
            node = node.child(0)
        return Expression().read(node)

    def schema(self) -> Schema:
        """See Kind."""
        return {"anyOf": [Expression().schema(), Vector().schema()]}


@dataclass(frozen=True, slots=True)
class Table(Kind):
    """A table with known keys.

    later   names that are kept for a later version
    rest    kind of every other key, where the user chooses the names (then `rest_name` says what they are)
    hints   other spellings -> the key meant
    example what to write, where a table was expected; `wrap` puts a lone value ("?") into such a table
    """

    fields: Mapping[str, Field]
    later: tuple[str, ...] = ()
    rest: Kind | None = None
    rest_name: str = "key"
    hints: Mapping[str, str] = field(default_factory=dict)
    example: str | None = None
    wrap: str | None = None

    def read(self, node: Node) -> dict[str, Any] | None:
        """The good values by key. Faulty and absent keys are not in it."""
        if not isinstance(node.value, dict):
            near = self.wrap.replace("?", node.source.written(node.path) or "?") if self.wrap else None
            if isinstance(node.value, list):
                near = None
            node.fault("this must be a table", self.example or f"a table with {', '.join(self.fields)}", near)
            return None
        out: dict[str, Any] = {}
        meant = set()  # a misspelt key is not missing as well
        for key in node.value:
            child = node.child(key)
            if key in self.fields:
                kind: Kind | None = self.fields[key].kind
            elif key in self.later:
                child.fault(
                    f"`{key}` is not yet supported: the name is kept for a later version", "leave it out"
                )
                continue
            else:
                kind = self.rest
            if kind is None:
                near = self.hints.get(key) or nearest(key, [*self.fields, *self.hints])
                near = self.hints.get(near, near) if near else None
                meant.add(near)
                child.fault(f"unknown {self.rest_name} `{key}`", ", ".join(self.fields), near, given=key)
                continue
            value = kind.read(child)
            if value is not None:
                out[key] = value
        for key, known in self.fields.items():
            if known.required and key not in node.value and key not in meant:
                node.missing(key, known.doc)
        return out

    def schema(self) -> Schema:
        """See Kind."""
        properties = {k: {"description": f.doc, **f.kind.schema()} for k, f in self.fields.items()}
        out: Schema = {"type": "object", "properties": properties}
        required = [k for k, f in self.fields.items() if f.required]
        if required:
            out["required"] = required
        out["additionalProperties"] = self.rest.schema() if self.rest is not None else False
        return out


def number(node: Node, words: str) -> float | None:
    """A bare finite number."""
    if isinstance(node.value, bool) or not isinstance(node.value, (int, float)):
        node.fault("this must be a number", words)
        return None
    try:
        return units.finite(node.value, words)
    except units.UnitFault as fault:
        node.fault(fault.what, fault.allowed)
        return None


def formula(node: Node, in_s: bool) -> Formula | None:
    """The text at a node as a formula; without `in_s`, s is refused."""
    assert isinstance(node.value, str)
    try:
        parsed = parse(node.value)
        if not in_s and (parsed.uses_s or not parsed.names):
            parsed.value({})  # refuses s; and a number such as 1/0 is wrong already here
    except FormulaError as error:
        allowed = "numbers, names, s, pi, sqrt(...), + - * / ^, ( ), exp(-theta*s)" if in_s else None
        node.fault(error.message, allowed, error.repaired, given=error.excerpt())
        return None
    return parsed


def is_name(key: str) -> bool:
    """Whether a key can be a name in a formula."""
    return key.isidentifier() and key not in RESERVED
