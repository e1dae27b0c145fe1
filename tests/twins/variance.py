"""Variances of a linear estimate Σ l y (methods 2), each as its formula reads."""

from __future__ import annotations

import numpy as np

from .local_polynomial import Long, fitted, kernel_weights, sides, solve


def neighbour_residuals(x, y, neighbours=3):
    """√(J/(J+1))·(y_i − mean of the J nearest on the same side), every tie at the J-th distance kept."""
    x = np.asarray(x, dtype=float)
    y = np.asarray(y, dtype=Long)
    residual = np.zeros(len(x), dtype=Long)
    for i in range(len(x)):
        distance = np.abs(x - x[i])
        distance[i] = np.inf  # not a neighbour of itself
        limit = np.sort(distance)[min(neighbours, len(x) - 1) - 1]
        near = distance <= limit
        count = int(near.sum())
        residual[i] = np.sqrt(Long(count) / (count + 1)) * (y[i] - y[near].sum() / count)
    return residual


def both_neighbour_residuals(x, y, above, neighbours=3):
    """The same, each side on its own."""
    residual = np.zeros(len(x), dtype=Long)
    for side in (~above, above):
        residual[side] = neighbour_residuals(x[side], y[side], neighbours)
    return residual


def hc_residuals(x, y, bandwidth, order, kernel, weight, kind):
    """One side's residuals, inflated as HC0–HC3 say; HC1's factor counts rows with k > 0."""
    x = np.asarray(x, dtype=Long)
    k = kernel_weights(x, bandwidth, kernel, weight)
    e = np.asarray(y, dtype=Long) - fitted(x, y, bandwidth, order, kernel, weight)
    n = int((k > 0).sum())
    if kind == "hc1":
        e = e * np.sqrt(Long(n) / (n - order - 1))
    if kind in ("hc2", "hc3"):
        r = np.stack([(x / Long(bandwidth)) ** j for j in range(order + 1)], axis=1)
        inverse = solve((r * k[:, None]).T @ r, np.eye(order + 1))
        leverage = k * np.einsum("ij,jk,ik->i", r, inverse, r)
        e = e / (np.sqrt(1 - leverage) if kind == "hc2" else 1 - leverage)
    return np.where(k > 0, e, 0)


def both_hc_residuals(x, y, above, bandwidth, order, kernel="triangular", weight=None, kind="hc0"):
    """The same on both sides."""
    residual = np.zeros(len(x), dtype=Long)
    for side, width in zip((~above, above), sides(bandwidth)):
        part = None if weight is None else weight[side]
        residual[side] = hc_residuals(x[side], y[side], width, order, kernel, part, kind)
    return residual


def from_residuals(weights, residual, other=None):
    """Σ l² e e′: a variance, or the covariance of two estimates with the same weights."""
    return np.sum(weights**2 * residual * (residual if other is None else other))


def clustered(weights, residual, cluster):
    """Σ_g (Σ_{i∈g} l_i e_i)²·G/(G−1), clusters counted in the window; they may span both sides."""
    inside = weights != 0
    names = sorted(set(cluster[inside].tolist()))
    total = sum(np.sum((weights * residual)[inside & (cluster == name)]) ** 2 for name in names)
    return total * len(names) / (len(names) - 1), len(names)


def spatial(weights, residual, east, north, reach):
    """Conley (1999): Σ_ij l_i l_j e_i e_j (1 − d_ij/reach)₊."""
    total = Long(0)
    for i in range(len(weights)):
        distance = np.hypot(east - east[i], north - north[i])
        total += weights[i] * residual[i] * np.sum(weights * residual * np.maximum(1 - distance / reach, 0))
    return total
