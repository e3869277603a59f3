"""The scoring core for an engineer at a prompt: plants and compensators as arrays in, a table of quantities
out.

B compensators, K plants, Q quantities. SI units throughout; what the numbers mean is in `synth.QUANTITIES`.
"""

from __future__ import annotations

import html
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from synth.errors import nearest
from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.closed_loop import Rational, exact_degree
from synth.loop.evaluate import evaluate as score
from synth.loop.quantities import EVERY_QUANTITY, QUANTITIES, Measure
from synth.model.plant import Plant

if TYPE_CHECKING:
    from rich.table import Table as RichTable

# Loops shown side by side; the rest is counted below the table.
SHOWN = 6


@dataclass(frozen=True, slots=True)
class Table:
    """Quantities of B compensators on K plants.

    measures     the Q quantities, in order
    values       (B, K, Q) in the units of `units`; NaN is absent, ±inf is meant
    stable       (B, K)
    approximate  (B, K, Q) True where the error bound of the core was not reached
    plants       K names; compensators : B names

    table["overshoot"] is the (B, K) array of one quantity.
    """

    measures: tuple[Measure, ...]
    values: FloatArray
    stable: BoolArray
    approximate: BoolArray
    plants: tuple[str, ...]
    compensators: tuple[str, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Keys of the quantities, in the order of the last axis of `values`."""
        return tuple(m.quantity for m in self.measures)

    @property
    def units(self) -> dict[str, str]:
        """Unit of each quantity by its key; "" for a pure ratio."""
        return {m.quantity: m.row.unit for m in self.measures}

    def __getitem__(self, quantity: str | Measure) -> FloatArray:
        """(B, K) values of one quantity; KeyError names the nearest one when there is none of that name."""
        for i, measure in enumerate(self.measures):
            if quantity in (measure, measure.quantity):
                out: FloatArray = self.values[:, :, i]
                return out
        raise KeyError(f"no quantity {quantity!r} in this table" + _hint(str(quantity), self.names))

    def _columns(self) -> list[tuple[str, int, int]]:
        pairs = [(b, k) for b in range(len(self.compensators)) for k in range(len(self.plants))]
        names = [
            self.compensators[b] if len(self.plants) == 1 else f"{self.compensators[b]} on {self.plants[k]}"
            for b, k in pairs
        ]
        return [(name, b, k) for name, (b, k) in zip(names, pairs, strict=True)][:SHOWN]

    def _rows(self) -> list[list[str]]:
        """Heading, then a row for each quantity: name, unit, a cell for each loop shown."""
        columns = self._columns()
        rows = [["quantity", "unit", *(name for name, _, _ in columns)]]
        rows.append(["stable", "", *("yes" if self.stable[b, k] else "no" for _, b, k in columns)])
        for i, measure in enumerate(self.measures):
            cells = [_cell(self.values[b, k, i], bool(self.approximate[b, k, i])) for _, b, k in columns]
            rows.append([_title(measure), measure.row.unit, *cells])
        return rows

    def _rest(self) -> str:
        hidden = len(self.compensators) * len(self.plants) - SHOWN
        return f"{hidden} more loops in .values" if hidden > 0 else ""

    def __str__(self) -> str:
        rows = self._rows()
        widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
        lines = []
        for row in rows:
            padded = [c.rjust(w) for c, w in zip(row, widths, strict=True)]
            padded[:2] = [c.ljust(w) for c, w in zip(row[:2], widths[:2], strict=True)]
            lines.append("  ".join(padded).rstrip())
        return "\n".join([*lines, self._rest()]).rstrip()

    def __repr__(self) -> str:
        return str(self)

    def __rich__(self) -> RichTable:
        from rich.table import Table as RichTable

        heading, *rows = self._rows()
        table = RichTable(box=None, pad_edge=False, caption=self._rest() or None, caption_justify="left")
        for i, name in enumerate(heading):
            table.add_column(name, justify="left" if i < 2 else "right", style="dim" if i == 1 else "")
        for row in rows:
            table.add_row(*row)
        return table

    def _repr_html_(self) -> str:
        heading, *rows = self._rows()
        head = "".join(f"<th>{html.escape(c)}</th>" for c in heading)
        body = "".join(f"<tr>{''.join(f'<td>{html.escape(c)}</td>' for c in row)}</tr>" for row in rows)
        note = f"<caption>{html.escape(self._rest())}</caption>" if self._rest() else ""
        return f"<table>{note}<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


def evaluate(
    plants: Plant | Sequence[Plant],
    numerator: ArrayLike,
    denominator: ArrayLike = 1.0,
    *,
    quantities: Sequence[str | Measure] | None = None,
    reference_step: float = 1.0,
) -> Table:
    """Every quantity of compensators on plants, in a negative unity feedback loop.

    Parameters
    ----------
    plants : one plant or K of them.
    numerator, denominator : coefficients of the compensators in descending powers of s, (width,) for one or
        (B, width) for B; a single row on either side serves all. Widths may differ, leading zeros are
        padding.
    quantities : keys of synth.QUANTITIES, or Measure("settling_time", band=0.05) with options; None is all.
    reference_step : size of the reference step that control_peak is given for, in the unit of y.

    Returns
    -------
    Table with values of shape (B, K, Q), SI units.

    Raises
    ------
    ValueError where a quantity is unknown, or a compensator is not a proper ratio of two rows.
    """
    chosen = [plants] if isinstance(plants, Plant) else list(plants)
    if not chosen:
        raise ValueError("no plant given")
    compensators = _compensators(numerator, denominator)
    measures = EVERY_QUANTITY if quantities is None else tuple(_measure(q) for q in quantities)
    found = score(_stacked(chosen), compensators, measures=measures, reference_step=reference_step)
    return Table(
        measures,
        found.values,
        found.stable,
        found.approximate,
        tuple(f"P{k + 1}" for k in range(len(chosen))),
        tuple(f"C{b + 1}" for b in range(len(compensators))),
    )


def _stacked(plants: Sequence[Plant]) -> Rational:
    wide = max(len(p.numerator) for p in plants), max(len(p.denominator) for p in plants)
    return Rational.of(
        [(0.0,) * (wide[0] - len(p.numerator)) + p.numerator for p in plants],
        [(0.0,) * (wide[1] - len(p.denominator)) + p.denominator for p in plants],
        [p.dead_time for p in plants],
    )


def _compensators(numerator: ArrayLike, denominator: ArrayLike) -> Rational:
    top, bottom = (np.atleast_2d(np.asarray(a, dtype=float)) for a in (numerator, denominator))
    if top.ndim != 2 or bottom.ndim != 2 or len({len(top), len(bottom)} - {1}) > 1:
        shapes = f"got {top.shape} and {bottom.shape}"
        raise ValueError(f"numerator and denominator must be (width,) or (B, width) with one B, {shapes}")
    out = Rational.of(top, bottom)
    degree = exact_degree(out.numerator), exact_degree(out.denominator)
    if (degree[0] > degree[1]).any() or (degree[1] < 0).any():
        raise ValueError("a compensator must be proper: its numerator's degree at most its denominator's")
    return out


def _measure(given: str | Measure) -> Measure:
    if isinstance(given, Measure):
        return given
    if given not in QUANTITIES:
        raise ValueError(f"unknown quantity {given!r}" + _hint(given, QUANTITIES))
    return Measure(given)


def _hint(name: str, allowed: Iterable[str]) -> str:
    close = nearest(name, allowed)
    return f"; nearest is {close!r}" if close else ""


def _title(measure: Measure) -> str:
    """Name of the quantity with the options that are not the usual ones."""
    plain = Measure(measure.quantity)
    extra = [
        f"{key} {value:g}" if isinstance(value, float) else f"{key} {value}"
        for key in ("band", "below", "span", "after")
        if (value := getattr(measure, key)) != getattr(plain, key)
    ]
    return ", ".join([measure.row.name, *extra])


def _cell(value: float, approximate: bool) -> str:
    if np.isnan(value):
        return "-"
    text = f"{value:.5g}"
    return f"~{text}" if approximate else text
