"""Intervals (methods 4): robust weights, critical value of a folded normal, worst bias three ways, curvature."""

from __future__ import annotations

import itertools
import math

import numpy as np
from scipy import optimize, special

from .local_polynomial import Long, one_side_weights, sides


def robust_weights(x, above, bandwidth, pilot, order, kernel="triangular", weight=None, treated="above"):
    """l_bc = l_h − (Σ l_h x^(p+1))·v_b on each side."""
    weights = np.zeros(len(x), dtype=Long)
    for side, h, b in zip((~above, above), sides(bandwidth), sides(pilot)):
        part = None if weight is None else weight[side]
        level = one_side_weights(x[side], h, order, kernel, part)
        curve = one_side_weights(x[side], b, order + 1, kernel, part, order + 1)
        weights[side] = level - np.sum(level * x[side].astype(Long) ** (order + 1)) * curve
    return np.where(above == (treated == "above"), weights, -weights)


def critical_value(ratio, level=0.95):
    """The level quantile of |N(ratio, 1)|, by root search of its distribution function."""

    def excess(value):
        return special.ndtr(value - ratio) - special.ndtr(-value - ratio) - level

    return optimize.brentq(excess, 0, ratio + 10, xtol=1e-14, rtol=8e-15)


def worst_bias_local_linear(x, above, weights, curvature):
    """(M/2)(|Σ₊ l x²| + |Σ₋ l x²|), of local linear weights."""
    return curvature / 2 * sum(abs(np.sum(weights[side] * x[side] ** 2)) for side in (above, ~above))


def worst_bias_integral(x, above, weights, curvature, points=200):
    """M·∫|W(t)|dt, W(t) = Σ_{x_i>t} l_i (x_i − t) in distance from the line, each side; midpoints of fine cells."""
    total = Long(0)
    for side in (above, ~above):
        distance, level_weights = np.abs(x[side]).astype(Long), weights[side]
        knots = np.unique(np.concatenate([[0], distance[level_weights != 0]]))
        for low, high in itertools.pairwise(knots):
            t = low + (high - low) * (np.arange(points) + Long(0.5)) / points
            w = np.sum(
                np.where(distance[:, None] > t, level_weights[:, None] * (distance[:, None] - t), 0), axis=0
            )
            total += np.sum(np.abs(w)) * (high - low) / points
    return curvature * total


def worst_bias_linear_programme(x, above, weights, curvature, cells=400):
    """Largest Σ l f(x) over f with |f″| ≤ M: f″ constant on each cell is the variable, f its double integral.

    The weights must annihilate levels and slopes, so f(0) = f′(0) = 0 loses nothing.
    """
    total = 0.0
    for side in (above, ~above):
        distance, level_weights = np.abs(x[side]).astype(float), weights[side].astype(float)
        edges = np.linspace(0, distance.max(), cells + 1)
        # f(x_i) = Σ_cells f″ · ∫_cell (x_i − t)₊ dt
        primitive = -(np.maximum(distance[:, None] - edges[None, :], 0) ** 2) / 2
        effect = level_weights @ (primitive[:, 1:] - primitive[:, :-1])
        answer = optimize.linprog(-effect, bounds=[(-curvature, curvature)] * cells, method="highs")
        total += -answer.fun
    return total


def curvature_auto(x, y, above, weight=None):
    """Largest |second derivative| of a global quartic, over each side from the line to its farthest row."""
    largest = 0.0
    for side in (above, ~above):
        part = None if weight is None else weight[side]
        c = [
            one_side_weights(x[side], math.inf, 4, "uniform", part, j) @ y[side].astype(Long)
            for j in range(5)
        ]
        end = x[side][np.argmax(np.abs(x[side]))]
        spots = [0.0, end]
        turn = -6 * c[3] / (24 * c[4])  # 2c₂ + 6c₃x + 12c₄x² turns here
        if min(0.0, end) < turn < max(0.0, end):
            spots.append(turn)
        largest = max(largest, *(abs(2 * c[2] + 6 * c[3] * t + 12 * c[4] * t * t) for t in spots))
    return float(largest)
