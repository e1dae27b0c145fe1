"""The effect against the bandwidth: how the answer moves with how close is close."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from study.literal import clean
from study.wording import percent
from tui.canvas import Canvas, narrow
from tui.look import Ink
from tui.plot_area import PlotArea, Scale, even_scale, gutter
from tui.widgets.plot import PlotWidget

Vector = npt.NDArray[np.float64]


class EffectByWidth(Protocol):
    """Effects at many bandwidths with the ends of the chosen interval."""

    @property
    def bandwidth(self) -> Vector:
        """Ascending, positive, shape (k,)."""

    @property
    def estimate(self) -> Vector:
        """The effect, NaN where it cannot be had."""

    @property
    def low(self) -> Vector:
        """Lower end of the interval."""

    @property
    def high(self) -> Vector:
        """Upper end of the interval."""


@dataclass(frozen=True, slots=True)
class _Here:
    bandwidth: float
    estimate: float
    low: float
    high: float


HERE, MARKED = "▲", "△"


class SweepChart(PlotWidget):
    """The sweep with its band, the zero line, the place where we stand and the widths that rules would choose.

    The axis is logarithmic: a key press changes the width by a share, so every press moves the mark equally far, and the narrow
    widths, where the answer moves most, get room.
    """

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._sweep: EffectByWidth | None = None
        self._here: _Here | None = None
        self._marks: tuple[tuple[float, str], ...] = ()
        self._label = self._interval = ""
        self._still: tuple[Canvas, PlotArea] | None = None

    @property
    def has_data(self) -> bool:
        """Whether there is something to draw."""
        return self._sweep is not None and np.isfinite(np.asarray(self._sweep.estimate)).any().item()

    def set_data(self, *, sweep: EffectByWidth, label: str = "", level: float = 0.95) -> None:
        """Show this sweep.

        Parameters
        ----------
        sweep : EffectByWidth
            Effects at ascending bandwidths.
        label : str
            What the effect is on.
        level : float
            Level of the interval, for the legend.
        """
        self._sweep, self._label = sweep, narrow(clean(label))
        self._interval = f"{percent(level)} interval"
        self._still = None
        self._message = ""
        self.repaint()

    def set_here(self, *, bandwidth: float, estimate: float, low: float, high: float) -> None:
        """Move the mark to the bandwidth in force and its interval."""
        self._here = _Here(bandwidth, estimate, low, high)
        if self.has_data:
            self.repaint()

    def set_marks(self, marks: Sequence[tuple[float, str]]) -> None:
        """Mark bandwidths on the axis, each with a word for what chose it."""
        self._marks = tuple((float(width), narrow(clean(word))) for width, word in marks)
        self._still = None
        if self.has_data:
            self.repaint()

    def draw(self, canvas: Canvas) -> None:
        """Draw band, sweep, zero, the standing mark and the axes."""
        still, area = self._stand_still(canvas)
        canvas.put(still)
        self._draw_here(area.on(canvas))
        self._draw_title(canvas)

    def _stand_still(self, canvas: Canvas) -> tuple[Canvas, PlotArea]:
        """What a moving width leaves as it is: all but the mark, drawn once for each size and sweep."""
        assert self._sweep is not None
        if self._still is not None:
            kept = self._still[0]
            if (kept.width, kept.height, kept.ascii_only) == (canvas.width, canvas.height, canvas.ascii_only):
                return self._still
        canvas = Canvas(canvas.width, canvas.height, ascii_only=canvas.ascii_only)
        widths = np.asarray(self._sweep.bandwidth, dtype=np.float64)
        y = even_scale(*_heights(self._sweep), canvas.height - 3)
        left = gutter(y, canvas.height - 3)
        x = Scale(
            low=float(widths[0]),
            high=float(widths[-1]) if widths[-1] > widths[0] else 2 * float(widths[0]),
            log=True,
        )
        area = PlotArea(
            canvas, left=left, top=1, width=canvas.width - left, height=canvas.height - 3, x=x, y=y
        )
        area.band(widths, self._sweep.low, self._sweep.high)
        area.curve(widths, self._sweep.estimate, Ink.ACCENT)
        area.horizontal_rule(0.0, ink=Ink.MUTED)
        area.y_labels()
        area.x_axis(name="bandwidth")
        self._draw_marks(area)
        self._still = canvas, area
        return self._still

    def _draw_marks(self, area: PlotArea) -> None:
        row = area.top + area.height
        columns = area.columns([width for width, _ in self._marks])
        area.canvas.marks(columns, np.full(columns.shape, row), MARKED, Ink.TEXT)

    def _draw_here(self, area: PlotArea) -> None:
        here = self._here
        if here is None:
            return
        column = int(area.columns([here.bandwidth])[0])
        if column < 0:
            return
        ends = np.clip([here.high, here.low], area.y.low, area.y.high)
        if np.isfinite(ends).all():
            top, bottom = (int(row) for row in area.rows(ends))
            area.canvas.vertical(column, range(top, bottom + 1), "│", Ink.STRONG, only_blank=False)
        area.points([here.bandwidth], [here.estimate], "◆", Ink.STRONG)
        area.canvas.text(column, area.top + area.height, HERE, Ink.STRONG)

    def _draw_title(self, canvas: Canvas) -> None:
        words = [f"{HERE} here"] if self._here is not None else []
        names = [word for _, word in self._marks if word]
        if names:
            words.append(f"{MARKED} {', '.join(names)}")
        words.append(f"╌ {self._interval}")
        legend = "  ".join(words)
        start = canvas.width - len(legend)
        label = self._label
        if len(label) > start - 2:
            label = label[: max(0, start - 3)] + "…" if start > 8 else ""
        canvas.text(0, 0, label, Ink.STRONG)
        canvas.text(start, 0, legend, Ink.MUTED)


def _heights(sweep: EffectByWidth) -> tuple[float, float]:
    """Return the y range: zero, all but the wildest tenth of the interval's ends, and most of the estimates.

    At the narrowest widths an interval can be a hundred times as long as elsewhere; it runs out of the picture.
    """
    low, high, estimate = (
        np.asarray(part, dtype=np.float64) for part in (sweep.low, sweep.high, sweep.estimate)
    )
    known = np.isfinite(low) & np.isfinite(high) & np.isfinite(estimate)
    if not known.any():
        numbers = estimate[np.isfinite(estimate)]
        return min(0.0, float(numbers.min())), max(0.0, float(numbers.max()))
    low, high, estimate = low[known], high[known], estimate[known]
    bottom = min(0.0, float(np.quantile(low, 0.1)), float(np.quantile(estimate, 0.05)))
    top = max(0.0, float(np.quantile(high, 0.9)), float(np.quantile(estimate, 0.95)))
    return bottom, top
