"""Every structure, simplest first, and which of them can be a given function."""

from __future__ import annotations

from types import MappingProxyType

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.double_lead import DOUBLE_LEAD
from synth.structures.factors import TOLERANCE, factors_of
from synth.structures.family import Structure
from synth.structures.lag import LAG
from synth.structures.lead import LEAD
from synth.structures.lead_lag import LEAD_LAG
from synth.structures.p import P
from synth.structures.pd import PD
from synth.structures.pi import PI
from synth.structures.pi_lead import PI_LEAD
from synth.structures.pid import PID

_ALL = (P, PI, PD, PID, LAG, LEAD, LEAD_LAG, PI_LEAD, DOUBLE_LEAD)

REGISTRY: MappingProxyType[str, Structure] = MappingProxyType({s.name: s for s in _ALL})


def by_name(name: str) -> Structure:
    """The structure of that name, whatever its case. Raises KeyError with the names there are."""
    for structure in _ALL:
        if structure.name.casefold() == name.casefold():
            return structure
    raise KeyError(f"no structure {name!r}; there are {', '.join(REGISTRY)}")


def same_function(
    numerator: FloatArray, denominator: FloatArray, tolerance: float = TOLERANCE
) -> tuple[tuple[Structure, FloatArray], ...]:
    """Every structure that can be this compensator, simplest first, each with the parameters that make it so.

    numerator, denominator : (n,) descending coefficients of one compensator. Zeros and poles whose logarithms
    differ by less than `tolerance` are struck first, so a lag of ratio 1.0005 is known for the P it is.
    The first entry is the one to report; the others are its other names. Empty where none fits.
    """
    factors = factors_of(np.asarray(numerator, dtype=float), np.asarray(denominator, dtype=float), tolerance)
    found = ((structure, structure.recognise(factors)) for structure in _ALL)
    return tuple((structure, theta) for structure, theta in found if theta is not None)
