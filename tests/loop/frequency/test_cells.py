"""The Bernstein forms against 40 digits, the signs they prove against a dense look, and the upper end."""

import mpmath
import numpy as np
import pytest
from scipy.interpolate import BPoly

from synth.loop.frequency.cells import ROTATION, SHARED_EDGES, STEP, AngleForm, cell_tables, in_form
from synth.loop.frequency.response import response_of
from synth.loop.frequency.survey import open_cells, sign_changes
from synth.loop.frequency.upper_end import last_with_gain, noise_ranges, roots_above

FAR = (300.0 + STEP * np.arange(3)) ** 2


@pytest.mark.parametrize("edges", [SHARED_EDGES, FAR], ids=["shared", "far"])
@pytest.mark.parametrize("n", [1, 6, 12])
def test_tables_give_the_rotated_powers(edges, n):
    tables = cell_tables(edges, n)
    rng = np.random.default_rng(n)
    for c in range(len(edges) - 1):
        low, high = edges[c], edges[c + 1]
        form = BPoly(tables[c].reshape(n + ROTATION + 1, 1, 3, n + 1), [0.0, 1.0])
        for t in rng.uniform(size=3):
            y = low + (high - low) * t
            found = form(t)
            with mpmath.workdps(40):
                angle = mpmath.sqrt(mpmath.mpf(float(y)))
                turned = [mpmath.mpf(1), mpmath.cos(angle), mpmath.sin(angle) / angle]
                for k in range(n + 1):
                    for j in range(3):
                        expected = float(mpmath.mpf(float(y)) ** k * turned[j])
                        assert abs(found[j, k] - expected) <= 2e-13 * high**k


def test_forms_are_those_of_the_loop(delayed_loops):
    loops = delayed_loops(3, 5, 4)
    form = AngleForm(response_of(loops))
    tables = cell_tables(SHARED_EDGES, form.n)
    columns = form.below(1, np.full(len(loops), 2.0), np.arange(len(loops)))
    out = np.empty((*tables.shape[:2], len(loops)))
    in_form(tables, columns, out)
    cell = 12
    y = SHARED_EDGES[cell] + 0.3 * (SHARED_EDGES[cell + 1] - SHARED_EDGES[cell])
    for i in range(len(loops)):
        s = 1j * np.sqrt(y) / loops.dead_time[i]
        d, n = np.polyval(loops.denominator[i], s), np.polyval(loops.numerator[i], s)
        expected = 2.0 * abs(d + n * np.exp(-s * loops.dead_time[i])) ** 2 - abs(d) ** 2
        found = BPoly(out[cell, :, i][:, None], [0.0, 1.0])(0.3)
        # up to the power of two that the form takes out of each loop
        power = np.log2(expected / found)
        assert abs(power - round(power)) < 1e-9


def test_every_change_of_sign_is_isolated(delayed_loops):
    loops = delayed_loops(11, 4, 40, light=True)
    form = AngleForm(response_of(loops))
    rows = np.arange(len(loops))
    cells = open_cells(cell_tables(SHARED_EDGES, form.n), form.turned, rows, below=False)
    found = sign_changes(cells, SHARED_EDGES, np.zeros(len(loops)))
    angle = np.concatenate([np.geomspace(1e-5, 1.0, 100_000), np.linspace(1.0, 8.5, 400_000)[1:]])
    for i in rows:
        s = 1j * angle / loops.dead_time[i]
        loop = np.polyval(loops.numerator[i], s) / np.polyval(loops.denominator[i], s)
        above = (loop * np.exp(-s * loops.dead_time[i])).imag >= 0.0
        at = np.flatnonzero(above[1:] != above[:-1])
        mine = found.row == i
        inside = mine & (found.high > angle[0] ** 2)
        assert np.count_nonzero(inside) == len(at)
        order = np.argsort(found.low[inside])
        assert (np.sqrt(found.low[inside][order]) <= angle[at + 1]).all()
        assert (np.sqrt(found.high[inside][order]) >= angle[at]).all()
        assert np.array_equal(found.negative[inside][order], ~above[at])


def test_roots_above_a_floor():
    # (x - 1)(x - 4)(x - 9): ascending coefficients
    cubic = np.array([-36.0, 49.0, -14.0, 1.0])
    floors = np.array([0.5, 2.0, 5.0, 10.0])
    found = roots_above(np.tile(cubic[:, None], 4), floors)
    assert [np.count_nonzero(found.row == i) for i in range(4)] == [3, 2, 1, 0]
    for row, low, high in zip(found.row, found.low, found.high, strict=True):
        root = [r for r in (1.0, 4.0, 9.0) if low <= r <= high]
        assert len(root) == 1
        assert root[0] > floors[row]
        assert high - low < 1e-3 * high


def test_the_end_of_a_gain():
    # |L|² = 1/(1 + x): below 0.1 from x = 99 on, below 2 everywhere
    squares = np.array([[[1.0] * 3, [0.0] * 3], [[1.0] * 3, [1.0] * 3]])
    found = last_with_gain(squares, np.array([0.1, 2.0, 0.0]), np.full(3, 4.0))
    assert found[0] == pytest.approx(99.0, rel=1e-3)
    assert found[1] == 0.0
    assert found[2] == np.inf


@pytest.mark.parametrize("peak", [1.05, 1.3, 3.0])
def test_the_range_where_the_noise_gain_could_exceed_its_peak(peak):
    # |C| = 1, |L| = 1/ω: |C|/||L| - 1| exceeds the peak between 1/(1 + 1/peak) and 1/(1 - 1/peak)
    squares = np.array([[1.0, 0.0], [0.0, 1.0], [0.0, 1.0]])[:, :, None]
    rows, low, high = noise_ranges(squares, np.array([peak]), np.array([1e-6]))
    assert rows.tolist() == [0]
    assert np.sqrt(low[0]) == pytest.approx(1.0 / (1.0 + 1.0 / peak), rel=1e-3)
    assert np.sqrt(high[0]) == pytest.approx(1.0 / (1.0 - 1.0 / peak), rel=1e-3)
    rows, _, _ = noise_ranges(squares, np.array([peak]), np.array([4.0 / (1.0 - 1.0 / peak) ** 2]))
    assert rows.size == 0
