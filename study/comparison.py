"""The sites of a study side by side, and what they say together."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from estimation.arrays import Codes, Vector
from estimation.errors import CannotEstimate
from estimation.inference import Interval
from estimation.line_fit import Bandwidths
from estimation.line_shares import shares_at_line
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
from estimation.randomisation import Randomisation
from estimation.reading import Reading
from estimation.shared_clusters import ClusterShares, joint_covariance, shares_of_jump, shares_of_ratio
from estimation.simultaneous import Band, JointTest, joint_test, simultaneous_band

if TYPE_CHECKING:
    from study.analysis import Workbench

Found = TypeVar("Found")


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteRow:
    """One site, whether it could be estimated or not.

    Attributes
    ----------
    name, cutoff
        The site and its cutoff in units of the score.
    below, above
        Rows with the outcome known on each side, whatever the bandwidth.
    bandwidths, reading
        Its own local polynomial answer; None where there is none, then `reason` and `remedy` say why and what to do.
    randomisation, randomisation_reason
        The answer as if drawn by lot near its line; looked for where the local fit can't run, else None.
    share
        Its share of the units at the line, as the pooled effect weighs it; None where there is no pooled effect.
    weight
        Its weight in the pooled effect: the share, for a fuzzy study times its jump in take-up, over all; None where
        it has no estimate of its own or the pooled effect none.
    """

    name: str
    cutoff: float
    below: int
    above: int
    bandwidths: Bandwidths | None = None
    reading: Reading | None = None
    reason: str | None = None
    remedy: str | None = None
    randomisation: Randomisation | None = None
    randomisation_reason: str | None = None
    share: float | None = None
    weight: float | None = None

    @property
    def estimated(self) -> bool:
        """Whether the site has an estimate with a spread, so that it takes part in what sites say together."""
        return self.reading is not None


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


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """All sites of one outcome.

    Attributes
    ----------
    rows
        Every site that the study names, in natural order.
    together
        What they say together, of the headline effect; for a fuzzy study the ratio.
    intention
        The same of the jump in the outcome itself; None for a sharp study.
    pooled, pooled_bandwidths
        The pooled effect over normalised scores; None where it can't be had, then `pooled_reason` says why.
    level
        Of every interval.
    width
        The common width that all sites were asked at, or None where each has its own.
    kind
        "site", "step" or "segment".
    binary
        Whether the outcome is nought or one, so that effects read in percentage points.
    """

    outcome: str
    rows: tuple[SiteRow, ...]
    together: Together
    intention: Together | None
    pooled: Reading | None
    pooled_bandwidths: Bandwidths | None
    pooled_reason: str | None
    level: float
    width: float | None
    kind: str
    binary: bool

    def has(self, name: str) -> bool:
        """Whether a site of that name is among the rows."""
        return any(row.name == name for row in self.rows)

    @property
    def not_estimated(self) -> tuple[SiteRow, ...]:
        """Sites without an estimate of their own."""
        return tuple(row for row in self.rows if not row.estimated)


@dataclass(frozen=True, slots=True)
class _Site:
    row: SiteRow
    ratio: ClusterShares | None
    jump: ClusterShares | None


def compare(
    bench: Workbench,
    outcome: str,
    width: float | None = None,
    *,
    should_stop: Callable[[], bool] | None = None,
) -> Comparison:
    """Estimate every site and put the sites together.

    Parameters
    ----------
    width
        A common bandwidth for all sites; None for each site's own, as the study's rule chooses it.
    should_stop
        Asked before each site; when it answers True, the remaining ones are listed as not looked at.

    Raises
    ------
    ValueError
        For a study with one line.
    """
    if not bench.sites:
        raise ValueError("one line has nothing to compare")
    sites = []
    for name in bench.sites:
        if should_stop is not None and should_stop():
            row = _bare(
                bench, outcome, name, "The comparison was stopped before this site.", "Start it again."
            )
            sites.append(_Site(row, None, None))
        else:
            sites.append(_site(bench, outcome, name, width))
    pooled, widths, reason = _pooled(bench, outcome, width)
    shares = None if widths is None else _shares(bench, outcome, widths)
    rows = _weighed([site.row for site in sites], shares)
    fuzzy = bench.assigned.take_up is not None
    return Comparison(
        outcome=outcome,
        rows=rows,
        together=_together(bench, rows, [site.ratio if fuzzy else site.jump for site in sites], sharp=False),
        intention=_together(bench, rows, [site.jump for site in sites], sharp=True) if fuzzy else None,
        pooled=pooled,
        pooled_bandwidths=widths,
        pooled_reason=reason,
        level=bench.study.estimate.level,
        width=width,
        kind={"steps": "step", "boundary": "segment"}.get(bench.study.assignment.rule, "site"),
        binary=widths is not None and bench.line(outcome).binary,
    )


def _bare(bench: Workbench, outcome: str, name: str, reason: str, remedy: str) -> SiteRow:
    """A site without a local answer; small sites keep their answer by lot."""
    below, above = bench.rows_with(outcome, name)
    by_lot = bench.randomisation(outcome, name)
    return SiteRow(
        name=name,
        cutoff=bench.cutoff(name),
        below=below,
        above=above,
        reason=reason,
        remedy=remedy,
        randomisation=None if isinstance(by_lot, str) else by_lot,
        randomisation_reason=by_lot if isinstance(by_lot, str) else None,
    )


def _site(bench: Workbench, outcome: str, name: str, width: float | None) -> _Site:
    try:
        line = bench.line(outcome, name)
        widths = bench.chosen(outcome, name) if width is None else line.at(width)
        reading = bench.reading(outcome, widths, name)
        if not reading.robust.std_error > 0.0 or not np.isfinite(reading.robust.estimate):
            raise CannotEstimate(
                "Inside its bandwidth the outcome does not vary, so that its effect has no known spread.",
                "Widen the bandwidth.",
            )
    except CannotEstimate as problem:
        return _Site(_bare(bench, outcome, name, problem.sentence, problem.remedy), None, None)
    below, above = bench.rows_with(outcome, name)
    row = SiteRow(
        name=name, cutoff=bench.cutoff(name), below=below, above=above, bandwidths=widths, reading=reading
    )
    adjust = line.choices.adjust and line.with_covariates is not None
    changes = line.cluster_changes(widths, adjust=adjust)
    if changes is None:
        return _Site(row, None, None)
    ratio = shares_of_ratio(changes, line.fit(widths, adjust=adjust)) if line.fuzzy else None
    return _Site(row, ratio, shares_of_jump(changes))


def _pooled(
    bench: Workbench, outcome: str, width: float | None
) -> tuple[Reading | None, Bandwidths | None, str | None]:
    try:
        line = bench.line(outcome)
        widths = bench.chosen(outcome) if width is None else line.at(width)
        return bench.reading(outcome, widths), widths, None
    except CannotEstimate as problem:
        return None, None, problem.sentence


def _shares(bench: Workbench, outcome: str, widths: Bandwidths) -> Vector:
    """Each site's share of the units at the line, the mean of what the two sides say, shape (sites,)."""
    line, codes = bench.line(outcome), bench.assigned.site
    assert codes is not None  # there are sites
    sides = [
        shares_at_line(
            side,
            codes[side.row],
            len(bench.sites),
            bandwidth=widths.of(name)[0],
            kernel=line.choices.kernel,
            order=line.choices.order,
            resolution=line.sample.resolution,
        )
        for name, side in line.sample.sides
    ]
    return np.asarray(0.5 * (sides[0] + sides[1]))


