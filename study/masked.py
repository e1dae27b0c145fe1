"""What may be known before the plan is sealed: rows, take-up, widths, counts and precision; no effect, no level.

Precision is told in standard deviations of the outcome. The outcome's own spread is not, for the spread of a yes/no
outcome, or of a count, gives its level away; the weights of the estimate alone say how much they average out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from estimation.choices import Choices
from estimation.effect import AgainstRule
from estimation.errors import CannotEstimate
from estimation.inference import quantile
from estimation.kernels import count_inside
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_side
from estimation.reading import Reading
from estimation.sample import Sample, Side, build_sample
from study.analysis import Workbench
from study.literal import clean
from study.record import record_of
from study.result import document_head
from study.result_parts import number

POWER: Final = 0.8


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """What one outcome's estimate at one place will rest on.

    Attributes
    ----------
    bandwidths
        That the study's rule chooses, in units of the score.
    below, above
        Rows with the outcome known inside them.
    detectable
        Smallest effect that is found with a power of 80 % at the study's level, in standard deviations of the outcome
        around its fit, rows taken as independent of each other; for a fuzzy study of the jump in the outcome itself.
    """

    outcome: str
    where: str
    bandwidths: Bandwidths
    below: int
    above: int
    detectable: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Withheld:
    """An outcome at a place whose design can't be told, and why."""

    outcome: str
    where: str
    sentence: str
    remedy: str


@dataclass(frozen=True, slots=True, kw_only=True)
class MaskedResult:
    """What a run of a masked study shows.

    Attributes
    ----------
    take_up
        Its jump at the line, place by place, at the first outcome's width.
    """

    bench: Workbench
    designs: tuple[Design, ...]
    withheld: tuple[Withheld, ...]
    take_up: tuple[tuple[str, Bandwidths, Reading], ...]
    against_rule: AgainstRule | None

    @property
    def clustered(self) -> bool:
        """Whether rows of a cluster hang together, so that precision is told too well."""
        return self.bench.assigned.cluster is not None

    def to_document(self) -> dict[str, Any]:
        """The result document of a study whose outcomes are masked: no effects, and `before_the_seal` in their place."""
        bench = self.bench
        reason = how_to_seal(bench)
        return {
            **document_head(bench.study, bench.assigned, record_of(bench.study, bench.assigned.fingerprint)),
            "effects": [],
            "effects_reason": reason,
            "not_estimated": [
                {"outcome": one.outcome, "where": one.where, "reason": one.sentence, "remedy": one.remedy}
                for one in self.withheld
            ],
            "before_the_seal": {
                "power": POWER,
                "level": bench.study.estimate.level,
                "designs": [_design_document(design) for design in self.designs],
                "take_up": [_take_up_document(*found) for found in self.take_up],
            },
            "comparison": None,
            "comparison_reason": reason,
            "doubts": [],
            "doubts_reason": reason,
        }


def masked_result(bench: Workbench) -> MaskedResult:
    """Widths, counts, precision and take-up of a study, whether its outcomes are masked or not."""
    designs: list[Design] = []
    withheld: list[Withheld] = []
    take_up: list[tuple[str, Bandwidths, Reading]] = []
    for outcome in bench.outcomes:
        for site in (*bench.sites, None):
            where = bench.place(site)
            try:
                design = _design(bench, outcome, site)
            except CannotEstimate as problem:
                withheld.append(
                    Withheld(outcome=outcome, where=where, sentence=problem.sentence, remedy=problem.remedy)
                )
                continue
            designs.append(design)
            if outcome == bench.outcomes[0] and bench.assigned.take_up is not None:
                take_up += _take_up(bench, design, site)
    return MaskedResult(
        bench=bench,
        designs=tuple(designs),
        withheld=tuple(withheld),
        take_up=tuple(take_up),
        against_rule=bench.against_rule(),
    )


def _design(bench: Workbench, outcome: str, site: str | None) -> Design:
    choices, widths = bench.study.estimate, bench.chosen(outcome, site)
    sample = _sample(bench, bench.assigned.outcomes[outcome], site).without_donut(choices.donut)
    spread = np.sqrt(sum(_squares(side, *widths.of(name), choices) for name, side in sample.sides))
    return Design(
        outcome=outcome,
        where=bench.place(site),
        bandwidths=widths,
        below=count_inside(sample.below.distance, widths.below, choices.kernel),
        above=count_inside(sample.above.distance, widths.above, choices.kernel),
        # quantile() is two-sided: 0.6 between its tails is 0.8 below the upper one.
        detectable=float((quantile(choices.level) + quantile(2.0 * POWER - 1.0)) * spread),
    )


def _squares(side: Side, bandwidth: float, pilot: float, choices: Choices) -> float:
    """Σ l² of one side's weights: the variance of its level at the line where every row has variance one."""
    order, kernel = choices.order, choices.kernel
    weights = fit_side(side, bandwidth=bandwidth, kernel=kernel, order=order).weights[0]
    if choices.interval == "robust":
        # The robust answer pays for its bias correction (see estimation.local_polynomial).
        pilot_weights = fit_side(side, bandwidth=pilot, kernel=kernel, order=order + 1).weights[order + 1]
        left = float(weights @ side.distance[: len(weights)] ** (order + 1))
        corrected = np.zeros(max(len(weights), len(pilot_weights)))
        corrected[: len(weights)] = weights
        corrected[: len(pilot_weights)] -= left * pilot_weights
        weights = corrected
    return float(weights @ weights)


def _take_up(bench: Workbench, design: Design, site: str | None) -> list[tuple[str, Bandwidths, Reading]]:
    """The first stage by itself, from rows whose outcome may be missing; nothing where it can't be had."""
    assert bench.assigned.take_up is not None
    try:
        line = Line.prepare(_sample(bench, bench.assigned.take_up, site), bench.study.estimate)
        return [(design.where, design.bandwidths, line.reading(design.bandwidths, adjust=False))]
    except CannotEstimate:
        return []


def _sample(bench: Workbench, values: np.ndarray, site: str | None) -> Sample:
    a = bench.assigned
    rows = a.reason == 0
    if site is not None and a.site is not None:
        rows = rows & (a.site == bench.sites.index(site))
    return build_sample(
        position=a.position[rows],
        outcome=values[rows],
        above=a.above[rows],
        treated=a.treated,
        weight=None if a.weight is None else a.weight[rows],
        cluster=None if a.cluster is None else a.cluster[rows],
        score_magnitude=float(np.max(np.abs(a.position[rows] + a.cutoffs[rows]), initial=0.0)),
    )


def _design_document(design: Design) -> dict[str, Any]:
    widths = design.bandwidths
    return {
        "outcome": design.outcome,
        "where": design.where,
        "bandwidth": {
            "below": widths.below,
            "above": widths.above,
            "pilot_below": widths.pilot_below,
            "pilot_above": widths.pilot_above,
            "rule": widths.rule,
        },
        "counts": {"below": design.below, "above": design.above},
        "detectable_in_sd": number(design.detectable),
    }


def _take_up_document(where: str, widths: Bandwidths, reading: Reading) -> dict[str, Any]:
    return {
        "where": where,
        "bandwidth": {"below": widths.below, "above": widths.above},
        "jump": reading.estimate,
        "std_error": number(reading.std_error),
        "low": number(reading.plain.low),
        "high": number(reading.plain.high),
        "levels": {"below": reading.levels_below, "above": reading.levels_above},
    }


def how_to_seal(bench: Workbench) -> str:
    """What to do to see the effects."""
    name = clean(bench.study.path.name)
    return f"Outcomes are masked: effects and levels show once the plan is sealed, with: cutbank seal {name}"
