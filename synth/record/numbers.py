"""Numbers between floats and what JSON can hold: "inf", "-inf", and null for what is absent."""

from __future__ import annotations

import math

from synth.record.format import Number


def plain(value: float) -> Number:
    """A float as it stands in a record; NaN (absent) becomes null."""
    value = float(value)
    if math.isnan(value):
        return None
    if math.isinf(value):
        return "inf" if value > 0.0 else "-inf"
    return value


def number(value: Number) -> float:
    """A record's number as a float; null (absent) becomes NaN."""
    if value is None:
        return math.nan
    return float(value)
