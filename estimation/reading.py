"""What is read off one fit: the effect, its intervals, and with take-up the ratio. Cheap enough for every key."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.arrays import Matrix, Vector
from estimation.inference import HonestInterval, Interval, honest_interval, interval
from estimation.line_fit import LineFit
from estimation.take_up import (
    WEAK_F,
    Pieces,
    Ratio,
    anderson_rubin,
    honest_anderson_rubin,
    ratio_of_jumps,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class TakeUp:
    """The first stage of a fuzzy study.

    Attributes
    ----------
    jump, std_error, low, high
        Of take-up at the line, as a share of units, with its interval.
    robust_jump
        The same, bias-corrected.
    first_stage_f
        (jump / std_error)².
    weak
        Whether F is under 16: then the Anderson–Rubin set leads.
    anderson_rubin, honest_anderson_rubin
        Sets of ratios as pieces (low, high): from the bias-corrected jumps, and from the plain ones with both regressions
        allowed to bend.
    levels_below, levels_above
        Fitted take-up at the line.
    """

    jump: float
    std_error: float
    low: float
    high: float
    robust_jump: float
    first_stage_f: float
    weak: bool
    anderson_rubin: Pieces
    honest_anderson_rubin: Pieces | None
    levels_below: float
    levels_above: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One estimate with its intervals at one pair of widths.

    Attributes
    ----------
    estimate, std_error
        Treated level less the other at the line; for a fuzzy study the ratio of the jumps.
    robust, plain
        Bias-corrected with its own error; and as if there were no bias.
    bias_aware
        Honest under a bound on the curvature, or None, then `bias_aware_reason` says why.
    levels_below, levels_above
        Fitted outcome at the line.
    count_below, count_above, effective, clusters
        Rows inside the bandwidth, Kish's equally weighted rows, clusters among them.
    take_up, intention
        Of a fuzzy study: the first stage, and the jump in the outcome itself as a sharp reading.
    """

    estimate: float
    std_error: float
    robust: Interval
    plain: Interval
    bias_aware: HonestInterval | None
    bias_aware_reason: str | None
    unit_bias: float
    levels_below: float
    levels_above: float
    count_below: int
    count_above: int
    effective: float
    clusters: int | None
    take_up: TakeUp | None = None
    intention: Reading | None = None


def read_fit(fit: LineFit, *, level: float, curvature: Vector, fuzzy: bool) -> Reading:
    """Intervals from a fit.

    Parameters
    ----------
    fit
        Variables: the outcome, then take-up where `fuzzy`.
    curvature
        Bounds on the second derivative of the outcome and, where `fuzzy`, of take-up: shape (1,) or (2,).
    """
    degrees = None if fit.clusters is None else float(max(fit.clusters - 1, 1))
    sharp = _read_jump(fit, level=level, curvature=float(curvature[0]), degrees=degrees)
    if not fuzzy:
        return sharp
    return _read_ratio(fit, sharp, level=level, curvature=curvature, degrees=degrees)


def _read_jump(fit: LineFit, *, level: float, curvature: float, degrees: float | None) -> Reading:
    estimate, error = float(fit.jump[0]), _error(fit.covariance)
    honest = (
        honest_interval(
            estimate, error, unit_bias=fit.unit_bias, curvature=curvature, level=level, degrees=degrees
        )
        if np.isfinite(fit.unit_bias)
        else None
    )
    return Reading(
        estimate=estimate,
        std_error=error,
        robust=interval(
            float(fit.robust_jump[0]), _error(fit.robust_covariance), level=level, degrees=degrees
        ),
        plain=interval(estimate, error, level=level, degrees=degrees),
        bias_aware=honest,
        bias_aware_reason=None
        if honest
        else "means are biased by the slope, which no bound on the curvature bounds",
        unit_bias=fit.unit_bias,
        levels_below=float(fit.levels_below[0]),
        levels_above=float(fit.levels_above[0]),
        count_below=fit.count_below,
        count_above=fit.count_above,
        effective=fit.effective,
        clusters=fit.clusters,
    )


def _read_ratio(
    fit: LineFit, sharp: Reading, *, level: float, curvature: Vector, degrees: float | None
) -> Reading:
    """The ratio; its bias-corrected form is the ratio of the bias-corrected jumps (at b = h an order p + 1 fit)."""
    plain = ratio_of_jumps(fit.jump, fit.covariance)
    robust = ratio_of_jumps(fit.robust_jump, fit.robust_covariance)
    honest, reason = _honest_ratio(fit, plain, level=level, curvature=curvature, degrees=degrees)
    first = interval(float(fit.jump[1]), _error(fit.covariance, 1), level=level, degrees=degrees)
    strength = (first.estimate / first.std_error) ** 2 if first.std_error > 0.0 else float("inf")
    take_up = TakeUp(
        jump=first.estimate,
        std_error=first.std_error,
        low=first.low,
        high=first.high,
        robust_jump=float(fit.robust_jump[1]),
        first_stage_f=strength,
        weak=strength < WEAK_F,
        anderson_rubin=anderson_rubin(fit.robust_jump, fit.robust_covariance, level=level, degrees=degrees),
        honest_anderson_rubin=honest[1],
        levels_below=float(fit.levels_below[1]),
        levels_above=float(fit.levels_above[1]),
    )
    return Reading(
        estimate=plain.estimate,
        std_error=plain.std_error,
        robust=interval(robust.estimate, robust.std_error, level=level, degrees=degrees),
        plain=interval(plain.estimate, plain.std_error, level=level, degrees=degrees),
        bias_aware=honest[0],
        bias_aware_reason=reason,
        unit_bias=fit.unit_bias,
        levels_below=sharp.levels_below,
        levels_above=sharp.levels_above,
        count_below=fit.count_below,
        count_above=fit.count_above,
        effective=fit.effective,
        clusters=fit.clusters,
        take_up=take_up,
        intention=sharp,
    )


def _honest_ratio(
    fit: LineFit, plain: Ratio, *, level: float, curvature: Vector, degrees: float | None
) -> tuple[tuple[HonestInterval | None, Pieces | None], str | None]:
    """The bias-aware Anderson–Rubin set, and as an interval where it is one."""
    if not np.isfinite(fit.unit_bias):
        return (None, None), "means are biased by the slope, which no bound on the curvature bounds"
    bounds = (float(curvature[0]), float(curvature[1]))
    pieces = honest_anderson_rubin(
        fit.jump, fit.covariance, unit_bias=fit.unit_bias, curvature=bounds, level=level, degrees=degrees
    )
    if len(pieces) != 1 or not np.all(np.isfinite(pieces[0])):
        return (None, pieces), "take-up jumps too little to bound the ratio on both sides"
    worst = (bounds[0] + abs(plain.estimate) * bounds[1]) * fit.unit_bias / abs(float(fit.jump[1]))
    low, high = pieces[0]
    found = HonestInterval(
        curvature=bounds[0],
        max_bias=worst,
        critical_value=0.5 * (high - low) / plain.std_error if plain.std_error > 0.0 else float("nan"),
        low=low,
        high=high,
    )
    return (found, pieces), None


def _error(covariance: Matrix, variable: int = 0) -> float:
    return float(np.sqrt(max(float(covariance[variable, variable]), 0.0)))
