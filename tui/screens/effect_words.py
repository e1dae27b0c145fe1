"""What the Effect screen says: the headline, the three answers, and what they rest on. The words are those of the headless run."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

from study.document import Study
from study.literal import clean
from tui.look import Ink
from tui.screens.lines import Line, wrapped

if TYPE_CHECKING:  # these bring numpy, which the first screen must not wait for
    from estimation.effect import Effect
    from tui.widgets.answers import Answer


_RULES: Final = {
    "mse": "MSE-optimal",
    "coverage": "coverage-optimal",
    "bias-aware": "shortest bias-aware",
    "mse per side": "MSE-optimal by side",
    "coverage per side": "coverage-optimal by side",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Standing:
    """Where the person stands on the Effect screen.

    Attributes
    ----------
    effect
        The effect at this width, with the words' numbers.
    own
        Whether the width is the study's own.
    own_width
        The study's own width, the wider of the two sides.
    pending
        Whether the slow part (randomisation, notes) is still that of another width.
    going_to
        The width that was asked for and whose reading takes a moment; None when the reading is there.
    """

    effect: Effect
    own: bool
    own_width: float
    pending: bool
    going_to: float | None = None


def headline_lines(standing: Standing, width: int) -> list[Line]:
    """The effect and its interval: two short lines that survive any terminal."""
    from study.wording import effect_headline, width_text

    effect = standing.effect
    first, _, rest = effect_headline(effect).partition("  ")
    if effect.kind in ("site", "step", "segment"):
        first = f"{clean(effect.where)}: {first}"
    elif effect.kind == "pooled":
        first = f"All sites: {first}"
    reading, at = effect.reading, effect.bandwidths
    verdict = "holds zero" if _holds_zero(effect) else "excludes zero"
    near = (
        width_text(at.below) if at.below == at.above else f"{width_text(at.below)} and {width_text(at.above)}"
    )
    rows = f"{reading.count_below:,} below, {reading.count_above:,} above within {near}"
    lines: list[Line] = [[(first, Ink.ACCENT), (f"   {rest}, {verdict}", Ink.TEXT)]]
    if len(first) + len(rest) + len(verdict) + 5 > width:
        lines = [[(first, Ink.ACCENT)], *[[part] for part in wrapped(f"{rest}, {verdict}", width)]]
    return [*lines, [(rows, Ink.TEXT), ("   " + _mark(standing), Ink.MUTED if standing.own else Ink.STRONG)]]


def _holds_zero(effect: Effect) -> bool:
    """Whether the answer that leads holds zero; a set of ratios may lie on both sides of it and still exclude it."""
    if effect.lead == "anderson-rubin" and effect.reading.take_up is not None:
        return any(low <= 0.0 <= high for low, high in effect.reading.take_up.anderson_rubin)
    low, high = effect.leading
    return not (low > 0.0 or high < 0.0)


def _mark(standing: Standing) -> str:
    """Whether we stand where the study stands, in words."""
    from study.wording import width_text

    if standing.going_to is not None:
        return f"going to {width_text(standing.going_to)} ..."
    if standing.own:
        rule = _RULES.get(standing.effect.bandwidths.rule, "")
        return "the study's own width" + (f" ({rule})" if rule else "")
    return f"not the study's {width_text(standing.own_width)}: Enter keeps it"


def sentence_lines(standing: Standing, study: Study, width: int) -> list[str]:
    """The effect in full, as the headless run says it."""
    from study.wording import effect_sentence

    return wrapped(effect_sentence(standing.effect, study), width)


def answers(effect: Effect) -> tuple[list[Answer], int]:
    """The answers for the table that draws them, and the decimals that the headline has: one number, one spelling."""
    from study.wording import answers_table
    from tui.widgets.answers import Answer

    rows = answers_table(effect)
    drawn = []
    for row in rows:
        estimate, low, high = row.numbers
        note = row.reason or row.basis
        drawn.append(
            Answer(name=row.name, estimate=estimate, low=low, high=high, note=note, chosen=row.leads)
        )
    leading = next((row for row in rows if row.leads and row.reason is None), None)
    spelt = leading if leading is not None else next((row for row in rows if row.reason is None), None)
    return drawn, 2 if spelt is None else len(spelt.low.partition(".")[2])


def why_lines(standing: Standing, width: int, most: int) -> list[Line]:
    """What the answers' difference comes from and what there is to mind, in at most so many lines."""
    from study.disagreement import disagreement

    if most <= 0:
        return []
    effect = standing.effect
    lines: list[Line] = []
    for sentence in disagreement(effect):
        lines += [[(part, Ink.TEXT)] for part in wrapped(sentence, width)]
    for note in sorted(effect.notes, key=lambda note: note.severity != "caution"):
        caution = note.severity == "caution"
        words = f"Caution: {note.sentence}" if caution else note.sentence
        lines += [[(part, Ink.WARNING if caution else Ink.MUTED)] for part in wrapped(words, width)]
    if len(lines) > most:
        lines = [*lines[: most - 1], [("v shows the rest", Ink.FAINT)]]
    return lines


def choices_lines(study: Study, width: int) -> list[Line]:
    """The choices of the estimate, in one line where they fit."""
    chosen = study.estimate
    parts = [f"{chosen.kernel} kernel", f"order {chosen.order}", f"{chosen.interval} leads"]
    parts.append("clustered errors" if study.columns.cluster else f"{chosen.variance} errors")
    if chosen.donut:
        parts.append(f"donut {chosen.donut:g}")
    if study.columns.covariates:
        parts.append("covariates on" if chosen.adjust else "covariates off")
    # A choice is not broken over two lines: "covariates" at the end of one would say the opposite of "off" on the next.
    whole = ", ".join(part.replace(" ", "\N{NO-BREAK SPACE}") for part in parts)
    return [[(line, Ink.MUTED)] for line in wrapped(whole, width)]


def all_text(standing: Standing, study: Study) -> list[str]:
    """Everything that the screen says, a sentence or an answer a line, for others to wrap."""
    from study.disagreement import remarks
    from study.wording import answers_table, effect_sentence

    effect = standing.effect
    lines = [effect_sentence(effect, study), ""]
    rows = answers_table(effect)
    names = max(len(row.name) for row in rows)
    for row in rows:
        if row.reason is not None:
            lines.append(f"{row.name.ljust(names)}  none: {row.reason}")
        else:
            lead = "leads; " if row.leads else ""
            lines.append(
                f"{row.name.ljust(names)}  {row.estimate} ({row.low} to {row.high}): {lead}{row.basis}"
            )
    lines += ["", *remarks(effect)]
    for note in effect.notes:
        lines.append(
            f"{'Caution: ' if note.severity == 'caution' else ''}{note.sentence} {note.remedy}".strip()
        )
    return lines
