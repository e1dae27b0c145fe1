"""Local polynomial weights by dense normal equations in extended precision (Fan & Gijbels 1996)."""

from __future__ import annotations

import math

import numpy as np

Long = np.longdouble

KERNEL = {
    "triangular": lambda u: np.maximum(1 - np.abs(u), 0),
    "uniform": lambda u: np.where(np.abs(u) <= 1, 1, 0),
    "epanechnikov": lambda u: np.maximum(1 - u * u, 0) * Long(3) / 4,
}


def solve(matrix, right):
    """Gaussian elimination with partial pivoting, in the precision of its arguments."""
    a = np.array(matrix, dtype=Long)
    b = np.array(right, dtype=Long)
    if b.ndim == 1:
        return solve(a, b[:, None])[:, 0]
    size = len(a)
    for column in range(size):
        pivot = column + int(np.argmax(np.abs(a[column:, column])))
        a[[column, pivot]] = a[[pivot, column]]
        b[[column, pivot]] = b[[pivot, column]]
        for row in range(column + 1, size):
            factor = a[row, column] / a[column, column]
            a[row, column:] -= factor * a[column, column:]
            b[row] -= factor * b[column]
    answer = np.zeros_like(b)
    for row in range(size - 1, -1, -1):
        answer[row] = (b[row] - a[row, row + 1 :] @ answer[row + 1 :]) / a[row, row]
    return answer


def kernel_weights(x, bandwidth, kernel="triangular", weight=None):
    """The rows' k = K(x/h)·weight; an infinite bandwidth weighs every row by its sampling weight."""
    x = np.asarray(x, dtype=Long)
    k = np.ones_like(x) if math.isinf(bandwidth) else KERNEL[kernel](x / Long(bandwidth)).astype(Long)
    return k if weight is None else k * np.asarray(weight, dtype=Long)


def one_side_weights(x, bandwidth, order, kernel="triangular", weight=None, derivative=0):
    """l_i = e_ν′ A⁻¹ r_i k_i, the linear weights of the coefficient of x^ν; scaled inside, returned in units of x."""
    x = np.asarray(x, dtype=Long)
    scale = Long(np.max(np.abs(x))) if math.isinf(bandwidth) else Long(bandwidth)
    k = kernel_weights(x, bandwidth, kernel, weight)
    r = np.stack([(x / scale) ** j for j in range(order + 1)], axis=1)
    a = (r * k[:, None]).T @ r
    unit = np.zeros(order + 1, dtype=Long)
    unit[derivative] = 1
    return (r @ solve(a, unit)) * k / scale**derivative


def sides(bandwidth):
    """(below, above) of a bandwidth given as one number or two."""
    return bandwidth if isinstance(bandwidth, tuple) else (bandwidth, bandwidth)


def is_above(x, treated):
    """The four kinds of `treated`: where a unit exactly on the line stands follows from the words."""
    return x >= 0 if treated in ("at or above", "below") else x > 0


def effect_weights(
    x, above, bandwidth, order, kernel="triangular", weight=None, derivative=0, treated="above"
):
    """Weights of the whole sample: + on the treated side, − on the other."""
    x = np.asarray(x, dtype=float)
    weights = np.zeros(len(x), dtype=Long)
    for side, width in zip((~above, above), sides(bandwidth)):
        part = None if weight is None else np.asarray(weight)[side]
        weights[side] = one_side_weights(x[side], width, order, kernel, part, derivative)
    return np.where(above == (treated == "above"), weights, -weights)


def fitted(x, y, bandwidth, order, kernel="triangular", weight=None):
    """Fitted values of one side's local polynomial, everywhere on the side."""
    x = np.asarray(x, dtype=Long)
    y = np.asarray(y, dtype=Long)
    return sum(
        (one_side_weights(x, bandwidth, order, kernel, weight, j) @ y) * x**j for j in range(order + 1)
    )
