r"""The worst bias of a linear estimate when each side's regression bends by at most M.

With |μ″| ≤ M and weights l that reproduce straight lines, the bias of one side's level is
∫ W(t) μ″(t) dt with W(t) = Σ_{d_i > t} l_i (d_i − t), so that the worst is M·∫|W|. For local linear weights W
has one sign and the integral is |Σ l d²| / 2.

References
----------
Armstrong, T. & Kolesár, M. (2018). Optimal inference in a class of regression models. Econometrica 86,
    655–683. https://doi.org/10.3982/ECTA14434
Armstrong, T. & Kolesár, M. (2020). Simple and honest confidence intervals in nonparametric regression.
    Quantitative Economics 11, 1–39. https://doi.org/10.3982/QE1199
Kolesár, M. & Rothe, C. (2018). Inference in regression discontinuity designs with a discrete running
    variable. American Economic Review 108, 2277–2304. https://doi.org/10.1257/aer.20160945
"""

from __future__ import annotations

import numpy as np

from estimation.arrays import Vector


def worst_bias(distance: Vector, weights: Vector, *, order: int) -> float:
    """∫|W(t)| dt: worst bias of one side's level for each unit of the curvature bound.

    Parameters
    ----------
    distance
        |x| of the rows, shape (m,), ascending.
    weights
        l, shape (m,).
    order
        Order of the fit. Order 0 does not reproduce straight lines: no bound on the second derivative
        bounds its bias, and the answer is infinite. Order 1 has the closed form.
    """
    if order == 0:
        return float("inf")
    if order == 1:
        return 0.5 * abs(float(weights @ distance**2))
    return integral_bias(distance, weights)


def integral_bias(distance: Vector, weights: Vector) -> float:
    """∫₀^∞ |W(t)| dt exactly: W is linear between neighbouring rows, and each piece may change sign once."""
    knots = np.concatenate(([0.0], distance))
    # Σ_{j ≥ i} l_j and Σ_{j ≥ i} l_j d_j for each knot's tail, so that W(t) = Σ l d − t Σ l on its piece.
    tail = np.append(np.cumsum(weights[::-1])[::-1], 0.0)
    tail_moment = np.append(np.cumsum((weights * distance)[::-1])[::-1], 0.0)
    left = tail_moment[:-1] - knots[:-1] * tail[:-1]
    right = tail_moment[:-1] - knots[1:] * tail[:-1]
    width = np.diff(knots)
    same_sign = left * right >= 0.0
    size = np.abs(left) + np.abs(right)
    crossing = np.divide(left**2 + right**2, size, out=np.zeros_like(size), where=size > 0.0)
    return float(np.sum(0.5 * width * np.where(same_sign, size, crossing)))
