"""What a release asks of the guard: every count and every estimate, in the order in which they matter."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from estimation.effect import Effect
from study.analysis import Workbench
from study.guard.decisions import Decisions
from study.guard.rows import CLOSED_KERNELS, RowSet
from study.literal import clean
from study.result import Result

_SITE_KINDS = ("site", "step", "segment")
_SWEEP = 24  # widths asked for; those that step by too few rows are left out


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """A result with the guard's answers.

    Attributes
    ----------
    effects
        Effects that are shown, headline ones first.
    withheld
        Effects that are not.
    widths
        Bandwidths of each headline outcome's sweep that are shown.
    """

    result: Result
    bench: Workbench
    decisions: Decisions
    effects: tuple[Effect, ...]
    withheld: tuple[Effect, ...]
    widths: dict[str, tuple[float, ...]]


def headline(effect: Effect) -> bool:
    """Whether an effect is one of its own, not one site of several."""
    return effect.kind not in _SITE_KINDS


def key_of(effect: Effect) -> str:
    """What an effect is called among the guard's keys."""
    return f"{effect.outcome}|{effect.where}"


def site_of(effect: Effect) -> str | None:
    """The site that an effect is about, None for the headline."""
    return None if headline(effect) else effect.where


def inside(effect: Effect, side: str, high: float | None = None) -> RowSet:
    """Rows of one side that an effect's local fit rests on, at its own bandwidth unless another is given."""
    own = effect.bandwidths.below if side == "below" else effect.bandwidths.above
    return RowSet(
        site=site_of(effect),
        side=side,
        low=effect.choices.donut,
        high=own if high is None else high,
        closed=effect.choices.kernel in CLOSED_KERNELS,
        known=effect.outcome,
        complete=effect.choices.adjust,
    )


def window(effect: Effect, side: str) -> RowSet:
    """Rows of one side in the randomisation window."""
    assert effect.randomisation is not None
    end = effect.randomisation.window[0 if side == "below" else 1]
    return RowSet(
        site=site_of(effect),
        side=side,
        low=effect.choices.donut,
        high=abs(end),
        closed=True,
        known=effect.outcome,
    )


def ask(result: Result, bench: Workbench, decisions: Decisions) -> Asked:
    """Ask for everything, and settle what is shown."""
    effects = sorted(
        result.effects,
        key=lambda e: (not headline(e), -(e.reading.count_below + e.reading.count_above)),
    )
    order = {name: i for i, name in enumerate(bench.outcomes)}
    effects.sort(key=lambda e: (not headline(e), order[e.outcome] if headline(e) else 0))
    _ask_rows(result, decisions)
    for effect in effects:
        _ask_effect(effect, decisions)
    _ask_rest(result, bench, decisions)
    decisions.decide()
    shown = tuple(e for e in effects if decisions.shows(key_of(e)) and _degrees(e, decisions))
    shown = _second_site(effects, shown, decisions)
    widths = {e.outcome: _ask_sweep(e, bench, decisions) for e in shown if headline(e)}
    return Asked(
        result=result,
        bench=bench,
        decisions=decisions,
        effects=shown,
        withheld=tuple(e for e in effects if e not in shown),
        widths=widths,
    )


def _ask_rows(result: Result, decisions: Decisions) -> None:
    a = result.assigned
    decisions.ask_count("read", "rows read", RowSet(used=False))
    decisions.ask_count("used", "rows used", RowSet())
    for reason in a.dropped:
        decisions.ask_count(
            f"dropped|{reason}", f"rows left out: {reason}", RowSet(used=False, reason=reason)
        )
    for name in a.outcomes:
        decisions.ask_count(f"missing|{name}", f"rows without {clean(name)}", RowSet(missing=name))


def _ask_effect(effect: Effect, decisions: Decisions) -> None:
    key, name = key_of(effect), f"{clean(effect.outcome)}, {clean(effect.where)}"
    below, above = inside(effect, "below"), inside(effect, "above")
    decisions.ask_count(f"{key}|below", f"{name}: rows below", below)
    decisions.ask_count(f"{key}|above", f"{name}: rows above", above)
    decisions.ask_estimate(key, f"{name}: effect", effect.outcome, below, above)
    if effect.randomisation is not None:
        sides = window(effect, "below"), window(effect, "above")
        decisions.ask_estimate(f"{key}|window", f"{name}: effect in the window", effect.outcome, *sides)
        for side, rows in zip(("below", "above"), sides):
            decisions.ask_count(f"{key}|window {side}", f"{name}: rows in the window {side}", rows)


def _ask_rest(result: Result, bench: Workbench, decisions: Decisions) -> None:
    a = result.assigned
    for site in bench.sites:
        for side in ("below", "above"):
            decisions.ask_count(
                f"site|{site}|{side}", f"{clean(site)}: rows {side}", RowSet(site=site, side=side)
            )
    if a.take_up is not None:
        for side in ("below", "above"):
            for took, said in ((True, "took it"), (False, "did without")):
                decisions.ask_count(
                    f"take-up|{side}|{took}", f"rows {side} that {said}", RowSet(side=side, took=took)
                )


def _degrees(effect: Effect, decisions: Decisions) -> bool:
    """Whether enough rows are left beyond the coefficients of each side's bias-corrected fit."""
    coefficients = effect.choices.order + 2
    left = min(effect.reading.count_below, effect.reading.count_above) - coefficients
    if left >= decisions.profile.degrees_of_freedom:
        return True
    decisions.hide(key_of(effect))
    decisions.note_estimate(
        key_of(effect), "", f"fewer than {decisions.profile.degrees_of_freedom} degrees of freedom on a side"
    )
    return False


def _second_site(
    effects: Sequence[Effect], shown: tuple[Effect, ...], decisions: Decisions
) -> tuple[Effect, ...]:
    """Beside a pooled effect one suppressed site could be worked out: the smallest of the others goes too."""
    for outcome in dict.fromkeys(effect.outcome for effect in effects):
        mine = [e for e in effects if e.outcome == outcome and not headline(e)]
        hidden = [e for e in mine if e not in shown]
        left = [e for e in mine if e in shown]
        pooled = any(e.outcome == outcome and headline(e) for e in shown)
        if pooled and len(hidden) == 1 and left:
            second = left[-1]  # they come largest first
            decisions.hide(key_of(second))
            decisions.note_estimate(
                key_of(second), "", "a suppressed site could be worked out beside the pooled effect"
            )
            shown = tuple(e for e in shown if e is not second)
    return shown


def _ask_sweep(effect: Effect, bench: Workbench, decisions: Decisions) -> tuple[float, ...]:
    """Widths from a half to twice the chosen one, nearest first, that step by enough rows a side."""
    middle = max(effect.bandwidths.below, effect.bandwidths.above)
    if effect.bandwidths.below != effect.bandwidths.above:
        return ()
    widest = bench.widest(effect.outcome)
    grid = [decisions.profile.number(float(w)) for w in middle * np.geomspace(0.4, 2.5, _SWEEP)]
    asked = sorted({w for w in grid if w <= widest}, key=lambda w: abs(np.log(w / middle)))
    for width in asked:
        decisions.ask_estimate(
            f"{effect.outcome}|sweep|{width}",
            f"{clean(effect.outcome)}: effect within {width:g}",
            effect.outcome,
            inside(effect, "below", width),
            inside(effect, "above", width),
        )
    decisions.decide()
    kept = [width for width in asked if decisions.shows(f"{effect.outcome}|sweep|{width}")]
    return tuple(sorted({*kept, middle}))
