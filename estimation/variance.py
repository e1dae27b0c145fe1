r"""Variances of linear estimates: for weights l, Var(Σ l y) = Σ (l e)², with a residual e by each rule.

Each rule below is a way of making e, linear in the values, so that one residual serves the outcome, take-up,
covariates and every combination of them.

References
----------
Abadie, A. & Imbens, G. (2006). Large sample properties of matching estimators. Econometrica 74, 235–267.
    https://doi.org/10.1111/j.1468-0262.2006.00655.x  (nearest-neighbour residuals)
MacKinnon, J. & White, H. (1985). Some heteroskedasticity-consistent covariance matrix estimators.
    Journal of Econometrics 29, 305–325. https://doi.org/10.1016/0304-4076(85)90158-7  (HC0–HC3)
Liang, K.-Y. & Zeger, S. (1986). Longitudinal data analysis using generalized linear models.
    Biometrika 73, 13–22. https://doi.org/10.1093/biomet/73.1.13  (clusters)
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from estimation.arrays import Codes, Matrix, Vector

NEIGHBOURS: Final = 3


def neighbour_residuals(
    distance: Vector, values: Matrix, *, resolution: float, neighbours: int = NEIGHBOURS
) -> Matrix:
    r"""Residual of each row from the mean of its nearest rows on the same side, shape (n, v).

    e_i = √(J/(J+1))·(v_i − mean of the J nearest), J = `neighbours`; every row tied at the J-th distance is
    kept, and J is then their number. A side with fewer than J + 1 rows uses the rows it has.

    Parameters
    ----------
    distance
        Ascending, shape (n,).
    values
        Shape (n, v).
    resolution
        Distances that differ by at most this are ties.
    """
    n = len(distance)
    if n < 2:
        return np.zeros_like(values)
    # A level common to all rows cancels in a residual; taken off first, it costs no digits.
    centre = values[:4096].mean(axis=0)
    if not np.any(np.diff(distance) <= resolution):
        return _residuals_without_ties(distance, values, centre, resolution, neighbours)
    starts = mass_point_starts(distance, resolution)
    return _residuals_with_ties(distance, values - centre, starts, resolution, neighbours)


def mass_point_starts(distance: Vector, resolution: float) -> Codes:
    """Index of the first row of each distinct score, shape (distinct,), for ascending `distance`."""
    if not len(distance):
        return np.zeros(0, dtype=np.int64)
    return np.concatenate(([0], np.flatnonzero(np.diff(distance) > resolution) + 1))


def _residuals_with_ties(
    distance: Vector, values: Matrix, starts: Codes, resolution: float, neighbours: int
) -> Matrix:
    """Works on mass points: the rows of one point share their neighbourhood but for themselves."""
    sizes = np.diff(np.append(starts, len(distance)))
    sums = np.add.reduceat(values, starts, axis=0)
    count, total = _grow_windows(distance[starts], sizes, sums, resolution, neighbours)
    point = np.repeat(np.arange(len(starts)), sizes)
    others = np.maximum(count[point] - 1, 1)[:, None]
    mean = (total[point] - values) / others
    return np.asarray((values - mean) * np.sqrt(others / (others + 1.0)))


def _residuals_without_ties(
    distance: Vector, values: Matrix, centre: Vector, resolution: float, neighbours: int
) -> Matrix:
    """The same with one row a point, in blocks that stay in the processor's cache."""
    n, block = len(distance), 1 << 14
    result = np.empty_like(values)
    for start in range(0, n, block):
        stop = min(start + block, n)
        low, high = max(0, start - neighbours - 1), min(n, stop + neighbours + 1)
        residual = _slide(distance[low:high], values[low:high] - centre, resolution, neighbours)
        result[start:stop] = residual[start - low : stop - low]
    return result


