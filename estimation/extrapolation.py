r"""The effect away from the line, between two cutoffs.

Two groups of units have cutoffs l < H on one score. Between them those with the lower one are treated and those with
the higher one are not, so that with a gap between their untreated curves that stays what it is at l,

    τ(x) = μ₁ˡ(x) − [μ₀ᴴ(x) + (μ₀ˡ(l) − μ₀ᴴ(l))],   l ≤ x < H.

At x = l it is the group's own effect at its line. That the gap is constant can be looked at only below l, where both
groups are untreated: there their curves must be parallel. Where the lower side is treated, everything is reflected.
With take-up the same is done to take-up, and the ratio of the two is the effect.

Each curve's value is a local polynomial fit, linear in the outcomes, so that the variance follows from the rows'
scores, summed by cluster where there are clusters. Intervals are bias-corrected: the fits one order up at the same
width.

References
----------
Cattaneo, M., Keele, L., Titiunik, R. & Vazquez-Bare, G. (2021). Extrapolating treatment effects in multi-cutoff
    regression discontinuity designs. JASA 116, 1941–1952. https://doi.org/10.1080/01621459.2020.1751646
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.inference import Interval, interval
from estimation.kernels import kernel_values
from estimation.variance import (
    clustered_spread,
    fit_residuals,
    independent_spread,
    mass_point_starts,
    neighbour_residuals,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Group:
    """The units under one cutoff.

    Attributes
    ----------
    score
        As in the file, shape (n,), finite.
    values
        The outcome, then take-up where the study has one, shape (n, 1) or (n, 2), finite.
    treated
        Whether the rule hands the programme to the unit, shape (n,).
    weight, cluster
        Shape (n,) or None; cluster codes are shared between groups.
    cutoff
        In units of the score.
    bandwidth
        Of every local fit to this group, in units of the score.
    """

    score: Vector
    values: Matrix
    treated: Mask
    cutoff: float
    bandwidth: float
    weight: Vector | None = None
    cluster: Codes | None = None

    def part(self, rows: Mask, sign: float) -> _Part:
        """Some of its rows, by ascending (reflected) score."""
        index = np.flatnonzero(rows)
        index = index[np.argsort(sign * self.score[index], kind="stable")]
        x, values = sign * self.score[index], self.values[index]
        alone = self.cluster is None and len(index) > 0
        return _Part(
            x=x,
            values=values,
            # Neighbours are looked for among all rows of the part, as on one side of a line.
            residual=neighbour_residuals(x - x[0], values, resolution=0.0) if alone else None,
            weight=np.ones(len(index)) if self.weight is None else self.weight[index],
            cluster=None if self.cluster is None else self.cluster[index],
            bandwidth=self.bandwidth,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Constancy:
    """Whether the untreated curves of the two groups run parallel where both can be seen.

    Attributes
    ----------
    slopes
        Difference of the two untreated curves' slopes at the first cutoff, outcome per unit of score.
    points, gap, low, high
        Scores on the untreated side of both lines, and the gap between the curves there with its pointwise interval,
        shape (m,); NaN where either curve can't be fitted.
    """

    slopes: Interval
    points: Vector
    gap: Vector
    low: Vector
    high: Vector


@dataclass(frozen=True, slots=True, kw_only=True)
class Extrapolation:
    """The effect on the units of one group between its cutoff and the other's.

    Attributes
    ----------
    points
        Scores, shape (m,).
    estimate
        Plain local fits; for a fuzzy study the ratio. NaN where a curve can't be fitted.
    robust
        Bias-corrected centre, error and pointwise interval at each point, or None where it can't be had.
    covariance
        Of the bias-corrected estimates, shape (m, m), NaN where there is none.
    first, other
        The cutoff of the group whose effect this is, and the other's.
    constancy
        What can be seen of the assumption.
    """

    points: Vector
    estimate: Vector
    robust: tuple[Interval | None, ...]
    covariance: Matrix
    first: float
    other: float
    constancy: Constancy


@dataclass(frozen=True, slots=True, kw_only=True)
class _Part:
    x: Vector
    values: Matrix
    residual: Matrix | None
    weight: Vector
    cluster: Codes | None
    bandwidth: float


@dataclass(frozen=True, slots=True, kw_only=True)
class _Fit:
    """A value that is linear in the rows of one part, and the rows' scores in its spread, shape (n, v)."""

    value: Vector
    scores: Matrix


