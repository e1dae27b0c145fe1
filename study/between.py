"""The effect between the cutoffs of two sites: which pairs are asked, and what is said of them."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from estimation.errors import CannotEstimate
from estimation.extrapolation import Extrapolation, Group, extrapolate
from study.literal import clean
from study.result_parts import interval_document, number
from study.wording import figure, percent, width_text

if TYPE_CHECKING:
    from study.analysis import Workbench

# More sites than this and neighbouring cutoffs are asked about one by one, not all in every run.
MOST_SITES = 12
POINTS = 8  # an even number: one of them lies half-way


@dataclass(frozen=True, slots=True, kw_only=True)
class Between:
    """One pair of sites with neighbouring cutoffs.

    Attributes
    ----------
    whose, other
        The site whose units the effect is about, and the one whose untreated units stand in for theirs.
    found
        The effect between the two cutoffs; None where it can't be had, then `reason` says why.
    """

    whose: str
    other: str
    found: Extrapolation | None
    reason: str | None


def between(bench: Workbench, outcome: str, one: str, two: str, points: int = POINTS) -> Between:
    """The effect between two sites' cutoffs, at evenly spaced scores from the one to just short of the other."""
    sign = 1.0 if bench.assigned.treated == "above" else -1.0
    whose, other = (one, two) if sign * bench.cutoff(one) <= sign * bench.cutoff(two) else (two, one)
    start, end = bench.cutoff(whose), bench.cutoff(other)
    choices = bench.study.estimate
    try:
        found = extrapolate(
            _group(bench, outcome, whose),
            _group(bench, outcome, other),
            points=start + (end - start) * np.arange(points) / points,
            kernel=choices.kernel,
            order=min(choices.order, 2),
            level=choices.level,
            treated_above=sign > 0.0,
            variance=choices.variance,
        )
    except CannotEstimate as problem:
        return Between(whose=whose, other=other, found=None, reason=problem.sentence)
    return Between(whose=whose, other=other, found=found, reason=None)


def neighbouring_pairs(bench: Workbench, outcome: str) -> tuple[Between, ...]:
    """Every pair of sites with neighbouring, different cutoffs; empty for steps and segments and for many sites."""
    if bench.study.assignment.rule != "cutoffs" or len(bench.sites) > MOST_SITES:
        return ()
    ordered = sorted(bench.sites, key=bench.cutoff)
    return tuple(
        between(bench, outcome, low, high)
        for low, high in pairwise(ordered)
        if bench.cutoff(low) != bench.cutoff(high)
    )


def _group(bench: Workbench, outcome: str, site: str) -> Group:
    sample = bench.line(outcome, site).sample
    widths, cutoff = bench.chosen(outcome, site), bench.cutoff(site)
    sides = (sample.below, sample.above)
    treated = [name == sample.treated for name, _ in sample.sides]
    targets = 1 + int(sample.has_take_up)
    clusters = [side.cluster for side in sides if side.cluster is not None]
    weights = [side.weights(len(side)) for side in sides]
    return Group(
        score=cutoff + np.concatenate((-sample.below.distance, sample.above.distance)),
        values=np.concatenate([side.values[:, :targets] for side in sides]),
        treated=np.repeat(treated, [len(side) for side in sides]),
        cutoff=cutoff,
        bandwidth=max(widths.below, widths.above),
        weight=None if sample.below.weight is None else np.concatenate(weights),
        cluster=np.concatenate(clusters) if clusters else None,
    )


def between_sentence(pair: Between, *, scale: float, level: float) -> str:
    """The effect in the middle, what it rests on, and whether that can be believed."""
    whose, other = clean(pair.whose), clean(pair.other)
    if pair.found is None:
        return f"Between the cutoffs of {whose} and {other} the effect can't be had: {pair.reason}"
    found = pair.found
    middle = len(found.points) // 2
    robust, slopes = found.robust[middle], found.constancy.slopes
    if robust is None:
        said = f"Half-way from {whose}'s cutoff to {other}'s the curves can't be fitted"
    else:
        spread = scale * robust.std_error
        said = (
            f"Half-way from {whose}'s cutoff to {other}'s, at {width_text(float(found.points[middle]))}, the effect on "
            f"{whose} is {figure(scale * robust.estimate, spread, sign=True)} ({figure(scale * robust.low, spread)} to "
            f"{figure(scale * robust.high, spread)})"
        )
    spread = scale * slopes.std_error
    doubted = slopes.p_value < 1.0 - level
    verdict = "which speaks against it" if doubted else "which does not speak against it"
    return (
        f"{said}, if the gap between their untreated curves stays as it is at {width_text(found.first)}; there their "
        f"slopes differ by {figure(scale * slopes.estimate, spread, sign=True)} ({figure(scale * slopes.low, spread)} to "
        f"{figure(scale * slopes.high, spread)}, {percent(level)}), {verdict}."
    )


def between_document(pair: Between) -> dict[str, Any]:
    """One pair as an entry of the result document."""
    document: dict[str, Any] = {"site": pair.whose, "other": pair.other}
    if pair.found is None:
        return {**document, "points": None, "reason": pair.reason}
    found, constancy = pair.found, pair.found.constancy
    return {
        **document,
        "from_cutoff": number(found.first),
        "to_cutoff": number(found.other),
        "points": [
            {
                "score": number(float(score)),
                "estimate": number(float(estimate)),
                "robust": None if robust is None else interval_document(robust),
                **({"reason": "a curve has too few rows near this score"} if robust is None else {}),
            }
            for score, estimate, robust in zip(found.points, found.estimate, found.robust)
        ],
        "untreated_slopes_differ_by": interval_document(constancy.slopes),
        "untreated_gap": [
            {
                "score": number(float(x)),
                "gap": number(float(g)),
                "low": number(float(a)),
                "high": number(float(b)),
            }
            for x, g, a, b in zip(constancy.points, constancy.gap, constancy.low, constancy.high)
        ],
    }
