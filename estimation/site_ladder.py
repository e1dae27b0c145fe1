r"""All sites at once: the fit at every site's line, each at its own bandwidths, from sums kept site by site.

The same quantities as `estimation.ladder`, with the sites in place of the queries: rows are sorted once by site and
distance, running sums start anew at each site, and one question reads a few dozen rows of each. Nearest-neighbour
variances; one pair of widths a site.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.kernels import COEFFICIENTS
from estimation.moments import Channels, Extended, combine, hankel, kernel_coefficients, powers_of, solve
from estimation.sample import SideName
from estimation.variance import mass_point_starts, neighbour_residuals

# Rows between two kept sums. Fewer than a single ladder's: a question reads that many of every site.
_BLOCK: Final = 64
_STRETCH: Final = 256
# Distinct scores that are remembered nearest to each line: what decides whether a fit can run.
_KEPT_SCORES: Final = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteFits:
    """The fits at S sites, NaN where one can't run.

    Attributes
    ----------
    jump, covariance, robust_jump, robust_covariance
        Treated level less the other, shape (S, v), and covariances (S, v, v), plain and bias-corrected.
    count_below, count_above
        Rows inside the bandwidth, shape (S,).
    distinct_below, distinct_above
        Distinct scores inside the bandwidth, counted up to eight.
    """

    jump: Matrix
    covariance: Cube
    robust_jump: Matrix
    robust_covariance: Cube
    count_below: Codes
    count_above: Codes
    distinct_below: Codes
    distinct_above: Codes


@dataclass(frozen=True, slots=True, kw_only=True)
class SideOfSites:
    """One side of every site: rows by site, then outward from the site's line.

    Attributes
    ----------
    starts
        Where each site's rows begin, with the end of the last, shape (S + 1,).
    distance, columns
        |score − cutoff|, shape (n,), and the columns that are summed, shape (n, channels), with each site's centre
        taken off its values.
    reach
        Largest distance of each site, shape (S,); 1 for a site without rows here.
    centre
        Shape (S, v).
    first_scores
        Nearest distinct scores of each site, shape (S, 8), infinite where there are fewer.
    tenth
        Distance of each site's tenth row, or of its last.
    running, rungs
        Sums from each site's line outward at every 64th row, and where each site's begin, shape (S,).
    """

    name: SideName
    starts: Codes
    distance: Vector
    columns: Matrix
    channels: Channels
    reach: Vector
    centre: Matrix
    first_scores: Matrix
    tenth: Vector
    running: Extended
    rungs: Codes

    @classmethod
    def build(
        cls,
        name: SideName,
        starts: Codes,
        distance: Vector,
        values: Matrix,
        weight: Vector | None,
        centre: Matrix,
        *,
        powers: int,
        resolution: float,
    ) -> SideOfSites:
        """Sum one side of every site once."""
        sites = len(starts) - 1
        channels = Channels(values.shape[1], False)
        site = np.repeat(np.arange(sites), np.diff(starts))
        residual = np.empty_like(values)
        first_scores = np.full((sites, _KEPT_SCORES), np.inf)
        reach, tenth = np.ones(sites), np.full(sites, np.inf)
        for s in range(sites):
            a, b = int(starts[s]), int(starts[s + 1])
            if a == b:
                continue
            own = distance[a:b]
            residual[a:b] = neighbour_residuals(own, values[a:b], resolution=resolution)
            reach[s] = own[-1] or 1.0
            tenth[s] = own[min(10, b - a) - 1]
            near = own[:512]
            points = mass_point_starts(near, resolution)
            if len(points) < _KEPT_SCORES and b - a > 512:
                near, points = own, mass_point_starts(own, resolution)
            kept = near[points[:_KEPT_SCORES]]
            first_scores[s, : len(kept)] = kept
        columns = channels.columns(values - centre[site], residual, weight)
        running, rungs = _running(starts, distance / reach[site], columns, powers)
        return cls(
            name=name,
            starts=starts,
            distance=distance,
            columns=columns,
            channels=channels,
            reach=reach,
            centre=centre,
            first_scores=first_scores,
            tenth=tenth,
            running=running,
            rungs=rungs,
        )

    def count(self, limit: Vector, kernel: str) -> Codes:
        """Rows inside each site's bandwidth, shape (S,): a bisection of all sites together."""
        low, high = self.starts[:-1].copy(), self.starts[1:].copy()
        last = max(len(self.distance) - 1, 0)
        while np.any(low < high):
            middle = (low + high) // 2
            at = self.distance[np.minimum(middle, last)]
            inside = (at <= limit) if kernel == "uniform" else (at < limit)
            going = low < high
            low = np.where(going & inside, middle + 1, low)
            high = np.where(going & ~inside, middle, high)
        return np.asarray(low - self.starts[:-1], dtype=np.int64)

    def distinct(self, limit: Vector, kernel: str) -> Codes:
        """Distinct scores inside each bandwidth, at most eight counted, shape (S,)."""
        inside = (
            self.first_scores <= limit[:, None] if kernel == "uniform" else self.first_scores < limit[:, None]
        )
        return np.asarray(inside.sum(axis=1), dtype=np.int64)

    def raw(self, limit: Vector, kernel: str) -> Extended:
        """Σ over each site's rows inside its limit of (…)·(d / limit)^r, shape (S, powers, channels)."""
        counts = self.count(limit, kernel)
        block = counts // _BLOCK
        total = self.running[self.rungs + block]
        first = self.starts[:-1] + block * _BLOCK
        stop = self.starts[:-1] + counts
        powers = total.shape[1]
        for start in range(0, len(counts), _STRETCH):
            some = slice(start, start + _STRETCH)
            total[some] += self._between(first[some], stop[some], self.reach[some], powers)
        ratio = (self.reach / limit).astype(np.longdouble)
        return np.asarray(total * powers_of(ratio, powers)[:, :, None])

    def _between(self, first: Codes, stop: Codes, reach: Vector, powers: int) -> Matrix:
        width = int(np.max(stop - first, initial=0))
        index = first[:, None] + np.arange(width)
        inside = index < stop[:, None]
        rows = np.minimum(index, max(len(self.distance) - 1, 0))
        columns = self.columns[rows] * inside[:, :, None]
        u = self.distance[rows] / reach[:, None]
        powered = np.empty((*u.shape, powers))
        powered[..., 0] = 1.0
        for r in range(1, powers):
            powered[..., r] = powered[..., r - 1] * u
        # Rows beyond the limit stand for nothing; their powers must not overflow into it.
        return np.asarray(np.matmul(np.where(inside[:, :, None], powered, 0.0).transpose(0, 2, 1), columns))


