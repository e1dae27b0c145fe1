r"""Partial take-up: the effect on those whom the line moved to take the programme.

The ratio of two jumps at one bandwidth, r = j_y / j_t, with the delta-method error
√(V_yy + r²V_tt − 2r V_yt)/|j_t|. A ratio over a jump near zero has no such error: the Anderson–Rubin set keeps
every r that the jump of y − r·t does not speak against,
(j_y − r j_t)² ≤ z²(V_yy + r²V_tt − 2r V_yt): an interval, two rays, or everything.

References
----------
Hahn, J., Todd, P. & Van der Klaauw, W. (2001). Identification and estimation of treatment effects with a
    regression-discontinuity design. Econometrica 69, 201–209. https://doi.org/10.1111/1468-0262.00183
Feir, D., Lemieux, T. & Marmer, V. (2016). Weak identification in fuzzy regression discontinuity designs.
    Journal of Business & Economic Statistics 34, 185–196. https://doi.org/10.1080/07350015.2015.1024836
Noack, C. & Rothe, C. (2024). Bias-aware inference in fuzzy regression discontinuity designs. Econometrica
    92, 687–711. https://doi.org/10.3982/ECTA19466
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from estimation.arrays import Mask, Matrix, Vector
from estimation.inference import critical_values, quantile, widened

# First-stage F below which the ratio's own interval does not lead (methods note, common practice of the trade).
WEAK_F: Final = 16.0

Pieces = tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Ratio:
    """A ratio of jumps with its delta-method error."""

    estimate: float
    std_error: float


def ratio_of_jumps(jump: Vector, covariance: Matrix) -> Ratio:
    """j_y / j_t and its standard error; NaN where take-up does not jump at all.

    Parameters
    ----------
    jump
        (j_y, j_t), shape (2,) or more; only the first two are used.
    covariance
        Their covariance.
    """
    outcome, take_up = float(jump[0]), float(jump[1])
    if take_up == 0.0:
        return Ratio(estimate=float("nan"), std_error=float("nan"))
    r = outcome / take_up
    variance = covariance[0, 0] + r * r * covariance[1, 1] - 2.0 * r * covariance[0, 1]
    return Ratio(estimate=r, std_error=float(np.sqrt(max(variance, 0.0))) / abs(take_up))


def anderson_rubin(jump: Vector, covariance: Matrix, *, level: float, degrees: float | None = None) -> Pieces:
    """The set of ratios that the data do not speak against, as pieces (low, high), infinite ends allowed.

    Solves a r² − 2b r + c ≤ 0 with a = j_t² − z²V_tt, b = j_y j_t − z²V_yt, c = j_y² − z²V_yy. The first
    stage is distinguishable from zero exactly when a > 0; then the set is an interval.
    """
    z = quantile(level, degrees) ** 2
    a = float(jump[1] ** 2 - z * covariance[1, 1])
    b = float(jump[0] * jump[1] - z * covariance[0, 1])
    c = float(jump[0] ** 2 - z * covariance[0, 0])
    everything: Pieces = ((-np.inf, np.inf),)
    if a == 0.0:
        if b == 0.0:
            return everything if c <= 0.0 else ()
        edge = c / (2.0 * b)
        return ((edge, np.inf),) if b > 0.0 else ((-np.inf, edge),)
    inside = b * b - a * c
    if inside < 0.0:
        # With a > 0 the set always holds j_y / j_t, so that this is the case a < 0 with no root.
        return everything
    # The root that adds like signs first: the other, c over it, loses no digits to cancellation.
    far = b + np.copysign(np.sqrt(inside), b)
    roots = sorted((far / a, c / far)) if far != 0.0 else [0.0, 0.0]
    low, high = float(roots[0]), float(roots[1])
    return ((low, high),) if a > 0.0 else ((-np.inf, low), (high, np.inf))


def honest_anderson_rubin(
    jump: Vector,
    covariance: Matrix,
    *,
    unit_bias: float,
    curvature: tuple[float, float],
    level: float,
    degrees: float | None = None,
) -> Pieces:
    """The same set when each regression may bend: r stays while |j_y − r j_t| ≤ cv(bias(r)/se(r))·se(r).

    bias(r) = (M_y + |r| M_t)·unit_bias. On the compactified line r = tan(θ) the acceptance margin is
    continuous, with a kink at r = 0; each sign change on a fine grid of angles is bisected.
    """

    longer = widened(level, degrees)

    def margin(angle: Vector) -> Vector:
        # Multiplied through by cos θ > 0: works at r = ±∞ too.
        s, c = np.sin(angle), np.cos(angle)
        gap = np.abs(c * jump[0] - s * jump[1])
        variance = c * c * covariance[0, 0] + s * s * covariance[1, 1] - 2.0 * s * c * covariance[0, 1]
        error = np.sqrt(np.maximum(variance, 0.0))
        bias = (c * curvature[0] + np.abs(s) * curvature[1]) * unit_bias
        safe = np.where(error > 0.0, error, 1.0)
        reach = np.where(error > 0.0, longer * critical_values(bias / safe, level) * safe, bias)
        return np.asarray(reach - gap)

    half = 0.5 * np.pi
    # Denser round the ratio itself, where a narrow interval would otherwise fall between grid points.
    centre = float(np.arctan2(jump[0], jump[1])) if jump[1] > 0.0 else float(np.arctan2(-jump[0], -jump[1]))
    near = centre + np.concatenate((-np.geomspace(1e-12, 1.0, 300), [0.0], np.geomspace(1e-12, 1.0, 300)))
    grid = np.unique(np.clip(np.concatenate((np.linspace(-half, half, 721), near, [0.0])), -half, half))
    inside = margin(grid) >= 0.0
    change = np.flatnonzero(inside[1:] != inside[:-1])
    cuts = _edges(margin, grid[change], grid[change + 1], inside[change])
    ends = ([-half] if inside[0] else []) + cuts + ([half] if inside[-1] else [])

    def ratio(angle: float) -> float:
        return float(np.copysign(np.inf, angle)) if abs(angle) >= half else float(np.tan(angle))

    return tuple((ratio(low), ratio(high)) for low, high in zip(ends[::2], ends[1::2]))


def _edges(margin: Callable[[Vector], Vector], low: Vector, high: Vector, inside_low: Mask) -> list[float]:
    """Where the margin changes sign between each low and high: all of them together, 32 times finer a pass."""
    steps = np.linspace(0.0, 1.0, 33)
    for _ in range(11 if len(low) else 0):
        points = low[:, None] + (high - low)[:, None] * steps
        same = (margin(points.ravel()).reshape(points.shape) >= 0.0) == inside_low[:, None]
        # The first point of the other kind ends the stretch; the ends themselves are of different kinds.
        same[:, 0], same[:, -1] = True, False
        first = np.argmin(same, axis=1)
        rows = np.arange(len(low))
        low, high = points[rows, first - 1], points[rows, first]
    return [float(cut) for cut in 0.5 * (low + high)]
