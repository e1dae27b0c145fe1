"""What the figures of a release show, as numbers that have passed the guard."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np

from estimation.effect import Effect
from study.guard.decisions import Decision
from study.guard.pictures import SafeBins, safe_bins
from study.guard.profile import rounded
from study.guard.rows import RowSet
from study.literal import clean
from study.release.asked import Asked, headline
from study.release.material import EffectPicture, Picture, ScorePicture, SitesPicture, SweepPicture, Table
from study.wording import percent

_BINS = 16  # a side, before any are merged
_BARS = 16  # a side


def pictures_of(asked: Asked, sweeps: dict[str, Table]) -> dict[str, tuple[Picture, ...]]:
    """The pictures of each headline outcome, and under the empty name that of the score."""
    found: dict[str, tuple[Picture, ...]] = {}
    for effect in asked.effects:
        if headline(effect):
            found[effect.outcome] = (effect_picture(effect, asked), *_sweep(effect, sweeps[effect.outcome]))
    for comparison in asked.result.comparisons:
        sites = _sites(asked, comparison.outcome, 100.0 if comparison.binary else 1.0)
        if sites is not None:
            found[comparison.outcome] = (*found.get(comparison.outcome, ()), sites)
    first = next((effect for effect in asked.effects if headline(effect)), None)
    if first is not None:
        found[""] = (_score(asked, first),)
    return found


def effect_picture(effect: Effect, asked: Asked) -> EffectPicture:
    """Merged bins and the local fits."""
    bench, profile = asked.bench, asked.decisions.profile
    line = bench.line(effect.outcome)
    reach = min(1.5 * max(effect.bandwidths.below, effect.bandwidths.above), line.sample.widest)
    reach = profile.number(reach)
    sides = {
        name: safe_bins(side, reach=reach, bins=_BINS, binary=effect.binary, profile=profile)
        for name, side in line.sample.sides
    }
    for name, bins in sides.items():
        for centre, mean, count in zip(bins.centre, bins.mean, bins.count):
            asked.decisions.note(
                Decision(
                    what=f"{clean(effect.outcome)}: mean of the bin {name} around {centre:g} from the line",
                    released=f"{mean:g}",
                    rows=f"{count:,}",
                    did="rounded",
                    why=f"{profile.name}: bins merge until each holds enough rows",
                )
            )
    curve = rounded(bench.curve(effect.outcome, effect.bandwidths, 40), profile.digits)
    scale = 100.0 if effect.binary else 1.0
    score = clean(asked.result.study.columns.score or "score")
    if effect.kind == "boundary":
        across = "metres from the border, treated side to the right"
    else:
        across = score if effect.cutoff is not None else f"{score} less its cutoff"

    def scaled(side: SafeBins) -> SafeBins:
        return replace(side, mean=scale * side.mean)

    return EffectPicture(
        name=f"effect-{effect.outcome}",
        title=f"{clean(effect.outcome)} around the line",
        across=across,
        up=f"{clean(effect.outcome)}{', %' if effect.binary else ''}",
        cutoff=effect.cutoff or 0.0,
        below=scaled(sides["below"]),
        above=scaled(sides["above"]),
        curve=replace(
            curve,
            below=replace(
                curve.below, **{k: scale * getattr(curve.below, k) for k in ("fit", "low", "high")}
            ),
            above=replace(
                curve.above, **{k: scale * getattr(curve.above, k) for k in ("fit", "low", "high")}
            ),
        ),
        percent=effect.binary,
    )


def _sweep(effect: Effect, table: Table) -> tuple[SweepPicture, ...]:
    """Drawn from the table's own cells, so that the picture holds nothing that the table does not."""
    rows = [[float(text) if text != "no end" else np.nan for text in row] for row in table.rows]
    if len(rows) < 3:
        return ()
    width, estimate, low, high = (tuple(column) for column in zip(*rows))
    unit = ", percentage points" if effect.binary else ""
    return (
        SweepPicture(
            name=f"widths-{effect.outcome}",
            title=f"{clean(effect.outcome)}: the effect by bandwidth, with its {percent(effect.choices.level)} "
            f"{effect.choices.interval} interval",
            across="bandwidth",
            up=f"effect{unit}",
            width=width,
            estimate=estimate,
            low=low,
            high=high,
            chosen=max(effect.bandwidths.below, effect.bandwidths.above),
        ),
    )


def _sites(asked: Asked, outcome: str, scale: float) -> SitesPicture | None:
    profile = asked.decisions.profile
    mine = [e for e in asked.effects if e.outcome == outcome]
    order = [row.name for c in asked.result.comparisons if c.outcome == outcome for row in c.rows]
    sites = sorted((e for e in mine if not headline(e)), key=lambda e: order.index(e.where))
    if not sites:
        return None

    def numbers(effect: Effect) -> tuple[float, float, float]:
        robust = effect.reading.robust
        low, mid, high = (profile.number(scale * v) for v in (robust.low, robust.estimate, robust.high))
        return mid, low, high

    pooled = next((e for e in mine if headline(e)), None)
    unit = ", percentage points" if scale != 1.0 else ""
    return SitesPicture(
        name=f"sites-{outcome}",
        title=f"{clean(outcome)}: bias-corrected effects with their robust intervals",
        across=f"effect{unit}",
        names=tuple(clean(e.where) for e in sites),
        numbers=tuple(numbers(e) for e in sites),
        pooled=None if pooled is None else numbers(pooled),
    )


def _score(asked: Asked, effect: Effect) -> ScorePicture:
    """Rows by score near the line; every bar is asked of the guard like any other count."""
    decisions, profile = asked.decisions, asked.decisions.profile
    reach = profile.number(2.0 * max(effect.bandwidths.below, effect.bandwidths.above))
    edges = [profile.number(float(v)) for v in np.linspace(0.0, reach, _BARS + 1)]
    keys = []
    for side in ("below", "above"):
        for low, high in itertools.pairwise(edges):
            key = f"bar|{side}|{low}"
            rows = RowSet(side=side, low=low, high=high)
            decisions.ask_count(key, f"rows {side} from {low:g} to {high:g} from the line", rows)
            keys.append((key, side, low, high, rows))
    decisions.decide()
    bars, hidden = [], []
    for key, side, low, high, rows in keys:
        decisions.count_text(key)
        start, end = (low, high) if side == "above" else (-high, -low)
        if decisions.shows(key):
            bars.append((start, end, profile.rounded_count(decisions.size(rows))))
        else:
            hidden.append((start, end))
    score = clean(asked.result.study.columns.score or "score")
    border = effect.kind == "boundary"
    return ScorePicture(
        name="score",
        title="Rows by distance from the border" if border else "Rows by score around the line",
        across="metres from the border, treated side to the right"
        if border
        else score
        if effect.cutoff is not None
        else f"{score} less its cutoff",
        bars=tuple(sorted(bars)),
        hidden=tuple(sorted(hidden)),
        cutoff=effect.cutoff or 0.0,
    )