def _running(starts: Codes, u: Vector, columns: Matrix, powers: int) -> tuple[Extended, Codes]:
    """Sums from each site's line outward at every 64th row, and where each site's sums begin."""
    blocks = np.diff(starts) // _BLOCK
    rungs = np.concatenate(([0], np.cumsum(blocks + 1)))[:-1].astype(np.int64)
    running = np.zeros((int((blocks + 1).sum()), powers, columns.shape[1]), dtype=np.longdouble)
    site = np.repeat(np.arange(len(blocks)), blocks)
    place = np.arange(len(site)) - np.repeat(np.cumsum(blocks) - blocks, blocks)
    first = starts[:-1][site] + place * _BLOCK
    for start in range(0, len(first), _STRETCH):
        rows = first[start : start + _STRETCH, None] + np.arange(_BLOCK)
        powered = np.empty((*rows.shape, powers))
        powered[..., 0] = 1.0
        near = u[rows]
        for r in range(1, powers):
            powered[..., r] = powered[..., r - 1] * near
        some = slice(start, start + _STRETCH)
        running[rungs[site[some]] + place[some] + 1] = np.matmul(powered.transpose(0, 2, 1), columns[rows])
    for s in np.flatnonzero(blocks > 1):
        own = slice(int(rungs[s]), int(rungs[s] + blocks[s] + 1))
        np.cumsum(running[own], axis=0, out=running[own])
    return running, rungs


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteLadder:
    """Both sides of every site, for one kernel and one order."""

    below: SideOfSites
    above: SideOfSites
    kernel: str
    order: int
    treated_sign: float
    targets: int

    @classmethod
    def build(
        cls,
        *,
        position: Vector,
        values: Matrix,
        above: Mask,
        site: Codes,
        sites: int,
        weight: Vector | None,
        treated: SideName,
        kernel: str,
        order: int,
        has_take_up: bool,
        score_magnitude: float,
    ) -> SiteLadder:
        """Sort the rows once by site, side and distance, and sum them.

        Parameters
        ----------
        position, values, above, site, weight
            Rows with every value known, shapes (n,), (n, v), (n,), (n,), (n,) or None.
        sites
            S; sites may be without rows.
        score_magnitude
            Largest |score|: it sets below what scores are one mass point.
        """
        distance = np.abs(position)
        degree = len(COEFFICIENTS[kernel]) - 1
        powers = 1 + max(2 * (order + 1) + 2 * degree, 2 * (order + 2) + 1)
        reach = float(distance.max()) if len(distance) else 1.0
        resolution = 8.0 * np.finfo(np.float64).eps * max(score_magnitude, reach)
        # A common level costs no digits when it is taken off first, one for both sides of a site.
        rows = np.maximum(np.bincount(site, minlength=sites), 1)
        centre = np.stack(
            [np.bincount(site, weights=column, minlength=sites) / rows for column in values.T], axis=1
        )

        def side(name: SideName, mask: Mask) -> SideOfSites:
            own = np.flatnonzero(mask)
            outward = own[np.argsort(distance[own])]
            by_site = outward[order_by_site(site[outward], sites)]
            counts = np.bincount(site[by_site], minlength=sites)
            return SideOfSites.build(
                name,
                np.concatenate(([0], np.cumsum(counts))).astype(np.int64),
                distance[by_site],
                values[by_site],
                None if weight is None else weight[by_site],
                centre,
                powers=powers,
                resolution=resolution,
            )

        # One after the other: thousands of small calls would only pass the interpreter to and fro between threads.
        below, upper = (side("below", ~above), side("above", above))
        return cls(
            below=below,
            above=upper,
            kernel=kernel,
            order=order,
            treated_sign=1.0 if treated == "above" else -1.0,
            targets=1 + int(has_take_up),
        )

    def fits(
        self,
        below: Vector,
        above: Vector,
        pilot_below: Vector | None = None,
        pilot_above: Vector | None = None,
    ) -> SiteFits:
        """The fits at each site's own widths, shape (S,) each; pilots follow the bandwidths unless given."""
        low = _side_fits(self.below, below, below if pilot_below is None else pilot_below, self)
        high = _side_fits(self.above, above, above if pilot_above is None else pilot_above, self)
        return SiteFits(
            jump=self.treated_sign * (high.level - low.level),
            covariance=low.covariance + high.covariance,
            robust_jump=self.treated_sign * (high.robust_level - low.robust_level),
            robust_covariance=low.robust_covariance + high.robust_covariance,
            count_below=low.count,
            count_above=high.count,
            distinct_below=self.below.distinct(below, self.kernel),
            distinct_above=self.above.distinct(above, self.kernel),
        )

    def shares_at_line(self, below: float, above: float) -> Vector:
        """Each site's share of the units at the line in a fit pooled over sites at these widths, shape (S,).

        The mean of both sides' local fits of "is of this site" (see `estimation.line_shares`), from the sums.
        NaN where a pooled side can't carry the fit.
        """
        shape, size = kernel_coefficients(self.kernel), self.order + 1
        sides = []
        for side, width in ((self.below, below), (self.above, above)):
            limit = np.full(len(side.starts) - 1, width)
            moments = combine(side.raw(limit, self.kernel), shape, 2 * size - 1)[:, :, 0]
            unit = np.zeros((1, size, 1), dtype=np.longdouble)
            unit[:, 0] = 1.0
            weights = solve(hankel(moments.sum(axis=0)[None], size), unit)[0, :, 0]
            sides.append((moments[:, :size] @ weights).astype(np.float64))
        return np.asarray(0.5 * (sides[0] + sides[1]))


