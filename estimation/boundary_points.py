r"""Effects at points along a boundary: local linear in the plane, with the points' joint covariance.

At a point b each side is fitted by least squares on (1, u₁, u₂), u = (X − b)/h, with weights K(‖u‖)·w; the effect is
the difference of the intercepts. A fit in the distance alone has a bias of order h where the line bends; this one has
order h² there too. Squares and their product stand beside them for the bias-corrected form (the order 2 fit at the
same h).

Row i moves the effect at point k by ψ_ik = l_ik e_ik / √(1 − h_ii) (HC2), and points share rows, so that their
covariance is Ψ′Ψ; with clusters rows are added up by cluster first. Few rows stand behind a point: intervals are
Student's t with the degrees of freedom of Bell & McCaffrey (2002), and the band that holds at all points together maps
the quantile c of max |N(0, R)| to each point's own t, t_ν⁻¹(Φ(c)).

References
----------
Keele, L. & Titiunik, R. (2015). Geographic boundaries as regression discontinuities. Political Analysis 23, 127–155.
    https://doi.org/10.1093/pan/mpu014
Imbens, G. & Zajonc, T. (2011). Regression discontinuity design with multiple forcing variables. Working paper.
Bell, R. & McCaffrey, D. (2002). Bias reduction in standard errors for linear regression with multi-stage samples.
    Survey Methodology 28, 169–181.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.special import ndtr, stdtrit

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.kernels import kernel_values

FEWEST_ROWS: Final = 20
# A plane has three coefficients: with few clusters a side it passes through their means, and their residuals, summed by
# cluster, all but vanish. The error would be a pretence (no source; twice the coefficients).
FEWEST_CLUSTERS: Final = 6
FEWEST_DEGREES: Final = 5.0
FEW_DEGREES: Final = 15.0
BAND_DRAWS: Final = 20_000


@dataclass(frozen=True, slots=True, kw_only=True)
class PointEffects:
    """Effects at K points, NaN where they can't be estimated.

    Attributes
    ----------
    estimate, std_error, degrees, low, high
        Shape (K,): effect, HC2 error, degrees of freedom, pointwise interval.
    band_low, band_high
        Shape (K,): limits that hold at all estimated points together.
    corrected, corrected_low, corrected_high
        Shape (K,): the same pointwise by the order 2 fit at the same width.
    covariance
        Of the estimates, shape (K, K); NaN rows and columns where there is none.
    below, above
        Rows of the other and of the treated side inside the kernel, shape (K,).
    critical
        The quantile c of max |N(0, R)|.
    reasons
        For each point why there is no effect, or "" where there is one.
    """

    estimate: Vector
    std_error: Vector
    degrees: Vector
    low: Vector
    high: Vector
    band_low: Vector
    band_high: Vector
    corrected: Vector
    corrected_low: Vector
    corrected_high: Vector
    covariance: Matrix
    below: Codes
    above: Codes
    critical: float
    bandwidth: float
    level: float
    reasons: tuple[str, ...]

    @property
    def known(self) -> Mask:
        """Which points have an effect, shape (K,)."""
        return np.isfinite(self.estimate)

    @property
    def thin(self) -> Mask:
        """Which of them stand on few degrees of freedom, shape (K,)."""
        return self.known & (self.degrees < FEW_DEGREES)


@dataclass(frozen=True, slots=True, kw_only=True)
class Average:
    """A weighted mean of point effects, with its error from their joint covariance."""

    estimate: float
    std_error: float
    low: float
    high: float


def point_effects(
    *,
    places: Matrix,
    treated: Mask,
    outcome: Vector,
    points: Matrix,
    frames: Cube,
    bandwidth: float,
    level: float = 0.95,
    kernel: str = "triangular",
    weight: Vector | None = None,
    cluster: Codes | None = None,
    seed: int = 0,
) -> PointEffects:
    """Effects at points of a boundary.

    Parameters
    ----------
    places
        Coordinates of n units, shape (n, d): x and y in a plane, or earth-centred X, Y, Z in metres.
    treated, outcome, weight, cluster
        Shape (n,).
    points
        Coordinates of K points in the same system, shape (K, d).
    frames
        For each point two unit vectors of the plane in which offsets are taken, shape (K, 2, d): the identity in a plane,
        east and north on the earth (a tangent plane is 4 mm off at 10 km).
    bandwidth
        Radius of the kernel, in the coordinates' unit.
    seed
        Of the draws behind the simultaneous band.
    """
    count = len(points)
    nothing = np.full(count, np.nan)
    first = _Collected(count)
    second = _Collected(count)
    rows = np.zeros((2, count), dtype=np.int64)
    reasons = [""] * count
    most_degrees = np.full(count, np.inf)
    for k in range(count):
        offset = (places - points[k]) @ frames[k].T / bandwidth
        near = np.flatnonzero((offset**2).sum(axis=1) < 1.0)
        side = treated[near]
        rows[:, k] = ((~side).sum(), side.sum())
        if rows[:, k].min() < FEWEST_ROWS:
            reasons[k] = f"fewer than {FEWEST_ROWS} rows on a side within the width"
            continue
        if cluster is not None:
            groups = [len(np.unique(cluster[near[rows_of]])) for rows_of in (~side, side)]
            if min(groups) < FEWEST_CLUSTERS:
                reasons[k] = f"fewer than {FEWEST_CLUSTERS} clusters on a side within the width"
                continue
            most_degrees[k] = len(np.unique(cluster[near])) - 1.0
        given = None if weight is None else weight[near]
        for order, collected in ((1, first), (2, second)):
            fits = [
                _fit(
                    offset[near[rows_of]],
                    outcome[near[rows_of]],
                    None if given is None else given[rows_of],
                    order,
                    kernel,
                )
                for rows_of in (~side, side)
            ]
            if any(fit is None for fit in fits):
                reasons[k] = reasons[k] or "rows within the width lie too much in a line"
                continue
            below, above = (fit for fit in fits if fit is not None)
            collected.add(k, near, side, below, above)
    thin = np.minimum(first.degrees, most_degrees) < FEWEST_DEGREES
    for place in np.flatnonzero(thin).tolist():
        reasons[place] = reasons[place] or f"under {FEWEST_DEGREES:g} degrees of freedom"
    estimate = np.where(thin, np.nan, first.estimate)
    covariance = first.covariance(len(places), cluster)
    covariance[thin] = np.nan
    covariance[:, thin] = np.nan
    error = np.sqrt(np.diagonal(covariance))
    known = np.isfinite(estimate) & np.isfinite(error)
    critical = _critical(covariance[np.ix_(known, known)], level, seed)
    degrees = np.where(known, np.minimum(first.degrees, most_degrees), np.nan)
    reach = nothing.copy()
    reach[known] = stdtrit(degrees[known], 0.5 * (1.0 + level)) * error[known]
    band = nothing.copy()
    band[known] = stdtrit(degrees[known], ndtr(critical)) * error[known]
    corrected = np.where(known, second.estimate, np.nan)
    corrected_error = np.sqrt(np.diagonal(second.covariance(len(places), cluster)))
    usable = np.isfinite(corrected) & (second.degrees > 1.0)
    half = nothing.copy()
    half[usable] = stdtrit(second.degrees[usable], 0.5 * (1.0 + level)) * corrected_error[usable]
    return PointEffects(
        estimate=estimate,
        std_error=np.where(known, error, np.nan),
        degrees=degrees,
        low=estimate - reach,
        high=estimate + reach,
        band_low=estimate - band,
        band_high=estimate + band,
        corrected=corrected,
        corrected_low=corrected - half,
        corrected_high=corrected + half,
        covariance=covariance,
        below=rows[0],
        above=rows[1],
        critical=critical,
        bandwidth=bandwidth,
        level=level,
        reasons=tuple(reasons),
    )


def average(effects: PointEffects, share: Vector) -> Average:
    """Mean of the known effects with weights `share` (by length, or by units), shape (K,).

    Its degrees of freedom are Satterthwaite's of the weighted variances, no more than the points' own allow.
    """
    known = effects.known
    a = np.where(known, share, 0.0)
    a = a[known] / a.sum()
    covariance = effects.covariance[np.ix_(known, known)]
    estimate, variance = float(a @ effects.estimate[known]), float(a @ covariance @ a)
    own = a**2 * np.diagonal(covariance)
    degrees = float(own.sum() ** 2 / (own**2 / effects.degrees[known]).sum())
    reach = float(stdtrit(degrees, 0.5 * (1.0 + effects.level))) * np.sqrt(variance)
    return Average(
        estimate=estimate, std_error=float(np.sqrt(variance)), low=estimate - reach, high=estimate + reach
    )


@dataclass(frozen=True, slots=True)
class _SideFit:
    intercept: float
    moves: Vector  # l e / √(1 − h), shape (rows,)
    trace: float
    trace_of_square: float


class _Collected:
    """What the points' fits leave: estimates, degrees of freedom, and how each row moves each of them."""

    def __init__(self, count: int) -> None:
        self.estimate = np.full(count, np.nan)
        self.degrees = np.full(count, np.nan)
        self._entries: list[tuple[int, Codes, Vector]] = []

    def add(self, k: int, near: Codes, side: Mask, below: _SideFit, above: _SideFit) -> None:
        self.estimate[k] = above.intercept - below.intercept
        square = below.trace_of_square + above.trace_of_square
        self.degrees[k] = (below.trace + above.trace) ** 2 / square if square > 0.0 else np.nan
        moves = np.empty(len(near))
        moves[side], moves[~side] = above.moves, -below.moves
        self._entries.append((k, near, moves))

    def covariance(self, rows: int, cluster: Codes | None) -> Matrix:
        """Ψ′Ψ, shape (K, K), NaN where there is no estimate; with clusters of their sums, times G/(G − 1)."""
        from scipy.sparse import csc_matrix  # only a boundary needs it

        count = len(self.estimate)
        if not self._entries:
            return np.full((count, count), np.nan)
        code = np.arange(rows) if cluster is None else np.unique(cluster, return_inverse=True)[1]
        psi = csc_matrix(
            (
                np.concatenate([moves for _, _, moves in self._entries]),
                (
                    np.concatenate([code[near] for _, near, _ in self._entries]),
                    np.concatenate([np.full(len(near), k) for k, near, _ in self._entries]),
                ),
            ),
            shape=(int(code.max()) + 1, count),
        )
        psi.sum_duplicates()
        product = np.asarray((psi.T @ psi).todense(), dtype=np.float64)
        if cluster is not None:
            groups = psi.shape[0]
            product *= groups / max(groups - 1, 1)
        missing = ~np.isfinite(self.estimate)
        product[missing] = np.nan
        product[:, missing] = np.nan
        return product


