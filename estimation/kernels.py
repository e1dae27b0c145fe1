r"""Kernels on \|u\| ≤ 1, each a polynomial in u = \|x\| / h.

That they are polynomials is what makes the ladder possible: a kernel-weighted sum at any bandwidth is a
combination of plain sums of powers (see `estimation.moments`). Only the relative weight matters to a local
polynomial, so kernels are scaled to 1 at the line.

References
----------
Fan, J. & Gijbels, I. (1996). Local Polynomial Modelling and Its Applications. Chapman & Hall.
"""

from __future__ import annotations

from typing import Final, Literal

import numpy as np

from estimation.arrays import Vector

# Coefficients of u⁰, u¹, u², … on 0 ≤ u ≤ 1.
COEFFICIENTS: Final[dict[str, tuple[float, ...]]] = {
    "triangular": (1.0, -1.0),
    "uniform": (1.0,),
    "epanechnikov": (1.0, 0.0, -1.0),
}

# C in the first-step bandwidth C·min(sd, IQR/1.349)·n^(−1/5) (Calonico, Cattaneo & Titiunik 2014).
RULE_OF_THUMB: Final[dict[str, float]] = {"triangular": 2.576, "uniform": 1.843, "epanechnikov": 2.34}


def kernel_values(distance: Vector, bandwidth: float, kernel: str) -> Vector:
    """Kernel weight of each row, shape (n,), 0 at and beyond the edge (the uniform kernel keeps its edge).

    Parameters
    ----------
    distance
        |score − cutoff|, shape (n,), in units of the score.
    bandwidth
        Above 0, same units.
    kernel
        A name in `COEFFICIENTS`.
    """
    u = distance / bandwidth
    value = np.polynomial.polynomial.polyval(u, COEFFICIENTS[kernel])
    return np.where(u <= 1.0, np.maximum(value, 0.0), 0.0)


def count_inside(distance: Vector, bandwidth: float, kernel: str) -> int:
    """Rows with a positive kernel weight, given distances in ascending order."""
    edge: Literal["left", "right"] = "right" if kernel == "uniform" else "left"
    return int(np.searchsorted(distance, bandwidth, side=edge))


def product_coefficients(kernel: str, bandwidth: float, other: str, other_bandwidth: float) -> Vector:
    """Coefficients in |x| of K(|x|/h)·K'(|x|/b), shape (degree + 1,), valid on |x| ≤ min(h, b)."""
    first = np.array([c / bandwidth**m for m, c in enumerate(COEFFICIENTS[kernel])])
    second = np.array([c / other_bandwidth**m for m, c in enumerate(COEFFICIENTS[other])])
    return np.convolve(first, second)