def extrapolate(
    one: Group,
    two: Group,
    *,
    points: Vector,
    kernel: str,
    order: int,
    level: float,
    treated_above: bool,
    variance: str = "neighbour",
) -> Extrapolation:
    """The effect between two cutoffs under a constant gap between the untreated curves.

    Parameters
    ----------
    one, two
        The groups in any order; their cutoffs must differ.
    points
        Scores from the first group's cutoff up to the other's, shape (m,).
    treated_above
        Whether the rule treats the upper side.

    Raises
    ------
    CannotEstimate
        When the curves can't be fitted at the first cutoff, or the two cutoffs are one.
    """
    if one.cutoff == two.cutoff:
        raise CannotEstimate(
            "The two sites have the same cutoff, so that nothing lies between.", "Choose sites that differ."
        )
    sign = 1.0 if treated_above else -1.0
    first, other = (one, two) if sign * one.cutoff < sign * two.cutoff else (two, one)
    parts = (
        first.part(first.treated, sign),
        first.part(~first.treated, sign),
        other.part(~other.treated, sign),
    )
    here = sign * first.cutoff
    estimate, _ = _effects(*_at_points(parts, here, sign * points, kernel, order, variance))
    centres, linear = _effects(*_at_points(parts, here, sign * points, kernel, order + 1, variance))
    covariance, degrees = _joint(parts, linear)
    found = [
        None
        if not np.isfinite(centre)
        else interval(float(centre), float(np.sqrt(max(spread, 0.0))), level=level, degrees=degrees)
        for centre, spread in zip(centres, np.diagonal(covariance))
    ]
    return Extrapolation(
        points=points,
        estimate=estimate,
        robust=tuple(found),
        covariance=covariance,
        first=first.cutoff,
        other=other.cutoff,
        constancy=_constancy(parts, here, sign, kernel, order, level, variance),
    )


def _at_points(
    parts: tuple[_Part, _Part, _Part], here: float, points: Vector, kernel: str, order: int, variance: str
) -> tuple[Matrix, tuple[Cube, Cube, Cube]]:
    """Jumps at each point, shape (m, v), and the scores of the three parts' rows in them, each (m, n, v)."""
    treated, untreated, other = parts
    base = _local(untreated, here, kernel, order, 0, variance)
    level_there = _local(other, here, kernel, order, 0, variance)
    v = treated.values.shape[1]
    values = np.full((len(points), v), np.nan)
    scores = tuple(np.full((len(points), len(part.x), v), np.nan) for part in parts)
    for i, point in enumerate(points):
        try:
            own = _local(treated, float(point), kernel, order, 0, variance)
            theirs = _local(other, float(point), kernel, order, 0, variance)
        except CannotEstimate:
            continue
        values[i] = own.value - theirs.value - base.value + level_there.value
        scores[0][i], scores[1][i] = own.scores, -base.scores
        scores[2][i] = level_there.scores - theirs.scores
    return values, (scores[0], scores[1], scores[2])


def _effects(values: Matrix, scores: tuple[Cube, Cube, Cube]) -> tuple[Vector, list[Matrix]]:
    """The effect at each point, and its scores by part, each (m, n): the jump itself, or the ratio of two."""
    if values.shape[1] == 1:
        return values[:, 0], [part[:, :, 0] for part in scores]
    ratio = values[:, 0] / np.where(values[:, 1] != 0.0, values[:, 1], np.nan)
    linear = [(part[:, :, 0] - ratio[:, None] * part[:, :, 1]) / values[:, 1, None] for part in scores]
    return ratio, linear


