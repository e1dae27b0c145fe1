r"""What the effects at many sites say together.

With estimates y_i, variances v_i and their joint covariance Σ (diagonal unless clusters span sites), any weights w
give a mean w′y with variance w′Σw. Weights are made from the variances alone, so that a joint covariance that is
itself only estimated need not be inverted; it enters every variance and the expectation and spread of Q:

    Q = Σ (y_i − ȳ)²/v_i = y′Py with P = W − W X (X′WX)⁻¹ X′W, W = diag(1/v), X = 1,
    E[Q | sites alike] = tr(PΣ), Var = 2 tr((PΣ)²), and with a spread τ² among sites E[Q] = tr(PΣ) + τ² tr(P).

Independent sites have tr(PΣ) = k − 1 exactly, and all of this is Cochran's Q and DerSimonian and Laird's τ². The
trend in the cutoff is the same with X = (1, c).

References
----------
Cochran, W. (1954). The combination of estimates from different experiments. Biometrics 10, 101–129.
DerSimonian, R. & Laird, N. (1986). Meta-analysis in clinical trials. Controlled Clinical Trials 7, 177–188.
    https://doi.org/10.1016/0197-2456(86)90046-2
Satterthwaite, F. (1946). An approximate distribution of estimates of variance components. Biometrics Bulletin 2,
    110–114.  (the spread of Q where sites depend on each other)
Higgins, J. & Thompson, S. (2002). Quantifying heterogeneity in a meta-analysis. Statistics in Medicine 21,
    1539–1558. https://doi.org/10.1002/sim.1186  (I²)
Higgins, J., Thompson, S. & Spiegelhalter, D. (2009). A re-evaluation of random-effects meta-analysis. JRSS A 172,
    137–159. https://doi.org/10.1111/j.1467-985X.2008.00552.x  (prediction interval)
Robinson, G. (1991). That BLUP is a good thing. Statistical Science 6, 15–32.  (shrunken effects and their errors)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import chdtrc, fdtrc

from estimation.arrays import Codes, Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.inference import Interval, interval, quantile


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteEstimates:
    """Estimates at k sites that are looked at together.

    Attributes
    ----------
    estimate, std_error
        Shape (k,), finite; errors positive.
    covariance
        Their joint covariance, shape (k, k), with the squared errors on its diagonal; None where sites are independent.
    degrees
        Degrees of freedom of the spread: clusters over all sites less one, or None for the normal law.
    """

    estimate: Vector
    std_error: Vector
    covariance: Matrix | None = None
    degrees: float | None = None

    def __len__(self) -> int:
        return len(self.estimate)

    @property
    def variance(self) -> Vector:
        """Squared errors, shape (k,)."""
        return np.asarray(self.std_error**2)

    def spread(self, weights: Matrix) -> Matrix:
        """Covariance of the combinations weights @ estimate: weights Σ weights′ for weights of shape (m, k)."""
        if self.covariance is None:
            return np.asarray((weights * self.variance) @ weights.T)
        return np.asarray(weights @ self.covariance @ weights.T)

    def of(self, kept: Codes) -> SiteEstimates:
        """The same of some sites."""
        return SiteEstimates(
            estimate=self.estimate[kept],
            std_error=self.std_error[kept],
            covariance=None if self.covariance is None else self.covariance[np.ix_(kept, kept)],
            degrees=self.degrees,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Mean:
    """A weighted mean of the sites' effects, and the weights (k,), which add to one."""

    found: Interval
    weights: Vector


@dataclass(frozen=True, slots=True, kw_only=True)
class Heterogeneity:
    """How far the sites differ by more than chance.

    Attributes
    ----------
    q, df, p_value
        Cochran's Q, k − 1, and its p-value under sites that are alike.
    expected
        E[Q] if sites are alike: `df` for independent sites.
    tau2
        Variance of the true effects among sites, DerSimonian and Laird; in squared units of the outcome.
    i2
        Share of Q beyond what chance gives, from 0 to 1.
    """

    q: float
    df: int
    p_value: float
    expected: float
    tau2: float
    i2: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Shrunken:
    """Each site's effect drawn toward the mean as far as its own noise says, shape (k,) each."""

    estimate: Vector
    std_error: Vector
    low: Vector
    high: Vector


@dataclass(frozen=True, slots=True, kw_only=True)
class RandomEffects:
    """The mean over a wider set of sites like these.

    Attributes
    ----------
    mean
        With weights 1/(v + τ²).
    prediction
        (low, high) for the true effect at a new site; None with fewer than three sites.
    shrunken
        The sites' own effects, drawn toward the mean.
    """

    mean: Mean
    prediction: tuple[float, float] | None
    shrunken: Shrunken


