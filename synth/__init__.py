"""Automated compensator synthesis: requirements in, ranked and explained compensators out.

As a library, in a notebook or a script:

    import synth
    plant = synth.Plant.from_formula("2/(s*(0.1*s + 1))")
    synth.evaluate(plant, numerator=[[1.0], [2.0], [4.0]], denominator=[[1.0]])

Names are loaded when they are first used, so that importing the package costs next to nothing.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from synth.loop.quantities import QUANTITIES, Measure
    from synth.model.plant import Plant
    from synth.notebook import Table, evaluate

__all__ = ["QUANTITIES", "Measure", "Plant", "Table", "evaluate"]

__version__ = "0.1.0"

_HOME = {
    "Measure": "synth.loop.quantities",
    "Plant": "synth.model.plant",
    "QUANTITIES": "synth.loop.quantities",
    "Table": "synth.notebook",
    "evaluate": "synth.notebook",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(importlib.import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
