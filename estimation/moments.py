r"""Running sums of powers: what makes any bandwidth answerable in about log n.

A kernel that is a polynomial in d/h turns every kernel-weighted sum into a combination of plain sums
Σ_{d ≤ h} (…)·d^r. Those sums are kept at every 256th row outward from the line, and the rows in between are
added when asked, so that a query touches a few hundred rows whatever their number.

Kept for each power r: Σ w, Σ w v_a, Σ w², Σ w² e_a e_b with e the residuals that make the variance (see
`estimation.variance`), and with covariates Σ w v_a v_b. Sums are additive over rows, so that those of parts
merge exactly by adding their answers.

Digits: powers are taken of d over the side's largest distance and rescaled to the bandwidth asked for. Running
sums are kept in extended precision; so are the sums of a block when a high order would lose digits of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from estimation.arrays import Codes, Matrix, Vector
from estimation.kernels import COEFFICIENTS
from estimation.sample import Side, SideName
from estimation.variance import mass_point_starts

BLOCK: Final = 256
# Blocks or queries handled at once: enough to amortise a call, few enough to stay in the processor's cache.
STRETCH: Final = 64

Extended = npt.NDArray[np.longdouble]


@dataclass(frozen=True)
class Channels:
    """Where each sum stands among the columns, for v variables.

    `with_spread` keeps Σ w² and Σ w² e e′; `with_products` keeps Σ w v v′.
    """

    variables: int
    with_products: bool
    with_spread: bool = True

    @cached_property
    def pairs(self) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]]:
        """Rows and columns of the pairs a ≤ b."""
        rows, columns = np.triu_indices(self.variables)
        return rows, columns

    @cached_property
    def first(self) -> slice:
        """Σ w v_a; column 0 is Σ w."""
        return slice(1, 1 + self.variables)

    @cached_property
    def squared_weight(self) -> int:
        """Σ w²; there only with the spread."""
        return 1 + self.variables

    @cached_property
    def spread(self) -> slice:
        """Σ w² e_a e_b over the pairs; empty unless `with_spread`."""
        start = self.squared_weight + self.with_spread
        return slice(start, start + len(self.pairs[0]) * self.with_spread)

    @cached_property
    def products(self) -> slice:
        """Σ w v_a v_b over the pairs; empty unless `with_products`."""
        return slice(self.spread.stop, self.spread.stop + len(self.pairs[0]) * self.with_products)

    def symmetric(self, pairs: npt.NDArray[Any]) -> npt.NDArray[Any]:
        """Pairs along the last axis as symmetric matrices, shape (…, v, v)."""
        rows, columns = self.pairs
        full = np.empty((*pairs.shape[:-1], self.variables, self.variables), dtype=pairs.dtype)
        full[..., rows, columns] = pairs
        full[..., columns, rows] = pairs
        return full

    def columns(self, values: Matrix, residual: Matrix, weight: Vector | None) -> Matrix:
        """What is summed, for some rows: shape (rows, channels)."""
        a, b = self.pairs
        columns = np.empty((len(values), self.products.stop))
        columns[:, 0] = 1.0 if weight is None else weight
        columns[:, self.first] = values
        if self.with_spread:
            columns[:, self.squared_weight] = 1.0 if weight is None else weight
            columns[:, self.spread] = residual[:, a] * residual[:, b]
        if self.with_products:
            columns[:, self.products] = values[:, a] * values[:, b]
        if weight is not None:
            columns[:, self.first] *= weight[:, None]
            if self.with_spread:
                columns[:, self.squared_weight] *= weight
                columns[:, self.spread] *= (weight * weight)[:, None]
            columns[:, self.products] *= weight[:, None]
        return columns


def powers_of(ratio: npt.NDArray[Any], count: int) -> npt.NDArray[Any]:
    """ratio^0 … ratio^(count − 1) along a new last axis."""
    powers = np.empty((*ratio.shape, count), dtype=ratio.dtype)
    powers[..., 0] = 1.0
    for r in range(1, count):
        np.multiply(powers[..., r - 1], ratio, out=powers[..., r])
    return powers


@dataclass(frozen=True, slots=True, kw_only=True)
class Rungs:
    """Running sums of some rows of one side.

    Attributes
    ----------
    side
        The rows, nearest first.
    residual
        Residuals that make the variance, shape (n, v); not read without `Channels.with_spread`.
    centre
        Taken off the values before they are summed, shape (v,), so that a common level costs no digits.
    reach
        The largest distance.
    running
        Sums over the rows before each block, shape (blocks + 1, powers, channels), in units of (d / reach)^r.
    extended
        Whether sums within a block are in extended precision too.
    """

    side: Side
    residual: Matrix
    centre: Vector
    channels: Channels
    reach: float
    running: Extended
    extended: bool

    @classmethod
    def build(
        cls,
        side: Side,
        residual: Matrix,
        centre: Vector,
        *,
        powers: int,
        with_products: bool,
        extended: bool,
        with_spread: bool = True,
    ) -> Rungs:
        """Sum one side once, in stretches that stay in the processor's cache."""
        channels = Channels(side.values.shape[1], with_products, with_spread)
        reach = float(side.distance[-1]) or 1.0
        blocks = len(side) // BLOCK
        kind = np.longdouble if extended else np.float64
        sums = np.empty((blocks, powers, channels.products.stop), dtype=kind)
        for start in range(0, blocks, STRETCH):
            stop = min(start + STRETCH, blocks)
            rows = slice(start * BLOCK, stop * BLOCK)
            weight = None if side.weight is None else side.weight[rows]
            columns = channels.columns(side.values[rows] - centre, residual[rows], weight)
            powered = powers_of((side.distance[rows] / reach).astype(kind), powers)
            sums[start:stop] = _sum_blocks(powered, columns.astype(kind, copy=False), stop - start)
        running = np.zeros((blocks + 1, *sums.shape[1:]), dtype=np.longdouble)
        np.cumsum(sums, axis=0, dtype=np.longdouble, out=running[1:])
        return cls(
            side=side,
            residual=residual,
            centre=centre,
            channels=channels,
            reach=reach,
            running=running,
            extended=extended,
        )

    def sums(self, counts: Codes, *, weights_only: bool = False) -> Extended:
        """Σ over the `counts[i]` nearest rows, shape (len(counts), powers, channels), or of Σ w alone (…, 1)."""
        block = counts // BLOCK
        total = self.running[block, :, :1] if weights_only else self.running[block]
        for start in range(0, len(counts), STRETCH):
            some = slice(start, start + STRETCH)
            total[some] += self._between(block[some] * BLOCK, counts[some], weights_only)
        return total

    def _between(self, first: Codes, stop: Codes, weights_only: bool) -> npt.NDArray[Any]:
        """Σ over rows first[i] … stop[i] − 1, fewer than a block each."""
        width = int(np.max(stop - first, initial=0))
        index = first[:, None] + np.arange(width)
        inside = index < stop[:, None]
        rows = np.minimum(index, len(self.side) - 1).ravel()
        weight = None if self.side.weight is None else self.side.weight[rows]
        if weights_only:
            columns = np.ones((len(rows), 1)) if weight is None else weight[:, None]
        else:
            columns = self.channels.columns(self.side.values[rows] - self.centre, self.residual[rows], weight)
        columns[~inside.ravel()] = 0.0
        kind = np.longdouble if self.extended else np.float64
        powered = powers_of((self.side.distance[rows] / self.reach).astype(kind), self.running.shape[1])
        return _sum_blocks(powered, columns.astype(kind, copy=False), len(first))


