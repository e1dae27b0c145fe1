"""The answers side by side: each with its interval in figures and drawn on one common axis."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from study.literal import clean
from tui.canvas import Canvas, narrow
from tui.look import Ink
from tui.plot_area import PlotArea, Scale, padded, with_minus
from tui.widgets.plot import PlotWidget


@dataclass(frozen=True, slots=True, kw_only=True)
class Answer:
    """One way to answer.

    Parameters
    ----------
    name : str
        What answers.
    estimate, low, high : float, optional
        The estimate and its interval; None or NaN where there is none.
    note : str
        A few words: why there is no answer, or what drives it; shown where there is room.
    chosen : bool
        Whether this is the answer of the study; marked.
    """

    name: str
    estimate: float | None
    low: float | None
    high: float | None
    note: str = ""
    chosen: bool = False


_DRAWN_FROM = 16  # cells below which the drawing is left out
_DRAWN_MOST = 56


class AnswerTable(PlotWidget):
    """One line an answer: its name, the estimate, the ends of the interval, and the interval drawn.

    All intervals lie on one axis with zero on it, so that agreement and disagreement are seen before they are read.
    """

    DEFAULT_CSS = """
    AnswerTable { height: auto; }
    """

    smallest = (20, 1)

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._answers: tuple[Answer, ...] = ()
        self._digits: int | None = None

    @property
    def has_data(self) -> bool:
        """Whether there is something to draw."""
        return bool(self._answers)

    def set_answers(self, answers: Sequence[Answer], *, digits: int | None = None) -> None:
        """Show these answers, with so many decimals or, by default, as many as the narrowest interval deserves."""
        taller = len(answers) != len(self._answers)
        self._answers, self._digits = tuple(answers), digits
        self._message = ""
        self.repaint()
        if taller:
            self.refresh(layout=True)

    def get_content_height(self, container: object, viewport: object, width: int) -> int:
        """One line an answer."""
        return max(1, len(self._answers))

    def draw(self, canvas: Canvas) -> None:
        """Draw the figures, then the intervals in the room that is left."""
        figures = _figures(
            self._answers, decimals_for(self._answers) if self._digits is None else self._digits
        )
        names = [narrow(clean(answer.name)) for answer in self._answers]
        at = [0, 2, 2 + max(map(len, names)) + 2]
        widths = [max(len(row[part]) for row in figures) for part in range(3)]
        at += [at[2] + widths[0] + 2]
        end = at[3] + widths[1] + 4 + widths[2] + 2
        for y, (answer, name, row) in enumerate(zip(self._answers, names, figures, strict=True)):
            ink = Ink.STRONG if answer.chosen else Ink.TEXT
            canvas.text(0, y, "▸" if answer.chosen else " ", Ink.ACCENT)
            canvas.text(at[1], y, name, ink)
            canvas.text(at[2], y, row[0].rjust(widths[0]), ink)
            if row[1]:
                canvas.text(at[3], y, f"{row[1]:>{widths[1]}} to {row[2]:>{widths[2]}}", Ink.TEXT)
            elif answer.note:
                canvas.text(at[3], y, narrow(clean(answer.note)), Ink.MUTED)
        drawn = min(_DRAWN_MOST, canvas.width - end)
        if drawn >= _DRAWN_FROM:
            self._draw_intervals(canvas, end, drawn)
            self._write_notes(canvas, end + drawn + 2)

    def _write_notes(self, canvas: Canvas, x: int) -> None:
        for y, answer in enumerate(self._answers):
            words = narrow(clean(answer.note))
            if _known(answer.low) and words and len(words) <= canvas.width - x:
                canvas.text(x, y, words, Ink.MUTED)

    def _draw_intervals(self, canvas: Canvas, left: int, width: int) -> None:
        ends = [
            end
            for answer in self._answers
            for end in (answer.low, answer.high, answer.estimate)
            if _known(end)
        ]
        if not ends:
            return
        low, high = padded(min(0.0, *map(float, ends)), max(0.0, *map(float, ends)), 0.04)  # type: ignore[arg-type]
        scale = Scale(low=low, high=high)
        for y, answer in enumerate(self._answers):
            if not (_known(answer.low) and _known(answer.high)):
                continue
            area = PlotArea(
                canvas, left=left, top=y, width=width, height=1, x=scale, y=Scale(low=0.0, high=1.0)
            )
            interval = np.array(
                [answer.low, answer.high, answer.estimate], dtype=np.float64
            )  # None becomes NaN
            first, last, middle = (int(column) for column in area.columns(interval))
            ink = Ink.ACCENT if answer.chosen else Ink.TEXT
            canvas.horizontal(y, range(first, last + 1), "─", ink, only_blank=False)
            canvas.text(first, y, "├", ink)
            canvas.text(last, y, "┤", ink)
            if middle >= 0:
                canvas.text(middle, y, "●" if answer.chosen else "○", ink)
            area.vertical_rule(0.0)


def _known(number: float | None) -> bool:
    return number is not None and math.isfinite(number)


def _figures(answers: Sequence[Answer], decimals: int) -> list[tuple[str, str, str]]:
    def words(number: float | None) -> str:
        return (
            with_minus(f"{number + 0.0:,.{decimals}f}")
            if number is not None and math.isfinite(number)
            else ""
        )

    return [
        (
            words(answer.estimate) or "none",
            *((words(answer.low), words(answer.high)) if _known(answer.low) else ("", "")),
        )
        for answer in answers
    ]


def decimals_for(answers: Sequence[Answer]) -> int:
    """Return the decimals that show the narrowest interval's length with two significant digits, 6 at most."""
    lengths = [
        answer.high - answer.low
        for answer in answers
        if answer.low is not None
        and answer.high is not None
        and _known(answer.low)
        and answer.high > answer.low
    ]
    if not lengths or not math.isfinite(min(lengths)):
        return 2
    return min(6, max(0, 1 - math.floor(math.log10(min(lengths)))))
