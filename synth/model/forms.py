"""The plant as a sheet states it, before its parameters have values: formula, coefficients, roots, matrices.

Letters: K sets of parameters, w columns. A form's `plants` gives K rows of coefficients; its `at` gives the
response at complex s by another way, straight from what was written, which the second opinion compares with.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from synth.errors import Fault, InputError
from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Rational, exact_degree
from synth.model.exact import polynomial_of_roots, transfer_function
from synth.model.formula import Formula, parse
from synth.model.fraction import MAX_DEGREE

Scalar = float | Formula
Parameters = Mapping[str, FloatArray]
Polynomials = tuple[FloatArray, FloatArray, FloatArray]


class FormError(InputError):
    """What is wrong with a plant.

    key   the field it is in ("poles[2]", "A[0][1]"), None for the plant as a whole
    case  row of the parameters it happens for, None where it is the form itself
    """

    def __init__(
        self, message: str, key: str | None = None, *, given: str | None = None, case: int | None = None
    ):
        self.message = message
        self.key = key
        self.case = case
        super().__init__([Fault(message, key=key, given=given)])


class PlantForm(ABC):
    """One way of writing a plant."""

    @property
    @abstractmethod
    def names(self) -> tuple[str, ...]:
        """Parameters that stand in it, in order of appearance."""

    @abstractmethod
    def at(self, s: ComplexArray, parameters: Mapping[str, float]) -> ComplexArray:
        """P(s) with its dead time for one set of parameters, nothing multiplied out. inf at a pole."""

    @abstractmethod
    def _polynomials(self, parameters: Parameters, cases: int) -> Polynomials:
        """Numerator (K, w), denominator (K, v), dead time (K,)."""

    def plants(self, parameters: Parameters, cases: int | None = None) -> Rational:
        """K plants. parameters: name -> (K,) values in SI. Nothing is cancelled.

        Raises FormulaError and FormError (a denominator of 0, more zeros than poles, a negative dead time
        ...).
        """
        missing = [n for n in self.names if n not in parameters]
        if missing:
            raise FormError(f"no value for {', '.join(missing)}")
        count = cases if cases is not None else max((len(parameters[n]) for n in self.names), default=1)
        try:
            with np.errstate(over="raise", invalid="raise"):
                numerator, denominator, delay = self._polynomials(parameters, count)
        except (OverflowError, FloatingPointError):
            raise FormError("the coefficients leave the range of numbers") from None
        width = max(numerator.shape[1], denominator.shape[1])
        numerator = np.pad(numerator, ((0, 0), (width - numerator.shape[1], 0)))
        denominator = np.pad(denominator, ((0, 0), (width - denominator.shape[1], 0)))
        above, below = exact_degree(numerator), exact_degree(denominator)
        for k in range(count):
            if not (np.isfinite(numerator[k]).all() and np.isfinite(denominator[k]).all()):
                raise FormError("the coefficients leave the range of numbers", case=k)
            if below[k] < 0:
                raise FormError("the denominator is 0", case=k)
            if above[k] < 0:
                raise FormError("the numerator is 0: this plant does nothing", case=k)
            if above[k] > below[k]:
                raise FormError(f"more zeros than poles ({above[k]} and {below[k]}): no such plant", case=k)
            if not 0.0 <= delay[k] < np.inf:
                raise FormError(f"the dead time must be 0 or more, it is {delay[k]:g} s", "dead_time", case=k)
        degree = int(below.max())
        return Rational(numerator[:, width - 1 - degree :], denominator[:, width - 1 - degree :], delay)


@dataclass(frozen=True, slots=True)
class FormulaForm(PlantForm):
    """P(s) as one formula in s."""

    formula: Formula

    @property
    def names(self) -> tuple[str, ...]:
        """See PlantForm."""
        return self.formula.names

    def at(self, s: ComplexArray, parameters: Mapping[str, float]) -> ComplexArray:
        """See PlantForm."""
        return self.formula.at(s, parameters)

    def _polynomials(self, parameters: Parameters, cases: int) -> Polynomials:
        return self.formula.rational({n: parameters[n] for n in self.names}, cases)


@dataclass(frozen=True, slots=True)
class CoefficientForm(PlantForm):
    """Descending coefficients of numerator and denominator, each a number or a formula without s."""

    numerator: tuple[Scalar, ...]
    denominator: tuple[Scalar, ...]
    dead_time: Scalar = 0.0

    @property
    def names(self) -> tuple[str, ...]:
        """See PlantForm."""
        return _names((*self.numerator, *self.denominator, self.dead_time))

    def at(self, s: ComplexArray, parameters: Mapping[str, float]) -> ComplexArray:
        """See PlantForm."""
        top = np.polyval([_value(v, parameters) for v in self.numerator], s)
        bottom = np.polyval([_value(v, parameters) for v in self.denominator], s)
        with np.errstate(divide="ignore", invalid="ignore"):
            out: ComplexArray = top / bottom * np.exp(-s * _value(self.dead_time, parameters))
        return out

    def _polynomials(self, parameters: Parameters, cases: int) -> Polynomials:
        for key, row in (("numerator", self.numerator), ("denominator", self.denominator)):
            if len(row) - 1 > MAX_DEGREE:
                raise FormError(f"the degree goes above {MAX_DEGREE}", key)
        rows = [
            np.column_stack([_column(v, parameters, cases) for v in row])
            for row in (self.numerator, self.denominator)
        ]
        return rows[0], rows[1], _column(self.dead_time, parameters, cases)


@dataclass(frozen=True, slots=True)
class RootForm(PlantForm):
    """gain · Π(s - zero) / Π(s - pole); a root is a complex number or a formula of a real one."""

    gain: Scalar
    zeros: tuple[complex | Formula, ...]
    poles: tuple[complex | Formula, ...]
    dead_time: Scalar = 0.0

    @property
    def names(self) -> tuple[str, ...]:
        """See PlantForm."""
        roots = tuple(r for r in (*self.zeros, *self.poles) if isinstance(r, Formula))
        return _names((self.gain, *roots, self.dead_time))

    def at(self, s: ComplexArray, parameters: Mapping[str, float]) -> ComplexArray:
        """See PlantForm."""
        points: ComplexArray = np.asarray(s, dtype=complex)
        top: ComplexArray = np.exp(-points * _value(self.dead_time, parameters))
        top *= _value(self.gain, parameters)
        bottom: ComplexArray = np.ones_like(points)
        for zero in self.zeros:
            top *= points - _root(zero, parameters)
        for pole in self.poles:
            bottom *= points - _root(pole, parameters)
        with np.errstate(divide="ignore", invalid="ignore"):
            return top / bottom

    def _polynomials(self, parameters: Parameters, cases: int) -> Polynomials:
        if max(len(self.zeros), len(self.poles)) > MAX_DEGREE:
            raise FormError(f"more than {MAX_DEGREE} roots")
        gain = _column(self.gain, parameters, cases)
        return (
            gain[:, None] * _expanded(self.zeros, parameters, cases),
            _expanded(self.poles, parameters, cases),
            _column(self.dead_time, parameters, cases),
        )


@dataclass(frozen=True, slots=True)
class MatrixForm(PlantForm):
    """State space A (n, n), B (n), C (n), D; uncontrollable and unobservable modes stay."""

    a: tuple[tuple[Scalar, ...], ...]
    b: tuple[Scalar, ...]
    c: tuple[Scalar, ...]
    d: Scalar = 0.0
    dead_time: Scalar = 0.0

    @property
    def names(self) -> tuple[str, ...]:
        """See PlantForm."""
        return _names((*(v for row in self.a for v in row), *self.b, *self.c, self.d, self.dead_time))

    def at(self, s: ComplexArray, parameters: Mapping[str, float]) -> ComplexArray:
        """See PlantForm."""
        a = np.array([[_value(v, parameters) for v in row] for row in self.a]).reshape(
            len(self.b), len(self.b)
        )
        b, c = (np.array([_value(v, parameters) for v in row]) for row in (self.b, self.c))
        points: ComplexArray = np.asarray(s, dtype=complex)
        systems = points[..., None, None] * np.eye(len(b)) - a
        out: ComplexArray
        try:
            out = np.linalg.solve(systems, b[:, None])[..., 0] @ c
        except np.linalg.LinAlgError:  # a point on a pole spoils the whole stack: one by one
            out = np.empty(points.shape, dtype=complex)
            for index in np.ndindex(points.shape):
                try:
                    out[index] = c @ np.linalg.solve(systems[index], b)
                except np.linalg.LinAlgError:
                    out[index] = np.inf
        with np.errstate(invalid="ignore"):
            out = (out + _value(self.d, parameters)) * np.exp(-points * _value(self.dead_time, parameters))
        return out

    def _polynomials(self, parameters: Parameters, cases: int) -> Polynomials:
        n = len(self.b)
        if n > MAX_DEGREE:
            raise FormError(f"the order goes above {MAX_DEGREE}", "A")
        a = np.stack([_column(v, parameters, cases) for row in self.a for v in row], axis=-1).reshape(
            cases, n, n
        )
        b, c = (np.stack([_column(v, parameters, cases) for v in row], axis=-1) for row in (self.b, self.c))
        d, delay = _column(self.d, parameters, cases), _column(self.dead_time, parameters, cases)
        known: dict[bytes, tuple[FloatArray, FloatArray]] = {}  # corners of a dead time share their matrices
        rows = []
        for k in range(cases):
            key = a[k].tobytes() + b[k].tobytes() + c[k].tobytes() + d[k].tobytes()
            if key not in known:
                if not all(np.isfinite(m).all() for m in (a[k], b[k], c[k], d[k])):
                    raise FormError("the entries leave the range of numbers", case=k)
                known[key] = transfer_function(a[k], b[k], c[k], float(d[k]))
            rows.append(known[key])
        return np.array([r[0] for r in rows]), np.array([r[1] for r in rows]), delay


def from_formula(text: str) -> FormulaForm:
    """A plant written as a formula in s. Raises FormulaError."""
    return FormulaForm(parse(text))


def from_coefficients(
    numerator: Sequence[float | str], denominator: Sequence[float | str], dead_time: float | str = 0.0
) -> CoefficientForm:
    """Descending coefficients; entries are numbers or formulas without s. Raises FormulaError, FormError."""
    for key, row in (("numerator", numerator), ("denominator", denominator)):
        if len(row) == 0:
            raise FormError("at least one coefficient is needed", key)
    top = tuple(_scalar(v, f"numerator[{i}]") for i, v in enumerate(numerator))
    bottom = tuple(_scalar(v, f"denominator[{i}]") for i, v in enumerate(denominator))
    return CoefficientForm(top, bottom, _scalar(dead_time, "dead_time"))


def from_roots(
    gain: float | str,
    zeros: Sequence[complex | str],
    poles: Sequence[complex | str],
    dead_time: float | str = 0.0,
) -> RootForm:
    """gain · Π(s - zero)/Π(s - pole). Roots: numbers, text such as "-2+5j", or formulas of real ones."""
    return RootForm(
        _scalar(gain, "gain"), _roots(zeros, "zeros"), _roots(poles, "poles"), _scalar(dead_time, "dead_time")
    )


def from_matrices(
    a: Sequence[Sequence[float | str]],
    b: Sequence[Sequence[float | str] | float | str],
    c: Sequence[Sequence[float | str] | float | str],
    d: object = 0.0,
    dead_time: float | str = 0.0,
) -> MatrixForm:
    """State space. B is a column, C a row, either may be given flat; D a number, [..] or [[..]]."""
    n = len(a)
    if n == 0:
        raise FormError("A has no rows", "A")
    for i, row in enumerate(a):
        if not isinstance(row, Sequence) or isinstance(row, str) or len(row) != n:
            raise FormError(f"A must be square: row {i} does not have {n} entries", f"A[{i}]")
    flat = {}
    for key, value in (("B", b), ("C", c)):
        entries = _flattened(value)
        if len(entries) != n:
            raise FormError(f"{key} must have {n} entries for this A, one input and one output", key)
        flat[key] = tuple(_scalar(v, f"{key}[{i}]") for i, v in enumerate(entries))
    through = _flattened(d if isinstance(d, Sequence) and not isinstance(d, str) else [d])
    if len(through) != 1:
        raise FormError("D must be one number: one input and one output", "D")
    matrix = tuple(tuple(_scalar(v, f"A[{i}][{j}]") for j, v in enumerate(row)) for i, row in enumerate(a))
    return MatrixForm(matrix, flat["B"], flat["C"], _scalar(through[0], "D"), _scalar(dead_time, "dead_time"))


def _flattened(rows: object) -> list[object]:
    out: list[object] = []
    for entry in rows if isinstance(rows, Sequence) else [rows]:
        out.extend(entry if isinstance(entry, Sequence) and not isinstance(entry, str) else [entry])
    return out


def _scalar(value: object, key: str) -> Scalar:
    """A number, or the formula of one; a formula without names becomes its number."""
    if isinstance(value, Formula):
        formula = value
    elif isinstance(value, str):
        formula = parse(value)
    elif isinstance(value, int | float | np.floating | np.integer) and not isinstance(value, bool):
        if not np.isfinite(value):
            raise FormError("must be a finite number", key, given=repr(value))
        return float(value)
    else:
        raise FormError("must be a number or a formula", key, given=repr(value))
    if formula.uses_s:
        raise FormError("`s` cannot stand here", key, given=formula.text)
    return formula if formula.names else float(formula.value({})[0])


def _roots(values: Sequence[complex | str], key: str) -> tuple[complex | Formula, ...]:
    """Roots as written; complex ones must come with their conjugates, which are then made exact."""
    out: list[complex | Formula] = []
    upper: list[tuple[complex, str]] = []
    lower: list[tuple[complex, str]] = []
    for i, value in enumerate(values):
        where = f"{key}[{i}]"
        root: complex | Formula | None = None
        if isinstance(value, complex | np.complexfloating):
            root = complex(value)
        elif isinstance(value, str):
            try:
                root = complex(value.replace(" ", ""))
            except ValueError:
                root = None
        if root is None:
            scalar = _scalar(value, where)
            root = scalar if isinstance(scalar, Formula) else complex(scalar)
        if isinstance(root, complex) and not np.isfinite(root):
            raise FormError("must be a finite number", where, given=repr(value))
        if isinstance(root, Formula) or root.imag == 0.0:
            out.append(root)
        else:
            (upper if root.imag > 0.0 else lower).append((root, where))
    for root, where in upper:
        partner = min(lower, key=lambda other: abs(other[0].conjugate() - root), default=None)
        if partner is None or abs(partner[0].conjugate() - root) > 1e-9 * abs(root):
            raise FormError("its conjugate is missing: give both", where, given=f"{root:.6g}")
        lower.remove(partner)
        out += [root, root.conjugate()]
    if lower:
        raise FormError("its conjugate is missing: give both", lower[0][1], given=f"{lower[0][0]:.6g}")
    return tuple(out)


def _names(values: tuple[Scalar, ...]) -> tuple[str, ...]:
    return tuple(dict.fromkeys(n for v in values if isinstance(v, Formula) for n in v.names))


def _column(value: Scalar, parameters: Parameters, cases: int) -> FloatArray:
    if isinstance(value, Formula):
        return value.value({n: parameters[n] for n in value.names}, cases)
    return np.full(cases, value)


def _value(value: Scalar, parameters: Mapping[str, float]) -> float:
    if isinstance(value, Formula):
        return float(value.at(np.zeros((), dtype=complex), parameters).real)
    return value


def _root(root: complex | Formula, parameters: Mapping[str, float]) -> complex:
    return _value(root, parameters) if isinstance(root, Formula) else root


def _expanded(roots: tuple[complex | Formula, ...], parameters: Parameters, cases: int) -> FloatArray:
    """Π(s - root) for each set of parameters, (K, number of roots + 1)."""
    if not any(isinstance(r, Formula) for r in roots):
        return np.tile(polynomial_of_roots([r for r in roots if isinstance(r, complex)]), (cases, 1))
    columns = [
        _column(r, parameters, cases).astype(complex) if isinstance(r, Formula) else np.full(cases, r)
        for r in roots
    ]
    return np.array([polynomial_of_roots([complex(c[k]) for c in columns]) for k in range(cases)])
