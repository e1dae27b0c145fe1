"""Names for the array shapes that every function of this package speaks in."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
import numpy.typing as npt

Vector: TypeAlias = npt.NDArray[np.float64]  # (n,)
Matrix: TypeAlias = npt.NDArray[np.float64]  # (n, k)
Cube: TypeAlias = npt.NDArray[np.float64]  # (n, k, l)
Mask: TypeAlias = npt.NDArray[np.bool_]  # (n,)
Codes: TypeAlias = npt.NDArray[np.int64]  # (n,)
