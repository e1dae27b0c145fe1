"""What the sites of a study say together, each part with a reason where it can't be had."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from estimation.arrays import Vector
from estimation.errors import CannotEstimate
from estimation.inference import Interval
from estimation.multiple import holm
from estimation.pooling import (
    Heterogeneity,
    Mean,
    RandomEffects,
    SiteEstimates,
    Trend,
    Without,
    heterogeneity,
    leave_one_out,
    random_effects,
    require_sites,
    trend_in,
    weighted_mean,
)
from estimation.shared_clusters import ClusterShares, joint_covariance
from estimation.simultaneous import Band, JointTest, joint_test, simultaneous_band

if TYPE_CHECKING:
    from study.analysis import Workbench
    from study.comparison import SiteReading, SiteRow

Found = TypeVar("Found")


@dataclass(frozen=True, slots=True, kw_only=True)
class Together:
    """What the bias-corrected effects of the sites say together.

    Attributes
    ----------
    names
        Sites that take part, in the order of every vector here.
    estimates
        Their robust centres, errors and joint covariance.
    independent
        Whether no cluster serves two sites.
    inverse_variance, equal, stated
        Means of these sites' effects by each weighting; `stated` by the weights that the study names.
    spread, random, trend, without, band, joint, holm
        Heterogeneity, random effects, trend in the cutoff, leaving one out, simultaneous band, joint test, adjusted
        p-values; None where it can't be had, and then `reasons` holds the sentence by the attribute's name.
    """

    names: tuple[str, ...]
    estimates: SiteEstimates
    inverse_variance: Mean | None
    equal: Mean | None
    stated: Mean | None
    spread: Heterogeneity | None
    random: RandomEffects | None
    trend: Trend | None
    without: tuple[Without, ...] | None
    band: Band | None
    joint: JointTest | None
    holm: Vector
    reasons: Mapping[str, str]

    @property
    def independent(self) -> bool:
        """Whether sites share no cluster."""
        return self.estimates.covariance is None

    def place(self, name: str) -> int | None:
        """A site's place in the vectors, or None where it takes no part."""
        return self.names.index(name) if name in self.names else None


def _robust(reading: SiteReading, sharp: bool) -> Interval:
    return reading.intention if sharp and reading.intention is not None else reading.robust


def put_together(
    bench: Workbench,
    rows: Sequence[SiteRow],
    shares: list[ClusterShares | None],
    *,
    sharp: bool,
    by_dose: bool = False,
) -> Together:
    """All that the estimated sites say together; each part that can't be had is None with its reason."""
    part = [i for i, row in enumerate(rows) if row.reading is not None]
    found = [_robust(row.reading, sharp) for row in rows if row.reading is not None]
    usable = [j for j, one in enumerate(found) if np.isfinite(one.estimate) and one.std_error > 0.0]
    part, found = [part[j] for j in usable], [found[j] for j in usable]
    estimates = _estimates(found, [shares[i] for i in part])
    if by_dose:
        estimates = _divided(estimates, np.array([rows[i].dose or 1.0 for i in part]))
    clusters = [row.reading.clusters for row in (rows[i] for i in part) if row.reading is not None]
    degrees = np.array([np.nan if count is None else max(count - 1.0, 1.0) for count in clusters])
    level, seed = bench.study.estimate.level, bench.study.seed
    reasons: dict[str, str] = {}

    def attempt(name: str, work: Callable[[], Found]) -> Found | None:
        try:
            return work()
        except CannotEstimate as problem:
            reasons[name] = problem.sentence
            return None

    def mean(weights: Vector) -> Callable[[], Mean]:
        def work() -> Mean:
            require_sites(estimates, 1, "A mean over sites")
            return weighted_mean(estimates, weights, level=level)

        return work

    spread = attempt("spread", lambda: heterogeneity(estimates))
    cutoffs = np.array([rows[i].cutoff for i in part])
    return Together(
        names=tuple(rows[i].name for i in part),
        estimates=estimates,
        inverse_variance=attempt("inverse_variance", mean(1.0 / estimates.variance)),
        equal=attempt("equal", mean(np.ones(len(part)))),
        stated=_stated(bench, [rows[i].name for i in part], mean),
        spread=spread,
        random=None if spread is None else random_effects(estimates, spread.tau2, level=level),
        trend=attempt("trend", lambda: trend_in(cutoffs, estimates, level=level)),
        without=attempt("without", lambda: _without(estimates, level)),
        band=simultaneous_band(estimates, level=level, seed=seed, degrees=degrees) if part else None,
        joint=attempt("joint", lambda: _joint(estimates)),
        holm=holm(np.array([one.p_value for one in found])),
        reasons=reasons,
    )


def _estimates(found: list[Interval], shares: list[ClusterShares | None]) -> SiteEstimates:
    """The estimates with their joint covariance where sites share clusters."""
    estimate = np.array([one.estimate for one in found])
    error = np.array([one.std_error for one in found])
    known = [share for share in shares if share is not None]
    if not known:
        return SiteEstimates(estimate=estimate, std_error=error)
    covariance, clusters = joint_covariance(known)
    # Clusters that keep to one site leave the sites independent.
    apart = not np.any(covariance[~np.eye(len(known), dtype=bool)])
    return SiteEstimates(
        estimate=estimate,
        std_error=error,
        covariance=None if apart else covariance,
        degrees=float(max(clusters - 1, 1)),
    )


def _divided(estimates: SiteEstimates, by: Vector) -> SiteEstimates:
    return replace(
        estimates,
        estimate=estimates.estimate / by,
        std_error=estimates.std_error / by,
        covariance=None if estimates.covariance is None else estimates.covariance / np.outer(by, by),
    )


def _stated(bench: Workbench, names: list[str], mean: Callable[[Vector], Callable[[], Mean]]) -> Mean | None:
    """The mean by the study's own weights; None where it states none, or none for the sites that have an estimate."""
    stated = bench.study.assignment.site_weights
    weights = np.array([stated.get(name, 0.0) for name in names])
    return mean(weights)() if weights.sum() > 0.0 else None


# Sites beyond which dependent ones are not left out one at a time: each takes a pass over the joint covariance.
_MOST_LEFT_OUT = 400


def _without(estimates: SiteEstimates, level: float) -> tuple[Without, ...]:
    if estimates.covariance is not None and len(estimates) > _MOST_LEFT_OUT:
        raise CannotEstimate(
            f"Leaving out one of {len(estimates):,} sites that share clusters takes too long.",
            "Compare fewer sites.",
        )
    return leave_one_out(estimates, level=level)


def _joint(estimates: SiteEstimates) -> JointTest:
    require_sites(estimates, 1, "A test of all effects at once")
    return joint_test(estimates)
