"""Formulas in s: parsed, never run.

A parsed formula gives coefficient arrays for K plant cases (`rational`), a number for each case (`value`), or
the response at complex s without multiplying anything out (`at`).

Letters: K plant cases, w columns.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import trimmed
from synth.model.fraction import MAX_DEGREE, DegreeTooHigh, Fraction, Split, add, over, plain, times
from synth.model.syntax import (
    RESERVED,
    Call,
    FormulaError,
    Laplace,
    Name,
    Node,
    Number,
    Power,
    Product,
    Sum,
    read,
)

__all__ = ["RESERVED", "Formula", "FormulaError", "parse"]


@dataclass(frozen=True, slots=True)
class Formula:
    """A parsed formula.

    names   parameters that stand in it, in order of appearance (s and pi are not parameters)
    uses_s  True where s stands in it
    """

    text: str
    names: tuple[str, ...]
    uses_s: bool
    tree: Node = field(repr=False)

    def rational(
        self, parameters: Mapping[str, FloatArray], cases: int | None = None
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Numerator (K, w), denominator (K, v), dead time (K,) [s] for K sets of parameters.

        `cases` is K where the formula has no parameters (1 when left out). Leading zeros are padding.
        What the sheet wrote in numerator and denominator stays; see synth.model.fraction.
        Raises FormulaError (division by zero, dead time below 0, degree above MAX_DEGREE, overflow, ...).
        """
        values = _columns(parameters, self.names, cases)
        rows = np.arange(len(values[""]))
        with np.errstate(all="ignore"):  # what overflows is refused below, by name
            return self._rows(values, rows)

    def _rows(
        self, values: dict[str, FloatArray], rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        evaluation = _Evaluation(self.text, {n: v[rows] for n, v in values.items()}, rows)
        try:
            out = evaluation.fraction(self.tree)
            numerator, denominator = out.numerator(), out.denominator()
        except DegreeTooHigh:
            message = f"the degree in s goes above {MAX_DEGREE}"
            raise FormulaError(message, self.text, evaluation.position) from None
        except Split as split:
            return _merged([(m, self._rows(values, rows[m])) for m in (split.mask, ~split.mask)])
        for i in np.flatnonzero(~np.isfinite(np.hstack([numerator, denominator])).all(axis=1)):
            raise FormulaError("the coefficients leave the range of numbers", self.text, 0, case=int(rows[i]))
        return numerator, denominator, out.delay

    def value(self, parameters: Mapping[str, FloatArray], cases: int | None = None) -> FloatArray:
        """A formula without s as a number for each case, (K,). Raises FormulaError."""
        if self.uses_s:
            raise FormulaError("`s` cannot stand here", self.text, max(_place(self.text, "s"), 0))
        numerator, denominator, _ = self.rational(parameters, cases)
        out: FloatArray = numerator[:, -1] / denominator[:, -1]
        return out

    def at(self, s: ComplexArray, parameters: Mapping[str, FloatArray | float]) -> ComplexArray:
        """Value at complex s, evaluated as it is written: nothing multiplied out, nothing struck.

        s and the parameters broadcast against each other. A pole gives inf or NaN.
        """
        with np.errstate(all="ignore"):
            return _at(self.tree, np.asarray(s, dtype=complex), parameters) + 0.0 * s


def parse(text: str) -> Formula:
    """The formula of a text. Raises FormulaError with the position of the first fault."""
    tree, names, uses_s = read(text)
    return Formula(text, names, uses_s, tree)


def _place(text: str, name: str) -> int:
    match = re.search(rf"(?<!\w){re.escape(name)}(?!\w)", text)
    return match.start() if match else -1


def _columns(
    parameters: Mapping[str, FloatArray], names: tuple[str, ...], cases: int | None
) -> dict[str, FloatArray]:
    """The parameters as (K,) arrays; the entry "" is a column of ones, so that K is known without any."""
    arrays = {n: np.atleast_1d(np.asarray(parameters[n], dtype=float)) for n in names}
    count = cases if cases is not None else max((len(a) for a in arrays.values()), default=1)
    return {"": np.ones(count), **{n: np.broadcast_to(a, (count,)) for n, a in arrays.items()}}


class _Evaluation:
    """One walk over the tree for the cases `rows`. `position` is where it stands, for error messages."""

    def __init__(self, text: str, values: dict[str, FloatArray], rows: IntArray) -> None:
        self.text = text
        self.values = values
        self.rows = rows
        self.count = len(rows)
        self.position = 0
        self.s = plain(np.tile([1.0, 0.0], (self.count, 1)))

    def refuse(self, bad: BoolArray, message: str, position: int) -> None:
        for i in np.flatnonzero(bad):
            raise FormulaError(message, self.text, position, case=int(self.rows[i]))

    def number(self, value: float) -> Fraction:
        return plain(np.full((self.count, 1), value))

    def fraction(self, node: Node) -> Fraction:
        match node:
            case Number(value):
                return self.number(value)
            case Name(name, _):
                return plain(self.values[name][:, None])
            case Laplace():
                return self.s
            case Sum(terms):
                return self.total(terms)
            case Product(factors):
                return self.multiplied(factors)
            case Power(Laplace(), exponent, _) if 0 < exponent <= MAX_DEGREE:
                power = np.zeros((self.count, exponent + 1))
                power[:, 0] = 1.0
                return plain(power)
            case Power(base, exponent, position):
                return self.raised(self.fraction(base), exponent, position)
            case Call("sqrt", argument, position):
                inner = self.fraction(argument)
                if not inner.constant:
                    raise FormulaError("the argument of sqrt must not contain `s`", self.text, position)
                self.refuse(inner.gain < 0.0, "the square root of a negative number", position)
                return plain(np.sqrt(inner.gain)[:, None])
            case Call(_, argument, position):
                return self.delayed(self.fraction(argument), position)

    def total(self, terms: tuple[tuple[int, Node, int], ...]) -> Fraction:
        out: Fraction | None = None
        for sign, node, position in terms:
            term = self.fraction(node)
            if sign < 0:
                term = Fraction(-term.gain, term.above, term.below, term.delay)
            self.position = position
            if out is not None and (out.delay != term.delay).any():
                message = "a dead time must be a factor of the whole; it cannot stand in one term of a sum"
                raise FormulaError(message, self.text, position)
            out = term if out is None else add(out, term)
        assert out is not None
        return out

    def multiplied(self, factors: tuple[tuple[bool, Node, int], ...]) -> Fraction:
        out = self.fraction(factors[0][1])
        for divides, node, position in factors[1:]:
            factor = self.fraction(node)
            self.position = position
            out = self.divided(out, factor, position) if divides else times(out, factor)
        return out

    def divided(self, out: Fraction, factor: Fraction, position: int) -> Fraction:
        self.refuse(factor.zero, "division by zero", position)
        quotient = over(out, factor)
        self.refuse(quotient.delay < 0.0, "the dead time is below 0", position)
        return quotient

    def raised(self, base: Fraction, exponent: int, position: int) -> Fraction:
        self.position = position
        if base.constant:
            if exponent < 0:
                self.refuse(base.zero, "division by zero", position)
            return plain(base.gain[:, None] ** exponent)
        size = abs(exponent)
        if size > MAX_DEGREE and (base.above or base.below):
            raise DegreeTooHigh
        out = self.number(1.0)
        for _ in range(size):
            out = self.divided(out, base, position) if exponent < 0 else times(out, base)
        return out

    def delayed(self, inner: Fraction, position: int) -> Fraction:
        """exp(inner): inner must be -θ s."""
        polynomial = inner.numerator()
        slope = polynomial[:, -2] if polynomial.shape[1] > 1 else np.zeros(self.count)
        others = np.delete(polynomial, -2, axis=1) if polynomial.shape[1] > 1 else polynomial
        if inner.below or inner.delay.any() or others.any():
            message = "exp(...) stands for dead time alone: write exp(-theta*s), theta a number or a name"
            raise FormulaError(message, self.text, position)
        self.refuse(slope > 0.0, "the dead time is below 0: exp(-theta*s) takes a minus", position)
        return Fraction(np.ones(self.count), (), (), 0.0 - slope)


Polynomials = tuple[FloatArray, FloatArray, FloatArray]


def _merged(parts: list[tuple[BoolArray, Polynomials]]) -> Polynomials:
    """Cases that were evaluated apart, back in their places."""
    count = len(parts[0][0])
    degrees = [max(p[i].shape[1] for _, p in parts) - 1 for i in (0, 1)]
    numerator, denominator = (np.zeros((count, d + 1)) for d in degrees)
    delay = np.zeros(count)
    for mask, (num, den, dead) in parts:
        numerator[mask], denominator[mask] = trimmed(num, degrees[0]), trimmed(den, degrees[1])
        delay[mask] = dead
    return numerator, denominator, delay


def _at(node: Node, s: ComplexArray, parameters: Mapping[str, FloatArray | float]) -> ComplexArray:
    match node:
        case Number(value):
            return np.asarray(value, dtype=complex)
        case Name(name, _):
            return np.asarray(parameters[name], dtype=complex)
        case Laplace():
            return s
        case Sum(terms):
            total = np.zeros((), dtype=complex)
            for sign, term, _ in terms:
                total = total + sign * _at(term, s, parameters)
            return total
        case Product(factors):
            out = np.ones((), dtype=complex)
            for divides, factor, _ in factors:
                part = _at(factor, s, parameters)
                out = out / part if divides else out * part
            return out
        case Power(base, exponent, _):
            powered: ComplexArray = _at(base, s, parameters) ** exponent
            return powered
        case Call(function, argument, _):
            inner = _at(argument, s, parameters)
            result: ComplexArray = np.sqrt(inner) if function == "sqrt" else np.exp(inner)
            return result
