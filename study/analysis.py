"""One study's data, kept once and asked many questions: the bench and the headless run both stand on this."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise
from typing import TYPE_CHECKING, Final

import numpy as np

from estimation.arrays import Codes, Mask, Matrix, Vector
from estimation.effect import AgainstRule, Effect, Question, estimate_effect
from estimation.errors import CannotEstimate
from estimation.line import Bins, Curve, Line, Sweep
from estimation.line_fit import Bandwidths
from estimation.randomisation import Randomisation, randomise
from estimation.reading import Reading
from estimation.sample import Sample, build_sample, outward_order
from estimation.site_ladder import SiteLadder, order_by_site
from estimation.variance import mass_point_starts
from estimation.window import choose_window
from study.assemble import Assigned, assemble
from study.comparison import Comparison, compare
from study.document import Study
from study.errors import CANNOT_ESTIMATE, Masked, StudyError
from study.literal import clean
from study.plan import is_masked
from study.result import OutcomeFailure, Result, adjust_for_many
from study.site_readings import SitesAtOnce, can_be_read_at_once

if TYPE_CHECKING:
    from study.border_result import AlongBorder

NEAREST_FOR_WINDOW: Final = 50_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Histogram:
    """Rows by score, for all assigned rows, missing outcomes included.

    Attributes
    ----------
    edges
        Score minus cutoff, shape (bins + 1,); the line is one of the edges.
    counts
        Shape (bins,).
    below, above
        Assigned rows on each side, whatever the reach of the picture.
    on_line
        Rows exactly on the line.
    distinct
        Distinct scores among all assigned rows.
    heaviest
        Score minus cutoff of the most common score, and how many rows share it.
    """

    edges: Vector
    counts: Codes
    below: int
    above: int
    on_line: int
    distinct: int
    heaviest: tuple[float, int]


@dataclass(frozen=True, slots=True)
class _Need:
    """What a prepared line depends on; a change of anything else keeps it."""

    outcome: str
    site: str | None
    kernel: str
    order: int
    donut: float
    covariates: tuple[str, ...]


def mass_point_sizes(distance: Vector) -> tuple[float, int, int]:
    """(the most common value, the rows that share it, distinct values) of ascending distances."""
    if not len(distance):
        return 0.0, 0, 0
    starts = mass_point_starts(distance, 0.0)
    sizes = np.diff(np.append(starts, len(distance)))
    top = int(np.argmax(sizes))
    return float(distance[starts[top]]), int(sizes[top]), len(starts)


class Workbench:
    """One study with its rows, its sorted samples and their running sums.

    Everything is computed when first asked for and kept; `with_study` hands on what a change of the study did
    not touch. Methods are safe to call from one worker thread beside the interface's own.
    """

    def __init__(self, study: Study, assigned: Assigned, kept: Workbench | None = None) -> None:
        self.study = study
        self.assigned = assigned
        self.masked = is_masked(study)  # asked once: a seal that comes later makes a new bench
        self._orders: dict[str | None, tuple[Codes, Codes]] = {} if kept is None else kept._orders
        self._samples: dict[tuple[str, str | None, tuple[str, ...]], Sample] = (
            {} if kept is None else kept._samples
        )
        self._lines: dict[_Need, Line] = {} if kept is None else kept._lines
        self._chosen: dict[tuple[str, str | None], Bandwidths] = {}
        self._counts: dict[str, tuple[Codes, ...]] = {}
        self._at_once: dict[tuple[str, str, int, float], SitesAtOnce] = {} if kept is None else kept._at_once
        self._randomised: dict[tuple[object, ...], Randomisation | str] = (
            {} if kept is None else kept._randomised
        )

    @classmethod
    def open(cls, study: Study, *, progress: Callable[[str], None] | None = None) -> Workbench:
        """Read the study's data.

        Raises
        ------
        StudyError
            When the file, the columns or the rule can't be used.
        """
        return cls(study, assemble(study, progress=progress))

    def with_study(self, study: Study) -> Workbench:
        """The same bench for a changed study; rows are read again only when the change asks for it."""
        old = self.study
        if (study.data, study.assignment, study.path) != (old.data, old.assignment, old.path):
            return Workbench.open(study)
        if replace(study.columns, covariates=()) != replace(old.columns, covariates=()) or not set(
            study.columns.covariates
        ) <= set(old.columns.covariates):
            return Workbench.open(study)
        return Workbench(study, self.assigned, kept=self)

    @property
    def outcomes(self) -> tuple[str, ...]:
        """Names of the outcome columns."""
        return self.study.columns.outcomes

    @property
    def sites(self) -> tuple[str, ...]:
        """Names of the sites, empty where the study has one line."""
        return self.assigned.site_names

    def place(self, site: str | None) -> str:
        """What an effect is about, as the result document names it."""
        if site is not None:
            return site
        if self.assigned.border is not None:
            return "along the border"
        return "pooled" if self.sites else "at the cutoff"

    def _kind(self, site: str | None) -> str:
        if self.assigned.border is not None:
            return "boundary" if site is None else "segment"
        if site is not None:
            return "step" if self.study.assignment.rule == "steps" else "site"
        return "pooled" if self.sites else "cutoff"

    def line(self, outcome: str, site: str | None = None) -> Line:
        """The prepared line of an outcome, pooled over sites unless one is named.

        Every effect and level comes through here, so that this is where a masked outcome is refused.

        Raises
        ------
        Masked
            Until the plan is sealed.
        CannotEstimate
            When a side holds no row.
        """
        self._refuse_masked(outcome)
        return self._line(outcome, site)

    def _refuse_masked(self, outcome: str) -> None:
        if self.masked:
            raise Masked(clean(outcome))

    def _line(self, outcome: str, site: str | None = None) -> Line:
        """The line, masked or not: for widths and counts, which show no level and no effect."""
        choices = self.study.estimate
        covariates = self.study.columns.covariates
        need = _Need(outcome, site, choices.kernel, choices.order, choices.donut, covariates)
        line = self._lines.get(need)
        if line is None:
            full = self._sample(outcome, site, covariates) if covariates else None
            line = Line.prepare(self._sample(outcome, site, ()), choices, with_covariates=full)
            line = replace(line, cap=self.cap(site))
            self._lines[need] = line
        return line if line.choices == choices else line.choosing(choices)

    def cap(self, site: str | None) -> tuple[float, float]:
        """Largest widths (below, above): with steps on one score, half-way to the next, so that no row serves two.

        Pooled over steps it is the nearest half-way of all, beyond which some steps have rows and others none.
        """
        steps = np.array(self.study.assignment.steps)
        if self.study.assignment.rule != "steps" or len(steps) < 2:
            return (np.inf, np.inf)
        half = np.diff(steps) / 2.0
        if site is None:
            return (float(half.min()), float(half.min()))
        around = np.concatenate(([np.inf], half, [np.inf]))
        place = int(np.argmin(np.abs(steps - self.cutoff(site))))
        return (float(around[place]), float(around[place + 1]))

    def sites_at_once(self, outcome: str) -> SitesAtOnce | None:
        """All sites' sums in one ladder; None where the study's choices need each site's rows."""
        choices, a = self.study.estimate, self.assigned
        self._refuse_masked(outcome)
        if a.site is None or not can_be_read_at_once(choices, clustered=a.cluster is not None):
            return None
        key = (outcome, choices.kernel, choices.order, choices.donut)
        if key not in self._at_once:
            take_up = () if a.take_up is None else (a.take_up,)
            columns = (a.outcomes[outcome], *take_up)
            used = self._used & (a.site >= 0) & (np.abs(a.position) >= choices.donut)
            for column in columns:
                used = used & ~np.isnan(column)
            rows = np.flatnonzero(used)
            self._at_once[key] = SitesAtOnce.of(
                SiteLadder.build(
                    position=a.position[rows],
                    values=np.column_stack([column[rows] for column in columns]),
                    above=a.above[rows],
                    site=a.site[rows],
                    sites=len(self.sites),
                    weight=None if a.weight is None else a.weight[rows],
                    treated=a.treated,
                    kernel=choices.kernel,
                    order=choices.order,
                    has_take_up=a.take_up is not None,
                    score_magnitude=self._score_magnitude,
                )
            )
        return self._at_once[key]

    def chosen(self, outcome: str, site: str | None = None) -> Bandwidths:
        """The bandwidths that the study asks for."""
        key = (outcome, site)
        if key not in self._chosen:
            self._chosen[key] = self._line(outcome, site).bandwidths()
        return self._chosen[key]

    def widest(self, outcome: str, site: str | None = None) -> float:
        """The largest |score − cutoff| among the rows of an outcome."""
        return self._line(outcome, site).sample.widest

    def quick(self, outcome: str, site: str | None = None) -> bool:
        """Whether a reading comes at once, whatever the rows: cheap enough for every key."""
        return self._line(outcome, site).on_ladder

    def reading(self, outcome: str, bandwidth: float | Bandwidths, site: str | None = None) -> Reading:
        """The effect at one width."""
        line = self.line(outcome, site)
        return line.reading(bandwidth if isinstance(bandwidth, Bandwidths) else line.at(bandwidth))

    def sweep(
        self,
        outcome: str,
        bandwidths: Vector,
        should_stop: Callable[[], bool] | None = None,
        site: str | None = None,
    ) -> Sweep:
        """The effect against the width."""
        return self.line(outcome, site).sweep(bandwidths, should_stop)

    def sweep_grid(self, outcome: str, count: int = 50, site: str | None = None) -> Vector:
        """Widths worth looking at: from a quarter of the chosen one (or where a fit can run) to the data's reach."""
        chosen = self.chosen(outcome, site)
        middle = max(chosen.below, chosen.above)
        widest = self.widest(outcome, site)
        return np.geomspace(min(0.25 * middle, widest), max(min(4.0 * middle, widest), middle), count)

    def bins(self, outcome: str, reach: float, count: int, site: str | None = None) -> Bins:
        """Binned means of the outcome out to `reach`, `count` bins a side."""
        return self.line(outcome, site).bins(reach, count)

    def curve(
        self, outcome: str, bandwidth: float | Bandwidths, points: int = 60, site: str | None = None
    ) -> Curve:
        """The local fits with their bands."""
        line = self.line(outcome, site)
        return line.curve(bandwidth if isinstance(bandwidth, Bandwidths) else line.at(bandwidth), points)

    def effect(
        self, outcome: str, bandwidths: Bandwidths | float | None = None, site: str | None = None
    ) -> Effect:
        """The effect with its three answers, at the study's own width unless another is given."""
        line = self.line(outcome, site)
        if bandwidths is None:
            bandwidths = self.chosen(outcome, site)
        elif not isinstance(bandwidths, Bandwidths):
            bandwidths = line.at(bandwidths)
        randomised = self._randomisation(outcome, site)
        pooled = bool(self.sites) and site is None
        question = Question(
            outcome=outcome,
            where=self.place(site),
            kind=self._kind(site),
            cutoff=None if pooled or self.assigned.border is not None else self._cutoff(site),
            randomisation=None if isinstance(randomised, str) else randomised,
            randomisation_reason=randomised if isinstance(randomised, str) else None,
            without_slopes=None
            if isinstance(randomised, str)
            else self._without_slopes(outcome, site, randomised),
            covariates=self.study.columns.covariates,
            against_rule=self.against_rule(site),
            rows_without_covariate={
                name: int(np.isnan(column[self._rows(site)]).sum())
                for name, column in self.assigned.covariates.items()
                if name in self.study.columns.covariates
            },
        )
        return estimate_effect(line, bandwidths, question)

    def randomisation(self, outcome: str, site: str | None = None) -> Randomisation | str:
        """The answer as if drawn by lot near the line, or the sentence that says why there is none."""
        self._refuse_masked(outcome)
        return self._randomisation(outcome, site)

    def cutoff(self, site: str) -> float:
        """The cutoff of a site, in units of the score."""
        found = self._cutoff(site)
        return float("nan") if found is None else found

    def outcome_values(self, outcome: str) -> Vector:
        """The outcome of every row read, NaN where missing, in file order; refused while masked."""
        self._refuse_masked(outcome)
        return self.assigned.outcomes[outcome]

    def rows_with(self, outcome: str, site: str | None = None) -> tuple[int, int]:
        """Assigned rows with the outcome known, below and above."""
        if site is None or self.assigned.site is None:
            known = self._used & ~np.isnan(self.assigned.outcomes[outcome])
            return int(np.sum(known & ~self.assigned.above)), int(np.sum(known & self.assigned.above))
        if outcome not in self._counts:
            a = self.assigned
            known = self._used & ~np.isnan(a.outcomes[outcome]) & (self.assigned.site >= 0)
            self._counts[outcome] = tuple(
                np.bincount(self.assigned.site[known & side], minlength=len(self.sites))
                for side in (~a.above, a.above)
            )
        place, counts = self._place_of[site], self._counts[outcome]
        return int(counts[0][place]), int(counts[1][place])

    def against_rule(self, site: str | None = None) -> AgainstRule | None:
        """Take-up against the rule, by side, among all assigned rows; None without a take-up column."""
        take_up = self.assigned.take_up
        if take_up is None:
            return None
        rows = self._rows(site)
        known = rows[~np.isnan(take_up[rows])]
        above = self.assigned.above[known]
        treated = above if self.assigned.treated == "above" else ~above
        took = take_up[known] > 0.0
        return AgainstRule(
            treated_without=int(np.sum(treated & ~took)),
            treated_rows=int(treated.sum()),
            other_with=int(np.sum(~treated & took)),
            other_rows=int((~treated).sum()),
        )

    def histogram(self, bins: int = 60, reach: float | None = None, site: str | None = None) -> Histogram:
        """Assigned rows by score, the line on an edge, `bins` over both sides together."""
        lower, upper = self._outward(site)
        sides = (-self.assigned.position[lower], self.assigned.position[upper])
        reaches = [float(side[-1]) if len(side) else 0.0 for side in sides]
        if reach is not None:
            reaches = [min(reach, own) for own in reaches]
        width = sum(reaches) / bins or 1.0
        edges, counts = [], []
        for side, own in zip(sides, reaches):
            edge = width * np.arange(max(int(np.ceil(own / width - 1e-9)), 1) + 1)
            edge[-1] = max(edge[-1], own)
            inside = np.searchsorted(side, edge, side="left")
            inside[-1] = np.searchsorted(side, edge[-1], side="right")
            edges.append(edge)
            counts.append(np.diff(inside).astype(np.int64))
        points = [mass_point_sizes(side) for side in sides]
        tops = [(sign * score, rows) for sign, (score, rows, _) in zip((-1.0, 1.0), points)]
        return Histogram(
            edges=np.concatenate((-edges[0][:0:-1], edges[1])),
            counts=np.concatenate((counts[0][::-1], counts[1])),
            below=len(lower),
            above=len(upper),
            on_line=sum(int(np.searchsorted(side, 0.0, side="right")) for side in sides),
            distinct=sum(distinct for _, _, distinct in points),
            heaviest=max(tops, key=lambda top: top[1]),
        )

    def run(self, progress: Callable[[str], None] | None = None) -> Result:
        """Every effect of the study.

        Raises
        ------
        StudyError
            When no effect of the study can be estimated, as none can while its outcomes are masked.
        """
        self._refuse_masked(", ".join(self.outcomes))
        effects: list[Effect] = []
        failures: list[OutcomeFailure] = []
        questions: Sequence[str | None] = (*self.sites, None)
        for outcome in self.outcomes:
            for site in questions:
                if progress is not None:
                    progress(f"Estimating {outcome}" + (f" in {site}" if site else ""))
                try:
                    effects.append(self.effect(outcome, site=site))
                except CannotEstimate as problem:
                    failures.append(
                        OutcomeFailure(
                            outcome=outcome,
                            where=self.place(site),
                            sentence=problem.sentence,
                            remedy=problem.remedy,
                        )
                    )
        if not effects:
            first = failures[0]
            raise StudyError(f"{first.outcome}: {first.sentence}", first.remedy, CANNOT_ESTIMATE)
        return Result(
            study=self.study,
            assigned=self.assigned,
            effects=tuple(effects),
            failures=tuple(failures),
            families=adjust_for_many(effects),
            comparisons=self._comparisons(progress),
            along=self._along_border(progress),
        )

    def _along_border(self, progress: Callable[[str], None] | None) -> tuple[AlongBorder, ...]:
        if self.assigned.border is None:
            return ()
        from study.border_points import along_border  # it stands on this module

        if progress is not None:
            progress("Estimating along the border")
        return tuple(along_border(self, outcome) for outcome in self.outcomes)

    def _comparisons(self, progress: Callable[[str], None] | None) -> tuple[Comparison, ...]:
        found = []
        for outcome in self.outcomes if self.sites else ():
            if progress is not None:
                progress(f"Comparing sites in {outcome}")
            found.append(compare(self, outcome))
        return tuple(found)

    @cached_property
    def _used(self) -> Mask:
        used: Mask = self.assigned.reason == 0
        return used

    @cached_property
    def _place_of(self) -> dict[str, int]:
        return {name: i for i, name in enumerate(self.sites)}

    @cached_property
    def _rows_by_site(self) -> list[Codes]:
        """Used rows of each site in file order, from one sort."""
        site = self.assigned.site
        assert site is not None  # asked only where there are sites
        rows = np.flatnonzero(self._used)
        order = rows[order_by_site(site[rows], len(self.sites))]
        ends = np.searchsorted(site[order], np.arange(len(self.sites) + 1))
        return [order[a:b] for a, b in pairwise(ends)]

    def _rows(self, site: str | None) -> Codes:
        return np.concatenate(self._outward(site))

    def _outward(self, site: str | None) -> tuple[Codes, Codes]:
        """Rows of the lower and the upper side, nearest first, as indices into the file's rows."""
        if site not in self._orders:
            rows = np.flatnonzero(self._used) if site is None else self._rows_by_site[self._place_of[site]]
            lower, upper = outward_order(self.assigned.position[rows], self.assigned.above[rows])
            self._orders[site] = (rows[lower], rows[upper])
        return self._orders[site]

    def _sample(self, outcome: str, site: str | None, covariates: tuple[str, ...]) -> Sample:
        key = (outcome, site, covariates)
        if key not in self._samples:
            a = self.assigned
            sort = self._outward(site)
            own: Codes | None = None
            rows: Codes | slice = slice(None)
            if site is not None:
                # Of a site only its own rows are touched: many sites must not each cost a pass over the file.
                lower, rows = len(sort[0]), (own := np.concatenate(sort))
                sort = (np.arange(lower), np.arange(lower, len(own)))
            matrix = (
                np.column_stack([a.covariates[name][rows] for name in covariates]) if covariates else None
            )
            self._samples[key] = build_sample(
                position=a.position[rows],
                outcome=a.outcomes[outcome][rows],
                above=a.above[rows],
                treated=a.treated,
                weight=None if a.weight is None else a.weight[rows],
                take_up=None if a.take_up is None else a.take_up[rows],
                covariates=matrix,
                cluster=None if a.cluster is None else a.cluster[rows],
                row=own,
                score_magnitude=self._score_magnitude,
                sort=sort,
            )
        return self._samples[key]

    @cached_property
    def _score_magnitude(self) -> float:
        score = self.assigned.position + self.assigned.cutoffs
        return float(np.nanmax(np.abs(score))) if len(score) else 0.0

    def _cutoff(self, site: str | None) -> float | None:
        if site is None:
            return self.study.assignment.cutoff
        rows = self._rows_by_site[self._place_of[site]]
        return float(self.assigned.cutoffs[rows[0]]) if len(rows) else None

    def _randomisation(self, outcome: str, site: str | None) -> Randomisation | str:
        """The local randomisation answer, or the sentence that says why there is none."""
        choices, covariates = self.study.estimate, self.study.columns.covariates
        key = (outcome, site, choices.level, choices.donut, covariates, self.study.seed)
        if key not in self._randomised:
            try:
                self._randomised[key] = self._randomise(outcome, site, covariates)
            except CannotEstimate as problem:
                self._randomised[key] = problem.sentence
        return self._randomised[key]

    def _randomise(self, outcome: str, site: str | None, covariates: tuple[str, ...]) -> Randomisation:
        a, choices = self.assigned, self.study.estimate
        # A window is a matter of the nearest rows; the rest of a large file is not looked at.
        rows = np.concatenate([side[:NEAREST_FOR_WINDOW] for side in self._outward(site)])
        rows = rows[np.abs(a.position[rows]) >= choices.donut]
        balance: Matrix | None = (
            np.column_stack([a.covariates[name][rows] for name in covariates]) if covariates else None
        )
        window = choose_window(
            position=a.position[rows],
            above=a.above[rows],
            covariates=balance,
            names=covariates,
            seed=self.study.seed,
        )
        return self._drawn(outcome, site, (window.low, window.high), slope=False)

    def _without_slopes(self, outcome: str, site: str | None, found: Randomisation) -> Randomisation:
        """The same window with each side's slope taken off first."""
        key = ("slopes", outcome, site, found.window, found.level, self.study.estimate.donut, self.study.seed)
        kept = self._randomised.get(key)
        if kept is None or isinstance(kept, str):
            kept = self._randomised[key] = self._drawn(outcome, site, found.window, slope=True)
        return kept

    def _drawn(
        self, outcome: str, site: str | None, window: tuple[float, float], *, slope: bool
    ) -> Randomisation:
        a, choices = self.assigned, self.study.estimate
        rows = np.concatenate([side[:NEAREST_FOR_WINDOW] for side in self._outward(site)])
        rows = rows[np.abs(a.position[rows]) >= choices.donut]
        known = rows[~np.isnan(a.outcomes[outcome][rows])]
        if a.take_up is not None:
            known = known[~np.isnan(a.take_up[known])]
        return randomise(
            position=a.position[known],
            outcome=a.outcomes[outcome][known],
            above=a.above[known],
            treated=a.treated,
            window=window,
            level=choices.level,
            seed=self.study.seed,
            slope=slope,
            take_up=None if a.take_up is None else a.take_up[known],
        )
