"""The result document: every number of a run, as one JSON object with a version (`cutbank-result`, version 1)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from estimation.effect import Effect
from estimation.multiple import benjamini_hochberg, holm
from estimation.randomisation import Randomisation
from estimation.reading import Reading, TakeUp
from study.assemble import Assigned
from study.border_result import AlongBorder, border_document
from study.comparison import Comparison
from study.comparison_document import comparisons_document
from study.document import Study
from study.record import Record
from study.result_parts import interval_document, number, randomisation_document

FORMAT: Final = "cutbank-result"
VERSION: Final = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class OutcomeFailure:
    """An effect that could not be estimated, and why."""

    outcome: str
    where: str
    sentence: str
    remedy: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Family:
    """P-values of one outcome among all the outcomes asked about at the same place."""

    outcome: str
    where: str
    p_value: float
    holm: float
    benjamini_hochberg: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """What one run of a study found."""

    study: Study
    assigned: Assigned
    effects: tuple[Effect, ...]
    failures: tuple[OutcomeFailure, ...]
    families: tuple[Family, ...]
    comparisons: tuple[Comparison, ...] = ()
    along: tuple[AlongBorder, ...] = ()
    record: Record | None = None

    def to_document(self) -> dict[str, Any]:
        """The result document; what can't be computed is None with a reason beside it."""
        study, assigned = self.study, self.assigned
        return {
            **document_head(study, assigned, self.record),
            "effects": [
                effect_document(effect)
                | ({} if self.record is None else {"departs": list(self.record.departs(effect.outcome))})
                for effect in self.effects
            ],
            "not_estimated": [
                {
                    "outcome": failure.outcome,
                    "where": failure.where,
                    "reason": failure.sentence,
                    "remedy": failure.remedy,
                }
                for failure in self.failures
            ],
            "several_outcomes": [
                {
                    "outcome": family.outcome,
                    "where": family.where,
                    "p_value": number(family.p_value),
                    "holm": number(family.holm),
                    "benjamini_hochberg": number(family.benjamini_hochberg),
                }
                for family in self.families
            ],
            "comparison": comparisons_document(self.comparisons),
            **({} if self.comparisons else {"comparison_reason": "the study has one line"}),
            **({"border": [border_document(found) for found in self.along]} if self.along else {}),
            "doubts": [],
            "doubts_reason": "this version does not yet ask the doubts",
            "guard": {
                "profile": study.guard.profile,
                "suppressed": None,
                "rounded": None,
                "reason": "nothing was released: this document holds unrounded numbers and stays where the data are",
            },
        }


def document_head(study: Study, assigned: Assigned, record: Record | None) -> dict[str, Any]:
    """What every result document begins with: its version, the study and the data."""
    return {
        "format": FORMAT,
        "version": VERSION,
        "study": {
            "title": study.title,
            "file": study.path.name,
            "seed": study.seed,
            **(
                {"sealed": False, "looked_at": None, "looked_at_reason": "this run was not recorded"}
                if record is None
                else record.to_document()
            ),
        },
        "data": {
            "rows_read": assigned.rows_read,
            "rows_used": int(np.sum(assigned.reason == 0)),
            "dropped": dict(assigned.dropped),
            "missing_outcomes": {
                name: int(np.isnan(column[assigned.reason == 0]).sum())
                for name, column in assigned.outcomes.items()
            },
            "fingerprint": assigned.fingerprint,
            **({} if assigned.border is None else {"border_notes": list(assigned.border.notes)}),
        },
    }


def adjust_for_many(effects: Sequence[Effect]) -> tuple[Family, ...]:
    """Holm and Benjamini–Hochberg over the outcomes asked about at one place; empty for a single outcome."""
    families: list[Family] = []
    for where in dict.fromkeys(effect.where for effect in effects):
        here = [effect for effect in effects if effect.where == where]
        if len(here) < 2:
            continue
        p = np.array([effect.reading.robust.p_value for effect in here])
        families += [
            Family(
                outcome=effect.outcome,
                where=where,
                p_value=float(own),
                holm=float(held),
                benjamini_hochberg=float(found),
            )
            for effect, own, held, found in zip(here, p, holm(p), benjamini_hochberg(p))
        ]
    return tuple(families)


