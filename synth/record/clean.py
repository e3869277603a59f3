"""Values as JSON can hold them: what numpy made becomes plain, NaN null, infinities words."""

from __future__ import annotations

from typing import Any

import numpy as np

from synth.record.numbers import plain


def clean(value: Any) -> Any:
    """Facts as JSON: arrays to lists, NaN to null, infinities to words."""
    if isinstance(value, dict):
        return {str(k): clean(v) for k, v in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [clean(v) for v in value]
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return plain(float(value))
    return value if value is None or isinstance(value, str) else str(value)
