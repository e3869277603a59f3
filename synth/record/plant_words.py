"""The plant as the sheet writes it, in one line: what a report prints and what a revision is compared by."""

from __future__ import annotations

from collections.abc import Iterable

from synth.model.forms import CoefficientForm, FormulaForm, MatrixForm, PlantForm, RootForm, Scalar


def form_words(form: PlantForm) -> str:
    """One line, parameters by name and not by value."""
    if isinstance(form, FormulaForm):
        return form.formula.text.strip()
    if isinstance(form, CoefficientForm):
        return f"{_row(form.numerator)} / {_row(form.denominator)}{_delay(form.dead_time)}"
    if isinstance(form, RootForm):
        zeros, poles = _row(form.zeros), _row(form.poles)
        return f"gain {_one(form.gain)}, zeros {zeros}, poles {poles}{_delay(form.dead_time)}"
    if isinstance(form, MatrixForm):
        a = "[" + ", ".join(_row(row) for row in form.a) + "]"
        return f"A {a}, B {_row(form.b)}, C {_row(form.c)}, D {_one(form.d)}{_delay(form.dead_time)}"
    raise TypeError(f"no words for a plant of type {type(form).__name__}")


def _row(values: Iterable[Scalar | complex]) -> str:
    return "[" + ", ".join(_one(v) for v in values) + "]"


def _one(value: Scalar | complex) -> str:
    if isinstance(value, complex):
        if value.imag == 0.0:
            return f"{value.real:g}"
        return f"{value.real:g}{value.imag:+g}j"
    return f"{value:g}" if isinstance(value, int | float) else value.text


def _delay(value: Scalar) -> str:
    return "" if value == 0.0 else f", dead time {_one(value)} s"
