"""One effect with its three answers, and what there is to say about it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from estimation.bandwidth import coefficient
from estimation.choices import Choices
from estimation.errors import CannotEstimate
from estimation.inference import HonestInterval, breakdown_curvature, honest_interval, quantile
from estimation.kernels import count_inside
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.randomisation import Randomisation
from estimation.reading import Reading
from estimation.sample import Sample
from estimation.variance import mass_point_starts

# Fewer distinct scores a side than this and neither local answer is reliable (WWC handbook; Kolesár & Rothe 2018).
FEW_SCORES: Final = 4
# Fewer distinct scores a side than this are worth a word: single values carry much of the fit (no source).
LUMPY_SCORES: Final = 20
# Fewer clusters than this and the clustered error is too small by an amount nobody knows (common practice).
FEW_CLUSTERS: Final = 40

Severity = Literal["note", "caution"]
Leading = Literal["robust", "bias-aware", "plain", "anderson-rubin"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Note:
    """Something a reader must know: a code, how much it matters, one sentence, and what to do."""

    code: str
    severity: Severity
    sentence: str
    remedy: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class MassPoints:
    """How lumpy the score is where it matters.

    Attributes
    ----------
    below, above
        Distinct scores inside the bandwidth.
    rows_below, rows_above
        Rows inside the bandwidth.
    nearest_below, nearest_above
        Distance from the line to the nearest score of each side, in units of the score.
    on_line
        Rows exactly on the line.
    """

    below: int
    above: int
    rows_below: int
    rows_above: int
    nearest_below: float
    nearest_above: float
    on_line: int

    @property
    def few(self) -> bool:
        """Whether a side has too few distinct scores for local fits to be trusted."""
        return min(self.below, self.above) < FEW_SCORES

    @property
    def lumpy(self) -> bool:
        """Whether a side's scores are so few that its fit leans on each: under `LUMPY_SCORES` distinct ones."""
        return min(self.below, self.above) < LUMPY_SCORES and (
            self.below < self.rows_below or self.above < self.rows_above
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvatureRow:
    """The honest interval under a multiple of the stated bound."""

    multiple: float
    honest: HonestInterval


@dataclass(frozen=True, slots=True, kw_only=True)
class AgainstRule:
    """Rows whose take-up went against the rule, by side, of all that the study reads.

    Attributes
    ----------
    treated_without, treated_rows
        On the treated side: rows that did not take the programme, and all rows with take-up known.
    other_with, other_rows
        On the other side: rows that took it, and all rows with take-up known.
    """

    treated_without: int
    treated_rows: int
    other_with: int
    other_rows: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Effect:
    """What changed at the line, in one outcome.

    Attributes
    ----------
    outcome, where, kind, cutoff
        Which question this answers; `cutoff` in units of the score, None where sites differ.
    bandwidths, choices
        How.
    reading
        The local polynomial answer with its robust, bias-aware and plain intervals.
    adjusted, unadjusted
        The readings with and without covariates, where the study has any.
    randomisation
        The local randomisation answer, or None; then `randomisation_reason` says why.
    without_slopes
        The same with each side's slope in the score taken off first.
    curvature_table, breakdown
        The honest interval at half, once and twice the bound, and the bound at which it first holds zero.
    mass_points, against_rule
        Lumps in the score; take-up against the rule (None without take-up).
    lead
        The answer that leads, which is the chosen interval unless the data forbid it.
    slopes
        Of the local fits at the line, below and above, in outcome per unit of score; None for order 0.
    binary
        Whether the outcome is nought or one, so that effects read in percentage points.
    """

    outcome: str
    where: str
    kind: str
    cutoff: float | None
    bandwidths: Bandwidths
    choices: Choices
    reading: Reading
    adjusted: Reading | None
    unadjusted: Reading | None
    adjusted_reason: str | None
    randomisation: Randomisation | None
    randomisation_reason: str | None
    without_slopes: Randomisation | None
    curvature_table: tuple[CurvatureRow, ...]
    breakdown: float | None
    mass_points: MassPoints
    against_rule: AgainstRule | None
    lead: Leading
    slopes: tuple[float, float] | None
    binary: bool
    treated: str
    notes: tuple[Note, ...]

    @property
    def fuzzy(self) -> bool:
        """Whether the estimate is a ratio."""
        return self.reading.take_up is not None

    @property
    def holds_zero(self) -> bool:
        """Whether the answer that leads does not speak against no effect; a set of two rays may well do."""
        if self.lead == "anderson-rubin" and self.reading.take_up is not None:
            return any(low <= 0.0 <= high for low, high in self.reading.take_up.anderson_rubin)
        low, high = self.leading
        return not (low > 0.0 or high < 0.0)

    @property
    def leading(self) -> tuple[float, float]:
        """(low, high) of the answer that leads; infinite ends where a set has them."""
        reading = self.reading
        if self.lead == "anderson-rubin" and reading.take_up is not None:
            pieces = reading.take_up.anderson_rubin
            return (pieces[0][0], pieces[-1][1]) if pieces else (float("nan"), float("nan"))
        if self.lead == "bias-aware" and reading.bias_aware is not None:
            return (reading.bias_aware.low, reading.bias_aware.high)
        found = reading.plain if self.lead == "plain" else reading.robust
        return (found.low, found.high)


@dataclass(frozen=True, slots=True, kw_only=True)
class Question:
    """What an effect is asked about: names for people, and the answers computed elsewhere."""

    outcome: str
    where: str = "at the cutoff"
    kind: str = "cutoff"
    cutoff: float | None = None
    randomisation: Randomisation | None = None
    randomisation_reason: str | None = None
    against_rule: AgainstRule | None = None
    rows_without_covariate: Mapping[str, int] | None = None
    covariates: tuple[str, ...] = ()
    without_slopes: Randomisation | None = None


def estimate_effect(line: Line, bandwidths: Bandwidths, question: Question) -> Effect:
    """The effect at one pair of widths with everything that belongs beside it.

    Raises
    ------
    CannotEstimate
        When a side can't carry the fit.
    """
    unadjusted = line.reading(bandwidths, adjust=False)
    with_covariates, reason = _adjusted(line, bandwidths)
    reading = with_covariates if line.choices.adjust and with_covariates is not None else unadjusted
    points = mass_points(line.sample, bandwidths, line.choices.kernel)
    lead, notes = _lead(reading, points, line.choices)
    notes += _notes(line, reading, points, question)
    if with_covariates is not None:
        notes += _jumping_covariates(line, bandwidths, question)
    sharp = reading if reading.intention is None else reading.intention
    return Effect(
        outcome=question.outcome,
        where=question.where,
        kind=question.kind,
        cutoff=question.cutoff,
        bandwidths=bandwidths,
        choices=line.choices,
        reading=reading,
        adjusted=with_covariates,
        unadjusted=unadjusted if with_covariates is not None else None,
        adjusted_reason=reason,
        randomisation=question.randomisation,
        randomisation_reason=question.randomisation_reason,
        without_slopes=question.without_slopes,
        curvature_table=_curvature_table(sharp, line),
        breakdown=(
            breakdown_curvature(
                sharp.estimate,
                sharp.std_error,
                unit_bias=sharp.unit_bias,
                level=line.choices.level,
                degrees=_degrees(sharp),
            )
            if np.isfinite(sharp.unit_bias)
            else None
        ),
        mass_points=points,
        against_rule=question.against_rule,
        lead=lead,
        slopes=_slopes(line, bandwidths),
        binary=line.binary,
        treated=line.sample.treated,
        notes=tuple(notes),
    )


def mass_points(sample: Sample, bandwidths: Bandwidths, kernel: str) -> MassPoints:
    """Count what is distinct inside the bandwidth."""
    distinct, rows = [], []
    for name, side in sample.sides:
        count = count_inside(side.distance, bandwidths.of(name)[0], kernel)
        rows.append(count)
        distinct.append(len(mass_point_starts(side.distance[:count], sample.resolution)))
    return MassPoints(
        below=distinct[0],
        above=distinct[1],
        rows_below=rows[0],
        rows_above=rows[1],
        nearest_below=float(sample.below.distance[0]),
        nearest_above=float(sample.above.distance[0]),
        on_line=sum(
            int(np.searchsorted(side.distance, sample.resolution, side="right")) for _, side in sample.sides
        ),
    )


def _adjusted(line: Line, bandwidths: Bandwidths) -> tuple[Reading | None, str | None]:
    if line.with_covariates is None:
        return None, None
    try:
        return line.reading(bandwidths, adjust=True), None
    except CannotEstimate as problem:
        return None, problem.sentence


def _slopes(line: Line, bandwidths: Bandwidths) -> tuple[float, float] | None:
    if line.choices.order == 0:
        return None
    below, above = (
        coefficient(
            side,
            bandwidth=bandwidths.of(side.name)[0],
            kernel=line.choices.kernel,
            order=line.choices.order,
            power=1,
        )
        for side in (line.ladder.below, line.ladder.above)
    )
    return float(below.value[0]), float(above.value[0])


def _degrees(reading: Reading) -> float | None:
    return None if reading.clusters is None else float(max(reading.clusters - 1, 1))


def _curvature_table(sharp: Reading, line: Line) -> tuple[CurvatureRow, ...]:
    """Of the jump in the outcome itself; empty for order 0, where no curvature bounds the bias."""
    if not np.isfinite(sharp.unit_bias):
        return ()
    bound = float(line.curvature[0])
    return tuple(
        CurvatureRow(
            multiple=multiple,
            honest=honest_interval(
                sharp.estimate,
                sharp.std_error,
                unit_bias=sharp.unit_bias,
                curvature=multiple * bound,
                level=line.choices.level,
                degrees=_degrees(sharp),
            ),
        )
        for multiple in (0.5, 1.0, 2.0)
    )


def _lead(reading: Reading, points: MassPoints, choices: Choices) -> tuple[Leading, list[Note]]:
    """The answer that leads, with a note where it is not the one that was asked for."""
    lead: Leading = "robust"
    if choices.interval in ("bias-aware", "plain"):
        lead = "bias-aware" if choices.interval == "bias-aware" else "plain"
    notes = []
    if reading.take_up is not None and reading.take_up.weak:
        strength = reading.take_up.first_stage_f
        notes.append(
            Note(
                code="weak-take-up",
                severity="caution",
                sentence=f"Take-up jumps too little to divide by with confidence (F = {strength:.1f}, under 16): "
                "the Anderson–Rubin set leads.",
                remedy="Rely on the jump in the outcome itself and on the set.",
            )
        )
        return "anderson-rubin", notes
    if points.few and reading.bias_aware is not None and lead != "bias-aware":
        notes.append(
            Note(
                code="few-scores",
                severity="caution",
                sentence=f"Inside the bandwidth the score takes {points.below} values below the line and "
                f"{points.above} above, under four on a side: the bias-aware interval leads.",
                remedy="Widen the bandwidth, or state a curvature that you can defend.",
            )
        )
        lead = "bias-aware"
    if lead == "bias-aware" and reading.bias_aware is None:
        lead = "robust"
        notes.append(
            Note(
                code="no-bias-aware",
                severity="caution",
                sentence=f"The bias-aware interval can't be given: {reading.bias_aware_reason}. The robust one leads.",
                remedy="Choose order 1.",
            )
        )
    return lead, notes


def _notes(line: Line, reading: Reading, points: MassPoints, question: Question) -> list[Note]:
    notes: list[Note] = []
    if reading.clusters is not None and reading.clusters < FEW_CLUSTERS:
        notes.append(
            Note(
                code="few-clusters",
                severity="caution",
                sentence=f"Only {reading.clusters} clusters lie inside the bandwidth; with fewer than "
                f"{FEW_CLUSTERS} the clustered error is likely too small.",
                remedy="Widen the bandwidth or read the interval as too short.",
            )
        )
    if points.lumpy:
        gap = points.nearest_below + points.nearest_above
        notes.append(
            Note(
                code="lumpy-score",
                severity="note",
                sentence=f"The score is lumpy: {points.rows_below + points.rows_above:,} rows inside the bandwidth "
                f"share {points.below + points.above:,} values, and the nearest values on the two sides lie "
                f"{gap:.6g} apart.",
                remedy="Read the bias-aware interval beside the robust one.",
            )
        )
    if line.choices.curvature == "auto":
        notes.append(
            Note(
                code="rule-of-thumb-curvature",
                severity="note",
                sentence="The bias-aware interval's bound on the curvature is a rule of thumb from a global "
                "quartic; data can't vouch for it.",
                remedy="State a bound that you can defend as estimate.curvature.",
            )
        )
    if line.with_covariates is not None:
        notes += _covariate_notes(line, question)
    return notes


def _jumping_covariates(line: Line, bandwidths: Bandwidths, question: Question) -> list[Note]:
    """A covariate that itself jumps moves the adjusted estimate: said for each whose own interval excludes zero."""
    jumps, errors = line.covariate_jumps(bandwidths)
    z = quantile(line.choices.level)
    names = question.covariates or tuple(f"covariate {j + 1}" for j in range(len(jumps)))
    found = [name for name, jump, error in zip(names, jumps, errors) if abs(jump) > z * error > 0.0]
    if not found:
        return []
    subject = found[0] if len(found) == 1 else ", ".join(found[:-1]) + " and " + found[-1]
    return [
        Note(
            code="covariate-jumps",
            severity="caution",
            sentence=f"{subject} {'jumps' if len(found) == 1 else 'jump'} at the line: adjusting for "
            f"{'it' if len(found) == 1 else 'them'} would move the effect, not only sharpen it.",
            remedy="Leave it out of the adjustment, and ask why units on the two sides differ.",
        )
    ]


def _covariate_notes(line: Line, question: Question) -> list[Note]:
    lost = len(line.sample) - len(line.with_covariates or ())
    if not lost:
        return []
    named = ", ".join(
        f"{count:,} lack {name}" for name, count in (question.rows_without_covariate or {}).items() if count
    )
    return [
        Note(
            code="missing-covariates",
            severity="note",
            sentence=f"The adjusted answer leaves out {lost:,} rows that lack a covariate"
            + (f" ({named})" if named else "")
            + "; the bandwidth stays that of all rows.",
            remedy="Leave out a covariate that is often missing.",
        )
    ]
