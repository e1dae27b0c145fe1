r"""From an estimate and its spread to an interval, with or without a bound on the bias.

References
----------
Armstrong, T. & Kolesár, M. (2018). Optimal inference in a class of regression models. Econometrica 86,
    655–683. https://doi.org/10.3982/ECTA14434
Armstrong, T. & Kolesár, M. (2020). Simple and honest confidence intervals in nonparametric regression.
    Quantitative Economics 11, 1–39. https://doi.org/10.3982/QE1199
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ndtr, ndtri, stdtr, stdtrit

from estimation.arrays import Vector


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """An estimate with its interval.

    Attributes
    ----------
    estimate, std_error, low, high
        In units of the outcome.
    p_value
        Two-sided, of no effect.
    """

    estimate: float
    std_error: float
    low: float
    high: float
    p_value: float


@dataclass(frozen=True, slots=True, kw_only=True)
class HonestInterval:
    """An interval that holds its level whenever each side's curvature keeps to its bound.

    Attributes
    ----------
    curvature
        The bound M on the absolute second derivative, in units of outcome per squared unit of score.
    max_bias
        The worst bias under it.
    critical_value
        What replaces the normal quantile: the quantile of |N(max_bias / std_error, 1)|.
    """

    curvature: float
    max_bias: float
    critical_value: float
    low: float
    high: float


def quantile(level: float, degrees: float | None = None) -> float:
    """Two-sided critical value of a normal, or of Student's t with `degrees` of freedom."""
    tail = 0.5 * (1.0 + level)
    return float(ndtri(tail) if degrees is None else stdtrit(degrees, tail))


def two_sided(estimate: float, std_error: float, degrees: float | None = None) -> float:
    """P-value of no effect; NaN where the spread is zero or unknown."""
    if not std_error > 0.0:
        return float("nan")
    ratio = -abs(estimate) / std_error
    return float(2.0 * (ndtr(ratio) if degrees is None else stdtr(degrees, ratio)))


def interval(estimate: float, std_error: float, *, level: float, degrees: float | None = None) -> Interval:
    """Estimate ± critical value · std_error, normal or t with `degrees` of freedom."""
    reach = quantile(level, degrees) * std_error
    return Interval(
        estimate=estimate,
        std_error=std_error,
        low=estimate - reach,
        high=estimate + reach,
        p_value=two_sided(estimate, std_error, degrees),
    )


def critical_values(bias_ratio: Vector | float, level: float) -> Any:
    """The `level` quantile of |N(b, 1)|, elementwise in b ≥ 0.

    Solves Φ(c − b) − Φ(−c − b) = level by Newton steps from b + z_level (beyond the root, where the left side
    is concave, so that the steps never overshoot); for large b that starting point is the answer.
    """
    b = np.abs(np.asarray(bias_ratio, dtype=np.float64))
    z = ndtri(level)
    c = b + ndtri(0.5 * (1.0 + level))
    for _ in range(60):
        miss = ndtr(c - b) - ndtr(-c - b) - level
        slope = (np.exp(-0.5 * (c - b) ** 2) + np.exp(-0.5 * (c + b) ** 2)) / np.sqrt(2.0 * np.pi)
        step = np.where(np.isfinite(miss), miss / slope, 0.0)
        c = np.maximum(c - step, b + min(z, 0.0))
        if np.all(np.abs(step) <= 1e-14 * (1.0 + np.abs(c))):
            break
    return c if np.ndim(bias_ratio) else float(c)


def widened(level: float, degrees: float | None) -> float:
    """How much longer Student's t makes an interval than the normal law does, at least 1."""
    return 1.0 if degrees is None else quantile(level, degrees) / quantile(level)


def honest_interval(
    estimate: float,
    std_error: float,
    *,
    unit_bias: float,
    curvature: float,
    level: float,
    degrees: float | None = None,
) -> HonestInterval:
    """Estimate ± cv(max_bias / std_error)·std_error.

    Parameters
    ----------
    unit_bias
        Worst bias for each unit of `curvature` (`estimation.worst_bias`).
    degrees
        Of freedom of the error, where it comes from few clusters: the critical value grows by the ratio of t to the
        normal quantile, so that without any bias this is the t interval.
    """
    bias = unit_bias * curvature
    critical = float("nan")
    if std_error > 0.0:
        critical = float(critical_values(bias / std_error, level)) * widened(level, degrees)
    reach = critical * std_error if std_error > 0.0 else bias
    return HonestInterval(
        curvature=curvature,
        max_bias=bias,
        critical_value=critical,
        low=estimate - reach,
        high=estimate + reach,
    )


def breakdown_curvature(
    estimate: float,
    std_error: float,
    *,
    unit_bias: float,
    level: float,
    degrees: float | None = None,
    largest: float = 1e12,
) -> float:
    """The smallest bound M at which the honest interval holds zero; 0 where it always does.

    The interval's inner end moves toward zero as M grows, so that a bisection finds it.
    """

    def holds_zero(curvature: float) -> bool:
        found = honest_interval(
            abs(estimate), std_error, unit_bias=unit_bias, curvature=curvature, level=level, degrees=degrees
        )
        return found.low <= 0.0

    if holds_zero(0.0) or not unit_bias > 0.0:
        return 0.0
    low, high = 0.0, abs(estimate) / unit_bias
    while not holds_zero(high) and high < largest:
        high *= 2.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        low, high = (low, middle) if holds_zero(middle) else (middle, high)
    return high