def effect_document(effect: Effect) -> dict[str, Any]:
    """One entry of `effects`."""
    widths, choices = effect.bandwidths, effect.choices
    document: dict[str, Any] = {
        "outcome": effect.outcome,
        "where": effect.where,
        "kind": effect.kind,
        "design": "fuzzy" if effect.fuzzy else "sharp",
        "cutoff": number(effect.cutoff),
        "treated": effect.treated,
        "binary": effect.binary,
        "bandwidth": {
            "below": number(widths.below),
            "above": number(widths.above),
            "pilot_below": number(widths.pilot_below),
            "pilot_above": number(widths.pilot_above),
            "rule": widths.rule,
        },
        "kernel": choices.kernel,
        "order": choices.order,
        "level": choices.level,
        "variance": choices.variance,
        "donut": choices.donut,
        "lead": effect.lead,
        **reading_document(effect.reading),
        **_randomisation(effect),
        "take_up": None if effect.reading.take_up is None else take_up_document(effect.reading.take_up),
        "mass_points": {
            "below": effect.mass_points.below,
            "above": effect.mass_points.above,
            "nearest_below": number(effect.mass_points.nearest_below),
            "nearest_above": number(effect.mass_points.nearest_above),
            "on_line": effect.mass_points.on_line,
        },
        "curvature_table": [
            {
                "multiple": row.multiple,
                "curvature": number(row.honest.curvature),
                "max_bias": number(row.honest.max_bias),
                "low": number(row.honest.low),
                "high": number(row.honest.high),
            }
            for row in effect.curvature_table
        ],
        "breakdown_curvature": number(effect.breakdown),
        **(
            {"breakdown_curvature_reason": effect.reading.bias_aware_reason}
            if effect.breakdown is None
            else {}
        ),
        "notes": [note.sentence for note in effect.notes],
    }
    if effect.reading.intention is not None:
        document["intention"] = reading_document(effect.reading.intention)
    if effect.adjusted is not None and effect.unadjusted is not None:
        document["with_covariates"] = reading_document(effect.adjusted)
        document["without_covariates"] = reading_document(effect.unadjusted)
    elif effect.adjusted_reason is not None:
        document["with_covariates"] = None
        document["with_covariates_reason"] = effect.adjusted_reason
    if effect.against_rule is not None:
        document["against_rule"] = {
            "treated_side_without": effect.against_rule.treated_without,
            "treated_side_rows": effect.against_rule.treated_rows,
            "other_side_with": effect.against_rule.other_with,
            "other_side_rows": effect.against_rule.other_rows,
        }
    return document


def reading_document(reading: Reading) -> dict[str, Any]:
    """Counts, levels, estimate and intervals."""
    honest = reading.bias_aware
    document: dict[str, Any] = {
        "counts": {
            "below": reading.count_below,
            "above": reading.count_above,
            "effective": number(reading.effective),
            "clusters": reading.clusters,
        },
        "levels": {"below": number(reading.levels_below), "above": number(reading.levels_above)},
        "estimate": number(reading.estimate),
        "std_error": number(reading.std_error),
        "robust": interval_document(reading.robust),
        "bias_aware": (
            None
            if honest is None
            else {
                "curvature": number(honest.curvature),
                "max_bias": number(honest.max_bias),
                "critical_value": number(honest.critical_value),
                "low": number(honest.low),
                "high": number(honest.high),
            }
        ),
        "plain": {
            "low": number(reading.plain.low),
            "high": number(reading.plain.high),
            "p_value": number(reading.plain.p_value),
        },
    }
    if honest is None:
        document["bias_aware_reason"] = reading.bias_aware_reason
    return document


def take_up_document(take_up: TakeUp) -> dict[str, Any]:
    """The first stage; an infinite end of a set is None."""
    document: dict[str, Any] = {
        "jump": number(take_up.jump),
        "std_error": number(take_up.std_error),
        "low": number(take_up.low),
        "high": number(take_up.high),
        "weak": take_up.weak,
        "first_stage_f": number(take_up.first_stage_f),
        "levels": {"below": number(take_up.levels_below), "above": number(take_up.levels_above)},
        "anderson_rubin": [[number(low), number(high)] for low, high in take_up.anderson_rubin],
    }
    if take_up.honest_anderson_rubin is not None:
        document["honest_anderson_rubin"] = [
            [number(low), number(high)] for low, high in take_up.honest_anderson_rubin
        ]
    return document


def _randomisation(effect: Effect) -> dict[str, Any]:
    found: Randomisation | None = effect.randomisation
    if found is None:
        return {"randomisation": None, "randomisation_reason": effect.randomisation_reason}
    document = {"randomisation": randomisation_document(found)}
    if effect.without_slopes is not None:
        document["randomisation_without_slopes"] = randomisation_document(effect.without_slopes)
    return document
