r"""Many effects asked about at once: bands that hold at all of them, and the test that none is different from zero.

Independent effects hold together with probability α₁^k when each holds with α₁ (Šidák). Dependent ones take the
quantile of the largest |t| under their joint normal law, simulated with the study's seed; the level it leaves to each
effect alone is then read off each effect's own t law.

References
----------
Šidák, Z. (1967). Rectangular confidence regions for the means of multivariate normal distributions. JASA 62, 626–633.
    https://doi.org/10.1080/01621459.1967.10482935
Hotelling, H. (1931). The generalization of Student's ratio. Annals of Mathematical Statistics 2, 360–378.
    https://doi.org/10.1214/aoms/1177732979
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.special import chdtrc, fdtrc, ndtr

from estimation.arrays import Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.inference import quantile
from estimation.pooling import SiteEstimates


@dataclass(frozen=True, slots=True, kw_only=True)
class JointTest:
    """Wald test that every effect is zero."""

    statistic: float
    df: int
    p_value: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """Intervals that hold at all sites at once with the stated level.

    Attributes
    ----------
    low, high
        Shape (k,).
    pointwise_level
        Level of each interval alone.
    method
        "independent" (Šidák) or "joint" (largest |t| of the joint normal law, simulated).
    draws
        Simulated draws; 0 for independent sites.
    """

    low: Vector
    high: Vector
    pointwise_level: float
    method: str
    draws: int


def joint_test(sites: SiteEstimates) -> JointTest:
    """Wald test that all effects are zero, y′Σ⁻¹y; with clusters against Hotelling's law.

    Raises
    ------
    CannotEstimate
        When clusters are too few for so many effects.
    """
    k = len(sites)
    if sites.covariance is None:
        statistic = float(np.sum((sites.estimate / sites.std_error) ** 2))
        return JointTest(statistic=statistic, df=k, p_value=float(chdtrc(k, statistic)))
    correlation = sites.covariance / np.outer(sites.std_error, sites.std_error)
    degrees = np.inf if sites.degrees is None else sites.degrees
    if degrees < k or np.linalg.cond(correlation) > 1e10:
        raise CannotEstimate(
            f"{k} effects can't be tested together with {degrees + 1:.0f} clusters.",
            "Read the effects one by one, with their Holm-adjusted p-values.",
        )
    z = sites.estimate / sites.std_error
    statistic = float(z @ np.linalg.solve(correlation, z))
    if np.isinf(degrees):
        return JointTest(statistic=statistic, df=k, p_value=float(chdtrc(k, statistic)))
    scaled = statistic * (degrees - k + 1.0) / (degrees * k)
    return JointTest(statistic=statistic, df=k, p_value=float(fdtrc(k, degrees - k + 1.0, scaled)))


DRAWS: Final = 20_000


def simultaneous_band(
    sites: SiteEstimates, *, level: float, seed: int, degrees: Vector | None = None, draws: int = DRAWS
) -> Band:
    """Intervals that hold at all sites at once.

    Parameters
    ----------
    seed
        Of the simulated largest |t|; not used for independent sites.
    degrees
        Each site's own degrees of freedom, shape (k,), NaN for the normal law; None for the normal law everywhere.
    """
    k = len(sites)
    if sites.covariance is None:
        alone, method, used = level ** (1.0 / k), "independent", 0
    else:
        largest = _largest_t(sites.covariance, sites.std_error, seed=seed, draws=draws)
        alone = float(1.0 - 2.0 * ndtr(-np.quantile(largest, level)))
        method, used = "joint", draws
    normal = quantile(alone)
    reach = np.array(
        [normal]
        if degrees is None
        else [normal if np.isnan(d) else quantile(alone, float(d)) for d in degrees]
    )
    return Band(
        low=sites.estimate - reach * sites.std_error,
        high=sites.estimate + reach * sites.std_error,
        pointwise_level=float(alone),
        method=method,
        draws=used,
    )


def _largest_t(covariance: Matrix, std_error: Vector, *, seed: int, draws: int) -> Vector:
    """Largest |t| over sites in each draw of the joint normal law, shape (draws,); singular covariances allowed."""
    values, vectors = np.linalg.eigh(covariance / np.outer(std_error, std_error))
    kept = values > values[-1] * len(values) * np.finfo(np.float64).eps
    root = vectors[:, kept] * np.sqrt(values[kept])
    # A correlation that rounding or few clusters left short of one on its diagonal is brought back to it.
    root /= np.sqrt(np.einsum("ij,ij->i", root, root))[:, None]
    rng = np.random.default_rng(seed)
    largest = np.empty(draws)
    for start in range(0, draws, 2000):
        noise = rng.standard_normal((root.shape[1], min(2000, draws - start)))
        largest[start : start + noise.shape[1]] = np.abs(root @ noise).max(axis=0)
    return largest
