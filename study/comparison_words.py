"""The sites of a study in words and in one table: the same on the page and on the screen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.effect import FEW_CLUSTERS
from estimation.inference import Interval
from study.between import between_sentence
from study.comparison import Comparison, SiteRow, order_of
from study.document import Study
from study.literal import clean
from study.sites_together import Together
from study.wording import MINUS, TIE, figure, p_text, percent, width_text


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteText:
    """One site as text, in the unit of the page (percentage points for an outcome of noughts and ones).

    Attributes
    ----------
    estimate, low, high, band_low, band_high, shrunken
        Bias-corrected effect, its interval, the band that holds at all sites at once, the effect drawn toward the
        mean; empty where there is none.
    numbers
        (estimate, low, high) for a drawing, NaN where there is none.
    drawn
        The shrunken effect for a drawing, NaN where there is none.
    rows
        Rows inside the bandwidth, "below + above"; for a site without an estimate, all its rows.
    """

    name: str
    cutoff: str
    estimate: str
    low: str
    high: str
    band_low: str
    band_high: str
    shrunken: str
    rows: str
    width: str
    share: str
    numbers: tuple[float, float, float]
    drawn: float
    reason: str | None


def scale_of(comparison: Comparison) -> float:
    """100 where effects read in percentage points, else 1."""
    return 100.0 if comparison.binary else 1.0


def site_texts(comparison: Comparison, by: str = "name") -> tuple[SiteText, ...]:
    """Every site as text, sorted as asked (see `study.comparison.order_of`)."""
    return tuple(site_text(comparison, comparison.rows[i]) for i in order_of(comparison, by))


def site_text(comparison: Comparison, row: SiteRow) -> SiteText:
    """One site as text."""
    scale, together = scale_of(comparison), comparison.together
    share = "–" if row.share is None else f"{100 * row.share:.1f}{TIE}%".replace("-", MINUS)
    i = together.place(row.name)
    if row.reading is None or i is None:
        return SiteText(
            name=clean(row.name),
            cutoff="" if comparison.kind == "segment" else width_text(row.cutoff),
            estimate="",
            low="",
            high="",
            band_low="",
            band_high="",
            shrunken="",
            rows=f"{row.below:,} + {row.above:,}",
            width="",
            share=share,
            numbers=(np.nan, np.nan, np.nan),
            drawn=np.nan,
            reason=row.reason or "no estimate with a known spread",
        )
    robust, random, band = row.reading.robust, together.random, together.band
    spread = scale * robust.std_error
    drawn = np.nan if random is None else scale * float(random.shrunken.estimate[i])
    widths = row.bandwidths
    return SiteText(
        name=clean(row.name),
        cutoff="" if comparison.kind == "segment" else width_text(row.cutoff),
        estimate=figure(scale * robust.estimate, spread, sign=True),
        low=figure(scale * robust.low, spread),
        high=figure(scale * robust.high, spread),
        band_low="" if band is None else figure(scale * float(band.low[i]), spread),
        band_high="" if band is None else figure(scale * float(band.high[i]), spread),
        shrunken="" if random is None else figure(drawn, spread, sign=True),
        rows=f"{row.reading.count_below:,} + {row.reading.count_above:,}",
        width=""
        if widths is None
        else width_text(widths.below)
        if widths.below == widths.above
        else f"{width_text(widths.below)}, {width_text(widths.above)}",
        share=share,
        numbers=(scale * robust.estimate, scale * robust.low, scale * robust.high),
        drawn=drawn,
        reason=None,
    )


def headline(comparison: Comparison) -> str:
    """The sites in one short sentence: their pooled effect and whether they differ."""
    scale, unit = scale_of(comparison), " points" if comparison.binary else ""
    pooled, spread = comparison.pooled, comparison.together.spread
    said = f"{clean(comparison.outcome)} over all {comparison.kind}s: "
    if pooled is None:
        said += "no pooled effect"
    else:
        robust = pooled.robust
        wide = scale * robust.std_error
        said += (
            f"{figure(scale * robust.estimate, wide, sign=True)}{unit} ({figure(scale * robust.low, wide)} to "
            f"{figure(scale * robust.high, wide)})"
        )
    if spread is not None:
        differ = "they differ" if spread.p_value < 1.0 - comparison.level else "no difference shows"
        said += f"; {differ} ({p_text(spread.p_value)}, I² {100 * spread.i2:.0f}{TIE}%)"
    return said


def site_sentence(comparison: Comparison, row: SiteRow) -> str:
    """One site in a sentence: its effect with its intervals, or why it has none."""
    text = site_text(comparison, row)
    if text.reason is not None:
        return _unestimated(comparison, row)
    at = f" at {text.cutoff}" if text.cutoff else ""
    return (
        f"{text.name}{at}: {text.estimate} ({text.low} to {text.high}), with all {comparison.kind}s at once "
        f"{text.band_low} to {text.band_high}; drawn toward the mean {text.shrunken or 'no answer'}. {text.rows} rows within "
        f"{text.width}; {text.share} of the units at the line."
    )


def opening(comparison: Comparison, study: Study) -> str:
    """What the table shows."""
    outcome, score = clean(comparison.outcome), clean(study.columns.score or "the score")
    unit = " in percentage points" if comparison.binary else ""
    whose = " of those whom the line moved to take it" if comparison.intention is not None else ""
    places = {
        "site": f"each site at its own cutoff of {score}",
        "step": f"each step of {score}",
        "segment": "each segment of the border",
    }[comparison.kind]
    width = (
        f"all within {width_text(comparison.width)}"
        if comparison.width is not None
        else "each within its own width"
    )
    return (
        f"{outcome} at {places}, {width}: the bias-corrected effect{whose}{unit}, its {percent(comparison.level)} "
        f"interval, the same held at all {comparison.kind}s at once, and the effect drawn toward their mean."
    )


def sentences(comparison: Comparison) -> tuple[str, ...]:
    """What the sites say together, and what can't be said."""
    said = [*_spread(comparison), *_means(comparison), *_trend(comparison), *_left_out(comparison)]
    if comparison.intention is not None:
        said += _intention(comparison)
    said += _per_dose(comparison)
    said += [
        between_sentence(pair, scale=scale_of(comparison), level=comparison.level)
        for pair in comparison.between
    ]
    said += _joint(comparison)
    said += [_unestimated(comparison, row) for row in comparison.not_estimated]
    said += _weak(comparison)
    return tuple(said)


