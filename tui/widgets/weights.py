"""How much a unit counts at each score: the weights of the estimate on both sides, with their signs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from study.literal import clean
from tui.canvas import Canvas, narrow
from tui.look import Ink
from tui.plot_area import PlotArea, Scale, even_scale, gutter
from tui.widgets.plot import PlotWidget

Vector = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class WeightCurve:
    """One side, from left to right.

    Attributes
    ----------
    x
        Score less its cutoff, ascending, shape (m,).
    plain, corrected
        How many average units of its side a unit there counts as, signed as it enters the effect, shape (m,).
    width
        The side's bandwidth.
    """

    x: Vector
    plain: Vector
    corrected: Vector
    width: float


class WeightsChart(PlotWidget):
    """Two curves a side around the line, zero drawn between those who count for and those who count against."""

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._sides: tuple[WeightCurve, WeightCurve] | None = None
        self._cutoff = 0.0
        self._score = ""

    @property
    def has_data(self) -> bool:
        """Whether there is something to draw."""
        return self._sides is not None

    def set_data(self, *, below: WeightCurve, above: WeightCurve, cutoff: float, score: str) -> None:
        """Show these weights; `cutoff` is added where positions are labelled."""
        self._sides, self._cutoff, self._score = (below, above), cutoff, narrow(clean(score))
        self._message = ""
        self.repaint()

    def draw(self, canvas: Canvas) -> None:
        """Draw zero, the line, both curves and the axes."""
        assert self._sides is not None
        height = canvas.height - 3
        numbers = np.concatenate([part for side in self._sides for part in (side.plain, side.corrected)])
        y = even_scale(min(0.0, float(numbers.min())), max(0.0, float(numbers.max())), height)
        left = gutter(y, height)
        width = canvas.width - left
        width -= 1 - width % 2  # an odd width has the cutoff in the middle of a cell
        reach = 1.02 * max(float(np.abs(side.x).max()) for side in self._sides)
        x = Scale(low=-reach, high=reach)
        area = PlotArea(canvas, left=left, top=1, width=width, height=height, x=x, y=y)
        for side in self._sides:
            area.curve(side.x, side.corrected, Ink.EDGE, dashed=True)
        for side in self._sides:
            area.curve(side.x, side.plain, Ink.ACCENT)
        area.vertical_rule(0.0)
        area.horizontal_rule(0.0, ink=Ink.MUTED)
        area.y_labels()
        below, above = self._sides
        area.x_axis(heavy=(-below.width, above.width), labels_shift=self._cutoff, name=self._score)
        legend = "━ estimate  ╌ bias-corrected"
        canvas.text(0, 0, "one unit counts as", Ink.STRONG)
        canvas.text(max(20, left + width - len(legend)), 0, legend, Ink.MUTED)
