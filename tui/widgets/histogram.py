"""The score's histogram with the line on it, and the line under the person's fingers."""

from __future__ import annotations

from typing import ClassVar, Protocol

import numpy as np
import numpy.typing as npt
from textual import events
from textual.binding import Binding, BindingType
from textual.message import Message

from study.literal import clean
from tui.canvas import Canvas, narrow
from tui.look import Ink
from tui.plot_area import PlotArea, Scale, even_scale, gutter, nice_step
from tui.widgets.plot import PlotWidget

Vector = npt.NDArray[np.float64]
_EIGHTHS = " ▁▂▃▄▅▆▇█"


class Counts(Protocol):
    """How many have which score."""

    @property
    def edges(self) -> Vector:
        """Edges of the bins, ascending, shape (k + 1,)."""

    @property
    def counts(self) -> npt.NDArray[np.int64] | Vector:
        """Units in each bin, shape (k,)."""

    @property
    def on_line(self) -> int:
        """Units exactly on the line."""

    @property
    def below(self) -> int:
        """Units below it."""

    @property
    def above(self) -> int:
        """Units at or above it."""


class ScoreHistogram(PlotWidget, can_focus=True):
    """Columns of counts, the line between the sides, and how many are on each.

    With `cutoff_moves` the arrows move the line by about a cell, in round steps; `LineMoved` tells of each step and `LineChosen` of enter.
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("left,h", "shift(-1)", "Line down", show=False, id="line.down"),
        Binding("right,l", "shift(1)", "Line up", show=False, id="line.up"),
        Binding("pageup", "shift(-10)", "Line far down", show=False, id="line.far_down"),
        Binding("pagedown", "shift(10)", "Line far up", show=False, id="line.far_up"),
        Binding("enter", "choose", "Keep the line", show=False, id="line.keep"),
    ]

    class LineMoved(Message):
        """The line was moved to another score."""

        def __init__(self, histogram: ScoreHistogram, value: float) -> None:
            super().__init__()
            self.histogram = histogram
            self.value = value

        @property
        def control(self) -> ScoreHistogram:
            """The histogram that sent it."""
            return self.histogram

    class LineChosen(LineMoved):
        """Enter was pressed: the line is to stay here."""

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._histogram: Counts | None = None
        self._cutoff: float | None = None
        self._treated = "above"
        self._score = ""
        self._moves = False
        self._offset = 0.0

    @property
    def has_data(self) -> bool:
        """Whether there is something to draw."""
        return self._histogram is not None and len(self._histogram.counts) > 0

    @property
    def cutoff(self) -> float | None:
        """Where the line stands, in the score's units."""
        return self._cutoff

    def set_data(
        self,
        *,
        histogram: Counts,
        cutoff: float | None,
        treated: str = "above",
        score: str = "",
        cutoff_moves: bool = False,
        offset: float = 0.0,
    ) -> None:
        """Show these counts.

        Parameters
        ----------
        histogram : Counts
            The counts; bins that end at the line keep the sides apart.
        cutoff : float, optional
            Where the line is, in the score's units; None draws none.
        treated : str
            "above" or "below".
        score : str
            The score's name.
        cutoff_moves : bool
            Whether the arrows move the line.
        offset : float
            Added to the edges to give scores: the cutoff, when they are positions relative to it.
        """
        self._histogram, self._cutoff, self._treated = histogram, cutoff, treated
        self._score, self._moves, self._offset = narrow(clean(score)), cutoff_moves, float(offset)
        self._message = ""
        self.repaint()

    # ---- the line -------------------------------------------------------------------------------------------

    def action_shift(self, steps: int) -> None:
        """Move the line by round steps of about a cell."""
        if not (self._moves and self.has_data and self._cutoff is not None):
            return
        low, high = self._ends()
        step = nice_step((high - low) / max(20, self.size.width))
        # On multiples of the step, so that the line comes to rest on round numbers.
        wanted = (round(self._cutoff / step) + steps) * step
        wanted = float(f"{min(max(wanted, low), high):.12g}")
        if wanted != self._cutoff:
            self._cutoff = wanted
            self.repaint()
            self.post_message(self.LineMoved(self, wanted))

    def action_choose(self) -> None:
        """Tell that the line is to stay."""
        if self._moves and self._cutoff is not None:
            self.post_message(self.LineChosen(self, self._cutoff))

    def _ends(self) -> tuple[float, float]:
        assert self._histogram is not None
        edges = self._histogram.edges
        return float(edges[0]) + self._offset, float(edges[-1]) + self._offset

    def _on_focus(self, event: events.Focus) -> None:
        super()._on_focus(event)
        self.repaint()

    def _on_blur(self, event: events.Blur) -> None:
        super()._on_blur(event)
        self.repaint()

    # ---- drawing --------------------------------------------------------------------------------------------

    def draw(self, canvas: Canvas) -> None:
        """Draw the columns, the line between them, the counts above and the axis below."""
        assert self._histogram is not None
        low, high = self._ends()
        high = high if high > low else low + 1.0
        height = canvas.height - 4
        # The labels' width depends on the heights, and these a little on the room that the labels leave.
        most = float(self._per_cell(canvas.width - 7, low, high)[0].max())
        y = even_scale(0.0, max(most, 1.0), height, from_zero=True)
        left = gutter(y, height)
        per_cell, at = self._per_cell(canvas.width - left, low, high)
        y = even_scale(0.0, max(float(per_cell.max()), 1.0), height, from_zero=True)
        x = Scale(low=low, high=high)
        area = PlotArea(canvas, left=left, top=2, width=canvas.width - left, height=height, x=x, y=y)
        line = -1 if at < 0 else left + at
        self._draw_columns(area, per_cell / y.high, line)
        area.y_labels()
        area.x_axis()
        canvas.text(0, 0, f"{self._score}: how many have which score", Ink.STRONG)
        if line >= 0:
            self._draw_line(area, line)

    def _per_cell(self, cells: int, low: float, high: float) -> tuple[Vector, int]:
        """Share the counts out to columns of cells by area, and return where the line's own cell is (-1: nowhere).

        Each side of the line fills the cells on its side, so that nothing of a heap right at the line is hidden under it. A
        column is as high as the bin it lies in: the axis counts what one bin holds.
        """
        assert self._histogram is not None
        edges = np.asarray(self._histogram.edges, dtype=np.float64) + self._offset
        counts = np.asarray(self._histogram.counts, dtype=np.float64)
        bin_width = (high - low) / counts.size
        heights = np.zeros(cells)
        line = -1
        if self._cutoff is not None and low <= self._cutoff <= high:
            line = min(cells - 1, int((self._cutoff - low) / (high - low) * cells))
        parts = [(0, cells, low, high)]
        if line >= 0 and self._cutoff is not None:
            parts = [(0, line, low, self._cutoff), (line + 1, cells, self._cutoff, high)]
        for first, last, start, end in parts:
            if last > first and end > start:
                walls = np.linspace(start, end, last - first + 1)
                heights[first:last] = (
                    _counts_between(walls, edges, counts) * bin_width / (walls[1] - walls[0])
                )
        return heights, line

    def _draw_columns(self, area: PlotArea, share: Vector, line: int) -> None:
        eighths = np.rint(share * area.height * 8).astype(np.intp)
        eighths[(share > 0) & (eighths == 0)] = 1  # a single unit is seen
        filled = 8 * (area.height - 1 - np.arange(area.height))[:, None]
        level = np.clip(eighths[None, :] - filled, 0, 8)
        column = np.arange(area.width) + area.left
        treated = np.zeros(area.width, dtype=np.bool_)
        if line >= 0:
            treated = column > line if self._treated == "above" else column < line
        inks = np.where(treated, Ink.EDGE, Ink.FAINT).astype(np.uint8)
        for eighth in range(1, 9):
            rows, columns = np.nonzero(level == eighth)
            area.canvas.marks(columns + area.left, rows + area.top, _EIGHTHS[eighth], inks[columns])

    def _draw_line(self, area: PlotArea, column: int) -> None:
        assert self._histogram is not None and self._cutoff is not None
        held = self._moves and self.has_focus
        area.canvas.vertical(column, range(1, area.top + area.height), "┃" if held else "┊", Ink.STRONG)
        area.canvas.text(column, area.top + area.height, "▲", Ink.STRONG)
        below, above = f"{self._histogram.below:,} below", f"{self._histogram.above:,} above"
        if self._treated == "above":
            above += ", treated"
        else:
            below += ", treated"
        room_left, room_right = column - 1, area.canvas.width - column - 2
        if len(below) <= room_left and len(above) <= room_right:
            area.canvas.text(column - 1 - len(below), 1, below, Ink.TEXT)
            area.canvas.text(column + 2, 1, above, Ink.TEXT)
            return
        both = f"{below}, {above}"
        start = column + 2 if len(both) <= room_right else max(0, column - 1 - len(both))
        area.canvas.text(start, 1, both, Ink.TEXT)


def _counts_between(walls: Vector, edges: Vector, counts: Vector) -> Vector:
    """Return the counts between walls, each bin's spread evenly over it."""
    return np.diff(np.interp(walls, edges, np.concatenate([[0.0], np.cumsum(counts)])))