def _sum_blocks(powered: npt.NDArray[Any], columns: npt.NDArray[Any], blocks: int) -> npt.NDArray[Any]:
    """Σ over each block's rows of power × channel, shape (blocks, powers, channels)."""
    left = powered.reshape(blocks, -1, powered.shape[1])
    right = columns.reshape(blocks, -1, columns.shape[1])
    if left.dtype == np.float64:
        return np.asarray(np.matmul(left.transpose(0, 2, 1), right))
    # Extended precision has no fast matrix product; channel by channel keeps the temporaries small.
    return np.stack([(left * right[:, :, j, None]).sum(axis=1) for j in range(right.shape[2])], axis=2)


@dataclass(frozen=True, slots=True, kw_only=True)
class SideSums:
    """One side's running sums in parts; an answer is the sum of the parts' answers.

    Attributes
    ----------
    name
        "below" or "above".
    parts
        Sets of rows with one centre and one layout.
    first_scores
        Distances of the nearest distinct scores over all parts, ascending, at most `KEPT_SCORES` of them.
    """

    name: SideName
    parts: tuple[Rungs, ...]
    first_scores: Vector

    @classmethod
    def join(cls, name: SideName, parts: tuple[Rungs, ...], resolution: float) -> SideSums:
        """Parts of one side, summed about the first one's centre."""
        centre = parts[0].centre
        same = tuple(
            part if np.array_equal(part.centre, centre) else _recentred(part, centre) for part in parts
        )
        nearest = np.sort(np.concatenate([_first_distinct(part.side, resolution) for part in parts]))
        kept = nearest[mass_point_starts(nearest, resolution)][:KEPT_SCORES]
        return cls(name=name, parts=same, first_scores=kept)

    @property
    def reach(self) -> float:
        """Largest distance."""
        return max(part.reach for part in self.parts)

    @property
    def centre(self) -> Vector:
        """Taken off every value, shape (v,)."""
        return self.parts[0].centre

    @property
    def channels(self) -> Channels:
        """Layout of the sums."""
        return self.parts[0].channels

    def count(self, limit: Vector, kernel: str) -> Codes:
        """Rows with a positive kernel weight at each bandwidth, shape (H,)."""
        return np.asarray(sum(_counts(part, limit, kernel) for part in self.parts), dtype=np.int64)

    def distinct(self, limit: Vector, kernel: str) -> Codes:
        """Distinct scores inside each bandwidth, no more than `KEPT_SCORES` counted, shape (H,)."""
        edge: Any = "right" if kernel == "uniform" else "left"
        return np.searchsorted(self.first_scores, limit, side=edge).astype(np.int64)

    def raw(self, limit: Vector, scale: Vector, kernel: str, *, weights_only: bool = False) -> Extended:
        """Σ over rows inside `limit` of (…)·(d / scale)^r, shape (H, powers, channels), or of w alone (…, 1)."""
        total: Extended | None = None
        for part in self.parts:
            sums = part.sums(_counts(part, limit, kernel), weights_only=weights_only)
            ratio = np.longdouble(part.reach) / scale.astype(np.longdouble)
            sums *= powers_of(ratio, sums.shape[1])[:, :, None]
            total = sums if total is None else total + sums
        assert total is not None
        return total


