"""The Effect screen's questions to the workbench, and its pictures. Loaded once the data are there."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from time import perf_counter
from typing import Final

from estimation.arrays import Vector
from estimation.effect import Effect
from estimation.line import Bins, BinSide, CurveSide, Sweep, leading_interval
from estimation.line_fit import Bandwidths
from study.analysis import Workbench
from study.document import edit
from tui.widgets.chart import EffectChart
from tui.widgets.sweep import SweepChart

_SWEEP_POINTS: Final = 80
_SLOW_SWEEP_POINTS: Final = 30
_AT_ONCE_S: Final = 0.012  # a reading that takes longer than this waits for the key to rest


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """A question: which outcome at which width (None for the study's own), asked of which workbench."""

    workbench: Workbench
    outcome: str
    width: float | None
    site: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """An effect that was looked at."""

    outcome: str
    width: float | None
    effect: Effect
    site: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """One outcome's line, ready for the arrow keys.

    Attributes
    ----------
    own
        The study's own bandwidths.
    widest, narrowest
        Between what the arrow keys move, in units of the score.
    grid
        Widths at which the sweep looks.
    effect
        The full effect where the person stands; a reading at another width is put into its place.
    at_once
        Whether a reading is cheap enough for the key handler.
    """

    workbench: Workbench
    outcome: str
    own: Bandwidths
    widest: float
    narrowest: float
    grid: Vector
    effect: Effect
    at_once: bool
    width: float | None
    site: str | None = None
    _means: dict[tuple[float, int], Bins] = field(default_factory=dict, repr=False, compare=False)

    def means(self, reach: float, count: int) -> Bins:
        """Binned means, kept: a width that moves inside the picture does not change them."""
        if (reach, count) not in self._means:
            self._means[reach, count] = self.workbench.bins(self.outcome, reach, count, self.site)
        return self._means[reach, count]

    @property
    def found(self) -> Found:
        """The effect, as something that was looked at."""
        return Found(outcome=self.outcome, width=self.width, effect=self.effect, site=self.site)

    def bandwidths_at(self, width: float | None) -> Bandwidths:
        """The bandwidths of a width; None is the study's own."""
        if width is None:
            return self.own
        return self.workbench.line(self.outcome, self.site).at(width)

    def reading_at(self, width: float | None) -> Effect:
        """The effect with this width's reading; randomisation and notes stay those of the full effect.

        Raises
        ------
        CannotEstimate
            When a side can't carry the fit.
        """
        at = self.bandwidths_at(width)
        return replace(
            self.effect, reading=self.workbench.reading(self.outcome, at, self.site), bandwidths=at
        )


def prepare(asked: Asked, should_stop: Callable[[], bool]) -> Prepared:
    """Sort, sum, choose: what may take a while with many rows, once for each outcome and kernel.

    Raises
    ------
    CannotEstimate
        When the outcome has no estimate at the study's own width.
    """
    bench, outcome, site = asked.workbench, asked.outcome, asked.site
    own = bench.chosen(outcome, site)
    effect = find(asked).effect
    started = perf_counter()
    bench.reading(outcome, effect.bandwidths, site)
    took = perf_counter() - started
    # A clock under load must not decide what a picture looks like: what is quick by its kind is taken for quick.
    at_once = bench.quick(outcome, site) or took < _AT_ONCE_S
    grid = bench.sweep_grid(outcome, _SWEEP_POINTS if at_once else _SLOW_SWEEP_POINTS, site)
    return Prepared(
        workbench=bench,
        outcome=outcome,
        own=own,
        widest=bench.widest(outcome, site),
        narrowest=min(float(grid[0]), 0.2 * max(own.below, own.above)),
        grid=grid,
        effect=effect,
        at_once=at_once,
        width=asked.width,
        site=site,
    )


def sweep(prepared: Prepared, should_stop: Callable[[], bool]) -> Sweep:
    """The effect against the width."""
    return prepared.workbench.sweep(prepared.outcome, prepared.grid, should_stop, prepared.site)


def find(asked: Asked) -> Found:
    """The full effect at a width.

    Raises
    ------
    CannotEstimate
        When a side can't carry the fit.
    """
    effect = asked.workbench.effect(asked.outcome, asked.width, asked.site)
    return Found(outcome=asked.outcome, width=asked.width, effect=effect, site=asked.site)


def best_width(asked: Asked) -> float:
    """The MSE-optimal width of a study that declares another one."""
    study = edit(asked.workbench.study, {"estimate.bandwidth": "mse"})
    return float(f"{asked.workbench.with_study(study).chosen(asked.outcome, asked.site).below:.4g}")


def draw_chart(chart: EffectChart, prepared: Prepared, at: Bandwidths, *, reach: float, score: str) -> None:
    """Draw means and fits around the line; an outcome of nought and one is drawn in per cent, as its words are."""
    bench, outcome = prepared.workbench, prepared.outcome
    count = max(8, min(40, (chart.size.width or 80) // 4))
    bins = prepared.means(reach, count)
    curve = bench.curve(outcome, at, site=prepared.site)
    curve = replace(curve, below=_ascending(curve.below))
    binary = prepared.effect.binary
    if binary:
        bins = replace(bins, below=_bins_in_per_cent(bins.below), above=_bins_in_per_cent(bins.above))
        curve = replace(curve, below=_curve_in_per_cent(curve.below), above=_curve_in_per_cent(curve.above))
    chart.set_data(
        bins=bins,
        curve=curve,
        reach=reach,
        bandwidth=(at.below, at.above),
        cutoff=prepared.effect.cutoff or 0.0,
        label=f"{outcome}, % with it" if binary else outcome,
        score=score if prepared.effect.cutoff is not None else f"{score} less its cutoff",
    )


def _ascending(side: CurveSide) -> CurveSide:
    """The curve from left to right, as it is drawn; the lower side is computed from the line outward."""
    return replace(side, x=side.x[::-1], fit=side.fit[::-1], low=side.low[::-1], high=side.high[::-1])


def _bins_in_per_cent(side: BinSide) -> BinSide:
    return replace(side, mean=100.0 * side.mean)


def _curve_in_per_cent(side: CurveSide) -> CurveSide:
    return replace(side, fit=100.0 * side.fit, low=100.0 * side.low, high=100.0 * side.high)


def draw_sweep(chart: SweepChart, prepared: Prepared, swept: Sweep) -> None:
    """Draw the effect against the width, with a mark where the study's own width is."""
    scale = 100.0 if prepared.effect.binary else 1.0
    drawn = replace(swept, estimate=scale * swept.estimate, low=scale * swept.low, high=scale * swept.high)
    choices = prepared.workbench.study.estimate
    chart.set_data(sweep=drawn, label="effect by bandwidth", level=choices.level)
    chart.set_marks([(max(prepared.own.below, prepared.own.above), "study's own")])


def draw_here(chart: SweepChart, effect: Effect) -> None:
    """Move the mark in the sweep to where we stand."""
    scale = 100.0 if effect.binary else 1.0
    low, high = leading_interval(effect.reading, effect.choices.interval)
    chart.set_here(
        bandwidth=max(effect.bandwidths.below, effect.bandwidths.above),
        estimate=scale * effect.reading.estimate,
        low=scale * low,
        high=scale * high,
    )
