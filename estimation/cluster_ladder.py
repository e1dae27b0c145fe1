r"""Clustered variances from each cluster's own sums, at any bandwidth.

Two of them. The jackknife leaves out one cluster at a time, Var = (G − 1)/G · Σ_g (τ_(−g) − τ)²; the sandwich is
Σ_g (Σ_{i∈g} l_i e_i)² · G/(G − 1) with e the residuals of the fit. Clusters may span both sides; both use t with
G − 1 degrees of freedom, G counting clusters with a row of positive weight inside the bandwidth (or the pilot, where
that is wider).

The jackknife is what a clustered study gets unless it asks for "hc0" or "hc1". Nearest-neighbour residuals do not
serve here: the nearest rows are often of the same cluster, the shock they share cancels in the difference, and the
variance misses just what clustering is for. Share of 95 % intervals that held the truth, and mean error over the
estimate's true spread, with each cluster on one side (benchmarks/cluster_variances.py, seed 5, 1,000 draws, ICC 0.2,
straight lines, bandwidth 0.5 on scores out to 1; Monte Carlo error 0.7 points near 95 %):

    clusters   neighbours     other clusters   sandwich       jackknife
    20         28.2 %, 0.13   96.7 %, 1.10     64.5 %, 0.32   95.2 %, 1.45
    40         44.4 %, 0.25   96.1 %, 1.19     81.2 %, 0.61   93.9 %, 1.11
    100        72.2 %, 0.55   94.3 %, 1.12     90.3 %, 0.88   94.3 %, 1.04

Across the line all four hold 93–96 %. Neighbours from other clusters hold their level too; they are not used because
their error does not settle at the truth: rows of a cluster share their foreign neighbours' shocks as well as their
own, and where clusters keep to stretches of the score those neighbours are far, so that the slope enters. No paper
is known to us for them. The jackknife needs neither neighbours nor a scale, and works from small sums.

Both need only small sums by cluster: S_g = Σ k r r′ and F_g = Σ k r v. They are kept at a coarse grid of distances
(at most 48 MB a side), rows in between are added when asked, so that a reading costs a few passes over the clusters,
not over the rows. In a basis that makes the whole side's A the identity, with γ its coefficients,

    β − β_(−g) = (A − S_g)⁻¹ (F_g − S_g β) = T′ (I − S̃_g)⁻¹ (F̃_g − S̃_g γ),  T A T′ = I,

which loses no digits to a difference of two fits.

References
----------
Bell, R. & McCaffrey, D. (2002). Bias reduction in standard errors for linear regression with multi-stage samples.
    Survey Methodology 28, 169–181.
Cameron, A. C. & Miller, D. L. (2015). A practitioner's guide to cluster-robust inference. Journal of Human
    Resources 50, 317–372. https://doi.org/10.3368/jhr.50.2.317
MacKinnon, J., Nielsen, M. & Webb, M. (2023). Fast and reliable jackknife and bootstrap methods for
    cluster-robust inference. Journal of Applied Econometrics 38, 671–694. https://doi.org/10.1002/jae.2969
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.cluster_sums import ClusterSums, ClusterTable
from estimation.kernels import COEFFICIENTS
from estimation.ladder import LineFits, Widths
from estimation.line_fit import Bandwidths
from estimation.sample import Sample

# A side left without a cluster is not refitted when it keeps less than this share of its determinant.
SINGULAR: Final = 1e-9
# Clusters handled at once: their small systems stay in the processor's cache, and temporaries stay small.
_TOGETHER: Final = 1 << 14

ClusterRule = Literal["jackknife", "sandwich"]


def cluster_rule(variance: str) -> ClusterRule:
    """Which clustered variance a study's choice asks for."""
    return "sandwich" if variance in ("hc0", "hc1") else "jackknife"


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

    def clustered(self, fits: LineFits, widths: Widths, *, order: int, variance: str) -> LineFits:
        """Fits with their covariances clustered and their clusters counted, NaN where a fit can't run.

        Parameters
        ----------
        fits
            What a `Ladder` of the same sample gave at `widths`.
        """
        covariance, robust = np.empty_like(fits.covariance), np.empty_like(fits.robust_covariance)
        clusters = np.zeros(len(covariance), dtype=np.int64)
        # From the narrowest to the widest, each width adds its rows to the sums of the one before.
        tables: list[dict[float, ClusterTable]] = [{}, {}]
        for i in np.argsort(widths.above, kind="stable"):
            ask = Bandwidths(
                below=float(widths.below[i]),
                above=float(widths.above[i]),
                pilot_below=float(widths.pilot_below[i]),
                pilot_above=float(widths.pilot_above[i]),
                rule="chosen",
            )
            found = self.changes(ask, order=order, variance=variance, tables=tables)
            covariance[i] = found.plain.T @ found.plain
            robust[i] = found.robust.T @ found.robust
            clusters[i] = found.inside
        return replace(fits, covariance=covariance, robust_covariance=robust, clusters=clusters)

    def changes(
        self,
        bandwidths: Bandwidths,
        *,
        order: int,
        variance: str,
        tables: list[dict[float, ClusterTable]] | None = None,
    ) -> ClusterChanges:
        """The clusters' shares in the spread at one pair of widths.

        `tables` holds each side's sums at the widths asked about last; they are started from and replaced.
        """
        plain, robust = np.zeros((2, self.sides[0].variables, len(self.names)))
        present = np.zeros(len(self.names), dtype=bool)
        for i, (side, sign) in enumerate(zip(self.sides, (-1.0, 1.0))):
            bandwidth, pilot = bandwidths.of(side.name)
            known = {} if tables is None else tables[i]
            near = known.get(bandwidth) or side.at(bandwidth, self.kernel, known.values())
            wide = known.get(pilot) or (near if pilot == bandwidth else side.at(pilot, self.kernel, (near,)))
            if tables is not None:
                tables[i] = {bandwidth: near, pilot: wide}
            present |= side.present(max(near.count, wide.count))
            levels = _changes(near, wide, self.kernel, order, cluster_rule(variance))
            for total, level, count, parameters in zip(
                (plain, robust), levels, (near.count, wide.count), (order + 1, order + 2)
            ):
                factor = np.sqrt(count / max(count - parameters, 1)) if variance == "hc1" else 1.0
                total += sign * factor * level
        clusters = int(np.count_nonzero(present))
        share = max(clusters - 1, 1) / max(clusters, 1)
        factor = np.sqrt(share if cluster_rule(variance) == "jackknife" else 1.0 / share)
        return ClusterChanges(
            names=self.names, plain=factor * plain.T, robust=factor * robust.T, inside=clusters
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Fit:
    """A whole side's fit of `size` coefficients in the basis that makes its A the identity.

    Attributes
    ----------
    to_gram, to_first
        What turns a cluster's raw sums into S̃, shape (size², R), and F̃, shape (size, Q).
    to_next
        What turns them into F̃ for the value u^size, shape (size, R).
    target
        T's column of the coefficient asked for: that coefficient is target · γ.
    fitted, fitted_next
        γ of each variable, shape (size, v), and of u^size, shape (size,).
    powers
        What turns raw sums into Σ k u^r, shape (moments, R).
    basis
        T, shape (size, size).
    """

    to_gram: Matrix
    to_first: Matrix
    to_next: Matrix
    target: Vector
    fitted: Matrix
    fitted_next: Vector
    powers: Matrix
    basis: Matrix

    @classmethod
    def of(cls, table: ClusterTable, kernel: str, size: int, coefficient: int) -> _Fit:
        shape = COEFFICIENTS[kernel]
        raw = table.mass.sum(axis=1).astype(np.longdouble)
        powers = np.zeros((len(raw) - len(shape) + 1, len(raw)), dtype=np.longdouble)
        scale = np.longdouble(table.ratio) ** np.arange(len(raw))
        for m, c in enumerate(shape):
            index = np.arange(len(powers))
            powers[index, index + m] = c * scale[index + m]
        moments = powers @ raw
        index = np.arange(size)
        basis = _inverse_root(moments[index[:, None] + index])
        shifted = np.stack([powers[a : a + size] for a in range(size)])
        to_gram = np.einsum("ia,abr,kb->ikr", basis, shifted, basis).reshape(size * size, -1)
        to_first = basis @ powers[:size, : len(table.first)]
        # The order p + 1 fit has no next power to answer for, nor the sums for it.
        to_next = basis @ powers[size : 2 * size] if 2 * size <= len(powers) else np.zeros((size, len(raw)))
        return cls(
            to_gram=to_gram.astype(np.float64),
            to_first=to_first.astype(np.float64),
            to_next=to_next.astype(np.float64),
            target=basis[:, coefficient].astype(np.float64),
            fitted=(to_first @ table.first.sum(axis=2)).astype(np.float64),
            fitted_next=(to_next @ raw).astype(np.float64),
            powers=powers.astype(np.float64),
            basis=basis.astype(np.float64),
        )


def _inverse_root(gram: Matrix) -> Matrix:
    """Lower triangular T with T A T′ = I, in extended precision; NaN where A is not positive definite."""
    size = len(gram)
    lower = np.zeros_like(gram)
    inverse = np.zeros_like(gram)
    for j in range(size):
        pivot = gram[j, j] - lower[j, :j] @ lower[j, :j]
        lower[j, j] = np.sqrt(pivot) if pivot > 0.0 else np.nan
        lower[j + 1 :, j] = (gram[j + 1 :, j] - lower[j + 1 :, :j] @ lower[j, :j]) / lower[j, j]
    for j in range(size):
        inverse[j, :j] = -(lower[j, :j] @ inverse[:j, :j]) / lower[j, j]
        inverse[j, j] = 1.0 / lower[j, j]
    return inverse


@dataclass(frozen=True, slots=True, kw_only=True)
class _Parts:
    """Some clusters' shares in a whole side's fit: S̃ (n, n, g), F̃ (n, v, g) and F̃ − S̃γ, for v and for u^size."""

    gram: Cube
    first: Cube
    score: Cube
    score_next: Matrix

    @classmethod
    def of(cls, fit: _Fit, mass: Matrix, first: Cube) -> _Parts:
        size, clusters = len(fit.target), mass.shape[1]
        gram = fit.to_gram @ mass
        turned = (fit.to_first @ first.reshape(len(first), -1)).reshape(size, -1, clusters)
        wide = gram.reshape(size, -1)
        explained = (fit.fitted.T @ wide).reshape(-1, size, clusters).transpose(1, 0, 2)
        next_power = (fit.fitted_next @ wide).reshape(size, clusters)
        return cls(
            gram=gram.reshape(size, size, clusters),
            first=turned,
            score=turned - explained,
            score_next=fit.to_next @ mass - next_power,
        )


def _changes(
    near: ClusterTable, wide: ClusterTable, kernel: str, order: int, rule: ClusterRule
) -> tuple[Matrix, Matrix]:
    """What each cluster does to one side's level, plain and bias-corrected, each (v, G)."""
    fit, pilot = _Fit.of(near, kernel, order + 1, 0), _Fit.of(wide, kernel, order + 2, order + 1)
    scale = (wide.ratio / near.ratio) ** (order + 1)
    plain, robust = np.empty((2, near.first.shape[1], near.mass.shape[1]))
    for start in range(0, near.mass.shape[1], _TOGETHER):
        some = slice(start, start + _TOGETHER)
        inner = _Parts.of(fit, near.mass[:, some], near.first[:, :, some])
        outer = _Parts.of(pilot, wide.mass[:, some], wide.first[:, :, some])
        if rule == "jackknife":
            plain[:, some], robust[:, some], stands, both = _left_out(fit, pilot, inner, outer, scale)
            if both.all():
                continue
        else:
            stands = both = np.zeros(inner.gram.shape[2], dtype=bool)
        # A cluster without which a side can't be fitted has its sandwich score for a change.
        curve = pilot.basis.T @ pilot.fitted * (wide.ratio / near.ratio) ** np.arange(order + 2)[:, None]
        scores = _scores(fit, pilot, inner, outer, curve, near.mass[:, some], scale)
        plain[:, some] = np.where(stands, plain[:, some], scores[0])
        robust[:, some] = np.where(both, robust[:, some], scores[1])
    return plain, robust


def _left_out(
    fit: _Fit, pilot: _Fit, inner: _Parts, outer: _Parts, scale: float
) -> tuple[Matrix, Matrix, Mask, Mask]:
    """Level less the level without each cluster, plain and bias-corrected, and where each can be fitted without."""
    solved, stands = _without(inner.gram, fit.target)
    pilot_solved, pilot_stands = _without(outer.gram, pilot.target)
    level = np.einsum("ig,ivg->vg", solved, inner.score)
    top = np.einsum("ig,ivg->vg", pilot_solved, outer.score)
    left = np.einsum("ig,ig->g", solved, inner.score_next)
    # left·top less (left − Δleft)(top − Δtop), where left = Σ l u^(p+1) and top is the pilot's coefficient.
    whole_left, whole_top = fit.target @ fit.fitted_next, pilot.target @ pilot.fitted
    shift = whole_left * top + left * whole_top[:, None] - left * top
    return level, level - scale * shift, stands, stands & pilot_stands


def _scores(
    fit: _Fit, pilot: _Fit, inner: _Parts, outer: _Parts, curve: Matrix, mass: Matrix, scale: float
) -> tuple[Matrix, Matrix]:
    """Σ_{i∈g} l_i e_i of each cluster with the fit's residuals, plain and bias-corrected, each (v, g).

    `curve` holds the pilot's coefficients in units of the bandwidth: residuals of l_bc are taken from it.
    """
    plain = np.einsum("i,ivg->vg", fit.target, inner.score)
    weights = fit.basis.T @ fit.target
    explained = (
        np.stack([np.convolve(weights, column) for column in curve.T]) @ fit.powers[: 2 * len(weights)]
    )
    inside = np.einsum("i,ivg->vg", fit.target, inner.first) - explained @ mass
    around = np.einsum("i,ivg->vg", pilot.target, outer.score)
    return plain, inside - scale * (fit.target @ fit.fitted_next) * around


def _without(gram: Cube, right: Vector) -> tuple[Matrix, Mask]:
    """(I − S̃_g)⁻¹ b for every cluster, shape (n, g), and whether the side stands without it, shape (g,)."""
    size, clusters = len(gram), gram.shape[2]
    lower = np.empty_like(gram)
    left = np.ones(clusters)
    positive = np.ones(clusters, dtype=bool)
    for j in range(size):
        pivot = 1.0 - gram[j, j]
        for k in range(j):
            pivot -= lower[j, k] ** 2
        positive &= pivot > 0.0
        left *= pivot
        lower[j, j] = np.sqrt(np.where(pivot > 0.0, pivot, 1.0))
        for i in range(j + 1, size):
            rest = -gram[i, j]
            for k in range(j):
                rest -= lower[i, k] * lower[j, k]
            lower[i, j] = rest / lower[j, j]
    solved = np.empty((size, clusters))
    for j in range(size):
        total = np.full(clusters, right[j])
        for k in range(j):
            total -= lower[j, k] * solved[k]
        solved[j] = total / lower[j, j]
    for j in reversed(range(size)):
        for k in range(j + 1, size):
            solved[j] -= lower[k, j] * solved[k]
        solved[j] /= lower[j, j]
    return solved, positive & (left > SINGULAR)