def _reach(found: Interval, scale: float, *, sign: bool = True) -> str:
    spread = scale * found.std_error
    return (
        f"{figure(scale * found.estimate, spread, sign=sign)} ({figure(scale * found.low, spread)} to "
        f"{figure(scale * found.high, spread)})"
    )


def _spread(comparison: Comparison) -> list[str]:
    together, scale = comparison.together, scale_of(comparison)
    spread, random = together.spread, together.random
    if spread is None or random is None:
        return [together.reasons["spread"]] if "spread" in together.reasons else []
    differ = (
        f"The {comparison.kind}s differ by more than chance explains"
        if spread.p_value < 1.0 - comparison.level
        else f"Chance alone could make the {comparison.kind}s differ as they do"
    )
    shared = "" if together.independent else ", clusters that they share allowed for"
    said = [
        f"{differ} (Q = {spread.q:.1f} on {spread.df}, {p_text(spread.p_value)}; "
        f"I² {100 * spread.i2:.0f}{TIE}%{shared})."
    ]
    mean = random.mean.found
    if spread.tau2 > 0.0:
        tau = scale * float(np.sqrt(spread.tau2))
        said.append(
            f"Among {comparison.kind}s like these the effect averages {_reach(mean, scale)} and varies from one to the "
            f"next with a standard deviation of {figure(tau, tau)}."
        )
    if random.prediction is not None:
        low, high = (scale * end for end in random.prediction)
        wide = 0.25 * (high - low)
        said.append(
            f"At one more {comparison.kind} like these it would lie between {figure(low, wide)} and "
            f"{figure(high, wide)} ({percent(comparison.level)} prediction)."
        )
    return said


def _means(comparison: Comparison) -> list[str]:
    together, scale = comparison.together, scale_of(comparison)
    parts = []
    for mean, how in (
        (together.inverse_variance, "by precision"),
        (together.equal, "all alike"),
        (together.stated, "as the study states"),
    ):
        if mean is not None:
            parts.append(f"{how}, {_reach(mean.found, scale)}")
    if comparison.pooled is not None:
        parts.insert(0, f"as units fall at the line, {_reach(comparison.pooled.robust, scale)}")
    return [f"The mean effect with {comparison.kind}s weighted " + "; ".join(parts) + "."] if parts else []