def _basis(offset: Matrix, order: int) -> Matrix:
    u, v = offset[:, 0], offset[:, 1]
    columns = [np.ones(len(u)), u, v]
    if order == 2:
        columns += [u * u, u * v, v * v]
    return np.column_stack(columns)


def _fit(offset: Matrix, outcome: Vector, weight: Vector | None, order: int, kernel: str) -> _SideFit | None:
    """One side's fit at one point; None where its rows can't carry it."""
    k = kernel_values(np.sqrt((offset**2).sum(axis=1)), 1.0, kernel)
    if weight is not None:
        k = k * weight
    basis = _basis(offset, order)
    gram = basis.T @ (k[:, None] * basis)
    if len(outcome) <= basis.shape[1] or not np.linalg.cond(gram) < 1e10:
        return None
    inverse: Matrix = np.asarray(np.linalg.inv(gram), dtype=np.float64)
    line = (basis @ inverse[0]) * k
    fitted = basis @ (inverse @ (basis.T @ (k * outcome)))
    leverage = k * np.einsum("ij,jk,ik->i", basis, inverse, basis)
    room: Vector = np.maximum(1.0 - leverage, 1e-10)
    trace, trace_of_square = _satterthwaite(basis, inverse, k, np.asarray(line**2 / room))
    return _SideFit(
        intercept=float(line @ outcome),
        moves=line * (outcome - fitted) / np.sqrt(room),
        trace=trace,
        trace_of_square=trace_of_square,
    )


