"""The text of a formula to a small tree, by recursive descent; nothing is computed here.

Arithmetic: numbers, names, s, pi, sqrt(...), + - * / ^ **, parentheses, and exp(-... * s) for dead time.
Positions are 0-based characters of the text.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from synth.errors import Fault, InputError

MAX_TEXT = 400_000  # characters
MAX_DEPTH = 60  # parentheses, functions and signs inside one another
MAX_EXPONENT = 1000

RESERVED = ("s", "pi", "sqrt", "exp")
_OTHER_FUNCTIONS = {"sin", "cos", "tan", "log", "ln", "log10", "abs", "sinh", "cosh", "tanh", "atan", "pow"}
_SIGNS = {"·": "*", "×": "*", "−": "-", "–": "-", "÷": "/", "²": "^2", "³": "^3", "√": "sqrt(...)"}
TOKEN = re.compile(
    r"\s*(?:(?P<number>(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)|(?P<name>[^\W\d]\w*)|(?P<sign>\*\*|[-+*/^()]))"
)


class FormulaError(InputError):
    """What is wrong in a formula, and where.

    position  0-based character of the text
    case      row of the parameters it happens for, None where it is the text itself
    repaired  the text put right, where that is plain
    """

    def __init__(
        self, message: str, text: str, position: int, *, case: int | None = None, repaired: str | None = None
    ) -> None:
        self.message = message
        self.text = text
        self.position = position
        self.case = case
        self.repaired = repaired
        super().__init__([Fault(message, given=self.excerpt(), nearest=repaired)])

    def excerpt(self, width: int = 60) -> str:
        """The formula, or the stretch round the fault, with a caret under the place: two lines."""
        text = "".join(c if c.isprintable() else " " for c in self.text)
        start = max(0, min(self.position - width // 2, len(text) - width))
        stop = min(len(text), start + width)
        before, after = "..." if start else "", "..." if stop < len(text) else ""
        return f"{before}{text[start:stop]}{after}\n{' ' * (len(before) + self.position - start)}^"


@dataclass(frozen=True, slots=True)
class Number:
    value: float


@dataclass(frozen=True, slots=True)
class Name:
    name: str
    position: int


@dataclass(frozen=True, slots=True)
class Laplace:
    """s."""


@dataclass(frozen=True, slots=True)
class Sum:
    """Terms with their signs. Flat, so that ten thousand terms are no deeper than two."""

    terms: tuple[tuple[int, Node, int], ...]


@dataclass(frozen=True, slots=True)
class Product:
    """Factors; the flag says that one divides."""

    factors: tuple[tuple[bool, Node, int], ...]


@dataclass(frozen=True, slots=True)
class Power:
    base: Node
    exponent: int
    position: int


@dataclass(frozen=True, slots=True)
class Call:
    """sqrt(argument) or exp(argument)."""

    function: str
    argument: Node
    position: int


Node = Number | Name | Laplace | Sum | Product | Power | Call


@dataclass(frozen=True, slots=True)
class Token:
    kind: str  # "number", "name", "sign" or "end"
    text: str
    position: int


def tokens(text: str) -> list[Token]:
    """The text in tokens, the last of kind "end". Raises FormulaError."""
    found: list[Token] = []
    position = 0
    stop = len(text.rstrip())
    while position < stop:
        match = TOKEN.match(text, position)
        if match is not None and match.lastgroup == "name":  # \w takes in ² and its like
            name = match.group("name")
            if not name.isidentifier():
                stranger = (i for i, c in enumerate(name) if not f"a{c}".isidentifier())
                position, match = match.start("name") + next(stranger, 0), None
        if match is None:
            position += len(text[position:]) - len(text[position:].lstrip())
            sign = text[position]
            hint = f"; write {_SIGNS[sign]}" if sign in _SIGNS else ""
            shown = sign if sign.isprintable() else f"U+{ord(sign):04X}"
            raise FormulaError(f"`{shown}` is no sign of arithmetic{hint}", text, position)
        kind = str(match.lastgroup)
        found.append(Token(kind, match.group(kind), match.start(kind)))
        position = match.end()
    found.append(Token("end", "", stop))
    return found


class Reader:
    """Recursive descent: sum > product > signed > power > atom."""

    def __init__(self, text: str, tokens: list[Token]) -> None:
        self.text = text
        self.tokens = tokens
        self.index = 0
        self.depth = 0
        self.names: list[str] = []
        self.uses_s = False

    @property
    def token(self) -> Token:
        return self.tokens[self.index]

    def fault(self, message: str, token: Token, repaired: str | None = None) -> FormulaError:
        return FormulaError(message, self.text, token.position, repaired=repaired)

    def accept(self, *signs: str) -> Token | None:
        token = self.token
        if token.kind == "sign" and token.text in signs:
            self.index += 1
            return token
        return None

    def deeper(self) -> None:
        self.depth += 1
        if self.depth > MAX_DEPTH:
            raise self.fault(f"more than {MAX_DEPTH} levels inside one another", self.token)

    def sum(self) -> Node:
        terms = [(1, self.product(), self.token.position)]
        while sign := self.accept("+", "-"):
            terms.append((1 if sign.text == "+" else -1, self.product(), sign.position))
        return terms[0][1] if len(terms) == 1 else Sum(tuple(terms))

    def product(self) -> Node:
        factors = [(False, self.signed(), self.token.position)]
        while sign := self.accept("*", "/"):
            factors.append((sign.text == "/", self.signed(), sign.position))
        return factors[0][1] if len(factors) == 1 else Product(tuple(factors))

    def signed(self) -> Node:
        sign = self.accept("+", "-")
        if sign is None:
            return self.power()
        self.deeper()
        inner = self.signed()
        self.depth -= 1
        return inner if sign.text == "+" else Sum(((-1, inner, sign.position),))

    def power(self) -> Node:
        base = self.atom()
        sign = self.accept("^", "**")
        if sign is None:
            return base
        self.deeper()
        start = self.token
        exponent = self.exponent(self.signed(), start)
        self.depth -= 1
        return Power(base, exponent, sign.position)

    def exponent(self, node: Node, token: Token) -> int:
        value = _constant(node)
        if value is None or value != round(value):
            raise self.fault("an exponent must be a whole number, such as 2 or -1", token)
        if abs(value) > MAX_EXPONENT:
            raise self.fault(f"an exponent must lie between -{MAX_EXPONENT} and {MAX_EXPONENT}", token)
        return round(value)

    def atom(self) -> Node:
        token = self.token
        self.index += 1
        if token.kind == "number":
            value = float(token.text)
            if not np.isfinite(value):
                raise self.fault("the number is too large", token)
            self.joined(token)
            return Number(value)
        if token.kind == "name":
            return self.named(token)
        if token.text == "(":
            inner = self.bracket(token)
            self.joined(self.tokens[self.index - 1])
            return inner
        self.index -= 1
        if token.kind == "end":
            empty = len(self.tokens) == 1
            raise self.fault("the formula is empty" if empty else "a term must follow here", token)
        raise self.fault(f"a number, a name or `(` must stand before `{token.text}`", token)

    def named(self, token: Token) -> Node:
        if token.text in ("sqrt", "exp"):
            opening = self.accept("(")
            if opening is None:
                raise self.fault(f"`{token.text}` must be followed by `(`", self.token)
            inner = self.bracket(opening)
            self.joined(self.tokens[self.index - 1])
            return Call(token.text, inner, token.position)
        follows = self.token.kind == "sign" and self.token.text == "("
        if follows and token.text in _OTHER_FUNCTIONS:
            raise self.fault(f"`{token.text}` is not known here; the functions are sqrt and exp", token)
        self.joined(token)
        if token.text == "s":
            self.uses_s = True
            return Laplace()
        if token.text == "pi":
            return Number(float(np.pi))
        self.names.append(token.text)
        return Name(token.text, token.position)

    def bracket(self, opening: Token) -> Node:
        self.deeper()
        inner = self.sum()
        self.depth -= 1
        if self.accept(")") is None:
            if self.token.kind == "end":
                raise self.fault("this `(` is never closed", opening)
            raise self.fault(f"an operator must stand before `{self.token.text}`", self.token)
        return inner

    def joined(self, left: Token) -> None:
        """Refuse 2s, K(s+1), (s+1)(s+2): a `*` is missing before the next token."""
        right = self.token
        if right.kind in ("number", "name") or right.text == "(":
            text = self.text
            repaired = f"{text[: right.position].rstrip()}*{text[right.position :]}"
            short = repaired if len(repaired) <= 80 else None
            raise self.fault(f"`*` is missing between `{left.text}` and `{right.text}`", right, short)

    def end(self) -> None:
        token = self.token
        if token.text == ")":
            raise self.fault("this `)` closes nothing", token)
        if token.kind != "end":
            raise self.fault(f"an operator must stand before `{token.text}`", token)


def _constant(node: Node) -> float | None:
    """Value of a tree of plain numbers, None where names or s stand in it."""
    match node:
        case Number(value):
            return value
        case Sum(terms):
            total = 0.0
            for sign, term, _ in terms:
                part = _constant(term)
                if part is None:
                    return None
                total += sign * part
            return total
        case Power(base, exponent, _):
            inner = _constant(base)
            if inner is None or abs(inner) > MAX_EXPONENT or not 0 <= exponent <= 10:
                return None
            return float(inner**exponent)
        case _:
            return None


def read(text: str) -> tuple[Node, tuple[str, ...], bool]:
    """Tree, parameter names in order of appearance, and whether s stands in the text. Raises FormulaError."""
    if len(text) > MAX_TEXT:
        raise FormulaError(f"the formula is longer than {MAX_TEXT} characters", text[:80], 0)
    try:
        reader = Reader(text, tokens(text))
        tree = reader.sum()
        reader.end()
    except FormulaError as error:
        if error.repaired is not None:
            whole = _mended(error.repaired)
            raise FormulaError(error.message, text, error.position, repaired=whole) from None
        raise
    return tree, tuple(dict.fromkeys(reader.names)), reader.uses_s


def _mended(text: str) -> str:
    """A text in which one `*` was missing, with the others that are missing put in too."""
    for _ in range(20):
        try:
            reader = Reader(text, tokens(text))
            reader.sum()
        except FormulaError as error:
            if error.repaired is None:
                break
            text = error.repaired
        else:
            break
    return text
