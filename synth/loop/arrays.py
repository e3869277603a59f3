"""Names for the arrays of the core, and the batch it works on.

Letters used for sizes in every docstring below this folder:

    B  compensators      K  plant cases      M  loops, M = B·K or a choice of those pairs
    n  order of the closed loop             Q  measures asked for

Polynomials are rows of coefficients in DESCENDING powers of s, padded with leading zeros.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.intp]
