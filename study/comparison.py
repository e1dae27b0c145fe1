"""The sites of a study side by side, and what they say together."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from estimation.arrays import Codes, Vector
from estimation.effect_slope import effect_slope
from estimation.errors import CannotEstimate
from estimation.inference import Interval
from estimation.line_fit import Bandwidths
from estimation.line_shares import shares_at_line
from estimation.randomisation import Randomisation
from estimation.reading import Reading
from estimation.shared_clusters import ClusterShares, shares_of_jump, shares_of_ratio
from estimation.take_up import WEAK_F
from study.between import Between, neighbouring_pairs
from study.site_readings import readings_at_once
from study.sites_together import Together, put_together

# More sites than this and how each effect changes with its cutoff is asked one by one, not in every run.
MOST_SLOPES = 100

if TYPE_CHECKING:
    from study.analysis import Workbench

Found = TypeVar("Found")


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteReading:
    """What the comparison needs of one site's estimate.

    Attributes
    ----------
    estimate, std_error, robust
        The effect, plain and bias-corrected; for a fuzzy study the ratio.
    count_below, count_above, clusters
        Rows inside the bandwidth, and clusters among them.
    take_up_jump, first_stage_f, intention
        Of a fuzzy study: the first stage, and the bias-corrected jump in the outcome itself; else None.
    """

    estimate: float
    std_error: float
    robust: Interval
    count_below: int
    count_above: int
    clusters: int | None = None
    take_up_jump: float | None = None
    first_stage_f: float | None = None
    intention: Interval | None = None

    @classmethod
    def of(cls, reading: Reading) -> SiteReading:
        """The same of a full reading."""
        take_up, intention = reading.take_up, reading.intention
        return cls(
            estimate=reading.estimate,
            std_error=reading.std_error,
            robust=reading.robust,
            count_below=reading.count_below,
            count_above=reading.count_above,
            clusters=reading.clusters,
            take_up_jump=None if take_up is None else take_up.jump,
            first_stage_f=None if take_up is None else take_up.first_stage_f,
            intention=None if intention is None else intention.robust,
        )

    @property
    def weak(self) -> bool:
        """Whether take-up jumps too little to divide by with confidence."""
        return self.first_stage_f is not None and self.first_stage_f < WEAK_F


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
    slope
        How its effect changes as its cutoff moves, per unit of score; None where it was not asked or can't be had.
    dose
        By how much the programme grows at this step; None where the study names no doses.
    """

    name: str
    cutoff: float
    below: int
    above: int
    bandwidths: Bandwidths | None = None
    reading: SiteReading | None = None
    reason: str | None = None
    remedy: str | None = None
    randomisation: Randomisation | None = None
    randomisation_reason: str | None = None
    share: float | None = None
    weight: float | None = None
    dose: float | None = None
    slope: Interval | None = None

    @property
    def estimated(self) -> bool:
        """Whether the site has an estimate with a spread, so that it takes part in what sites say together."""
        return self.reading is not None


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
    per_dose
        The same of the effects divided by how much the programme grows at each step; None without doses.
    between
        The effect between neighbouring cutoffs, for a few sites at their own widths.
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
    per_dose: Together | None
    between: tuple[Between, ...]
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
    sites: list[_Site] = []
    at_once = readings_at_once(bench, outcome, width)
    for i, name in enumerate(bench.sites):
        read = None if at_once is None else at_once[i]
        if read is not None:
            sites.append(_Site(_row(bench, outcome, name, *read, slope=width is None), None, None))
        elif should_stop is not None and should_stop():
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
    shared = [site.ratio if fuzzy else site.jump for site in sites]
    doses = _doses(bench)
    if doses:
        rows = tuple(replace(row, dose=dose) for row, dose in zip(rows, doses))
    return Comparison(
        outcome=outcome,
        rows=rows,
        together=put_together(bench, rows, shared, sharp=False),
        intention=put_together(bench, rows, [site.jump for site in sites], sharp=True) if fuzzy else None,
        per_dose=put_together(bench, rows, shared, sharp=False, by_dose=True) if doses else None,
        between=neighbouring_pairs(bench, outcome) if width is None else (),
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
        reading = SiteReading.of(bench.reading(outcome, widths, name))
        if not reading.robust.std_error > 0.0 or not np.isfinite(reading.robust.estimate):
            raise CannotEstimate(
                "Inside its bandwidth the outcome does not vary, so that its effect has no known spread.",
                "Widen the bandwidth.",
            )
    except CannotEstimate as problem:
        return _Site(_bare(bench, outcome, name, problem.sentence, problem.remedy), None, None)
    row = _row(bench, outcome, name, widths, reading, slope=width is None)
    adjust = line.choices.adjust and line.with_covariates is not None
    changes = line.cluster_changes(widths, adjust=adjust)
    if changes is None:
        return _Site(row, None, None)
    ratio = shares_of_ratio(changes, line.fit(widths, adjust=adjust)) if line.fuzzy else None
    return _Site(row, ratio, shares_of_jump(changes))


def _row(
    bench: Workbench, outcome: str, name: str, widths: Bandwidths, reading: SiteReading, *, slope: bool
) -> SiteRow:
    below, above = bench.rows_with(outcome, name)
    return SiteRow(
        name=name,
        cutoff=bench.cutoff(name),
        below=below,
        above=above,
        bandwidths=widths,
        reading=reading,
        slope=_slope(bench, outcome, name, widths) if slope and len(bench.sites) <= MOST_SLOPES else None,
    )


def _slope(bench: Workbench, outcome: str, name: str, widths: Bandwidths) -> Interval | None:
    try:
        return effect_slope(bench.line(outcome, name), widths)
    except CannotEstimate:
        return None


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
    at_once = bench.sites_at_once(outcome)
    if at_once is not None:
        return at_once.ladder.shares_at_line(widths.below, widths.above)
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
        1.0 if row.reading is None or row.reading.take_up_jump is None else row.reading.take_up_jump
        for row in rows
    ]
    fuzzy = any(row.reading is not None and row.reading.take_up_jump is not None for row in rows)
    # A site without an estimate of its own has an unknown jump in take-up; so have the weights of a ratio then.
    known = not fuzzy or all(row.reading is not None for row in rows)
    weights = shares * np.array(jumps)
    total = float(weights.sum())
    return tuple(
        replace(row, share=float(share), weight=float(weight / total) if known and total else None)
        for row, share, weight in zip(rows, shares, weights)
    )


def _doses(bench: Workbench) -> tuple[float, ...]:
    """By how much the programme grows at each step, in the order of the sites; empty without doses."""
    rule = bench.study.assignment
    if rule.rule != "steps" or not rule.doses:
        return ()
    grows = np.diff(np.array(rule.doses), prepend=0.0)
    # Doses are listed as a row meets the steps: from below where the upper side is treated, else from above.
    in_order = grows if bench.assigned.treated == "above" else grows[::-1]
    of_step = dict(zip((f"{step:g}" for step in rule.steps), in_order))
    return tuple(float(of_step[name]) for name in bench.sites)


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
