r"""Running sums that make fitted-residual variances (HC0, HC1) answerable at any bandwidth.

With e = v − r′β of a local fit, Σ l m e_a e_b over weights l and m is Σ q·(Σ-columns w², w² v_a, w² v_a v_b) for
polynomials q in d of a known degree N − 1, whatever β is. For such polynomials the rows nearer than an edge can be
replaced, exactly, by N points at Chebyshev nodes between the line and the edge with column sums of their own. They
are kept at every 256th row; a query reads N points and the few rows between the edge and the bandwidth.

Digits: q has up to 21 coefficients of either sign, which plain powers do not survive (order 3 would keep 8 digits);
points inside the window lose none. An expansion also loses as many digits as v is larger than e: a side's own
global trend is taken off the values first, so that only what bends away from it counts.

References
----------
MacKinnon, J. & White, H. (1985). Some heteroskedasticity-consistent covariance matrix estimators.
    Journal of Econometrics 29, 305–325. https://doi.org/10.1016/0304-4076(85)90158-7
Trefethen, L. N. (2013). Approximation Theory and Approximation Practice. SIAM.  (interpolation at Chebyshev points)
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from estimation.arrays import Codes, Cube, Matrix, Vector
from estimation.kernels import COEFFICIENTS
from estimation.moments import BLOCK, STRETCH, Channels, Extended
from estimation.sample import Side

# Variances whose residuals are those of the local fit itself, without its leverages.
FITTED: Final = ("hc0", "hc1")
# Rows that a trend is learnt from: it need not be good, only near.
_TREND_ROWS: Final = 4096

# A width (H,) and the coefficients of (d/width)^j: of weights (H, p + 1), or of a curve in each variable (H, p + 1, v).
Weights: TypeAlias = tuple[Vector, Extended]
# Σ l m e e′ for weights l and m with the residuals from a curve, shape (H, v, v).
Spread: TypeAlias = Callable[[Weights, Weights, Weights], Extended]


@dataclass(frozen=True, slots=True, kw_only=True)
class Trend:
    """A polynomial in d/reach for each variable, coefficients of shape (p + 1, v)."""

    coefficients: Matrix
    reach: float

    @classmethod
    def of(cls, side: Side, centre: Vector, order: int) -> Trend:
        """Least squares on some of the side's rows, evenly spread over them."""
        step = max(len(side) // _TREND_ROWS, 1)
        reach = float(side.distance[-1]) or 1.0
        basis = np.vander(side.distance[::step] / reach, order + 1, increasing=True)
        found = np.linalg.lstsq(basis, side.values[::step] - centre, rcond=None)[0]
        return cls(coefficients=found.astype(np.float64), reach=reach)

    def at(self, distance: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        """Its values, shape (…, v)."""
        return _horner(self.coefficients[None], distance / self.reach)


@dataclass(frozen=True, slots=True, kw_only=True)
class Points:
    """What stands for the rows inside H widths: distances (H, m) and their column sums (H, m, channels)."""

    distance: Matrix
    columns: Cube


@dataclass(frozen=True, slots=True, kw_only=True)
class SideSquares:
    """One side's sums with squared weights, of values less their centre and trend.

    Attributes
    ----------
    side
        Its rows, with w² for a weight and values less centre and trend.
    channels
        Layout of the columns: Σ w², Σ w² v and Σ w² v v′.
    edges
        Distance that the nodes of each kept set reach to, shape (blocks + 1,).
    kept
        Column sums at the nodes for the rows before each block, shape (blocks + 1, N, channels).
    """

    side: Side
    trend: Trend
    channels: Channels
    nodes: Vector
    edges: Vector
    kept: Cube

    @classmethod
    def build(cls, side: Side, centre: Vector, *, kernel: str, order: int) -> SideSquares:
        """Sum one side once, for fits up to `order` with their bias correction."""
        trend = Trend.of(side, centre, order + 1)
        left = side.values - centre
        for start in range(0, len(side), 1 << 15):
            rows = slice(start, start + (1 << 15))
            left[rows] -= trend.at(side.distance[rows])
        squared = Side(
            distance=side.distance,
            values=left,
            weight=None if side.weight is None else side.weight**2,
            cluster=None,
            row=side.row,
        )
        # Degree: twice the kernel and the weights of an order p + 1 fit, and twice the order p + 1 curve.
        count = 1 + 2 * (len(COEFFICIENTS[kernel]) - 1) + 4 * (order + 1)
        channels = Channels(side.values.shape[1], with_products=True, with_spread=False)
        edges = _edges(side.distance)
        return cls(
            side=squared,
            trend=trend,
            channels=channels,
            nodes=0.5 + 0.5 * np.cos(np.pi * (np.arange(count) + 0.5) / count),
            edges=edges,
            kept=_accumulate(_block_sums(squared, channels, edges, count), edges),
        )

    def points(self, width: Vector, kernel: str) -> Points:
        """What stands for the rows inside each width."""
        edge: Any = "right" if kernel == "uniform" else "left"
        counts = np.searchsorted(self.side.distance, width, side=edge)
        block = counts // BLOCK
        first = block * BLOCK
        index = first[:, None] + np.arange(int(np.max(counts - first, initial=0)))
        inside = index < counts[:, None]
        rows = np.minimum(index, len(self.side) - 1).ravel()
        weight = None if self.side.weight is None else self.side.weight[rows]
        values = self.side.values[rows]
        columns = self.channels.columns(values, values[:, :0], weight)
        columns[~inside.ravel()] = 0.0
        between = np.where(inside, self.side.distance[rows].reshape(index.shape), 0.0)
        return Points(
            distance=np.concatenate((self.edges[block, None] * self.nodes, between), axis=1),
            columns=np.concatenate((self.kept[block], columns.reshape(*index.shape, -1)), axis=1),
        )

    def spread(self, kernel: str) -> Spread:
        """How Σ l m e e′ is asked for; the points at each set of widths are looked up once."""
        known: list[tuple[Vector, Points]] = []

        def points(reach: Vector) -> Points:
            for width, found in known:
                if np.array_equal(width, reach):
                    return found
            known.append((reach, self.points(reach, kernel)))
            return known[-1][1]

        def spread(first: Weights, second: Weights, curve: Weights) -> Extended:
            at = points(np.minimum(first[0], second[0]))
            product = _weights_at(kernel, first, at.distance) * _weights_at(kernel, second, at.distance)
            return self._summed(
                product, self.trend.at(at.distance) - _curve_at(curve, at.distance), at.columns
            )

        return spread

    def _summed(self, product: Matrix, departure: Cube, columns: Cube) -> Extended:
        """Σ product·(v_a + δ_a)(v_b + δ_b), shape (H, v, v)."""
        a, b = self.channels.pairs
        weight, first, products = (
            columns[:, :, 0, None],
            columns[:, :, self.channels.first],
            columns[:, :, self.channels.products],
        )
        left, right = departure[:, :, a], departure[:, :, b]
        squares = products + left * first[:, :, b] + right * first[:, :, a] + left * right * weight
        summed = np.einsum("hm,hmp->hp", product, squares)
        return np.asarray(self.channels.symmetric(summed), dtype=np.longdouble)


def degrees_factor(rows: Codes, parameters: int, variance: str) -> Vector:
    """HC1's n / (n − p − 1) of one side at each width, 1 for every other variance, shape (H,)."""
    if variance != "hc1":
        return np.ones(len(rows))
    return np.asarray(rows / np.maximum(rows - parameters, 1))


def _horner(coefficients: npt.NDArray[Any], u: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """Σ c_j u^j for u (H, …) and coefficients (H or 1, p + 1, v): shape (H, …, v)."""
    c = coefficients.astype(np.float64).reshape(
        len(coefficients), coefficients.shape[1], *(1,) * (u.ndim - 1), coefficients.shape[2]
    )
    total = np.zeros((*u.shape, coefficients.shape[2]))
    for j in reversed(range(coefficients.shape[1])):
        total *= u[..., None]
        total += c[:, j]
    return total


def _weights_at(kernel: str, weights: Weights, distance: Matrix) -> Matrix:
    """a·r(d/h)·K(d/h), shape (H, m)."""
    u = distance / weights[0][:, None]
    return np.asarray(
        _horner(weights[1][:, :, None], u)[:, :, 0]
        * np.polynomial.polynomial.polyval(u, np.array(COEFFICIENTS[kernel]))
    )


def _curve_at(curve: Weights, distance: Matrix) -> Cube:
    """A curve's values, shape (H, m, v)."""
    return _horner(curve[1], distance / curve[0][:, None])


def _edges(distance: Vector) -> Vector:
    """Distance of the last row before each block; where that is nought, the nearest one above it."""
    last = distance[BLOCK - 1 :: BLOCK][: len(distance) // BLOCK]
    above = distance[np.searchsorted(distance, 0.0, side="right") :][:1]
    nearest = float(above[0]) if len(above) else 1.0
    return np.maximum(np.concatenate(([0.0], last)), nearest)


def _chebyshev(t: npt.NDArray[np.float64], count: int) -> npt.NDArray[np.float64]:
    """T_0(t) … T_(count − 1)(t) along a new last axis."""
    found = np.empty((*t.shape, count))
    found[..., 0] = 1.0
    if count > 1:
        found[..., 1] = t
    for k in range(2, count):
        np.multiply(found[..., k - 1], 2.0 * t, out=found[..., k])
        found[..., k] -= found[..., k - 2]
    return found


def _at_nodes(count: int) -> Matrix:
    """Row j: the coefficients in T_k of the polynomial that is 1 at node j and 0 at the others."""
    angle = np.pi * (np.arange(count) + 0.5) / count
    table = 2.0 / count * np.cos(angle[:, None] * np.arange(count))
    table[:, 0] *= 0.5
    return table


def _block_sums(side: Side, channels: Channels, edges: Vector, count: int) -> Cube:
    """Column sums of each block at the nodes out to its own edge, shape (blocks, N, channels)."""
    blocks = len(edges) - 1
    sums = np.empty((blocks, count, channels.products.stop))
    for start in range(0, blocks, STRETCH):
        stop = min(start + STRETCH, blocks)
        rows = slice(start * BLOCK, stop * BLOCK)
        values = side.values[rows]
        weight = None if side.weight is None else side.weight[rows]
        columns = channels.columns(values, values[:, :0], weight).reshape(stop - start, BLOCK, -1)
        reached = side.distance[rows].reshape(stop - start, BLOCK) / edges[start + 1 : stop + 1, None]
        basis = _chebyshev(2.0 * reached - 1.0, count)
        sums[start:stop] = np.matmul(basis.transpose(0, 2, 1), columns)
    return np.asarray(np.matmul(_at_nodes(count), sums))


def _accumulate(sums: Cube, edges: Vector) -> Cube:
    """Sums over the rows before each block: those kept so far, moved out to the next edge's nodes, and the block's."""
    blocks, count = sums.shape[:2]
    nodes = 0.5 + 0.5 * np.cos(np.pi * (np.arange(count) + 0.5) / count)
    at_nodes = _at_nodes(count)
    kept = np.zeros((blocks + 1, *sums.shape[1:]))
    for start in range(0, blocks, STRETCH):
        stop = min(start + STRETCH, blocks)
        ratio = edges[start:stop] / edges[start + 1 : stop + 1]
        # Old nodes in the new interval: the new cardinal polynomials there say what each old sum adds to each node.
        moved = np.matmul(at_nodes, _chebyshev(2.0 * ratio[:, None] * nodes - 1.0, count).transpose(0, 2, 1))
        for k in range(start, stop):
            np.matmul(moved[k - start], kept[k], out=kept[k + 1])
            kept[k + 1] += sums[k]
    return kept