def _weighed(rows: list[SiteRow], shares: Vector | None) -> tuple[SiteRow, ...]:
    if shares is None:
        return tuple(rows)
    jumps = [
        1.0 if row.reading is None or row.reading.take_up is None else row.reading.take_up.jump
        for row in rows
    ]
    fuzzy = any(row.reading is not None and row.reading.take_up is not None for row in rows)
    # A site without an estimate of its own has an unknown jump in take-up; so have the weights of a ratio then.
    known = not fuzzy or all(row.reading is not None for row in rows)
    weights = shares * np.array(jumps)
    total = float(weights.sum())
    return tuple(
        replace(row, share=float(share), weight=float(weight / total) if known and total else None)
        for row, share, weight in zip(rows, shares, weights)
    )


def _robust(reading: Reading, sharp: bool) -> Interval:
    return reading.intention.robust if sharp and reading.intention is not None else reading.robust


def _together(
    bench: Workbench, rows: tuple[SiteRow, ...], shares: list[ClusterShares | None], *, sharp: bool
) -> Together:
    """All that the estimated sites say together; each part that can't be had is None with its reason."""
    part = [i for i, row in enumerate(rows) if row.reading is not None]
    found = [_robust(row.reading, sharp) for row in rows if row.reading is not None]
    usable = [j for j, one in enumerate(found) if np.isfinite(one.estimate) and one.std_error > 0.0]
    part, found = [part[j] for j in usable], [found[j] for j in usable]
    estimates = _estimates(found, [shares[i] for i in part])
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
        stated=None,
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


def order_of(comparison: Comparison, by: str) -> Codes:
    """Places of the sites sorted as asked, those without an estimate last.

    Parameters
    ----------
    by
        "name" (natural order), "cutoff", "effect" or "rows"; the last two from the largest down.
    """
    rows = comparison.rows
    keys: dict[str, list[float]] = {
        "name": [float(i) for i in range(len(rows))],
        "cutoff": [row.cutoff for row in rows],
        "effect": [-row.reading.robust.estimate if row.reading else 0.0 for row in rows],
        "rows": [
            -float(row.reading.count_below + row.reading.count_above) if row.reading else 0.0 for row in rows
        ],
    }
    missing = np.array([not row.estimated for row in rows])
    return np.lexsort((np.arange(len(rows)), np.array(keys[by]), missing)).astype(np.int64)
