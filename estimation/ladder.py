r"""The ladder: the fit at the line for any bandwidths, from running sums.

Answers what `estimation.local_polynomial.fit_rows` answers with nearest-neighbour variances (and HC0 and HC1, on
a ladder `with_squares`), to 1e-10, in a time that does not grow with the rows. All queries are vectors of bandwidths; one width is a vector of one.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np

from estimation.adjustment import common_coefficients
from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.kernels import COEFFICIENTS
from estimation.line_fit import Bandwidths, LineFit, too_few
from estimation.line_fits import LineFits as LineFits
from estimation.line_fits import Widths as Widths
from estimation.moments import (
    Extended,
    Rungs,
    SideSums,
    combine,
    hankel,
    kernel_coefficients,
    multiply,
    solve,
    weights_polynomial,
)
from estimation.sample import Sample, Side, SideName
from estimation.squares import FITTED, SideSquares, Spread, Weights, degrees_factor
from estimation.variance import neighbour_residuals


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
    squares: tuple[SideSquares, SideSquares] | None = None

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

    def with_squares(self, sample: Sample) -> Ladder:
        """The same ladder, able to answer with "hc0" and "hc1"; `sample` is what it was built from."""

        def sums(named: tuple[SideName, Side]) -> SideSquares:
            return SideSquares.build(named[1], self.below.centre, kernel=self.kernel, order=self.order)

        with ThreadPoolExecutor(2) as pool:
            below, above = pool.map(sums, sample.sides)
        return replace(self, squares=(below, above))

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

    def fit(
        self,
        bandwidths: Bandwidths,
        *,
        order: int | None = None,
        adjust: bool = False,
        variance: str = "neighbour",
    ) -> LineFit:
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
        fit = self.fits(Widths.single(bandwidths), order=order, adjust=adjust, variance=variance).at(0)
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

    def enough(self, widths: Widths, *, order: int) -> Mask:
        """Where both sides hold the distinct scores that `fit` asks for, shape (H,)."""
        found = np.ones(len(widths.below), dtype=bool)
        for side in (self.below, self.above):
            for width, p in zip(widths.of(side.name), (order, order + 1)):
                found &= side.distinct(width, self.kernel) >= p + 2
        return found

    def fits(
        self,
        widths: Widths,
        *,
        order: int | None = None,
        adjust: bool = False,
        variance: str = "neighbour",
        unit_bias: bool = True,
    ) -> LineFits:
        """The fit at each pair of widths, NaN where it can't run.

        Parameters
        ----------
        variance
            "neighbour", or "hc0" or "hc1" on a ladder `with_squares`.
        unit_bias
            Whether the worst bias is wanted; from order 2 on it costs more than all the rest, and is NaN if not.
        """
        order = self.order if order is None else order
        if variance in FITTED and self.squares is None:
            raise ValueError(f"this ladder holds no squares for {variance}; build it with_squares")
        squares = self.squares if variance in FITTED else None
        low, high = (
            _side_fits(
                side,
                None if squares is None else squares[i],
                *widths.of(side.name),
                self.kernel,
                order,
                variance,
            )
            for i, side in enumerate((self.below, self.above))
        )
        sign = self.treated_sign
        queries = len(widths.below)
        bias = np.full(queries, 0.0 if unit_bias else np.nan)
        for side, fit in ((self.below, low), (self.above, high)) if unit_bias else ():
            bias += _unit_bias(side, self.kernel, widths.of(side.name)[0], fit.level_weights, fit.moments)
        return LineFits(
            levels_below=low.level,
            levels_above=high.level,
            jump=sign * (high.level - low.level),
            covariance=low.covariance + high.covariance,
            robust_jump=sign * (high.robust_level - low.robust_level),
            robust_covariance=low.robust_covariance + high.robust_covariance,
            unit_bias=bias,
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
    level_weights: Extended
    moments: Extended
    count: Codes
    effective: Vector
    partial_products: Cube


def _side_fits(
    side: SideSums,
    squares: SideSquares | None,
    bandwidth: Vector,
    pilot: Vector,
    kernel: str,
    order: int,
    variance: str,
) -> _SideFits:
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
    pilot_first = pilot_moments[:, : size + 1, channels.first]
    solved = solve(hankel(pilot_moments[:, :, 0], size + 1), np.concatenate((last, pilot_first), axis=2))
    top, pilot_fitted = solved[:, :, 0], solved[:, :, 1:]
    # Σ l d^(p+1) is in units of h^(p+1), the pilot's coefficient in units of b^(−p−1).
    left_over = np.einsum("hj,hj->h", level_weights, moments[:, size : 2 * size, 0])
    ratio = (bandwidth / pilot).astype(np.longdouble) ** size
    correction = top * (left_over * ratio)[:, None]

    level = fitted[:, 0]
    shift = np.einsum("hj,hja->ha", correction, pilot_first)
    spread = (
        _neighbour_spread(side, kernel, ((bandwidth, raw), (pilot, pilot_raw)))
        if squares is None
        else squares.spread(kernel)
    )
    near, far = (bandwidth, level_weights), (pilot, correction)
    # Row by row, l_bc takes its residuals from the pilot's curve, also where that is continued past the pilot.
    curve = (pilot, pilot_fitted)
    plain = spread(near, near, (bandwidth, fitted))
    corrected = plain if squares is None else spread(near, near, curve)
    robust = corrected - 2.0 * spread(near, far, curve) + spread(far, far, curve)
    count = side.count(bandwidth, kernel)
    plain *= degrees_factor(count, size, variance)[:, None, None]
    robust *= degrees_factor(side.count(pilot, kernel), size + 1, variance)[:, None, None]
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
        robust_covariance=robust.astype(np.float64),
        level_weights=level_weights,
        moments=moments,
        count=count,
        effective=(moments[:, 0, 0] ** 2 / np.where(squared > 0.0, squared, np.nan)).astype(np.float64),
        partial_products=products.astype(np.float64),
    )


def _neighbour_spread(side: SideSums, kernel: str, raws: Sequence[tuple[Vector, Extended]]) -> Spread:
    """Σ l m e e′ with the residuals that were summed with the rows; `raws` are sums known at some widths."""

    def spread(first: Weights, second: Weights, _: Weights) -> Extended:
        (h, a), (b, c) = first, second
        reach = np.minimum(h, b)
        polynomial = multiply(
            weights_polynomial(kernel, a, reach / h), weights_polynomial(kernel, c, reach / b)
        )
        known = [sums for width, sums in raws if np.array_equal(width, reach)]
        sums = known[0] if known else side.raw(reach, reach, kernel)
        summed = np.einsum("hr,hrp->hp", polynomial, sums[:, : polynomial.shape[1], side.channels.spread])
        return np.asarray(side.channels.symmetric(summed))

    return spread


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
    polynomial = weights_polynomial(kernel, level_weights, np.ones(len(bandwidth)))
    return np.array(
        [_integral(side, kernel, float(h), row) for h, row in zip(bandwidth, polynomial, strict=True)]
    )


def _integral(side: SideSums, kernel: str, bandwidth: float, polynomial: Extended) -> float:
    r"""∫|W| between the sign changes of W.

    V(t) = ∫_t^∞ W = Σ_{d > t} l (d − t)²/2 is a combination of sums, so each stretch of one sign costs two
    queries. All crossings are bisected together; V is flat there, so their last digits hardly matter.
    """
    whole = side.raw(np.array([bandwidth]), np.array([bandwidth]), kernel, weights_only=True)[0, :, 0]

    def tails(u: Vector) -> tuple[Vector, Vector]:
        near = side.raw(u * bandwidth, np.full(len(u), bandwidth), "uniform", weights_only=True)[:, :, 0]
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
