"""The effect against the width: the chosen interval at many widths from their fits together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.inference import critical_values, quantile
from estimation.ladder import LineFits
from estimation.reading import Reading, read_fit


@dataclass(frozen=True, slots=True, kw_only=True)
class Sweep:
    """The effect at each of H common bandwidths, NaN where it can't be estimated, each shape (H,)."""

    bandwidth: Vector
    estimate: Vector
    std_error: Vector
    low: Vector
    high: Vector
    count_below: Codes
    count_above: Codes

    @classmethod
    def of(cls, bandwidth: Vector, rows: Matrix, counts: Codes) -> Sweep:
        """From (estimate, error, low, high), shape (4, H), and rows of each side, shape (2, H)."""
        return cls(
            bandwidth=bandwidth,
            estimate=rows[0],
            std_error=rows[1],
            low=rows[2],
            high=rows[3],
            count_below=counts[0],
            count_above=counts[1],
        )


def interval_rows(
    fits: LineFits, *, which: str, level: float, curvature: Vector, fuzzy: bool, enough: Mask
) -> Matrix:
    """(estimate, error, low, high) of the chosen interval at each width, shape (4, H); NaN where not `enough`.

    Parameters
    ----------
    fits
        Of the outcome, and of take-up where `fuzzy`.
    curvature
        Bounds on the second derivatives, shape (1,) or (2,).
    enough
        Widths whose sides hold enough distinct scores, shape (H,).
    """
    estimate, error = _estimates(fits.jump, fits.covariance, fuzzy=fuzzy)
    centre, reach = estimate, error
    if which == "bias-aware" and fuzzy:
        ends = np.full((2, len(estimate)), np.nan)
        for i in np.flatnonzero(enough & np.isfinite(estimate)):
            reading = read_fit(fits.at(int(i)), level=level, curvature=curvature, fuzzy=True)
            ends[:, i] = leading_interval(reading, which)
        return np.where(enough, np.stack((estimate, error, *ends)), np.nan)
    if which == "bias-aware":
        safe = np.where(error > 0.0, error, np.nan)
        bias = np.where(np.isfinite(fits.unit_bias), fits.unit_bias * curvature[0], np.nan)
        # As in one honest interval: longer by the ratio of t to the normal quantile where clusters are few.
        longer = _quantiles(level, fits.clusters) / quantile(level)
        reach = critical_values(bias / safe, level) * longer * error
    else:
        if which == "robust":
            centre, reach = _estimates(fits.robust_jump, fits.robust_covariance, fuzzy=fuzzy)
        reach = reach * _quantiles(level, fits.clusters)
    return np.where(enough, np.stack((estimate, error, centre - reach, centre + reach)), np.nan)


def _estimates(jump: Matrix, covariance: Cube, *, fuzzy: bool) -> tuple[Vector, Vector]:
    """The jump, or the ratio of jumps (`estimation.take_up.ratio_of_jumps`), with its error, each shape (H,)."""
    outcome = jump[:, 0]
    if not fuzzy:
        return outcome, np.sqrt(np.maximum(covariance[:, 0, 0], 0.0))
    take_up = np.where(jump[:, 1] == 0.0, np.nan, jump[:, 1])
    ratio = outcome / take_up
    variance = covariance[:, 0, 0] + ratio**2 * covariance[:, 1, 1] - 2.0 * ratio * covariance[:, 0, 1]
    return ratio, np.sqrt(np.maximum(variance, 0.0)) / np.abs(take_up)


def _quantiles(level: float, clusters: Codes | None) -> Vector:
    """Critical values: normal, or Student's t with one degree fewer than clusters at each width."""
    if clusters is None:
        return np.array(quantile(level))
    return np.array([quantile(level, float(max(count - 1, 1))) for count in clusters])


def leading_interval(reading: Reading, which: str) -> tuple[float, float]:
    """(low, high) of the chosen interval; NaN where it can't be had."""
    if which == "bias-aware":
        honest = reading.bias_aware
        return (float("nan"), float("nan")) if honest is None else (honest.low, honest.high)
    found = reading.robust if which == "robust" else reading.plain
    return (found.low, found.high)