KEPT_SCORES: Final = 8


def _counts(part: Rungs, limit: Vector, kernel: str) -> Codes:
    edge: Any = "right" if kernel == "uniform" else "left"
    return np.searchsorted(part.side.distance, limit, side=edge).astype(np.int64)


def _first_distinct(side: Side, resolution: float) -> Vector:
    reach = 4096
    while True:
        near = side.distance[:reach]
        starts = mass_point_starts(near, resolution)
        if len(starts) > KEPT_SCORES or reach >= len(side):
            return near[starts[:KEPT_SCORES]]
        reach *= 16


def _recentred(part: Rungs, centre: Vector) -> Rungs:
    return Rungs.build(
        part.side,
        part.residual,
        centre,
        powers=part.running.shape[1],
        with_products=part.channels.with_products,
        extended=part.extended,
        with_spread=part.channels.with_spread,
    )


def combine(raw: Extended, coefficients: Extended, powers: int) -> Extended:
    """Σ K·(…)·u^r for r < `powers`: Σ_m c_m·raw[r + m].

    Parameters
    ----------
    raw
        Shape (H, R, channels).
    coefficients
        Of the kernel in u, shape (degree + 1,) or, where they differ by query, (H, degree + 1).
    """
    by_query = np.broadcast_to(coefficients, (len(raw), coefficients.shape[-1]))
    total = np.zeros((len(raw), powers, raw.shape[2]), dtype=np.longdouble)
    for m in range(coefficients.shape[-1]):
        total += by_query[:, m, None, None] * raw[:, m : m + powers]
    return total


def kernel_coefficients(kernel: str) -> Extended:
    """Coefficients of the kernel in u, shape (degree + 1,)."""
    return np.array(COEFFICIENTS[kernel], dtype=np.longdouble)


def multiply(left: Extended, right: Extended) -> Extended:
    """Products of polynomials row by row, shape (H, m + n − 1)."""
    product = np.zeros((len(left), left.shape[1] + right.shape[1] - 1), dtype=np.longdouble)
    for m in range(left.shape[1]):
        product[:, m : m + right.shape[1]] += left[:, m, None] * right
    return product


def weights_polynomial(kernel: str, coefficients: Extended, ratio: Vector) -> Extended:
    """K(d/h)·Σ a_j (d/h)^j as a polynomial in d/reach with `ratio` = reach/h, shape (H, degree + p + 1)."""
    shape = np.broadcast_to(kernel_coefficients(kernel), (len(ratio), len(COEFFICIENTS[kernel])))
    product = multiply(shape, coefficients)
    return np.asarray(product * ratio.astype(np.longdouble)[:, None] ** np.arange(product.shape[1]))


def hankel(moments: Extended, size: int) -> Extended:
    """Moment matrices Σ k u^(i+j), shape (H, size, size), from Σ k u^r, shape (H, ≥ 2·size − 1)."""
    index = np.arange(size)
    return moments[:, index[:, None] + index[None, :]]


def solve(gram: Extended, right: Extended) -> Extended:
    """Solve small positive-definite systems by Cholesky in extended precision.

    Parameters
    ----------
    gram
        Shape (H, n, n).
    right
        Shape (H, n, k).

    Returns
    -------
    Shape (H, n, k); NaN where a system is not positive definite.
    """
    size = gram.shape[1]
    lower = np.zeros_like(gram)
    for j in range(size):
        pivot = gram[:, j, j] - np.einsum("hk,hk->h", lower[:, j, :j], lower[:, j, :j])
        lower[:, j, j] = np.sqrt(np.where(pivot > 0.0, pivot, np.nan))
        rest = gram[:, j + 1 :, j] - np.einsum("hik,hk->hi", lower[:, j + 1 :, :j], lower[:, j, :j])
        lower[:, j + 1 :, j] = rest / lower[:, j, j, None]
    x = np.array(right, dtype=np.longdouble)
    for j in range(size):
        x[:, j] -= np.einsum("hk,hkc->hc", lower[:, j, :j], x[:, :j])
        x[:, j] /= lower[:, j, j, None]
    for j in reversed(range(size)):
        x[:, j] -= np.einsum("hk,hkc->hc", lower[:, j + 1 :, j], x[:, j + 1 :])
        x[:, j] /= lower[:, j, j, None]
    return x