def _trend(comparison: Comparison) -> list[str]:
    trend, scale = comparison.together.trend, scale_of(comparison)
    if trend is None or comparison.kind == "segment":
        return []
    slope = trend.slope
    told = "" if slope.low > 0.0 or slope.high < 0.0 else ": no trend can be told from none"
    return [
        f"With each point by which the cutoff lies higher the effect changes by {_reach(slope, scale)}{told}."
    ]


def _left_out(comparison: Comparison) -> list[str]:
    together, scale = comparison.together, scale_of(comparison)
    if together.without is None or together.random is None:
        return []
    centres = np.array([one.random.estimate for one in together.without])
    low, high = int(np.argmin(centres)), int(np.argmax(centres))
    return [
        f"Leaving out one {comparison.kind}, their random-effects mean runs from "
        f"{_reach(together.without[low].random, scale)} without {clean(together.names[low])} to "
        f"{_reach(together.without[high].random, scale)} without {clean(together.names[high])}."
    ]


def _intention(comparison: Comparison) -> list[str]:
    intention, scale = comparison.intention, scale_of(comparison)
    if intention is None or intention.spread is None or intention.random is None:
        return []
    spread = intention.spread
    return [
        f"The jumps in the outcome itself average {_reach(intention.random.mean.found, scale)} "
        f"(Q = {spread.q:.1f} on {spread.df}, {p_text(spread.p_value)}; I² {100 * spread.i2:.0f}{TIE}%)."
    ]


def _per_dose(comparison: Comparison) -> list[str]:
    per, scale = comparison.per_dose, scale_of(comparison)
    if per is None or per.inverse_variance is None:
        return []
    each = "; ".join(
        f"{clean(name)}: {figure(scale * value, scale * error, sign=True)}"
        for name, value, error in zip(per.names, per.estimates.estimate, per.estimates.std_error)
    )
    said = f"For each unit of dose the effect is {_reach(per.inverse_variance.found, scale)} by precision ({each})"
    if per.spread is not None:
        alike = per.spread.p_value >= 1.0 - comparison.level
        said += (
            f"; that every unit does the same is {'not spoken against' if alike else 'spoken against'} "
            f"({p_text(per.spread.p_value)})"
        )
    return [said + "."]


def _joint(comparison: Comparison) -> list[str]:
    # Of a fuzzy study the jumps in the outcome: a ratio over a weak jump in take-up would carry the test.
    part: Together = comparison.intention or comparison.together
    if part.joint is None:
        return [part.reasons["joint"]] if "joint" in part.reasons and len(part.names) else []
    return [
        f"That the line moved nothing at any {comparison.kind}: χ² = {part.joint.statistic:.1f} on {part.joint.df}, "
        f"{p_text(part.joint.p_value)}."
    ]


def _unestimated(comparison: Comparison, row: SiteRow) -> str:
    scale, said = scale_of(comparison), f"{clean(row.name)} has no local estimate: {row.reason}"
    if row.share is not None:
        said += (
            f" It makes {100 * row.share:.1f}{TIE}% of the units at the line, which the pooled effect counts."
        )
    found = row.randomisation
    if found is None:
        return f"{said} Nor is there an answer by lot: {row.randomisation_reason}"
    spread = scale * (found.high - found.low) / 4.0
    return (
        f"{said} As if drawn by lot within {width_text(found.window[1])} of its line ({found.below:,} and "
        f"{found.above:,} rows): {figure(scale * found.estimate, spread, sign=True)} "
        f"({figure(scale * found.low, spread)} to {figure(scale * found.high, spread)})."
    )


def _weak(comparison: Comparison) -> list[str]:
    readings = [(clean(row.name), row.reading) for row in comparison.rows if row.reading is not None]
    weak = [name for name, reading in readings if reading.weak]
    few = [
        name for name, reading in readings if reading.clusters is not None and reading.clusters < FEW_CLUSTERS
    ]
    said = []
    if weak:
        said.append(
            f"Caution: take-up jumps too little in {_listed(weak)} to divide by with confidence; read the jumps in the "
            "outcome there."
        )
    if few:
        where = f"every {comparison.kind}" if len(few) == len(readings) > 1 else _listed(few)
        said.append(
            f"Caution: fewer than {FEW_CLUSTERS} clusters lie inside the bandwidth of {where}; clustered errors are "
            "likely too small there."
        )
    return said


def _listed(names: list[str], most: int = 8) -> str:
    if len(names) > most:
        return ", ".join(names[:most]) + f" and {len(names) - most:,} others"
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
