"""The `comparison` part of the result document."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from estimation.inference import Interval
from estimation.pooling import Mean
from study.between import between_document
from study.comparison import Comparison, SiteRow
from study.result_parts import interval_document, number, randomisation_document
from study.sites_together import Together


def comparisons_document(comparisons: Sequence[Comparison]) -> dict[str, Any] | None:
    """The first outcome's comparison with those of the others under `other_outcomes`; None for a single line."""
    if not comparisons:
        return None
    first, *others = (comparison_document(one) for one in comparisons)
    return {**first, "other_outcomes": others}


def comparison_document(comparison: Comparison) -> dict[str, Any]:
    """One outcome's sites together; what can't be computed is None with a reason beside it."""
    together = comparison.together
    document: dict[str, Any] = {
        "outcome": comparison.outcome,
        "kind": comparison.kind,
        "width": number(comparison.width),
        "level": comparison.level,
        "pooled": _pooled(comparison),
        "weights": {row.name: number(row.share) for row in comparison.rows},
        **_together(together),
        "sites": [_site(comparison, row) for row in comparison.rows],
        "between": [between_document(pair) for pair in comparison.between],
        "not_estimated": [
            {"site": row.name, "reason": row.reason, "remedy": row.remedy} for row in comparison.not_estimated
        ],
    }
    if comparison.per_dose is not None:
        document["per_dose"] = {
            "means": _means(comparison.per_dose),
            **_together(comparison.per_dose),
            "effects": [
                {"step": name, "estimate": number(float(value)), "std_error": number(float(error))}
                for name, value, error in zip(
                    comparison.per_dose.names,
                    comparison.per_dose.estimates.estimate,
                    comparison.per_dose.estimates.std_error,
                )
            ],
        }
    if comparison.intention is not None:
        document["weights_in_the_ratio"] = {row.name: number(row.weight) for row in comparison.rows}
        document["intention"] = {
            "means": _means(comparison.intention),
            **_together(comparison.intention),
        }
    return document


def _pooled(comparison: Comparison) -> dict[str, Any]:
    reading, widths = comparison.pooled, comparison.pooled_bandwidths
    document: dict[str, Any] = {"normalised": None, "reason": comparison.pooled_reason}
    if reading is not None and widths is not None:
        document = {
            "normalised": {
                "estimate": number(reading.estimate),
                "std_error": number(reading.std_error),
                "robust": interval_document(reading.robust),
                "bandwidth": {"below": number(widths.below), "above": number(widths.above)},
            }
        }
    return document | _means(comparison.together)


def _means(together: Together) -> dict[str, Any]:
    document = {
        "inverse_variance": _mean(together.inverse_variance),
        "equal": _mean(together.equal),
        "stated": _mean(together.stated),
        "random_effects": None if together.random is None else _mean(together.random.mean),
    }
    reasons = {
        "inverse_variance": together.reasons.get("inverse_variance"),
        "equal": together.reasons.get("equal"),
        "stated": "the study states no weights for sites that have an estimate",
        "random_effects": together.reasons.get("spread"),
    }
    for name, value in reasons.items():
        if document[name] is None and (value or name == "stated"):
            document[f"{name}_reason"] = value
    return document


def _mean(mean: Mean | None) -> Any:
    return None if mean is None else interval_document(mean.found)


def _together(together: Together) -> dict[str, Any]:
    spread, random, trend, joint, band = (
        together.spread,
        together.random,
        together.trend,
        together.joint,
        together.band,
    )
    document: dict[str, Any] = {
        "independent": together.independent,
        "heterogeneity": None
        if spread is None
        else {
            "q": number(spread.q),
            "df": spread.df,
            "p_value": number(spread.p_value),
            "tau2": number(spread.tau2),
            "i2": number(spread.i2),
            "expected_q": number(spread.expected),
        },
        "prediction": None
        if random is None or random.prediction is None
        else {"low": number(random.prediction[0]), "high": number(random.prediction[1])},
        "trend": None
        if trend is None
        else {
            "slope": interval_document(trend.slope),
            "level": interval_document(trend.level),
            "at_cutoff": number(trend.centre),
            "tau2": number(trend.tau2),
        },
        "joint_test": None
        if joint is None
        else {"statistic": number(joint.statistic), "df": joint.df, "p_value": number(joint.p_value)},
        "simultaneous": []
        if band is None
        else [
            {"site": name, "low": number(band.low[i]), "high": number(band.high[i])}
            for i, name in enumerate(together.names)
        ],
        "simultaneous_method": None
        if band is None
        else {
            "method": band.method,
            "pointwise_level": number(band.pointwise_level),
            "draws": band.draws,
        },
    }
    for name, key in (("spread", "heterogeneity"), ("trend", "trend"), ("joint", "joint_test")):
        if name in together.reasons:
            document[f"{key}_reason"] = together.reasons[name]
    return document


def _site(comparison: Comparison, row: SiteRow) -> dict[str, Any]:
    together = comparison.together
    document: dict[str, Any] = {
        "site": row.name,
        "cutoff": number(row.cutoff),
        "rows": {"below": row.below, "above": row.above},
        "share_at_the_line": number(row.share),
        "weight": number(row.weight),
    }
    if row.reading is None:
        document |= {"reason": row.reason, "remedy": row.remedy}
        document["randomisation"] = (
            None if row.randomisation is None else randomisation_document(row.randomisation)
        )
        if row.randomisation is None:
            document["randomisation_reason"] = row.randomisation_reason
        return document
    if row.dose is not None:
        document["dose"] = number(row.dose)
    document["estimate"] = number(row.reading.estimate)
    document["std_error"] = number(row.reading.std_error)
    document["robust"] = interval_document(row.reading.robust)
    if row.bandwidths is not None:
        document["bandwidth"] = {"below": number(row.bandwidths.below), "above": number(row.bandwidths.above)}
    if row.slope is not None:
        document["slope_of_the_effect"] = interval_document(row.slope)
    i = together.place(row.name)
    if i is None:
        return document
    document["holm"] = number(float(together.holm[i]))
    document["weight_by_precision"] = (
        None if together.inverse_variance is None else number(float(together.inverse_variance.weights[i]))
    )
    if together.stated is not None:
        document["weight_stated"] = number(float(together.stated.weights[i]))
    if together.random is not None:
        shrunken = together.random.shrunken
        document["shrunken"] = {
            "estimate": number(shrunken.estimate[i]),
            "std_error": number(shrunken.std_error[i]),
            "low": number(shrunken.low[i]),
            "high": number(shrunken.high[i]),
        }
    if together.without is not None:
        without = together.without[i]
        document["without_it"] = {
            "random_effects": _interval(without.random),
            "inverse_variance": _interval(without.fixed),
            "tau2": number(without.tau2),
        }
    return document


def _interval(found: Interval) -> dict[str, Any]:
    return interval_document(found)
