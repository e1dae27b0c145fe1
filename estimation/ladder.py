r"""The ladder: the fit at the line for any bandwidths, from running sums.

Answers what `estimation.local_polynomial.fit_rows` answers with nearest-neighbour variances, to 1e-10, in a
time that does not grow with the rows. All queries are vectors of bandwidths; one width is a vector of one.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from estimation.adjustment import common_coefficients
from estimation.arrays import Codes, Cube, Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.kernels import COEFFICIENTS
from estimation.line_fit import Bandwidths, LineFit, too_few
from estimation.moments import (
    Extended,
    Rungs,
    SideSums,
    combine,
    hankel,
    kernel_coefficients,
    solve,
)
from estimation.sample import Sample, Side, SideName
from estimation.variance import neighbour_residuals


@dataclass(frozen=True, slots=True, kw_only=True)
class Widths:
    """Bandwidths to ask about, each shape (H,), in units of the score."""

    below: Vector
    above: Vector
    pilot_below: Vector
    pilot_above: Vector

    @classmethod
    def of(cls, bandwidths: Bandwidths) -> Widths:
        """One query."""
        b = bandwidths
        return cls(
            below=np.array([b.below]),
            above=np.array([b.above]),
            pilot_below=np.array([b.pilot_below]),
            pilot_above=np.array([b.pilot_above]),
        )

    @classmethod
    def common(cls, bandwidth: Vector, pilot: float | None = None) -> Widths:
        """The same on both sides; the pilot follows the bandwidth unless it is given."""
        h = np.asarray(bandwidth, dtype=np.float64)
        b = h if pilot is None else np.full(len(h), float(pilot))
        return cls(below=h, above=h, pilot_below=b, pilot_above=b)


@dataclass(frozen=True, slots=True, kw_only=True)
class LineFits:
    """A `LineFit` for each query: the same quantities with a leading axis H, NaN where a fit can't run."""

    levels_below: Matrix
    levels_above: Matrix
    jump: Matrix
    covariance: Cube
    robust_jump: Matrix
    robust_covariance: Cube
    unit_bias: Vector
    adjustment: Cube
    count_below: Codes
    count_above: Codes
    effective: Vector

    def at(self, i: int) -> LineFit:
        """One of them."""
        return LineFit(
            levels_below=self.levels_below[i],
            levels_above=self.levels_above[i],
            jump=self.jump[i],
            covariance=self.covariance[i],
            robust_jump=self.robust_jump[i],
            robust_covariance=self.robust_covariance[i],
            unit_bias=float(self.unit_bias[i]),
            adjustment=self.adjustment[i],
            count_below=int(self.count_below[i]),
            count_above=int(self.count_above[i]),
            effective=float(self.effective[i]),
            clusters=None,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Ladder:
    """Both sides' running sums for one kernel, and every order up to the one they were built for."""

    below: SideSums
    above: SideSums
    kernel: str
    order: int
    treated_sign: float
    targets: int
    resolution: float

    @classmethod
    def build(cls, sample: Sample, *, kernel: str, order: int, adjust: bool = False) -> Ladder:
        """Sum the rows once.

        Parameters
        ----------
        sample
            Rows of both sides; any donut is already taken out.
        order
            Fits up to this order, with their bias correction, can be asked for.
        adjust
            Keep what covariate adjustment needs.
        """
        degree = len(COEFFICIENTS[kernel]) - 1
        # A bias-corrected fit needs 2(p + 1) powers and twice the kernel's own, the bandwidth rule a global
        # fit of order p + 2, the rule-of-thumb curvature a global quartic.
        powers = 1 + max(2 * (order + 1) + 2 * degree, 2 * (order + 2) + 1, 8)
        nearest = np.concatenate((sample.below.values[:4096], sample.above.values[:4096]))
        centre = nearest.mean(axis=0)

        def sums(named: tuple[SideName, Side]) -> SideSums:
            name, side = named
            residual = neighbour_residuals(side.distance, side.values, resolution=sample.resolution)
            rungs = Rungs.build(
                side, residual, centre, powers=powers, with_products=adjust, extended=order > 1
            )
            return SideSums.join(name, (rungs,), sample.resolution)

        # The sides are independent, and array arithmetic releases the interpreter: two cores, half the wait.
        with ThreadPoolExecutor(2) as pool:
            below, above = pool.map(sums, sample.sides)
        return cls(
            below=below,
            above=above,
            kernel=kernel,
            order=order,
            treated_sign=sample.treated_sign,
            targets=1 + int(sample.has_take_up),
            resolution=sample.resolution,
        )

    @classmethod
    def merge(cls, ladders: Sequence[Ladder]) -> Ladder:
        """One ladder over the rows of all: its sums are theirs added.

        Residuals stay those of each part: neighbours are not looked for across parts.
        """
        first = ladders[0]
        for other in ladders[1:]:
            if (other.kernel, other.order, other.treated_sign) != (
                first.kernel,
                first.order,
                first.treated_sign,
            ):
                raise ValueError("ladders of different kernels, orders or treated sides do not merge")
        resolution = max(ladder.resolution for ladder in ladders)
        below = tuple(part for ladder in ladders for part in ladder.below.parts)
        above = tuple(part for ladder in ladders for part in ladder.above.parts)
        # One centre for both sides: a difference of levels must not carry a difference of centres.
        above = SideSums.join("above", (below[0], *above), resolution).parts[1:]
        return cls(
            below=SideSums.join("below", below, resolution),
            above=SideSums.join("above", above, resolution),
            kernel=first.kernel,
            order=first.order,
            treated_sign=first.treated_sign,
            targets=first.targets,
            resolution=resolution,
        )

    def fit(self, bandwidths: Bandwidths, *, order: int | None = None, adjust: bool = False) -> LineFit:
        """The fit at one pair of widths.

        Raises
        ------
        CannotEstimate
            When a side has fewer than p + 2 distinct scores inside its bandwidth (p + 3 inside the pilot).
        """
        order = self.order if order is None else order
        for side in (self.below, self.above):
            bandwidth, pilot = bandwidths.of(side.name)
            for width, p in ((bandwidth, order), (pilot, order + 1)):
                found = int(side.distinct(np.array([width]), self.kernel)[0])
                if found < p + 2:
                    raise too_few(found, bandwidth=width, name=side.name, order=p)
        fit = self.fits(Widths.of(bandwidths), order=order, adjust=adjust).at(0)
        if not np.all(np.isfinite(fit.robust_jump)):
            raise CannotEstimate(
                "The scores inside the bandwidth are too alike to carry a fit of this order.",
                "Widen the bandwidth or lower the order.",
            )
        if adjust and not np.all(np.isfinite(fit.adjustment)):
            raise CannotEstimate(
                "Inside the window a covariate does not vary, or follows from the others.",
                "Leave it out or widen the bandwidth.",
            )
        return fit

    def fits(self, widths: Widths, *, order: int | None = None, adjust: bool = False) -> LineFits:
        """The fit at each pair of widths, NaN where it can't run."""
        order = self.order if order is None else order
        low = _side_fits(self.below, widths.below, widths.pilot_below, self.kernel, order)
        high = _side_fits(self.above, widths.above, widths.pilot_above, self.kernel, order)
        sign = self.treated_sign
        queries = len(widths.below)
        return LineFits(
            levels_below=low.level,
            levels_above=high.level,
            jump=sign * (high.level - low.level),
            covariance=low.covariance + high.covariance,
            robust_jump=sign * (high.robust_level - low.robust_level),
            robust_covariance=low.robust_covariance + high.robust_covariance,
            unit_bias=low.unit_bias + high.unit_bias,
            adjustment=(
                common_coefficients(low.partial_products + high.partial_products, targets=self.targets)
                if adjust
                else np.zeros((queries, 0, low.level.shape[1]))
            ),
            count_below=low.count,
            count_above=high.count,
            effective=low.effective + high.effective,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class _SideFits:
    level: Matrix
    robust_level: Matrix
    covariance: Cube
    robust_covariance: Cube
    unit_bias: Vector
    count: Codes
    effective: Vector
    partial_products: Cube


def _side_fits(side: SideSums, bandwidth: Vector, pilot: Vector, kernel: str, order: int) -> _SideFits:
    """One side's level at the line, plain and bias-corrected, with its variances, at each width."""
    channels, shape = side.channels, kernel_coefficients(kernel)
    size = order + 1
    raw = side.raw(bandwidth, bandwidth, kernel)
    moments = combine(raw, shape, 2 * size)
    same = np.array_equal(bandwidth, pilot)
    pilot_raw = raw if same else side.raw(pilot, pilot, kernel)
    pilot_moments = combine(pilot_raw, shape, 2 * size + 1)

    # Row 0 of A⁻¹ (the level's weights are a·r(u)·k) and the fit's coefficients, from one factorisation.
    unit = np.zeros((len(bandwidth), size, 1), dtype=np.longdouble)
    unit[:, 0] = 1.0
    first = moments[:, :size, channels.first]
    solved = solve(hankel(moments[:, :, 0], size), np.concatenate((unit, first), axis=2))
    level_weights, fitted = solved[:, :, 0], solved[:, :, 1:]
    last = np.zeros((len(bandwidth), size + 1, 1), dtype=np.longdouble)
    last[:, -1] = 1.0
    top = solve(hankel(pilot_moments[:, :, 0], size + 1), last)[:, :, 0]
    # Σ l d^(p+1) is in units of h^(p+1), the pilot's coefficient in units of b^(−p−1).
    left_over = np.einsum("hj,hj->h", level_weights, moments[:, size : 2 * size, 0])
    ratio = (bandwidth / pilot).astype(np.longdouble) ** size
    correction = top * (left_over * ratio)[:, None]

    level = fitted[:, 0]
    shift = np.einsum("hj,hja->ha", correction, pilot_moments[:, : size + 1, channels.first])
    plain = _cross(side, kernel, (bandwidth, level_weights), (bandwidth, level_weights), raw)
    mixed = _cross(side, kernel, (bandwidth, level_weights), (pilot, correction), raw if same else None)
    pilots = _cross(side, kernel, (pilot, correction), (pilot, correction), pilot_raw)
    squared = combine(raw, np.convolve(shape, shape), 1)[:, 0, channels.squared_weight]
    products = (
        channels.symmetric(moments[:, 0, channels.products]) - np.einsum("hja,hjb->hab", fitted, first)
        if channels.with_products
        else np.zeros((len(bandwidth), 0, 0))
    )
    return _SideFits(
        level=(level + side.centre).astype(np.float64),
        robust_level=(level - shift + side.centre).astype(np.float64),
        covariance=plain.astype(np.float64),
        robust_covariance=(plain - 2.0 * mixed + pilots).astype(np.float64),
        unit_bias=_unit_bias(side, kernel, bandwidth, level_weights, moments),
        count=side.count(bandwidth, kernel),
        effective=(moments[:, 0, 0] ** 2 / np.where(squared > 0.0, squared, np.nan)).astype(np.float64),
        partial_products=products.astype(np.float64),
    )


def _cross(
    side: SideSums,
    kernel: str,
    first: tuple[Vector, Extended],
    second: tuple[Vector, Extended],
    raw: Extended | None,
) -> Extended:
    """Σ l m e e′ for weights l = a·r(d/h)·K(d/h)·w and m = c·r(d/b)·K(d/b)·w, shape (H, v, v).

    `raw` are the sums at the nearer of the two widths in units of it, where the caller has them.
    """
    (h, a), (b, c) = first, second
    reach = np.minimum(h, b)
    sums = side.raw(reach, reach, kernel) if raw is None else raw
    polynomial = _convolve(
        _weights_polynomial(kernel, a, reach / h), _weights_polynomial(kernel, c, reach / b)
    )
    spread = np.einsum("hr,hrp->hp", polynomial, sums[:, : polynomial.shape[1], side.channels.spread])
    return np.asarray(side.channels.symmetric(spread))


def _weights_polynomial(kernel: str, coefficients: Extended, ratio: Vector) -> Extended:
    """K(d/h)·Σ a_j (d/h)^j as a polynomial in d/reach with `ratio` = reach/h, shape (H, degree + p + 1)."""
    shape = np.broadcast_to(kernel_coefficients(kernel), (len(ratio), len(COEFFICIENTS[kernel])))
    product = _convolve(shape, coefficients)
    return np.asarray(product * ratio.astype(np.longdouble)[:, None] ** np.arange(product.shape[1]))


def _convolve(left: Extended, right: Extended) -> Extended:
    """Products of polynomials row by row, shape (H, m + n − 1)."""
    product = np.zeros((len(left), left.shape[1] + right.shape[1] - 1), dtype=np.longdouble)
    for m in range(left.shape[1]):
        product[:, m : m + right.shape[1]] += left[:, m, None] * right
    return product


def _unit_bias(
    side: SideSums, kernel: str, bandwidth: Vector, level_weights: Extended, moments: Extended
) -> Vector:
    """Worst bias for each unit of curvature (`estimation.worst_bias`) from sums alone, shape (H,)."""
    size = level_weights.shape[1]
    if size == 1:
        return np.full(len(bandwidth), np.inf)
    if size == 2:
        second = np.einsum("hj,hj->h", level_weights, moments[:, 2 : 2 + size, 0]).astype(np.float64)
        return np.asarray(0.5 * np.abs(second) * bandwidth**2)
    polynomial = _weights_polynomial(kernel, level_weights, np.ones(len(bandwidth)))
    return np.array(
        [_integral(side, kernel, float(h), row) for h, row in zip(bandwidth, polynomial, strict=True)]
    )


def _integral(side: SideSums, kernel: str, bandwidth: float, polynomial: Extended) -> float:
    r"""∫|W| between the sign changes of W.

    V(t) = ∫_t^∞ W = Σ_{d > t} l (d − t)²/2 is a combination of sums, so each stretch of one sign costs two
    queries. All crossings are bisected together; V is flat there, so their last digits hardly matter.
    """
    whole = side.raw(np.array([bandwidth]), np.array([bandwidth]), kernel)[0, :, 0]

    def tails(u: Vector) -> tuple[Vector, Vector]:
        near = side.raw(u * bandwidth, np.full(len(u), bandwidth), "uniform")[:, :, 0]
        beyond = np.where(u[:, None] > 0.0, whole - near, whole)
        s0, s1, s2 = (beyond[:, r : r + len(polynomial)] @ polynomial for r in range(3))
        v = u.astype(np.longdouble)
        return (s1 - v * s0).astype(np.float64), ((s2 - 2.0 * v * s1 + v * v * s0) / 2.0).astype(np.float64)

    grid = np.linspace(0.0, 1.0, 65)
    w, _ = tails(grid)
    change = np.flatnonzero(w[:-1] * w[1:] < 0.0)
    low, high = grid[change], grid[change + 1]
    rising = w[change] < 0.0
    for _ in range(36 if len(change) else 0):
        middle = 0.5 * (low + high)
        before = (tails(middle)[0] < 0.0) == rising
        low, high = np.where(before, middle, low), np.where(before, high, middle)
    cuts = np.concatenate(([0.0], 0.5 * (low + high)))
    heights = np.append(tails(cuts)[1], 0.0)
    return float(np.sum(np.abs(np.diff(heights)))) * bandwidth**2
