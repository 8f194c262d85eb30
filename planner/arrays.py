"""Names for the numpy column types that the rooms hand to each other."""

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
SignArray = NDArray[np.int8]
BoolArray = NDArray[np.bool_]

__all__ = ["BoolArray", "FloatArray", "IntArray", "SignArray"]
