"""Names for the arrays that travel between the rooms."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["BoolArray", "FloatArray", "IntArray", "NameArray", "TimeArray"]

BoolArray = npt.NDArray[np.bool_]
FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.integer]
NameArray = npt.NDArray[np.object_]
TimeArray = npt.NDArray[np.datetime64]