def _joint(parts: tuple[_Part, ...], linear: list[Matrix]) -> tuple[Matrix, float | None]:
    """Covariance over the points, and the degrees of freedom of its spread."""
    stacked = np.concatenate(linear, axis=1).T  # rows × points
    known = np.isfinite(stacked).all(axis=0)
    covariance = np.full((stacked.shape[1], stacked.shape[1]), np.nan)
    clusters = [part.cluster for part in parts if part.cluster is not None]
    if len(clusters) < len(parts):
        covariance[np.ix_(known, known)] = independent_spread(stacked[:, known])
        return covariance, None
    counted = np.any(stacked[:, known] != 0.0, axis=1)
    spread = clustered_spread(stacked[counted][:, known], np.concatenate(clusters)[counted])
    covariance[np.ix_(known, known)] = spread.covariance
    return covariance, float(max((spread.clusters or 2) - 1, 1))


def _constancy(
    parts: tuple[_Part, _Part, _Part],
    here: float,
    sign: float,
    kernel: str,
    order: int,
    level: float,
    variance: str,
) -> Constancy:
    """Slopes at the first cutoff, one order up as a slope asks for, and the gap at points further out."""
    _, untreated, other = parts
    pair = (untreated, other)
    slopes = [_local(part, here, kernel, order + 1, 1, variance) for part in pair]
    difference = sign * (slopes[0].value[0] - slopes[1].value[0])
    spread, degrees = _joint(pair, [slopes[0].scores[None, :, 0], -slopes[1].scores[None, :, 0]])
    reach = min(here - max(untreated.x[0], other.x[0]), 2.0 * max(untreated.bandwidth, other.bandwidth))
    points = here - np.linspace(0.0, max(reach, 0.0), 9)
    gap, low, high = (np.full(len(points), np.nan) for _ in range(3))
    for i, point in enumerate(points):
        try:
            fits = [_local(part, float(point), kernel, order, 0, variance) for part in pair]
        except CannotEstimate:
            continue
        gap[i] = fits[0].value[0] - fits[1].value[0]
        own, own_degrees = _joint(pair, [fits[0].scores[None, :, 0], -fits[1].scores[None, :, 0]])
        found = interval(float(gap[i]), float(np.sqrt(own[0, 0])), level=level, degrees=own_degrees)
        low[i], high[i] = found.low, found.high
    return Constancy(
        slopes=interval(float(difference), float(np.sqrt(spread[0, 0])), level=level, degrees=degrees),
        points=sign * points,
        gap=gap,
        low=low,
        high=high,
    )


def _local(part: _Part, point: float, kernel: str, order: int, power: int, variance: str) -> _Fit:
    """Coefficient of (x − point)^power of a local fit of one part, with its rows' scores.

    Rows without clusters take nearest-neighbour residuals unless the study asks for another rule; with clusters the
    residuals are the fit's own.

    Raises
    ------
    CannotEstimate
        With fewer than order + 2 distinct scores inside the bandwidth.
    """
    h = part.bandwidth
    distance = np.abs(part.x - point)
    k = kernel_values(distance, h, kernel) * part.weight
    inside = np.flatnonzero(k > 0.0)
    distinct = len(mass_point_starts(part.x[inside], 8.0 * np.finfo(np.float64).eps * abs(point)))
    # A curve is continued past its last row by no more than half a bandwidth.
    if distinct < order + 2 or not part.x[0] - 0.5 * h <= point <= part.x[-1] + 0.5 * h:
        raise CannotEstimate(
            f"Within {h:.6g} of {abs(point):.6g} there are {distinct} distinct scores on the side that the curve needs; "
            f"a fit of order {order} needs {order + 2}.",
            "Widen the bandwidth or choose sites that overlap.",
        )
    basis = np.vander((part.x[inside] - point) / h, order + 1, increasing=True)
    root = np.sqrt(k[inside])
    q, r = np.linalg.qr(basis * root[:, None])
    all_weights = np.linalg.solve(r, q.T) * root
    weights = all_weights[power] / h**power
    values = part.values[inside]
    if variance == "neighbour" and part.residual is not None:
        residual = part.residual[inside]
    else:
        residual = fit_residuals(
            values,
            basis @ (all_weights @ values),
            np.einsum("ij,ij->i", q, q),
            kind=variance,
            rows=len(inside),
            parameters=order + 1,
        )
    scores = np.zeros_like(part.values)
    scores[inside] = weights[:, None] * residual
    return _Fit(value=weights @ values, scores=scores)
