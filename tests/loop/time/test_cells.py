"""What plan and cells promise: blocks without gaps, errors within bounds, ranges that hold."""

import numpy as np
import pytest

from synth.loop.time.cells import Cells
from synth.loop.time.modes import Modes
from synth.loop.time.plan import blocks, reach
from synth.loop.time.residues import step_modes
from synth.loop.time.signals import CELLS

NAMES = ("y", "u", "d")


@pytest.fixture(name="planned")
def _planned(random_loops):
    loops, poles = random_loops(np.random.default_rng(11), 80, 6)
    modes = step_modes(loops, poles, NAMES)
    profile = modes.profile(1e-9 * modes.largest(), False)
    level = 1e-3 * modes.largest()
    ends = reach(profile, profile.envelope, level)
    return modes, ends, blocks(modes, profile, ends, 5e-3 * modes.largest(), 4096)


def test_blocks_cover_all_time_without_gaps(planned):
    modes, ends, plan = planned
    for i in range(len(modes)):
        mine = np.flatnonzero(plan.loop == i)
        start, stop = plan.t[mine], plan.t[mine] + CELLS * plan.h[mine]
        assert start[0] == 0.0
        np.testing.assert_allclose(start[1:], stop[:-1], rtol=1e-12)
        np.testing.assert_allclose(stop[-1], ends[i].max(), rtol=1e-9)


def test_envelope_has_fallen_by_the_end(planned):
    modes, ends, _ = planned
    loop = np.arange(len(modes))
    for s in range(3):
        envelope = modes.bounds(loop, ends[:, s])[1][s]
        assert (envelope <= 1e-3 * modes.largest()[:, s] * (1 + 1e-9)).all()


def test_cells_hold_what_they_promise(planned):
    """Dense values in every cell: near the cubic, within the range, monotone and bent where proven."""
    modes, _, plan = planned
    chosen = np.arange(0, len(plan.loop), 3)
    loop, t, h = plan.loop[chosen], plan.t[chosen], plan.h[chosen]
    value, slope = modes.nodes(loop, t, h)
    proven = 0
    for s in range(3):
        for k in range(CELLS):
            place = np.stack([loop, loop, np.full(len(loop), s)])
            ends = (value[s, k], value[s, k + 1], slope[s, k], slope[s, k + 1])
            cells = Cells(place, np.stack([t + k * h, h, *ends, plan.miss[s, chosen]]))
            low, high = cells.range()
            monotone, bent = cells.monotone(), cells.bent()
            proven += np.count_nonzero(monotone)
            x = np.linspace(0.0, 1.0, 21)
            inside = np.stack([modes.jet(loop, cells.signal, cells.t + v * h, 0, 3) for v in x])  # (21, 3, Q)
            rounding = 1e-13 * modes.largest()[loop, s]
            cubic = np.stack([cells.cubic(np.full(len(cells), v)) for v in x])
            assert (np.abs(inside[:, 0] - cubic) <= cells.miss + rounding).all()
            assert (inside[:, 0] <= high + rounding).all()
            assert (inside[:, 0] >= low - rounding).all()
            rising = inside[:, 1, monotone]
            assert (np.sign(rising) == np.sign(rising[0])).all()
            curving = inside[:, 2, bent]
            assert (np.sign(curving) == np.sign(curving[0])).all()
    assert proven > 0.5 * 3 * CELLS * len(chosen)  # the proofs are not empty


def test_a_split_cell_is_the_cell(planned):
    modes, _, plan = planned
    loop, t, h = plan.loop[:5], plan.t[:5], plan.h[:5]
    value, slope = modes.nodes(loop, t, h)
    ends = (value[1, 0], value[1, 1], slope[1, 0], slope[1, 1])
    cells = Cells(
        np.stack([loop, loop, np.ones(5, dtype=np.intp)]), np.stack([t, h, *ends, plan.miss[1, :5]])
    )
    parts = cells.split(modes)
    assert len(parts) == 5 * CELLS
    first, last = (parts.rows(np.arange(5) * CELLS + k) for k in (0, CELLS - 1))
    np.testing.assert_allclose(first.a, cells.a, rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(last.b, cells.b, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(first.c * CELLS, cells.c, rtol=1e-12, atol=1e-12)
    assert (parts.miss <= np.repeat(cells.miss, CELLS) / CELLS**4 * (1 + 1e-9)).all()


def test_crossing_of_the_cubic():
    rng = np.random.default_rng(2)
    a, b = np.zeros(200), np.ones(200)
    c, d = rng.uniform(0.0, 2.5, (2, 200))
    zero = np.zeros((3, 200), dtype=np.intp)
    cells = Cells(zero, np.stack([np.zeros(200), np.ones(200), a, b, c, d, np.zeros(200)]))
    level = rng.uniform(0.01, 0.99, 200)
    np.testing.assert_allclose(cells.cubic(cells.crossing(level, 5)), level, atol=1e-6)


def test_residues_add_up_to_the_jump(random_loops):
    """x(0+) - x(inf) is the sum of the residues, whatever the poles' own errors."""
    loops, poles = random_loops(np.random.default_rng(3), 300, 8)
    modes: Modes = step_modes(loops, poles, NAMES)
    total = modes.residue.real.sum(axis=2)
    for s, top in enumerate((loops.numerator, loops.control, loops.load)):
        expected = top[:, 0] / loops.closed[:, 0] - top[:, -1] / loops.closed[:, -1]
        assert (np.abs(total[:, s] - expected) <= 1e-12 * modes.largest()[:, s] + 1e-14).all()
