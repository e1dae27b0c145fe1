"""Covariates (methods 6): one stacked weighted regression, side-specific polynomials and one common coefficient vector."""

from __future__ import annotations

import numpy as np

from .local_polynomial import Long, kernel_weights, sides, solve


def stacked(x, y, z, above, bandwidth, order, kernel="triangular", weight=None):
    """(jump above − below, γ)."""
    k = np.zeros(len(x), dtype=Long)
    for side, width in zip((~above, above), sides(bandwidth)):
        k[side] = kernel_weights(x[side], width, kernel, None if weight is None else weight[side])
    scale = Long(max(sides(bandwidth)))
    powers = [(np.asarray(x, dtype=Long) / scale) ** j for j in range(order + 1)]
    columns = powers + [p * above for p in powers] + [z[:, j].astype(Long) for j in range(z.shape[1])]
    design = np.stack(columns, axis=1)
    size = np.sqrt(np.sum(k[:, None] * design**2, axis=0))
    design = design / size
    coefficient = solve((design * k[:, None]).T @ design, (design * k[:, None]).T @ y.astype(Long)) / size
    return coefficient[order + 1], coefficient[2 * (order + 1) :]
