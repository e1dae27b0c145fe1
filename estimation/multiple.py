"""P-values of several questions asked together.

References
----------
Holm, S. (1979). A simple sequentially rejective multiple test procedure. Scandinavian Journal of Statistics
    6, 65–70.
Benjamini, Y. & Hochberg, Y. (1995). Controlling the false discovery rate. JRSS B 57, 289–300.
    https://doi.org/10.1111/j.2517-6161.1995.tb02031.x
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from estimation.arrays import Vector


def holm(p_values: Vector) -> Vector:
    """Adjusted so that the chance of any false finding keeps to the level, shape (k,); NaN stays NaN."""
    return _step(p_values, lambda p, k: np.maximum.accumulate(p * (k - np.arange(len(p)))))


def benjamini_hochberg(p_values: Vector) -> Vector:
    """Adjusted so that the expected share of false findings keeps to the level, shape (k,); NaN stays NaN."""

    def stepped(p: Vector, k: int) -> Vector:
        scaled = p * k / np.arange(1, len(p) + 1)
        return np.asarray(np.minimum.accumulate(scaled[::-1])[::-1])

    return _step(p_values, stepped)


def _step(p_values: Vector, rule: Callable[[Vector, int], Vector]) -> Vector:
    """Apply a rule to the sorted p-values that are known and put them back in their places."""
    p = np.asarray(p_values, dtype=np.float64)
    result = np.full(len(p), np.nan)
    known = np.flatnonzero(np.isfinite(p))
    order = known[np.argsort(p[known], kind="stable")]
    result[order] = np.minimum(rule(p[order], len(known)), 1.0)
    return result
