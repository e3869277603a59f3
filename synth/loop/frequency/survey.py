"""Where functions of many loops with dead time change sign within cells of the angle: every place, each in a
bracket of its own.

Letters: M loops, c cells, F changes of sign, Q functions asked about. Cells and brackets are in y = (ωθ)².
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.frequency.cells import AngleForm, in_form
from synth.loop.frequency.isolation import Brackets, changes, halve

_LOOKS = 4  # coefficients of a cell that are looked at for a promising place
_ALIKE = 0.9
_BLOCK = 100_000  # coefficients in one go: they stay in the second-level cache
_WIDE = 0.125  # where a cell that begins at 0 or spans more than an octave is cut first


@dataclass(frozen=True, slots=True)
class Open:
    """F cells on which a function may vanish: its Bernstein coefficients (m + 1, F), what it is and where.

    target  (F,) the number the caller has given to a function of a loop
    """

    target: IntArray
    cell: IntArray
    coefficients: FloatArray


def open_cells(tables: FloatArray, columns: FloatArray, targets: IntArray, *, below: bool) -> Open:
    """The cells that F functions, by columns (3 (n + 1), F) and numbers `targets` (F,), may vanish on.

    below : only where they may be negative, so that where one is surely negative counts too.
    """
    parts = []
    block = max(1, _BLOCK // (tables.shape[0] * tables.shape[1]))
    form = np.empty((*tables.shape[:2], min(len(targets), block)))
    for start in range(0, len(targets), block):
        part = slice(start, start + block)
        if len(targets[part]) < form.shape[2]:
            form = np.empty((*tables.shape[:2], len(targets[part])))
        in_form(tables, columns[:, part], form)
        if not below:
            form[1:, 0] = form[:-1, -1]  # one value, one sign where two cells meet
        mask: BoolArray = form.min(axis=1) < 0.0
        if not below:
            mask &= form.max(axis=1) >= 0.0
        cell, column = np.nonzero(mask)
        parts.append(Open(targets[part][column], cell, np.ascontiguousarray(form[cell, :, column].T)))
    return joined(parts)


def joined(parts: list[Open]) -> Open:
    """All of them together."""
    return Open(
        np.concatenate([p.target for p in parts]),
        np.concatenate([p.cell for p in parts]),
        np.concatenate([p.coefficients for p in parts], axis=1),
    )


def sign_changes(cells: Open, edges: FloatArray, hint: FloatArray) -> Brackets:
    """Brackets of every change of sign on the open cells; `row` is the target.

    hint : by target, the y where a cell is cut first, because the function nearly vanishes there; 0 for none.
    Changes closer together than 1e-10 (relative) may be reported as none.
    """
    low, high = edges[cells.cell], edges[cells.cell + 1]
    negative = _signs(cells.coefficients, low)
    count = changes(negative)
    one, many = np.flatnonzero(count == 1), np.flatnonzero(count > 1)
    found = [(cells.target[one], low[one], high[one], negative[0, one])]
    if many.size:
        low, high, target = low[many], high[many], cells.target[many]
        near = (hint[target] - low) / (high - low)
        usual = np.where(high > 2.5 * low, _WIDE, 0.5)
        cut = np.where((near > 1e-9) & (near < 1.0 - 1e-9), near, usual)
        halve(cells.coefficients[:, many], target, low, high, cut, found)
    target, low, high, before = (np.concatenate(part) for part in zip(*found, strict=True))
    return Brackets(target, low, high, before)


def begun(cells: Open, edges: FloatArray) -> Brackets:
    """What is negative where the cells begin, as if it had become so just before."""
    at = np.flatnonzero((cells.cell == 0) & (cells.coefficients[0] < 0.0))
    first = np.full(len(at), edges[0])
    return Brackets(cells.target[at], 0.9 * first, first, np.zeros(len(at), dtype=bool))


def _signs(coefficients: FloatArray, low: FloatArray) -> BoolArray:
    """Where coefficients are negative; a function that is 0 at y = 0 does not change sign there. In place."""
    root = np.flatnonzero((coefficients[0] == 0.0) & (low == 0.0))
    if root.size:
        first = (coefficients[:, root] != 0.0).argmax(axis=0)
        sign = np.sign(coefficients[first, root])
        # a number too small to matter to the halves that it is split into
        coefficients[:, root] += np.where(np.arange(len(coefficients))[:, None] < first, 1e-300, 0.0) * sign
    negative: BoolArray = coefficients < 0.0
    return negative


def promising(
    form: AngleForm,
    places: list[int],
    tables: FloatArray,
    edges: FloatArray,
    rows: IntArray,
    known: FloatArray,
) -> FloatArray:
    """(places, rows): y where |P|²/|Δ|² looks largest by some coefficients of both, which run close to the
    values; 0 where nothing looks as large as `known` (places, rows). places : of each |P|² in the squares.

    A form of |Δ|² that is not positive crowds round a resonance.
    """
    at = np.linspace(0.0, 1.0, _LOOKS + 1)[:-1]
    some = np.round(at * (tables.shape[1] - 1)).astype(np.intp)
    few = np.ascontiguousarray(tables[:, some])
    plain = np.ascontiguousarray(few[:, :, : form.n + 1])
    closed, ratio = (np.empty((len(tables), _LOOKS, len(rows))) for _ in range(2))
    in_form(few, form.whole[:, rows], closed)
    np.maximum(closed, 1e-300, out=closed)
    flat, each = ratio.reshape(-1, len(rows)), np.arange(len(rows))
    out = np.zeros((len(places), len(rows)))
    for i, place in enumerate(places):
        in_form(plain, form.squares[place][:, rows], ratio)
        ratio /= closed
        best = flat.argmax(axis=0)
        cell, part = best // _LOOKS, some[best % _LOOKS] / (tables.shape[1] - 1)
        y = edges[cell] + (edges[cell + 1] - edges[cell]) * part
        out[i] = np.where(flat[best, each] > _ALIKE * known[i] * known[i], y, 0.0)
    return out
