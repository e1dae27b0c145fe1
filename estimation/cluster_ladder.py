r"""Clustered variances from each cluster's own sums, at any bandwidth.

Two of them. The jackknife leaves out one cluster at a time, Var = (G − 1)/G · Σ_g (τ_(−g) − τ)²; the sandwich is
Σ_g (Σ_{i∈g} l_i e_i)² · G/(G − 1) with e the residuals of the fit. Clusters may span both sides; both use t with
G − 1 degrees of freedom, G counting clusters with a row inside the bandwidth.

The jackknife is what a clustered study gets unless it asks for "hc0" or "hc1". Nearest-neighbour residuals do not
serve here: the nearest rows are often of the same cluster, the shock they share cancels in the difference, and the
variance misses just what clustering is for (with clusters that lie on one side, intervals meant to hold 95 % of
the time held under half of the time; benchmarks/RESULTS.md). The sandwich is too small when few clusters carry
the fit, and the jackknife is the leverage correction that repairs this best.

Both need only small sums by cluster: S_g = Σ k r r′ and F_g = Σ k r v. They are kept at a coarse grid of distances,
rows in between are added when asked, so that a reading costs a few passes over the clusters, not over the rows.

References
----------
Bell, R. & McCaffrey, D. (2002). Bias reduction in standard errors for linear regression with multi-stage samples.
    Survey Methodology 28, 169–181.
MacKinnon, J., Nielsen, M. & Webb, M. (2023). Fast and reliable jackknife and bootstrap methods for
    cluster-robust inference. Journal of Applied Econometrics 38, 671–694. https://doi.org/10.1002/jae.2969
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.kernels import COEFFICIENTS, count_inside
from estimation.line_fit import Bandwidths
from estimation.sample import Sample, Side, SideName

# Bytes that the kept sums of one side may take; fewer distances are kept when clusters are many.
_ROOM: Final = 48 * 2**20
_MOST_EDGES: Final = 64
# A side left without a cluster is not refitted when it keeps less than this share of its determinant.
_SINGULAR: Final = 1e-9

ClusterRule = Literal["jackknife", "sandwich"]


def cluster_rule(variance: str) -> ClusterRule:
    """Which clustered variance a study's choice asks for."""
    return "sandwich" if variance in ("hc0", "hc1") else "jackknife"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Sums:
    """Σ over the rows of each cluster of w·(d/scale)^r, shape (G, R), and of w·v·(d/scale)^r, shape (G, Q, v)."""

    mass: Matrix
    first: Cube


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterSums:
    """One side's sums by cluster.

    Attributes
    ----------
    codes
        Cluster of each row, 0 … G − 1, shared by both sides, shape (n,).
    edges
        Numbers of nearest rows at which sums are kept, ascending from 0.
    kept_mass, kept_first
        The sums there, shapes (edges, G, R) and (edges, G, Q, v), in units of the side's reach.
    """

    name: SideName
    side: Side
    codes: Codes
    clusters: int
    centre: Vector
    edges: Codes
    kept_mass: Cube
    kept_first: Cube

    @property
    def reach(self) -> float:
        """Largest distance."""
        return float(self.side.distance[-1]) or 1.0

    @classmethod
    def build(
        cls,
        name: SideName,
        side: Side,
        codes: Codes,
        clusters: int,
        centre: Vector,
        *,
        powers: int,
        firsts: int,
    ) -> ClusterSums:
        """Sum one side by cluster."""
        width = powers + firsts * side.values.shape[1]
        room = min(_MOST_EDGES, _ROOM // max(8 * clusters * width, 1), max(len(side) // 2048, 0))
        edges = np.linspace(0, len(side), room + 1).astype(np.int64)
        kept_mass = np.zeros((len(edges), clusters, powers))
        kept_first = np.zeros((len(edges), clusters, firsts, side.values.shape[1]))
        empty = cls(
            name=name,
            side=side,
            codes=codes,
            clusters=clusters,
            centre=centre,
            edges=edges,
            kept_mass=kept_mass,
            kept_first=kept_first,
        )
        for e in range(1, len(edges)):
            added = empty._between(int(edges[e - 1]), int(edges[e]))
            kept_mass[e] = kept_mass[e - 1] + added.mass
            kept_first[e] = kept_first[e - 1] + added.first
        return empty

    def _between(self, start: int, stop: int) -> _Sums:
        rows = slice(start, stop)
        codes, u = self.codes[rows], self.side.distance[rows] / self.reach
        weight = np.ones(len(u)) if self.side.weight is None else self.side.weight[rows]
        values = self.side.values[rows] - self.centre
        powers, firsts = self.kept_mass.shape[2], self.kept_first.shape[2]
        mass = np.empty((self.clusters, powers))
        first = np.empty((self.clusters, firsts, values.shape[1]))
        term = weight.copy()
        for r in range(powers):
            mass[:, r] = np.bincount(codes, weights=term, minlength=self.clusters)
            if r < firsts:
                for a in range(values.shape[1]):
                    first[:, r, a] = np.bincount(codes, weights=term * values[:, a], minlength=self.clusters)
            term *= u
        return _Sums(mass=mass, first=first)

    def at(self, bandwidth: float, kernel: str) -> _Sums:
        """Σ K(d/h)·w·(d/h)^r by cluster: one power fewer for each power of the kernel."""
        count = count_inside(self.side.distance, bandwidth, kernel)
        edge = int(np.searchsorted(self.edges, count, side="right")) - 1
        between = self._between(int(self.edges[edge]), count)
        scale = (self.reach / bandwidth) ** np.arange(self.kept_mass.shape[2])
        mass = (self.kept_mass[edge] + between.mass) * scale
        first = (self.kept_first[edge] + between.first) * scale[: self.kept_first.shape[2], None]
        shape = COEFFICIENTS[kernel]
        powers, firsts = mass.shape[1] - len(shape) + 1, first.shape[1] - len(shape) + 1
        return _Sums(
            mass=np.sum([c * mass[:, m : m + powers] for m, c in enumerate(shape)], axis=0),
            first=np.sum([c * first[:, m : m + firsts] for m, c in enumerate(shape)], axis=0),
        )

    def present(self, bandwidth: float, kernel: str) -> Codes:
        """Clusters with a row inside the bandwidth."""
        return np.unique(self.codes[: count_inside(self.side.distance, bandwidth, kernel)])


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterSpread:
    """Covariances of the jumps, plain and bias-corrected, each (v, v), and the clusters inside the bandwidth."""

    covariance: Matrix
    robust_covariance: Matrix
    clusters: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterChanges:
    """What each cluster does to the jumps: the covariance of any two estimates is Σ_g change_g change_g′.

    Attributes
    ----------
    names
        The clusters' own codes, shape (G,), ascending: estimates that share clusters are matched by them.
    plain, robust
        Share of each cluster in the spread of (upper less lower level), plain and bias-corrected, shape (G, v), with
        the factor of the variance taken in.
    inside
        Clusters inside the bandwidth.
    """

    names: Codes
    plain: Matrix
    robust: Matrix
    inside: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterLadder:
    """Both sides' sums by cluster, for one kernel and every order up to `order`; `names` are the clusters' codes."""

    names: Codes
    sides: tuple[ClusterSums, ClusterSums]
    kernel: str
    order: int

    @classmethod
    def build(cls, sample: Sample, *, kernel: str, order: int) -> ClusterLadder:
        """Sum the rows by cluster once; the sample must have clusters."""
        assert sample.below.cluster is not None and sample.above.cluster is not None
        degree = len(COEFFICIENTS[kernel]) - 1
        names, codes = np.unique(
            np.concatenate((sample.below.cluster, sample.above.cluster)), return_inverse=True
        )
        split = len(sample.below)
        nearest = np.concatenate((sample.below.values[:4096], sample.above.values[:4096]))
        below, above = (
            ClusterSums.build(
                name,
                side,
                code.astype(np.int64),
                len(names),
                nearest.mean(axis=0),
                powers=2 * (order + 1) + 1 + degree,
                firsts=order + 2 + degree,
            )
            for (name, side), code in zip(sample.sides, (codes[:split], codes[split:]))
        )
        return cls(names=names.astype(np.int64), sides=(below, above), kernel=kernel, order=order)

    def spread(self, bandwidths: Bandwidths, *, order: int, variance: str) -> ClusterSpread:
        """The clustered covariances at one pair of widths; `variance` is the study's word."""
        found = self.changes(bandwidths, order=order, variance=variance)
        return ClusterSpread(
            covariance=np.asarray(found.plain.T @ found.plain),
            robust_covariance=np.asarray(found.robust.T @ found.robust),
            clusters=found.inside,
        )

    def changes(self, bandwidths: Bandwidths, *, order: int, variance: str) -> ClusterChanges:
        """The clusters' shares in the spread at one pair of widths."""
        inside: list[Codes] = []
        plain: list[Matrix] = []
        robust: list[Matrix] = []
        for side, sign in zip(self.sides, (-1.0, 1.0)):
            bandwidth, pilot = bandwidths.of(side.name)
            near, wide = side.at(bandwidth, self.kernel), side.at(pilot, self.kernel)
            inside.append(side.present(max(bandwidth, pilot), self.kernel))
            change = _left_out if cluster_rule(variance) == "jackknife" else _scores
            levels = change(near, wide, order, bandwidth / pilot)
            if variance == "hc1":
                rows = [count_inside(side.side.distance, width, self.kernel) for width in (bandwidth, pilot)]
                levels = [
                    level * np.sqrt(n / max(n - k, 1))
                    for level, n, k in zip(levels, rows, (order + 1, order + 2))
                ]
            plain.append(sign * levels[0])
            robust.append(sign * levels[1])
        clusters = len(np.union1d(*inside))
        factor = np.sqrt(
            (clusters - 1) / clusters
            if cluster_rule(variance) == "jackknife"
            else clusters / max(clusters - 1, 1)
        )
        return ClusterChanges(
            names=self.names,
            plain=factor * (plain[0] + plain[1]),
            robust=factor * (robust[0] + robust[1]),
            inside=clusters,
        )


def _gram(mass: Matrix, size: int) -> Cube:
    index = np.arange(size)
    return mass[:, index[:, None] + index[None, :]]


def _solve_each(whole: Matrix, each: Cube, right: Cube) -> tuple[Cube, Mask]:
    """(A − S_g)⁻¹ b_g for every cluster, shape (G, n, k), and whether the side stands without it, shape (G,)."""
    left = whole - each
    stands: Mask = np.abs(np.linalg.det(left)) > _SINGULAR * abs(float(np.linalg.det(whole)))
    safe = np.where(stands[:, None, None], left, np.eye(len(whole)))
    return np.asarray(np.linalg.solve(safe, right), dtype=np.float64), stands


def _fits(sums: _Sums, size: int) -> tuple[Matrix, Matrix, Matrix]:
    """(A, F, coefficients) of a whole side."""
    gram = _gram(sums.mass.sum(axis=0)[None], size)[0]
    first = sums.first[:, :size].sum(axis=0)
    return gram, first, np.linalg.solve(gram, first)


def _left_out(near: _Sums, wide: _Sums, order: int, ratio: float) -> list[Matrix]:
    """Level less the level without each cluster, plain and bias-corrected, each (G, v).

    Where a side can't be fitted without a cluster, that cluster's share is its sandwich score.
    """
    size = order + 1
    gram, first, fitted = _fits(near, size)
    each = _gram(near.mass, size)
    total = near.mass.sum(axis=0)
    # Coefficients without g, and without g the sum of weights times d^(p+1) (in units of h^(p+1)).
    higher = (total - near.mass)[:, size : 2 * size]
    unit = np.zeros((len(each), size, 1))
    unit[:, 0] = 1.0
    right = np.concatenate((first - near.first[:, :size], unit), axis=2)
    solved, stands = _solve_each(gram, each, right)
    level_without = solved[:, 0, :-1]
    left_without = np.einsum("gj,gj->g", solved[:, :, -1], higher)

    pilot_gram, pilot_first, pilot_fitted = _fits(wide, size + 1)
    pilot_solved, pilot_stands = _solve_each(
        pilot_gram, _gram(wide.mass, size + 1), pilot_first - wide.first[:, : size + 1]
    )
    scale = ratio ** (order + 1)
    weights = np.linalg.solve(gram, np.eye(size)[:, 0])
    left_over = float(weights @ total[size : 2 * size])
    corrected = fitted[0] - scale * left_over * pilot_fitted[-1]
    corrected_without = level_without - scale * left_without[:, None] * pilot_solved[:, -1]
    scores = _scores(near, wide, order, ratio)
    plain = np.where(stands[:, None], fitted[0] - level_without, scores[0])
    both = stands & pilot_stands
    return [plain, np.where(both[:, None], corrected - corrected_without, scores[1])]


def _scores(near: _Sums, wide: _Sums, order: int, ratio: float) -> list[Matrix]:
    """Σ_{i∈g} l_i e_i of each cluster with the fit's residuals, plain and bias-corrected, each (G, v)."""
    size = order + 1
    gram, _, fitted = _fits(near, size)
    weights = np.linalg.solve(gram, np.eye(size)[:, 0])
    plain = np.einsum("j,gja->ga", weights, near.first[:, :size] - _gram(near.mass, size) @ fitted)
    pilot_gram, _, pilot_fitted = _fits(wide, size + 1)
    top = np.linalg.solve(pilot_gram, np.eye(size + 1)[:, -1])
    left_over = float(weights @ near.mass.sum(axis=0)[size : 2 * size])
    # The pilot's curve in units of the bandwidth, to take residuals from it inside the bandwidth.
    curve = pilot_fitted * (ratio ** np.arange(size + 1))[:, None]
    index = np.arange(size)[:, None] + np.arange(size + 1)[None, :]
    inside = near.first[:, :size] - near.mass[:, index] @ curve
    around = wide.first[:, : size + 1] - _gram(wide.mass, size + 1) @ pilot_fitted
    robust = np.einsum("j,gja->ga", weights, inside) - ratio**size * left_over * np.einsum(
        "j,gja->ga", top, around
    )
    return [plain, robust]
