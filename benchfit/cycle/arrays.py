"""Names for the arrays of this room."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]
"""Real numbers, float64 unless a step of the arithmetic made them integer."""

Index = NDArray[np.int64]
Mask = NDArray[np.bool_]
