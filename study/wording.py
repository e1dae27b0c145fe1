"""The same words on screen, in the headless run and in reports: numbers said in sentences."""

from __future__ import annotations

import math
from dataclasses import dataclass

from estimation.effect import Effect
from estimation.reading import Reading
from estimation.take_up import Pieces
from study.document import Study
from study.literal import clean

MINUS = "\N{MINUS SIGN}"
TIE = "\N{NO-BREAK SPACE}"  # holds a number and its unit on one line
LEADS = {
    "robust": "robust interval",
    "bias-aware": "bias-aware interval",
    "plain": "plain interval",
    "anderson-rubin": "Anderson–Rubin set",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class AnswerRow:
    """One of the three answers as text, with its numbers for a drawing.

    Attributes
    ----------
    name, basis
        What it is called, and what it rests on in a few words.
    estimate, low, high
        As text, at the digits that its own spread supports; empty where there is no answer.
    numbers
        (estimate, low, high), NaN where there is none and infinite where a set has no end.
    reason
        Why there is no answer, else None.
    leads
        Whether this answer is the one in the sentence.
    """

    name: str
    basis: str
    estimate: str
    low: str
    high: str
    numbers: tuple[float, float, float]
    reason: str | None
    leads: bool


def figure(value: float, spread: float, *, sign: bool = False) -> str:
    """A number at the digits its spread supports: two significant digits of the spread.

    Parameters
    ----------
    spread
        A standard error or half an interval; where it is unknown four significant digits are shown.
    sign
        Whether a positive number carries a plus sign.
    """
    if math.isnan(value):
        return "–"
    if math.isinf(value):
        return "∞" if value > 0 else MINUS + "∞"
    decimals = _decimals(value, spread)
    # A zero carries no sign: nought rounded from below is nought.
    rounded = round(value, decimals) + 0.0
    text = f"{abs(rounded):,.{max(decimals, 0)}f}"
    if rounded < 0:
        return MINUS + text
    return "+" + text if sign and rounded > 0 else text


def _decimals(value: float, spread: float) -> int:
    if spread > 0.0 and math.isfinite(spread):
        return max(min(1 - math.floor(math.log10(spread)), 12), -9)
    return 3 - math.floor(math.log10(abs(value))) if value else 0


def width_text(value: float) -> str:
    """A bandwidth or another length on the score's scale, four significant digits."""
    if not math.isfinite(value):
        return "–"
    text = f"{value:.4g}"
    return text if "e" not in text else f"{value:,.0f}" if abs(value) >= 1 else text


def percent(level: float) -> str:
    """A confidence level as a percentage."""
    return f"{100 * level:g}{TIE}%"


def share(value: float) -> str:
    """A share of units as a percentage."""
    return f"{100 * value:.1f}{TIE}%"


def p_text(value: float) -> str:
    """A p-value as trade journals print it."""
    if math.isnan(value):
        return "p unknown"
    return "p < 0.001" if value < 0.001 else f"p = {value:.3f}"


def plural(count: int, noun: str) -> str:
    """A count with its noun."""
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def rule_sentence(study: Study) -> str:
    """The rule in words: who got the programme."""
    assignment, score = study.assignment, study.columns.score
    named = clean(score) if score else "the score"
    if assignment.rule in ("boundary", "frontier"):
        return (
            f"Units {assignment.treated} the area are treated."
            if assignment.rule == "boundary"
            else "Units are treated where their scores meet the frontier's conditions."
        )
    where = {
        "at or above": "is at or above",
        "above": "is above",
        "at or below": "is at or below",
        "below": "is below",
    }[assignment.treated]
    if assignment.rule == "cutoff":
        line = width_text(assignment.cutoff) if assignment.cutoff is not None else "a cutoff not yet set"
    elif assignment.rule == "cutoffs":
        line = f"the cutoff of its {clean(study.columns.site or 'site')}"
    else:
        line = "the next of " + ", ".join(width_text(step) for step in assignment.steps)
    return f"A unit is treated when its {named} {where} {line}."


def headline(
    outcome: str, reading: Reading, *, lead: str, level: float, interval: tuple[float, float], binary: bool
) -> str:
    """The effect in one short line: number, interval, unit."""
    scale, unit = (100.0, " points") if binary else (1.0, "")
    spread = scale * (reading.robust.std_error if lead == "robust" else reading.std_error)
    low, high = (figure(scale * end, spread) for end in interval)
    what = "per unit of take-up, " if reading.take_up is not None else ""
    return (
        f"{figure(scale * reading.estimate, spread, sign=True)}{unit} {clean(outcome)}  "
        f"{what}{percent(level)} {LEADS[lead]} {low} to {high}"
    )


def effect_headline(effect: Effect) -> str:
    """`headline` of a full effect."""
    return headline(
        effect.outcome,
        effect.reading,
        lead=effect.lead,
        level=effect.choices.level,
        interval=effect.leading,
        binary=effect.binary,
    )


def effect_sentence(effect: Effect, study: Study) -> str:
    """The effect in full: the number, its interval, the levels, the bandwidth and the counts."""
    return f"{finding_sentence(effect, study)} {_basis(effect)}"


def finding_sentence(effect: Effect, study: Study) -> str:
    """The number, its interval and the levels, without what they rest on."""
    reading, outcome = effect.reading, clean(effect.outcome)
    scale, unit = (100.0, " percentage points") if effect.binary else (1.0, "")
    spread = scale * (reading.robust.std_error if effect.lead == "robust" else reading.std_error)
    said = figure(scale * reading.estimate, spread, sign=True)
    bracket = f"{percent(effect.choices.level)} {LEADS[effect.lead]} {_reach(effect, scale, spread)}"
    finding = f"the {'set' if effect.lead == 'anderson-rubin' else 'interval'} "
    finding += "holds zero" if effect.holds_zero else "excludes zero"
    where = _where(effect, study)
    if effect.fuzzy:
        start = f"{where}, the programme changes {outcome} by {said}{unit} for those whom the line moved to take it"
    else:
        start = f"{where}, {outcome} differs by {said}{unit} on the treated side"
    return f"{start} ({bracket}; {finding}){_levels(effect, scale)}."


def _where(effect: Effect, study: Study) -> str:
    score = clean(study.columns.score or "the score")
    if effect.kind == "boundary":
        return "Along the border"
    if effect.kind == "segment":
        return f"At {clean(effect.where)} of the border"
    if effect.kind == "pooled":
        return f"Over all sites, each at its own cutoff of {score}"
    if effect.kind in ("site", "step"):
        cutoff = "" if effect.cutoff is None else f" at {score} {width_text(effect.cutoff)}"
        return f"In {clean(effect.where)}{cutoff}"
    return f"At {score} {width_text(effect.cutoff)}" if effect.cutoff is not None else "At the line"


def _reach(effect: Effect, scale: float, spread: float) -> str:
    if effect.lead == "anderson-rubin" and effect.reading.take_up is not None:
        return pieces_text(effect.reading.take_up.anderson_rubin, scale, spread)
    low, high = effect.leading
    return f"{figure(scale * low, spread)} to {figure(scale * high, spread)}"


def _levels(effect: Effect, scale: float) -> str:
    reading = effect.reading
    other, treated = (
        (reading.levels_below, reading.levels_above)
        if effect.treated == "above"
        else (reading.levels_above, reading.levels_below)
    )
    sharp = reading.intention or reading
    spread = scale * sharp.std_error
    unit = f"{TIE}%" if effect.binary else ""
    jump = ""
    if reading.intention is not None:
        jump = (
            f"; the outcome itself jumps by {figure(scale * reading.intention.estimate, spread, sign=True)}"
        )
    return f"{jump}, from {figure(scale * other, spread)}{unit} to {figure(scale * treated, spread)}{unit}"


def _basis(effect: Effect) -> str:
    reading = effect.reading
    low, high = side_words(effect)
    rows = f"{plural(reading.count_below, 'row')} {low} and {reading.count_above:,} {high}"
    clusters = "" if reading.clusters is None else f" in {plural(reading.clusters, 'cluster')}"
    return f"It rests on {rows}{clusters} {near_words(effect)}."


def side_words(effect: Effect) -> tuple[str, str]:
    """What the two sides are called."""
    border = effect.kind in ("boundary", "segment")
    return ("on the other side", "on the treated side") if border else ("below", "above")


def near_words(effect: Effect) -> str:
    """How near to the line the rows lie, and which rule chose it."""
    widths = effect.bandwidths
    low, high = side_words(effect)
    unit, line = (" m", "border") if effect.kind in ("boundary", "segment") else ("", "line")
    if widths.below == widths.above:
        near = f"within {width_text(widths.below)}{unit} of the {line}"
    else:
        near = f"within {width_text(widths.below)}{unit} {low} and {width_text(widths.above)}{unit} {high}"
    rule = {
        "mse": "the MSE-optimal width",
        "coverage": "the coverage-optimal width",
        "bias-aware": "the shortest bias-aware width",
        "mse per side": "MSE-optimal widths by side",
        "coverage per side": "coverage-optimal widths by side",
    }.get(widths.rule, "a chosen width")
    return f"{near} ({rule})"


def pieces_text(pieces: Pieces, scale: float, spread: float) -> str:
    """A set of ratios in words."""
    if not pieces:
        return "empty: no ratio fits both jumps"
    if len(pieces) == 1 and math.isinf(pieces[0][0]) and math.isinf(pieces[0][1]):
        return "everything: take-up says nothing here"
    said = []
    for low, high in pieces:
        if math.isinf(low):
            said.append(f"below {figure(scale * high, spread)}")
        elif math.isinf(high):
            said.append(f"above {figure(scale * low, spread)}")
        else:
            said.append(f"{figure(scale * low, spread)} to {figure(scale * high, spread)}")
    return " or ".join(said)


def answers_table(effect: Effect) -> tuple[AnswerRow, ...]:
    """The three answers: robust, bias-aware, local randomisation; then the set of ratios where it leads."""
    reading, scale = effect.reading, 100.0 if effect.binary else 1.0
    curvature = reading.bias_aware
    rows = [
        _row(
            "Robust",
            f"local polynomial, order {effect.choices.order}, bias-corrected",
            (reading.robust.estimate, reading.robust.low, reading.robust.high),
            scale,
            reading.robust.std_error,
            effect.lead == "robust",
        ),
        _row(
            "Bias-aware",
            f"each side bends by at most {curvature.curvature:.3g}"
            if curvature
            else "a bound on the curvature",
            (reading.estimate, curvature.low, curvature.high) if curvature else None,
            scale,
            reading.std_error,
            effect.lead == "bias-aware",
            reading.bias_aware_reason,
        ),
    ]
    found = effect.randomisation
    rows.append(
        _row(
            "Randomisation",
            (
                f"as if drawn by lot within {width_text(found.window[1])} of the line, "
                f"{found.below:,} and {found.above:,} rows"
                if found
                else "as if drawn by lot near the line"
            ),
            (found.estimate, found.low, found.high) if found else None,
            scale,
            (found.high - found.low) / 4.0 if found else math.nan,
            False,
            effect.randomisation_reason,
        )
    )
    if effect.lead == "anderson-rubin" and reading.take_up is not None:
        pieces = reading.take_up.anderson_rubin
        low, high = effect.leading
        rows.append(
            AnswerRow(
                name="Anderson–Rubin",
                basis="ratios that both jumps allow: "
                + pieces_text(pieces, scale, scale * reading.std_error),
                estimate=figure(scale * reading.estimate, scale * reading.std_error, sign=True),
                low=figure(scale * low, scale * reading.std_error) if len(pieces) == 1 else "",
                high=figure(scale * high, scale * reading.std_error) if len(pieces) == 1 else "",
                numbers=(scale * reading.estimate, scale * low, scale * high),
                reason=None,
                leads=True,
            )
        )
    if effect.lead == "plain":
        rows.append(
            _row(
                "Plain",
                "as if the fit had no bias",
                (reading.estimate, reading.plain.low, reading.plain.high),
                scale,
                reading.std_error,
                True,
            )
        )
    return tuple(rows)


def _row(
    name: str,
    basis: str,
    numbers: tuple[float, float, float] | None,
    scale: float,
    spread: float,
    leads: bool,
    reason: str | None = None,
) -> AnswerRow:
    if numbers is None:
        return AnswerRow(
            name=name,
            basis=basis,
            estimate="",
            low="",
            high="",
            numbers=(math.nan, math.nan, math.nan),
            reason=reason or "not available",
            leads=leads,
        )
    estimate, low, high = (scale * value for value in numbers)
    return AnswerRow(
        name=name,
        basis=basis,
        estimate=figure(estimate, scale * spread, sign=True),
        low=figure(low, scale * spread),
        high=figure(high, scale * spread),
        numbers=(estimate, low, high),
        reason=None,
        leads=leads,
    )