@dataclass(frozen=True, slots=True, kw_only=True)
class Trend:
    """How the effect changes with the cutoff.

    Attributes
    ----------
    slope
        Effect for each unit of the score by which the cutoff lies higher.
    level, centre
        The fitted effect at `centre`, the weighted mean of the cutoffs.
    covariance
        Of (level, slope), shape (2, 2).
    tau2
        Variance of true effects round the trend.
    """

    slope: Interval
    level: Interval
    centre: float
    covariance: Matrix
    tau2: float


def weighted_mean(sites: SiteEstimates, weights: Vector, *, level: float, tau2: float = 0.0) -> Mean:
    """The mean with any weights of positive sum; they are scaled to add to one.

    Parameters
    ----------
    tau2
        Variance of true effects among the wider set of sites that the mean is meant for; 0 for these sites' own mean.
    """
    share = np.asarray(weights, dtype=np.float64) / float(np.sum(weights))
    error = float(np.sqrt(max(sites.spread(share[None])[0, 0], 0.0) + tau2 * float(share @ share)))
    return Mean(
        found=interval(float(share @ sites.estimate), error, level=level, degrees=sites.degrees),
        weights=share,
    )


@dataclass(frozen=True, slots=True)
class _Scatter:
    """Q round a weighted regression on X, and what it is expected to be."""

    q: float
    rank: int
    expected: float
    half_variance: float  # tr((PΣ)²)
    trace: float  # tr(P)

    @property
    def tau2(self) -> float:
        return max(0.0, (self.q - self.expected) / self.trace)


def _scatter(sites: SiteEstimates, design: Matrix) -> _Scatter:
    weight = 1.0 / sites.variance
    weighted = design * weight[:, None]
    inverse = np.linalg.inv(design.T @ weighted)
    residual = sites.estimate - design @ (inverse @ (weighted.T @ sites.estimate))
    rank = len(sites) - design.shape[1]
    expected = half = float(rank)
    if sites.covariance is not None:
        inner = weight[:, None] * sites.covariance - weighted @ (inverse @ (weighted.T @ sites.covariance))
        expected = float(np.trace(inner))
        half = float(np.einsum("ij,ji->", inner, inner))
    trace = float(weight.sum() - np.trace(inverse @ (weighted.T @ weighted)))
    return _Scatter(
        q=float(weight @ residual**2), rank=rank, expected=expected, half_variance=half, trace=trace
    )


def heterogeneity(sites: SiteEstimates) -> Heterogeneity:
    """Cochran's Q with its p-value, τ² and I².

    Where sites share clusters, Q over its expectation is compared with an F law whose first degrees of freedom match
    its variance and whose second are those of the spread.

    Raises
    ------
    CannotEstimate
        With fewer than two sites.
    """
    require_sites(sites, 2, "How far sites differ")
    found = _scatter(sites, np.ones((len(sites), 1)))
    if sites.covariance is None and sites.degrees is None:
        p = float(chdtrc(found.rank, found.q))
    else:
        freedom = found.expected**2 / found.half_variance
        degrees = sites.degrees if sites.degrees is not None else 1e9
        p = float(fdtrc(freedom, degrees, found.q / found.expected))
    return Heterogeneity(
        q=found.q,
        df=found.rank,
        p_value=p,
        expected=found.expected,
        tau2=found.tau2,
        i2=max(0.0, 1.0 - found.expected / found.q) if found.q > 0.0 else 0.0,
    )


def random_effects(sites: SiteEstimates, tau2: float, *, level: float) -> RandomEffects:
    """The random-effects mean, the prediction interval and the shrunken effects for a given τ².

    A shrunken effect is μ̂ + τ²/(τ² + v)·(y − μ̂); its error allows for the noise in y, for the true spread and for
    μ̂ having been estimated: with θ̂ = L y it is LΣL′ + τ²(I − L)(I − L)′.
    """
    mean = weighted_mean(sites, 1.0 / (sites.variance + tau2), level=level, tau2=tau2)
    centre, k = mean.found.estimate, len(sites)
    keep = tau2 / (tau2 + sites.variance)
    estimate = centre + keep * (sites.estimate - centre)
    error = np.sqrt(np.maximum(_shrunken_variance(sites, keep, mean.weights, tau2), 0.0))
    reach = quantile(level, sites.degrees) * error
    prediction = None
    if k >= 3:
        wide = quantile(level, float(k - 2)) * float(np.sqrt(tau2 + mean.found.std_error**2))
        prediction = (centre - wide, centre + wide)
    return RandomEffects(
        mean=mean,
        prediction=prediction,
        shrunken=Shrunken(estimate=estimate, std_error=error, low=estimate - reach, high=estimate + reach),
    )


