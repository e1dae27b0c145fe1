"""The picture of an effect: means of the outcome against the score, the fit on each side, and the gap at the line."""

from __future__ import annotations

import math
from typing import Protocol

import numpy as np
import numpy.typing as npt

from study.literal import clean
from tui.canvas import Canvas, narrow
from tui.look import Ink
from tui.plot_area import PlotArea, Scale, even_scale, gutter
from tui.widgets.plot import PlotWidget

Vector = npt.NDArray[np.float64]


class MeansOfSide(Protocol):
    """Means of the outcome in equal stretches of one side."""

    @property
    def centre(self) -> Vector:
        """Positions (score minus cutoff), shape (k,)."""

    @property
    def mean(self) -> Vector:
        """Mean outcome, NaN where nobody is, shape (k,)."""

    @property
    def count(self) -> npt.NDArray[np.int64] | Vector:
        """How many, shape (k,)."""


class FitOfSide(Protocol):
    """The local fit of one side with its pointwise band."""

    @property
    def x(self) -> Vector:
        """Positions, ascending, shape (m,)."""

    @property
    def fit(self) -> Vector:
        """The fit, shape (m,)."""

    @property
    def low(self) -> Vector:
        """Lower edge of the band."""

    @property
    def high(self) -> Vector:
        """Upper edge of the band."""


class Means(Protocol):
    """Binned means of both sides."""

    @property
    def below(self) -> MeansOfSide:
        """Scores below the cutoff."""

    @property
    def above(self) -> MeansOfSide:
        """Scores at or above it."""


class Fits(Protocol):
    """Fits of both sides."""

    @property
    def below(self) -> FitOfSide:
        """Scores below the cutoff."""

    @property
    def above(self) -> FitOfSide:
        """Scores at or above it."""


BELOW, ABOVE = "○", "■"


class EffectChart(PlotWidget):
    """Binned means with the fit and its band on both sides of the cutoff.

    The stretch of the axis inside the bandwidth is drawn heavy, and means outside it are drawn faint.
    """

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._bins: Means | None = None
        self._curve: Fits | None = None
        self._reach = 1.0
        self._bandwidth: tuple[float, float] | None = None
        self._cutoff = 0.0
        self._label = self._score = ""
        self._heights: tuple[float, float] | None = None

    @property
    def has_data(self) -> bool:
        """Whether there is something to draw."""
        return self._bins is not None

    def set_data(
        self,
        *,
        bins: Means,
        curve: Fits | None,
        reach: float,
        bandwidth: tuple[float, float] | None = None,
        cutoff: float = 0.0,
        label: str = "",
        score: str = "",
    ) -> None:
        """Show these means and fits.

        Parameters
        ----------
        bins : Means
            Binned means in positions relative to the cutoff.
        curve : Fits, optional
            None while the outcome is masked or could not be fitted.
        reach : float
            The x axis goes from -reach to reach.
        bandwidth : (float, float), optional
            Below and above: the window whose ends are marked.
        cutoff : float
            Added to positions where they are labelled; 0 leaves the normalised score.
        label, score : str
            Names of the outcome and the score.
        """
        label, score = narrow(clean(label)), narrow(clean(score))
        if (label, score, reach, cutoff) != (self._label, self._score, self._reach, self._cutoff):
            self._heights = None
        self._bins, self._curve, self._reach = bins, curve, float(reach)
        self._bandwidth, self._cutoff, self._label, self._score = bandwidth, cutoff, label, score
        self._heights = self._settle_heights()
        self._message = ""
        self.repaint()

    def _settle_heights(self) -> tuple[float, float]:
        """Choose the y range; it stays as it is while it still fits, so that scrubbing does not shake the picture."""
        low, high = _extent(self._bins, self._curve, self._reach)
        if self._heights is not None:
            bottom, top = self._heights
            if bottom <= low and high <= top and (high - low) > 0.5 * (top - bottom):
                return self._heights
        return low, high

    def draw(self, canvas: Canvas) -> None:
        """Draw band, fit, means, cutoff and axes, in that order."""
        assert self._bins is not None and self._heights is not None
        height = canvas.height - 3
        y = even_scale(*self._heights, height)
        left = gutter(y, height)
        width = canvas.width - left
        width -= 1 - width % 2  # an odd width has the cutoff in the middle of a cell
        x = Scale(low=-self._reach, high=self._reach)
        area = PlotArea(canvas, left=left, top=1, width=width, height=height, x=x, y=y)
        self._draw_fits(area)
        self._draw_means(area)
        area.vertical_rule(0.0)
        area.y_labels()
        window = None if self._bandwidth is None else (-self._bandwidth[0], self._bandwidth[1])
        area.x_axis(heavy=window, labels_shift=self._cutoff, name=self._score)
        self._draw_title(canvas, left + width)

    def _draw_fits(self, area: PlotArea) -> None:
        if self._curve is None:
            return
        sides = (self._curve.below, self._curve.above)
        for side in sides:
            area.band(side.x, side.low, side.high)
        for side in sides:
            area.curve(side.x, side.fit, Ink.ACCENT)

    def _draw_means(self, area: PlotArea) -> None:
        assert self._bins is not None
        widths = self._bandwidth or (math.inf, math.inf)
        for side, mark, width in ((self._bins.below, BELOW, widths[0]), (self._bins.above, ABOVE, widths[1])):
            centre = np.asarray(side.centre, dtype=np.float64)
            inks = np.where(np.abs(centre) <= width, Ink.TEXT, Ink.FAINT).astype(np.uint8)
            area.points(centre, side.mean, mark, inks)

    def _draw_title(self, canvas: Canvas, end: int) -> None:
        legend = f"{BELOW} below  {ABOVE} above"
        start = end - len(legend)
        label = self._label
        if len(label) > start - 2:
            label = label[: max(0, start - 3)] + "…"
        canvas.text(0, 0, label, Ink.STRONG)
        canvas.text(start, 0, legend, Ink.MUTED)


def _extent(bins: Means | None, curve: Fits | None, reach: float) -> tuple[float, float]:
    """Return the lowest and highest of the means and fits; the band may run out of the picture."""
    found: list[Vector] = []
    if bins is not None:
        for means in (bins.below, bins.above):
            inside = np.abs(means.centre) <= reach
            found.append(np.asarray(means.mean, dtype=np.float64)[inside])
    if curve is not None:
        found += [np.asarray(fits.fit, dtype=np.float64) for fits in (curve.below, curve.above)]
    numbers = np.concatenate(found) if found else np.empty(0)
    numbers = numbers[np.isfinite(numbers)]
    return (float(numbers.min()), float(numbers.max())) if numbers.size else (0.0, 1.0)
