"""The plain-language result of a run, as lines of text."""

from __future__ import annotations

import textwrap

import numpy as np

from estimation.effect import Effect
from study.analysis import Workbench
from study.assemble import Assigned
from study.border_result import border_sentences
from study.comparison import Comparison
from study.comparison_words import opening, sentences, site_texts
from study.disagreement import remarks
from study.figures import effect_picture, in_percent, table_lines
from study.literal import clean
from study.result import Result
from study.wording import answers_table, effect_sentence, p_text, percent, plural, rule_sentence, share


def result_lines(
    result: Result, bench: Workbench | None = None, *, width: int = 80, plain: bool = False
) -> list[str]:
    """What a person reads: the question, the rows, then each effect with its three answers and what to mind.

    Parameters
    ----------
    bench
        Draws a picture of each effect where given.
    width
        Columns of the page.
    plain
        ASCII marks in pictures.
    """
    study = result.study
    lines = [clean(study.title) or clean(study.path.name), ""]
    lines += wrapped_lines(rule_sentence(study), width)
    lines += wrapped_lines(rows_sentence(result.assigned), width)
    if result.assigned.border is not None:
        for found in result.assigned.border.notes:
            lines += item_lines(found, width)
    compared = {one.outcome: one for one in result.comparisons}
    told: set[str] = set()
    for effect in result.effects:
        if effect.outcome in compared:
            if effect.outcome not in told:
                told.add(effect.outcome)
                lines += ["", *_sites(compared[effect.outcome], result, width)]
            if effect.kind in ("site", "step", "segment"):
                continue  # one line of the table each; the document holds them in full
        lines.append("")
        lines += wrapped_lines(effect_sentence(effect, study), width)
        lines.append("")
        lines += _answers(effect, width)
        if bench is not None and effect.kind not in ("site", "segment", "step"):
            lines.append("")
            lines += _picture(effect, bench, width, plain)
        lines.append("")
        for sentence in (*_along(effect, result), *remarks(effect), *_take_up(effect)):
            lines += item_lines(sentence, width)
        departs = () if result.record is None else result.record.departs(effect.outcome)
        if departs:
            lines += item_lines(f"Departs from the sealed plan in {', '.join(departs)}.", width)
        for note in effect.notes:
            lines += item_lines(f"{'Caution: ' if note.severity == 'caution' else ''}{note.sentence}", width)
    for failure in result.failures:
        if failure.outcome in compared and compared[failure.outcome].has(failure.where):
            continue  # said beside its site
        lines.append("")
        lines += wrapped_lines(
            f"{clean(failure.outcome)} ({clean(failure.where)}) could not be estimated: {failure.sentence} "
            f"{failure.remedy}",
            width,
        )
    if result.families:
        lines += ["", *_families(result, width)]
    if result.record is not None:
        lines.append("")
        for sentence in result.record.sentences(study):
            lines += item_lines(sentence, width)
    lines.append("")
    lines += wrapped_lines(
        "The effect holds for units near the line. These numbers have not passed a disclosure review: the data "
        "owner's rules decide what may leave.",
        width,
    )
    return lines


def _along(effect: Effect, result: Result) -> tuple[str, ...]:
    """What the points along a border say, under the effect of the whole of it."""
    if effect.kind != "boundary":
        return ()
    return tuple(
        sentence
        for found in result.along
        if found.outcome == effect.outcome
        for sentence in border_sentences(found, binary=effect.binary)
    )


def wrapped_lines(sentence: str, width: int) -> list[str]:
    """A sentence as lines of at most `width` columns."""
    return textwrap.wrap(sentence, width, break_long_words=False, break_on_hyphens=False)


def item_lines(sentence: str, width: int) -> list[str]:
    """A sentence as one item of a list."""
    lines = wrapped_lines(sentence, width - 2)
    return [f"{'·' if i == 0 else ' '} {line}" for i, line in enumerate(lines)]