def _shrunken_variance(sites: SiteEstimates, keep: Vector, share: Vector, tau2: float) -> Vector:
    """Diagonal of LΣL′ + τ²(I − L)(I − L)′ with L = diag(keep) + (1 − keep)·share′, never forming L."""
    drawn = 1.0 - keep
    if sites.covariance is None:
        along = share * sites.variance
    else:
        along = sites.covariance @ share
    own = keep**2 * sites.variance + 2.0 * keep * drawn * along + drawn**2 * float(share @ along)
    # Row i of I − L is (1 − keep_i)(e_i − share).
    return np.asarray(own + tau2 * drawn**2 * (1.0 - 2.0 * share + float(share @ share)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Without:
    """The inverse-variance and the random-effects mean without one site, and τ² among the rest."""

    fixed: Interval
    random: Interval
    tau2: float


def leave_one_out(sites: SiteEstimates, *, level: float) -> tuple[Without, ...]:
    """What the means would be without each site in turn.

    Raises
    ------
    CannotEstimate
        With fewer than three sites.
    """
    require_sites(sites, 3, "Leaving one site out")
    if sites.covariance is None:
        return _leave_one_out_of_independent(sites, level)
    found = []
    everyone = np.arange(len(sites))
    for i in range(len(sites)):
        rest = sites.of(np.delete(everyone, i))
        tau2 = _scatter(rest, np.ones((len(rest), 1))).tau2
        found.append(
            Without(
                fixed=weighted_mean(rest, 1.0 / rest.variance, level=level).found,
                random=weighted_mean(rest, 1.0 / (rest.variance + tau2), level=level, tau2=tau2).found,
                tau2=tau2,
            )
        )
    return tuple(found)


def _leave_one_out_of_independent(sites: SiteEstimates, level: float) -> tuple[Without, ...]:
    """The same for all sites at once: every sum without a site is the whole less the site's own term."""
    weight, y = 1.0 / sites.variance, sites.estimate - float(np.mean(sites.estimate))
    rest, squares = weight.sum() - weight, np.sum(weight**2) - weight**2
    centre = (weight @ y - weight * y) / rest
    q = (weight @ y**2 - weight * y**2) - rest * centre**2
    tau2 = np.maximum(0.0, (q - (len(sites) - 2)) / (rest - squares / rest))
    # Row i holds the weights of the random-effects mean without site i.
    mixed = 1.0 / (sites.variance + tau2[:, None])
    np.fill_diagonal(mixed, 0.0)
    total = mixed.sum(axis=1)
    shift = float(np.mean(sites.estimate))

    def found(centre: float, error: float) -> Interval:
        return interval(float(centre + shift), float(error), level=level, degrees=sites.degrees)

    return tuple(
        Without(fixed=found(a, b**-0.5), random=found(c, d**-0.5), tau2=float(t))
        for a, b, c, d, t in zip(centre, rest, mixed @ y / total, total, tau2)
    )


def trend_in(cutoff: Vector, sites: SiteEstimates, *, level: float) -> Trend:
    """Weighted regression of the effects on their cutoffs, sites allowed to differ round it.

    Raises
    ------
    CannotEstimate
        With fewer than three sites, or when all have one cutoff.
    """
    require_sites(sites, 3, "A trend in the cutoff")
    if not np.ptp(cutoff) > 0.0:
        raise CannotEstimate(
            "All sites have the same cutoff, so that effects have no trend in it.",
            "Compare the sites without it.",
        )
    scale = float(np.ptp(cutoff))
    first = np.column_stack((np.ones(len(cutoff)), (cutoff - cutoff.mean()) / scale))
    tau2 = _scatter(sites, first).tau2
    weight = 1.0 / (sites.variance + tau2)
    centre = float(weight @ cutoff / weight.sum())
    design = np.column_stack((np.ones(len(cutoff)), cutoff - centre))
    # Centred on the weighted mean, X′WX is diagonal.
    combine = (design * weight[:, None]).T / np.array([weight.sum(), weight @ design[:, 1] ** 2])[:, None]
    covariance = sites.spread(combine) + tau2 * combine @ combine.T
    level_at, slope = combine @ sites.estimate
    errors = np.sqrt(np.diagonal(covariance))

    def found(value: float, error: float) -> Interval:
        return interval(float(value), float(error), level=level, degrees=sites.degrees)

    return Trend(
        slope=found(slope, errors[1]),
        level=found(level_at, errors[0]),
        centre=centre,
        covariance=covariance,
        tau2=tau2,
    )


def require_sites(sites: SiteEstimates, fewest: int, what: str) -> None:
    """Refuse a question that needs more sites than there are."""
    if len(sites) < fewest:
        have = {0: "no site has", 1: "1 site has"}.get(len(sites), f"{len(sites)} sites have")
        raise CannotEstimate(
            f"{what} takes {fewest} sites with an estimate; here {have} one.",
            "Widen the bandwidth or add sites.",
        )
