"""The tables of a release."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from decimal import Decimal

import numpy as np

from estimation.effect import Effect
from study.comparison import Comparison
from study.guard.decisions import Decisions
from study.guard.pictures import share_text
from study.guard.profile import Profile
from study.guard.rows import RowSet
from study.literal import clean
from study.release.asked import Asked, headline, inside, key_of
from study.release.material import Table
from study.wording import p_text

WITHHELD = "not shown"


def cell(value: float, profile: Profile) -> str:
    """A number as a table shows it: the profile's digits, no exponent, an ASCII minus."""
    if math.isnan(value):
        return ""
    if math.isinf(value):
        return "no end"
    return f"{Decimal(repr(profile.number(value))).normalize():f}"


def rows_table(asked: Asked) -> Table:
    """Rows read, used, left out, and outcomes that are missing."""
    decisions, a = asked.decisions, asked.result.assigned
    rows = [
        ("rows read", decisions.count_text("read")),
        ("rows used", decisions.count_text("used")),
        *((f"left out: {reason}", decisions.count_text(f"dropped|{reason}")) for reason in a.dropped),
        *(
            (f"used, but without {clean(name)}", decisions.count_text(f"missing|{name}"))
            for name in a.outcomes
        ),
    ]
    return Table(name="rows", title="Rows", head=("what", "rows"), rows=tuple(rows), numeric=(1,))


def effects_table(asked: Asked) -> Table:
    """Every effect that is shown, with what it rests on."""
    decisions, profile = asked.decisions, asked.decisions.profile
    rows: list[tuple[str, ...]] = []
    for effect in in_order(asked.effects, asked):
        scale = 100.0 if effect.binary else 1.0
        low, high = effect.leading
        key = key_of(effect)
        estimate = cell(scale * effect.reading.estimate, profile)
        decisions.note_estimate(key, estimate)
        rows.append(
            (
                clean(effect.outcome),
                clean(effect.where),
                estimate,
                cell(scale * effect.reading.std_error, profile),
                cell(scale * low, profile),
                cell(scale * high, profile),
                effect.lead,
                "percentage points" if effect.binary else "units",
                cell(effect.bandwidths.below, profile),
                cell(effect.bandwidths.above, profile),
                decisions.count_text(f"{key}|below"),
                decisions.count_text(f"{key}|above"),
            )
        )
    for effect in in_order(asked.withheld, asked):
        if not any(
            d.what.startswith(f"{clean(effect.outcome)}, {clean(effect.where)}: effect")
            for d in decisions.made
        ):
            decisions.note_estimate(key_of(effect), "")
        rows.append((clean(effect.outcome), clean(effect.where), WITHHELD, *[""] * 9))
    return Table(
        name="effects",
        title="Effects at the line",
        head=(
            "outcome", "where", "estimate", "std error", "low", "high", "interval", "unit", "width below",
            "width above", "rows below", "rows above",
        ),
        rows=tuple(rows),
        numeric=(2, 3, 4, 5, 8, 9, 10, 11),
        note="Positive where the treated side is higher. The interval is the one that leads for this effect.",
    )  # fmt: skip


def in_order(effects: Sequence[Effect], asked: Asked) -> list[Effect]:
    """By outcome, the headline before its sites: the order in which the guard was asked tells their sizes."""
    outcomes, sites = asked.bench.outcomes, asked.bench.sites
    return sorted(
        effects,
        key=lambda e: (
            outcomes.index(e.outcome),
            not headline(e),
            0 if headline(e) else sites.index(e.where),
        ),
    )


def site_tables(asked: Asked) -> tuple[Table, ...]:
    """One table an outcome: its sites side by side."""
    return tuple(_site_table(asked, comparison) for comparison in asked.result.comparisons)


def _site_table(asked: Asked, comparison: Comparison) -> Table:
    decisions, profile = asked.decisions, asked.decisions.profile
    scale = 100.0 if comparison.binary else 1.0
    shown = {e.where: e for e in asked.effects if e.outcome == comparison.outcome and not headline(e)}
    rows = []
    for row in comparison.rows:
        effect = shown.get(row.name)
        known = row.reading is not None and effect is not None
        robust = row.reading.robust if row.reading is not None and known else None
        counts = [decisions.count_text(f"site|{row.name}|{side}") for side in ("below", "above")]
        whole = all(decisions.shows(f"site|{row.name}|{side}") for side in ("below", "above"))
        rows.append(
            (
                clean(row.name),
                cell(row.cutoff, profile) if comparison.kind != "segment" else "",
                *(
                    (WITHHELD if row.reading is not None else "no estimate", "", "")
                    if robust is None
                    else tuple(cell(scale * v, profile) for v in (robust.estimate, robust.low, robust.high))
                ),
                # The share of units at the line would give a hidden count away.
                "" if row.share is None or not whole or not known else cell(100.0 * row.share, profile),
                *counts,
            )
        )
    return Table(
        name=f"sites-{comparison.outcome}",
        title=f"{clean(comparison.outcome)}: {comparison.kind}s side by side",
        head=(comparison.kind, "cutoff", "estimate", "low", "high", "share at the line, %", "rows below", "rows above"),
        rows=tuple(rows),
        numeric=(1, 2, 3, 4, 5, 6, 7),
        note="Bias-corrected estimates with their robust intervals"
        + (", in percentage points." if comparison.binary else "."),
    )  # fmt: skip