def rows_sentence(assigned: Assigned) -> str:
    """Rows read, used, left out and why, and outcomes that are missing."""
    used = int(np.sum(assigned.reason == 0))
    dropped = ", ".join(f"{count:,} {reason}" for reason, count in assigned.dropped.items() if count)
    said = f"{plural(assigned.rows_read, 'row')} read, {used:,} on one side of the line or the other"
    said += f" ({dropped})." if dropped else "."
    for name, column in assigned.outcomes.items():
        missing = int(np.isnan(column[assigned.reason == 0]).sum())
        if missing:
            said += f" {clean(name)} is missing in {missing:,} of them."
    return said


def _answers(effect: Effect, width: int) -> list[str]:
    rows = answers_table(effect)
    head = ("", "estimate", f"{percent(effect.choices.level)} from", "to", "rests on")
    body = [
        (
            ("› " if row.leads else "  ") + row.name,
            row.estimate or "–",
            row.low or "–",
            row.high or "–",
            row.basis if row.reason is None else "no answer, see below",
        )
        for row in rows
    ]
    lines = table_lines([head, *body], right=(1, 2, 3), indent=0)
    # A page of 80 columns has no room for the last column's longest words: they go on under their own heading.
    fitted: list[str] = []
    start = lines[0].index("rests on")
    for line in lines:
        pieces = textwrap.wrap(line[start:], max(width - start, 20)) or [""]
        fitted.append((line[:start] + pieces[0]).rstrip())
        fitted += [" " * start + piece for piece in pieces[1:]]
    for row in rows:
        if row.reason is not None:
            fitted += ["", *wrapped_lines(f"{row.name}: {row.reason}", width)]
    return fitted


def _sites(comparison: Comparison, result: Result, width: int) -> list[str]:
    rows = site_texts(comparison)
    head = ("", "cutoff", "effect", "from", "to", "at once", "", "drawn in", "rows", "share")
    body = [
        (
            row.name,
            row.cutoff,
            row.estimate or "–",
            row.low or "–",
            row.high or "–",
            row.band_low or "–",
            row.band_high or "–",
            row.shrunken or "–",
            row.rows,
            row.share,
        )
        for row in rows
    ]
    lines = wrapped_lines(opening(comparison, result.study), width)
    table: list[tuple[str, ...]] = [head, *body]
    if comparison.kind == "segment":  # a stretch of a border has no cutoff
        table = [(row[0], *row[2:]) for row in table]
    lines += ["", *table_lines(table, right=tuple(range(1, len(table[0]))), indent=0, gap=2), ""]
    for sentence in sentences(comparison):
        lines += item_lines(sentence, width)
    return lines


def _picture(effect: Effect, bench: Workbench, width: int, plain: bool) -> list[str]:
    reach = 1.5 * max(effect.bandwidths.below, effect.bandwidths.above)
    bins = bench.bins(effect.outcome, min(reach, bench.widest(effect.outcome)), 16)
    curve = bench.curve(effect.outcome, effect.bandwidths)
    if effect.binary:
        bins, curve = in_percent(bins, curve)
    return effect_picture(bins, curve, cutoff=effect.cutoff or 0.0, width=min(width, 100), plain=plain)


def _take_up(effect: Effect) -> list[str]:
    take_up, against = effect.reading.take_up, effect.against_rule
    if take_up is None:
        return []
    said = (
        f"Take-up jumps by {share(take_up.jump)} ({percent(effect.choices.level)} interval {share(take_up.low)} to "
        f"{share(take_up.high)}, F = {take_up.first_stage_f:.0f})."
    )
    if against is not None:
        said += (
            f" On the treated side {against.treated_without:,} of {against.treated_rows:,} did without; on the other "
            f"{against.other_with:,} of {against.other_rows:,} took it."
        )
    return [said]


def _families(result: Result, width: int) -> list[str]:
    rows = [("outcome", "where", "alone", "Holm", "Benjamini–Hochberg")]
    rows += [
        (clean(f.outcome), clean(f.where), p_text(f.p_value), p_text(f.holm), p_text(f.benjamini_hochberg))
        for f in result.families
        if not any(one.has(f.where) for one in result.comparisons)
    ]
    return [
        *wrapped_lines(
            "Several outcomes were asked about; p-values of the robust answer, alone and held to the family:",
            width,
        ),
        *table_lines(rows),
    ]
