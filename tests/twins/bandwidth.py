"""The MSE-optimal bandwidth in three steps, formula by formula (methods 3)."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from .local_polynomial import Long, one_side_weights
from .variance import neighbour_residuals

RULE_OF_THUMB = {"triangular": 2.576, "uniform": 1.843, "epanechnikov": 2.34}


@dataclass(frozen=True)
class OneSide:
    """One side's data with its own residuals, computed once: rows, their variances, their sampling weights."""

    x: np.ndarray
    y: np.ndarray
    weight: np.ndarray | None
    square: np.ndarray  # σ̂²
    ticks: np.ndarray


def side_of(x, y, weight, side, ticks):
    part = None if weight is None else weight[side]
    return OneSide(
        x[side], y[side].astype(Long), part, neighbour_residuals(ticks[side], y[side]) ** 2, ticks[side]
    )


def rough(x, kernel):
    """The pilot c = C·min(sd, IQR/1.349)·n^(−1/5)."""
    quartiles = np.quantile(x, [0.25, 0.75])
    spread = min(np.std(x, ddof=1), (quartiles[1] - quartiles[0]) / 1.349)
    return RULE_OF_THUMB[kernel] * spread * len(x) ** -0.2


def least(side, order, kernel):
    """The distance that holds p + 2 distinct scores and 10 rows; a kernel that ends at zero holds no score on its edge."""
    distance = np.abs(side.x)[np.argsort(np.abs(side.ticks))]
    distinct = distance[np.unique(np.sort(np.abs(side.ticks)), return_index=True)[1]]
    wanted = order + 1 if kernel == "uniform" else order + 2
    return max(distinct[min(wanted, len(distinct) - 1)], distance[min(9, len(distance) - 1)])


def terms(side, width, order, power, kernel, derivative, source):
    """One side's variance, bias and the variance of that bias, for the coefficient of x^derivative at a width.

    ``source`` is (coefficient of x^power, its linear weights): the bias of the fit is (Σ l x^power)·coefficient.
    """
    coefficient, coefficient_weights = source
    weights = one_side_weights(side.x, width, order, kernel, side.weight, derivative)
    lever = np.sum(weights * side.x.astype(Long) ** power)
    variance = np.sum(weights**2 * side.square)
    return variance, lever * coefficient, lever**2 * np.sum(coefficient_weights**2 * side.square)


def optimum(variance, bias, bias_variance, width, ahead, power, derivative):
    """Width minimising  V·(c/h)^(1+2ν) + (B·(h/c)^a)²  with 3·var(B) added to B², V and B measured at c.

    The derivative set to zero:  h^(2a+1+2ν) = c^(2a+1+2ν)·(1+2ν)·V / (2·a·(B² + R)),  a = power − ν.
    """
    assert ahead == power - derivative
    exponent = 2 * ahead + 1 + 2 * derivative
    ratio = (1 + 2 * derivative) * variance / (2 * ahead * (bias**2 + 3 * bias_variance))
    return float(width * ratio ** (Long(1) / exponent))


def mse(x, y, above, order, kernel="triangular", weight=None, per_side=False, ticks=None):
    """(h below, h above, b below, b above). Exact `ticks` of the score, where given, decide what is tied."""
    ticks = x if ticks is None else ticks
    below_side, above_side = (side_of(x, y, weight, side, ticks) for side in (~above, above))
    both = (below_side, above_side)
    p, q = order, order + 1
    farthest = max(np.max(np.abs(s.x)) for s in both)
    floor = max(least(s, q, kernel) for s in both)
    c = min(max(rough(x, kernel), floor), farthest)

    def combine(parts):
        """Both sides: variances add, biases are subtracted (the effect is a difference)."""
        if per_side:
            return list(parts)
        (v0, b0, r0), (v1, b1, r1) = parts
        return [(v0 + v1, b1 - b0, r0 + r1)] * 2

    def clip(widths):
        if per_side:
            return [min(max(w, least(s, q, kernel)), np.max(np.abs(s.x))) for w, s in zip(widths, both)]
        return [min(max(w, floor), farthest) for w in widths]

    # 1. The coefficient of x^(q+1) from a global polynomial of order q + 1.
    widest = []
    for s in both:
        g = one_side_weights(s.x, math.inf, q + 1, kernel, s.weight, q + 1)
        widest.append((g @ s.y, g))
    # 2. The bandwidth b for the coefficient of x^(p+1) by order q.
    parts = [terms(s, c, q, q + 1, kernel, p + 1, source) for s, source in zip(both, widest)]
    b = clip([optimum(*part, c, q - p, q + 1, p + 1) for part in combine(parts)])
    # 3. Those coefficients, and h.
    sources = []
    for s, width in zip(both, b):
        v = one_side_weights(s.x, width, q, kernel, s.weight, p + 1)
        sources.append((v @ s.y, v))
    parts = [terms(s, c, p, p + 1, kernel, 0, source) for s, source in zip(both, sources)]
    h = clip([optimum(*part, c, p + 1, p + 1, 0) for part in combine(parts)])
    return (*h, *b)


def coverage_factor(n, order):
    """n^(−p/((3+p)(3+2p)))."""
    return n ** (-order / ((3 + order) * (3 + 2 * order)))
