"""Where the curve of a loop with dead time crosses the real axis: every place, up to an angle. M loops."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.frequency.cells import SHARED_EDGES, STEP, AngleForm, cell_tables, shared_tables
from synth.loop.frequency.crossings import PHASE
from synth.loop.frequency.delayed_curves import refined
from synth.loop.frequency.response import Response
from synth.loop.frequency.survey import open_cells, sign_changes

_CELLS = 512  # beyond the shared ones, in one go


def real_axis_crossings(response: Response, until: FloatArray) -> tuple[IntArray, FloatArray]:
    """(row, ω) of every ω > 0 where L(jω) passes the real axis, in no order.

    until : (M,) angle ωθ [rad] up to which they are sought; those found may reach a little further.
    Isolated by the signs of Im L in Bernstein form (survey.py), then refined by Newton's method. Two closer
    than 1e-10 (relative) may be missed.
    """
    form = AngleForm(response)
    rows, hint = np.arange(response.loops), np.zeros(response.loops)
    edges, tables = SHARED_EDGES, shared_tables(form.n)
    found: list[tuple[IntArray, FloatArray]] = []
    while rows.size:
        cells = open_cells(tables, form.turned[:, rows], rows, below=False)
        brackets = sign_changes(cells, edges, hint)
        row, w, _ = refined(response, PHASE, brackets, hint)
        found.append((row, w))
        start = float(np.sqrt(edges[-1]))
        rows = rows[until[rows] > start]
        edges = (start + STEP * np.arange(_CELLS + 1.0)) ** 2
        tables = cell_tables(edges, form.n) if rows.size else tables
    row, w = (np.concatenate(part) for part in zip(*found, strict=True))
    return row, w