def _slide(points: Vector, values: Matrix, resolution: float, neighbours: int) -> Matrix:
    """Among the J + 1 runs of J + 1 rows that hold a row, the one that reaches least far is its neighbourhood.

    Two runs reach equally far when the J-th neighbour is tied between the sides: both ends are kept.
    """
    n, j = len(points), min(neighbours, len(points) - 1)
    edge = np.full(j, np.inf)
    padded = np.concatenate((-edge, points, edge))
    filled = np.concatenate((np.zeros((j, values.shape[1])), values, np.zeros((j, values.shape[1]))))

    def lag(array: Matrix, k: int) -> Matrix:
        return array[j + k : j + k + n]

    reaches = [np.maximum(points - lag(padded, -k), lag(padded, j - k) - points) for k in range(j + 1)]
    nearest = np.minimum.reduce(reaches) + resolution
    total = np.zeros_like(values)
    unsettled = np.ones(n, dtype=bool)
    tied = np.zeros(n)
    window = np.sum([lag(filled, k) for k in range(j + 1)], axis=0)
    for k in range(j + 1):
        best = reaches[k] <= nearest
        first = best & unsettled
        again = best & ~unsettled
        total[first] = window[first]
        if again.any():
            total[again] += lag(filled, -k)[again]
            tied[again] += 1.0
        unsettled &= ~best
        if k < j:
            window = window + lag(filled, -k - 1) - lag(filled, j - k)
    others = (j + tied)[:, None]
    return np.asarray((values - (total - values) / others) * np.sqrt(others / (others + 1.0)))


def _grow_windows(
    points: Vector, sizes: Codes, sums: Matrix, resolution: float, neighbours: int
) -> tuple[Codes, Matrix]:
    """Rows and sums of the smallest symmetric-by-distance window round each mass point.

    Each pass adds the nearest point not yet in the window, or both where they are equally far; a window with
    `neighbours` rows beside the row itself is done. At most `neighbours` passes are needed.
    """
    n = len(points)
    left, right = np.arange(n) - 1, np.arange(n) + 1
    count, total = sizes.copy(), sums.copy()
    padded = np.concatenate(([-np.inf], points, [np.inf]))
    for _ in range(neighbours):
        growing = count - 1 < neighbours
        if not growing.any():
            break
        gap_left = points - padded[left + 1]
        gap_right = padded[right + 1] - points
        nearer = np.minimum(gap_left, gap_right) + resolution
        for gap, edge, step in ((gap_left, left, -1), (gap_right, right, 1)):
            take = growing & (gap <= nearer) & np.isfinite(gap)
            index = edge[take]
            count[take] += sizes[index]
            total[take] += sums[index]
            edge[take] += step
    return count, total


def fit_residuals(
    values: Matrix, fitted: Matrix, leverage: Vector, *, kind: str, rows: int, parameters: int
) -> Matrix:
    """Residuals of a local fit, scaled as `kind` ("hc0" … "hc3") asks, shape (m, v).

    Parameters
    ----------
    values, fitted
        Shape (m, v).
    leverage
        Diagonal of the weighted fit's hat matrix, shape (m,).
    rows, parameters
        Of one side's fit, for HC1's n / (n − p − 1).
    """
    residual = values - fitted
    if kind == "hc1":
        return np.asarray(residual * np.sqrt(rows / max(rows - parameters, 1)))
    if kind in ("hc2", "hc3"):
        # A row that its own fit passes through has leverage 1 and says nothing of the noise.
        room = np.maximum(1.0 - leverage, 1e-10)[:, None]
        return np.asarray(residual / (np.sqrt(room) if kind == "hc2" else room))
    return residual


@dataclass(frozen=True, slots=True, kw_only=True)
class Spread:
    """Covariance of the linear estimates Σ l v.

    Attributes
    ----------
    covariance
        Shape (v, v).
    clusters
        Clusters with a non-zero weight, or None without clusters.
    """

    covariance: Matrix
    clusters: int | None


def independent_spread(scores: Matrix) -> Matrix:
    """Σ s s′ for scores s = l·e, shape (n, v): rows independent of each other."""
    return np.asarray(scores.T @ scores)


def clustered_spread(scores: Matrix, cluster: Codes) -> Spread:
    """Σ_g (Σ_{i∈g} s_i)(Σ_{i∈g} s_i)′·G/(G−1); clusters may span both sides."""
    names, code = np.unique(cluster, return_inverse=True)
    count = len(names)
    sums = np.stack([np.bincount(code, weights=column, minlength=count) for column in scores.T], axis=1)
    covariance = np.asarray(sums.T @ sums * (count / max(count - 1, 1)), dtype=np.float64)
    return Spread(covariance=covariance, clusters=count)
