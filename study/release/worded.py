"""The sentences of a release: the bench's own words, with counts and shares as the guard lets them leave."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Final

from estimation.effect import Effect
from study.comparison import Comparison
from study.comparison_words import sentences
from study.disagreement import remarks
from study.document import Study
from study.guard.profile import Profile, rounded
from study.literal import clean
from study.release.asked import Asked, headline, key_of
from study.release.material import Table
from study.release.tabled import WITHHELD
from study.wording import answers_table, near_words, percent, side_words, width_text

# A note's own sentence may hold counts: these say the same without. An unknown note is named, not quoted.
_NOTES: Final[Mapping[str, str]] = {
    "weak-take-up": "Take-up jumps too little to divide by with confidence: the Anderson–Rubin set leads.",
    "few-scores": "The score takes few values inside the bandwidth on a side: the bias-aware interval leads.",
    "no-bias-aware": "The bias-aware interval can't be given. The robust one leads.",
    "few-clusters": "Few clusters lie inside the bandwidth: the clustered error is likely too small.",
    "lumpy-score": "The score is lumpy: many rows share its values, so read the bias-aware interval beside the robust one.",
    "rule-of-thumb-curvature": "The bias-aware interval's bound on the curvature is a rule of thumb from a global "
    "quartic; data can't vouch for it.",
    "missing-covariates": "The adjusted answer leaves out rows that lack a covariate; the bandwidth stays that of all rows.",
    "covariate-jumps": "A covariate itself jumps at the line: ask why units on the two sides differ.",
}


def question_sentences(study: Study) -> tuple[str, ...]:
    """What is asked."""
    outcomes = _listed([clean(name) for name in study.columns.outcomes])
    return (
        f"Did the programme change {outcomes}? It was handed out by a line, so units just on either side of the line are "
        "alike but for it: the jump at the line is its effect there.",
    )


def data_sentences(asked: Asked) -> tuple[str, ...]:
    """Which data, known by their fingerprint."""
    study, a = asked.result.study, asked.result.assigned
    decisions = asked.decisions
    said = [
        f"The data are {clean(study.data_file.name)}, {decisions.count_text('read')} rows, of which "
        f"{decisions.count_text('used')} lie on one side of the line or the other.",
        f"SHA-256 of the file: {a.fingerprint}",
    ]
    if study.data.rows:
        said.insert(1, f"Only rows were read for which {clean(study.data.rows)}.")
    return tuple(said)


def basis_sentence(effect: Effect, asked: Asked) -> str:
    """What an effect rests on, counts as they may be shown."""
    key, (low, high) = key_of(effect), side_words(effect)
    below, above = (asked.decisions.count_text(f"{key}|{side}") for side in ("below", "above"))
    near = near_words(effect)
    if WITHHELD in (below, above):
        return f"It rests on rows {near}; how many is not shown."
    return f"It rests on {below} rows {low} and {above} {high}, {near}."


def safe_effect(effect: Effect, asked: Asked) -> Effect:
    """An effect at the digits that may leave, without texts that hold counts."""
    choices = effect.choices
    decisions = asked.decisions
    drawn, why = effect.randomisation, "no window near the line could carry it"
    if drawn is not None and not decisions.shows(f"{key_of(effect)}|window"):
        drawn, why = None, "it is not shown: too few rows, or too few that set it apart from another estimate"
    shown = rounded(
        replace(
            effect,
            randomisation=drawn,
            randomisation_reason=why if drawn is None else None,
            without_slopes=effect.without_slopes if drawn is not None else None,
            adjusted_reason=None,
            notes=(),
        ),
        decisions.profile.digits,
    )
    return replace(shown, choices=choices)


def answers_of(effect: Effect, safe: Effect, asked: Asked) -> Table:
    """The three answers."""
    decisions, key = asked.decisions, key_of(effect)
    rows = []
    for row in answers_table(safe):
        basis = row.basis
        if row.name == "Randomisation" and safe.randomisation is not None:
            below, above = (decisions.count_text(f"{key}|window {side}") for side in ("below", "above"))
            basis = f"as if drawn by lot within {width_text(safe.randomisation.window[1])} of the line"
            if WITHHELD not in (below, above):
                basis += f", {below} and {above} rows"
            decisions.note_estimate(f"{key}|window", row.estimate)
        leads = " (leads)" if row.leads else ""
        rows.append(
            (row.name + leads, row.estimate or "–", row.low or "–", row.high or "–", row.reason or basis)
        )
    return Table(
        name=f"answers-{effect.outcome}",
        title=f"{clean(effect.outcome)}: three answers",
        head=("answer", "estimate", f"{percent(effect.choices.level)} from", "to", "rests on"),
        rows=tuple(rows),
        numeric=(1, 2, 3),
        note="In percentage points." if effect.binary else "",
    )


def remarks_of(safe: Effect) -> tuple[str, ...]:
    """Why the answers differ, the answer with covariates, the bound on the curvature."""
    return remarks(safe)


def warnings_of(effect: Effect, asked: Asked) -> tuple[str, ...]:
    """What to mind about one effect."""
    record = asked.result.record
    departs = () if record is None else record.departs(effect.outcome)
    said = [f"Departs from the sealed plan in {_listed(list(departs))}."] if departs else []
    said += [
        _NOTES.get(note.code, f"A caution about it stays with the data ({clean(note.code)}).")
        for note in effect.notes
    ]
    return tuple(said)


def together_sentences(comparison: Comparison, asked: Asked) -> tuple[str, ...]:
    """What the sites say together; silent where a hidden site could be solved for from means and spreads."""
    shown = {e.where for e in asked.effects if e.outcome == comparison.outcome and not headline(e)}
    hidden = [row.name for row in comparison.rows if row.reading is not None and row.name not in shown]
    if hidden:
        return (
            f"Some {comparison.kind}s are not shown; means and spreads over all of them are not either, for theirs could be "
            "worked out from them.",
        )
    told = rounded(
        replace(comparison, rows=tuple(row for row in comparison.rows if row.reading is not None)),
        asked.decisions.profile.digits,
    )
    return sentences(told)


def guard_sentences(profile: Profile, suppressed: int, rounded_: int) -> tuple[str, ...]:
    """Which rules were applied and what they did."""
    return (
        f"Disclosure rules: {profile.name}. {profile.says}",
        f"They held back {suppressed:,} and rounded {rounded_:,} of the numbers that were asked for. The data owner's own "
        "rules and officers decide what may leave; this program only prepares it.",
    )


def cautions_of(study: Study) -> tuple[str, ...]:
    """What every reader must know."""
    line = "the border" if study.assignment.rule == "boundary" else "the line"
    return (
        f"The effect holds for units near {line}. Nothing here says what the programme does to others.",
        "It is an effect of the programme only if nothing else changes at the same line and nobody could choose a side.",
        "Intervals tell sampling error and, where they say so, bias; not errors in the data.",
        "Use it within the purpose that the data were given for. It speaks about groups, never about one person.",
    )


def repeat_sentences(study: Study, version: str) -> tuple[str, ...]:
    """How somebody else gets the same numbers."""
    return (
        f"Put study.toml beside the same data file and run: cutbank run study.toml (version {version}).",
        f"Every random step follows from the seed {study.seed}. The fingerprint tells whether the data file is the same.",
    )


def _listed(names: list[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
