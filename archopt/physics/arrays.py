"""The array types every physical function speaks: float64 arrays that broadcast, SI units throughout."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int_]
BoolArray = NDArray[np.bool_]
#: What a function accepts: an array of any shape that broadcasts, or one number.
FloatLike = FloatArray | float
