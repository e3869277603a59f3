"""Loops that are marched together."""

from __future__ import annotations

import numpy as np

from synth.loop.time.early import ROOM, _classes


def test_every_loop_is_in_one_class_that_is_not_empty() -> None:
    """Also where one loop alone needs more panels than there is room for."""
    todo = np.arange(7)
    for finest in (2, 8, int(np.log2(ROOM)) + 2):  # as a power of two
        coarse = np.array([1, 1, 3, 3, 3, finest, finest])
        parts = _classes(todo, coarse + 2, coarse, np.ones(7, dtype=np.intp))
        assert all(len(part) for part in parts)
        np.testing.assert_array_equal(np.sort(np.concatenate(parts)), todo)
