"""The same loops through scipy.signal: what its frequency response shows must be what we report."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from synth.loop.frequency.stage import KEYS, frequency_stage


@pytest.mark.parametrize("order", [2, 4, 6])
def test_scipy_frequency_response_shows_the_same(random_loops, poles_of, order):
    loops = random_loops(77 + order, order, 12)
    found = frequency_stage(loops, poles_of(loops), KEYS)
    w = np.geomspace(1e-4, 1e4, 40_001)
    for i in range(len(loops)):
        num, den, closed = loops.numerator[i], loops.denominator[i], loops.closed[i]
        num, con = np.trim_zeros(num, "f"), np.trim_zeros(loops.control[i], "f")
        for key, top in (("sensitivity_peak", den), ("complementary_peak", num), ("noise_gain", con)):
            _, h = signal.freqresp((top, closed), w)
            peak = np.abs(h).max()
            assert peak <= found[key][i] * (1 + 1e-9)
            assert found[key][i] == pytest.approx(peak, rel=2e-2)
        if np.isfinite(found["crossover"][i]):
            _, h = signal.freqresp((num, den), [found["crossover"][i]])
            assert abs(h[0]) == pytest.approx(1.0, rel=1e-9)
        if np.isfinite(found["bandwidth"][i]):
            _, h = signal.freqresp((num, closed), [found["bandwidth"][i]])
            assert abs(h[0]) == pytest.approx(abs(num[-1] / closed[-1]) / np.sqrt(2), rel=1e-9)