def order_by_site(site: Codes, sites: int) -> Codes:
    """Indices that put rows in the order of their sites, rows of one site as they were.

    Short codes are sorted digit by digit, in a pass or two over the rows.
    """
    codes = site.astype(np.uint16) if sites <= np.iinfo(np.uint16).max else site
    return np.argsort(codes, kind="stable").astype(np.int64, copy=False)


@dataclass(frozen=True, slots=True)
class _SideFits:
    level: Matrix
    robust_level: Matrix
    covariance: Cube
    robust_covariance: Cube
    count: Codes


def _side_fits(side: SideOfSites, bandwidth: Vector, pilot: Vector, ladder: SiteLadder) -> _SideFits:
    kernel, size, channels = ladder.kernel, ladder.order + 1, side.channels
    shape = kernel_coefficients(kernel)
    raw = side.raw(bandwidth, kernel)
    same = np.array_equal(bandwidth, pilot)
    pilot_raw = raw if same else side.raw(pilot, kernel)
    moments, wide = combine(raw, shape, 2 * size), combine(pilot_raw, shape, 2 * size + 1)
    unit, last = (np.zeros((len(bandwidth), n, 1), dtype=np.longdouble) for n in (size, size + 1))
    unit[:, 0], last[:, -1] = 1.0, 1.0
    # A site whose scores are too few for the fit must not pass on rounding's account.
    enough = (side.distinct(bandwidth, kernel) >= size + 1) & (side.distinct(pilot, kernel) >= size + 2)
    solved = solve(
        hankel(moments[:, :, 0], size), np.concatenate((unit, moments[:, :size, channels.first]), axis=2)
    )
    level_weights, level = solved[:, :, 0], solved[:, 0, 1:]
    top = solve(hankel(wide[:, :, 0], size + 1), last)[:, :, 0]
    left_over = np.einsum("sj,sj->s", level_weights, moments[:, size : 2 * size, 0])
    correction = top * (left_over * (bandwidth / pilot).astype(np.longdouble) ** size)[:, None]
    shift = np.einsum("sj,sja->sa", correction, wide[:, : size + 1, channels.first])

    def spread(one: tuple[Vector, Extended], two: tuple[Vector, Extended]) -> Extended:
        reach = np.minimum(one[0], two[0])
        near = (
            raw if np.array_equal(reach, bandwidth) else pilot_raw if np.array_equal(reach, pilot) else None
        )
        sums = side.raw(reach, kernel) if near is None else near
        product = _multiplied(*(_in_reach(shape, a, reach / h) for h, a in (one, two)))
        summed = np.einsum("sr,srp->sp", product, sums[:, : product.shape[1], channels.spread])
        return np.asarray(channels.symmetric(summed))

    close, far = (bandwidth, level_weights), (pilot, correction)
    plain = spread(close, close)
    robust = plain - 2.0 * spread(close, far) + spread(far, far)

    def known(found: Any) -> Any:
        numbers = found.astype(np.float64)
        return np.where(enough.reshape(-1, *([1] * (numbers.ndim - 1))), numbers, np.nan)

    return _SideFits(
        known(level + side.centre),
        known(level - shift + side.centre),
        known(plain),
        known(robust),
        side.count(bandwidth, kernel),
    )


def _in_reach(shape: Extended, coefficients: Extended, ratio: Vector) -> Extended:
    """K(u)·Σ a_j u^j in powers of d/reach, with u = ratio·d/reach, site by site."""
    product = _multiplied(np.broadcast_to(shape, (len(ratio), len(shape))), coefficients)
    return np.asarray(product * powers_of(ratio.astype(np.longdouble), product.shape[1]))


def _multiplied(left: Extended, right: Extended) -> Extended:
    """Products of polynomials site by site."""
    product = np.zeros((len(left), left.shape[1] + right.shape[1] - 1), dtype=np.longdouble)
    for m in range(left.shape[1]):
        product[:, m : m + right.shape[1]] += left[:, m, None] * right
    return product