def _satterthwaite(basis: Matrix, inverse: Matrix, k: Vector, squares: Vector) -> tuple[float, float]:
    r"""Tr S and tr S² of the variance estimate as a quadratic form in independent equal errors.

    S = (I − H)′ D² (I − H) with D² = `squares` on the diagonal and H = X A X′W. All n × n products reduce to sums over rows
    of n × 3p arrays: with C = A X′W²X A, P = [−XA, −WX, XC], Q = [WX, XA, X], (I − H)(I − H)′ = I + P Q′.
    """
    inner = inverse @ (basis.T @ ((k * k)[:, None] * basis)) @ inverse
    left = np.concatenate((-basis @ inverse, -k[:, None] * basis, basis @ inner), axis=1)
    right = np.concatenate((k[:, None] * basis, basis @ inverse, basis), axis=1)
    own = np.einsum("ij,ij->i", left, right)
    trace = float(np.sum(squares * (1.0 + own)))
    cross = np.sum((left.T @ (squares[:, None] * left)) * (right.T @ (squares[:, None] * right)))
    return trace, float(np.sum(squares**2 * (1.0 + 2.0 * own)) + cross)


def _critical(covariance: Matrix, level: float, seed: int) -> float:
    """The `level` quantile of max |N(0, R)| over the points, by draws; R's negative eigenvalues are rounding."""
    if not len(covariance):
        return float("nan")
    error = np.sqrt(np.diagonal(covariance))
    values, vectors = np.linalg.eigh(covariance / np.outer(error, error))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    draws = np.random.default_rng(seed).standard_normal((BAND_DRAWS, len(values))) @ root.T
    return float(np.quantile(np.abs(draws).max(axis=1), level))