def sweep_table(asked: Asked, effect: Effect) -> Table:
    """The effect at the widths that are shown; no counts, which would give the steps away."""
    profile = asked.decisions.profile
    sweep = asked.bench.sweep(effect.outcome, np.array(asked.widths[effect.outcome]))
    scale = 100.0 if effect.binary else 1.0
    rows = []
    for width, estimate, low, high in zip(sweep.bandwidth, sweep.estimate, sweep.low, sweep.high):
        if math.isfinite(estimate):
            rows.append(
                (
                    cell(float(width), profile),
                    *(cell(scale * float(v), profile) for v in (estimate, low, high)),
                )
            )
            key = f"{effect.outcome}|sweep|{float(width)}"
            if float(width) != max(effect.bandwidths.below, effect.bandwidths.above):
                asked.decisions.note_estimate(key, rows[-1][1])
    return Table(
        name=f"widths-{effect.outcome}",
        title=f"{clean(effect.outcome)}: the effect by bandwidth",
        head=("bandwidth", "estimate", "low", "high"),
        rows=tuple(rows),
        numeric=(0, 1, 2, 3),
        note="Widths step by enough rows on each side that no few people can be told from their differences.",
    )


def families_table(asked: Asked) -> Table | None:
    """P-values held to the number of outcomes; None for one outcome."""
    shown = {key_of(effect) for effect in asked.effects}
    families = [f for f in asked.result.families if f"{f.outcome}|{f.where}" in shown]
    if not families:
        return None
    return Table(
        name="outcomes",
        title="Several outcomes were asked about",
        head=("outcome", "where", "alone", "Holm", "Benjamini–Hochberg"),
        rows=tuple(
            (
                clean(f.outcome),
                clean(f.where),
                *(p_text(p) for p in (f.p_value, f.holm, f.benjamini_hochberg)),
            )
            for f in families
        ),
        note="P-values of the robust answer, alone and held to the family.",
    )


def take_up_table(asked: Asked) -> Table | None:
    """Take-up at the line and on each side; None without take-up."""
    decisions, profile = asked.decisions, asked.decisions.profile
    if asked.result.assigned.take_up is None:
        return None
    rows: list[tuple[str, str]] = []
    for effect in in_order(asked.effects, asked):
        found = effect.reading.take_up
        if found is not None and effect.outcome == asked.bench.outcomes[0]:
            rows += _first_stage(effect, decisions)
    for side, said in (("below", "below the line"), ("above", "above the line")):
        took, without = (decisions.size(RowSet(side=side, took=t)) for t in (True, False))
        rows.append((f"share of all rows {said} that took it", share_text(took, took + without, profile)))
    for side in ("below", "above"):
        for taken, said in ((True, "took it"), (False, "did without")):
            rows.append((f"rows {side} that {said}", decisions.count_text(f"take-up|{side}|{taken}")))
    return Table(
        name="take-up", title="Take-up", head=("what", "value"), rows=tuple(rows), numeric=(1,),
        note="A share of exactly nought or all of a group is never shown.",
    )  # fmt: skip


def _first_stage(effect: Effect, decisions: Decisions) -> list[tuple[str, str]]:
    """The jump in take-up; its levels only where neither side is unanimous."""
    found, profile = effect.reading.take_up, decisions.profile
    assert found is not None
    near = {side: inside(effect, side) for side in ("below", "above")}
    took = {side: decisions.size(_taking(rows, True)) for side, rows in near.items()}
    of = {side: took[side] + decisions.size(_taking(rows, False)) for side, rows in near.items()}
    unanimous = [side for side in near if took[side] in (0, of[side])]
    where = clean(effect.where)
    rows = [(f"{where}: F of the jump", cell(found.first_stage_f, profile))]
    if len(unanimous) == 2:
        return [(f"{where}: jump", WITHHELD)]
    jump = " to ".join(cell(100.0 * v, profile) for v in (found.low, found.high))
    rows.insert(0, (f"{where}: jump, percentage points", f"{cell(100.0 * found.jump, profile)} ({jump})"))
    for side, level in (("below", found.levels_below), ("above", found.levels_above)):
        rows.append((f"{where}: level {side}, %", WITHHELD if unanimous else cell(100.0 * level, profile)))
    return rows


def _taking(rows: RowSet, took: bool) -> RowSet:
    return replace(rows, took=took)


def numbers_of(tables: Sequence[Table]) -> dict[str, str]:
    """Every cell by its table, the text before it in its row, and its column."""
    found: dict[str, str] = {}
    for table in tables:
        labels = [j for j in range(len(table.head)) if j not in table.numeric][:2] or [0]
        for row in table.rows:
            where = ", ".join(row[j] for j in labels)
            for j, head in enumerate(table.head):
                if j not in labels:
                    found[f"{table.name}: {where}: {head}"] = row[j]
    return found
