"""Names for the array shapes that every function of this package speaks in."""

from __future__ import annotations

from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

Vector: TypeAlias = npt.NDArray[np.float64]  # (n,)
Matrix: TypeAlias = npt.NDArray[np.float64]  # (n, k)
Mask: TypeAlias = npt.NDArray[np.bool_]  # (n,)
Codes: TypeAlias = npt.NDArray[np.int64]  # (n,)
Signs: TypeAlias = npt.NDArray[np.int8]  # (n,): +1, -1 or 0
Shapes: TypeAlias = npt.NDArray[Any]  # (n,) of shapely geometries, None where missing
