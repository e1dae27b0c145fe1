"""One row a site: its interval drawn on a scale that all share, with the pooled effect and nought as rules."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, ClassVar, Protocol

from rich.segment import Segment

from tui.look import Ink, Look, Paper
from tui.widgets.cells import cell_width, fit
from tui.widgets.cursor_view import CursorView

if TYPE_CHECKING:  # numpy comes with it, and the first screen must not wait for that
    from study.comparison_words import SiteText


class SiteTexts(Protocol):
    """Where the rows come from: only the visible ones are asked for."""

    def __len__(self) -> int:
        """Return the number of sites."""
        ...

    def row(self, index: int, /) -> SiteText:
        """Return one site as text."""
        ...


_LEAST_DRAWN = 14
_RULES = ("│", "┊")
_CLIPPED = ("‹", "›")


class SiteIntervals(CursorView):
    """A table of sites with their intervals drawn beside the numbers.

    Call `set_sites`. It posts `SiteIntervals.RowHighlighted` and `SiteIntervals.RowChosen` like every list.
    """

    header_lines: ClassVar[int] = 1

    def __init__(self, *, id: str | None = None) -> None:
        super().__init__(id=id)
        self._texts: SiteTexts | None = None
        self._axis = (0.0, 1.0)
        self._pooled = math.nan
        self._name_cells = 4

    def set_sites(
        self,
        texts: SiteTexts,
        *,
        axis: tuple[float, float],
        pooled: float,
        names: Sequence[str],
        cursor: int | None = None,
    ) -> None:
        """Show these sites.

        Parameters
        ----------
        axis
            What the drawing reaches over, in the unit of the texts.
        pooled
            Where the pooled effect's rule stands; NaN for none.
        names
            Every site's name, for the width of the first column.
        """
        self._texts, self._axis, self._pooled = texts, axis, pooled
        self._name_cells = min(16, max((cell_width(name) for name in names), default=4))
        self.set_row_count(len(texts), cursor=cursor)

    # ---- drawing ----------------------------------------------------------------------------------------------

    def draw_header(self, line: int, look: Look, width: int) -> list[Segment]:
        """Draw the titles, with the ends of the scale over the drawing."""
        drawn = self._drawn_cells(width)
        low, high = (f"{end:.3g}".replace("-", "-" if look.ascii_only else "−") for end in self._axis)
        scale = low + high.rjust(drawn - len(low)) if drawn >= _LEAST_DRAWN else ""
        return [
            Segment(
                "  "
                + " " * self._name_cells
                + f" {'cutoff':>7} {scale:<{max(drawn, 0)}} {'effect':>8} {'rows':>13} {'share':>7}",
                look.style(Ink.MUTED),
            )
        ]

    def draw_row(self, row: int, look: Look, width: int, paper: Paper) -> list[Segment]:
        """Draw one site."""
        assert self._texts is not None
        text = self._texts.row(row)
        mark = (">" if look.ascii_only else "▸") if row == self.cursor else " "
        name = fit(text.name, self._name_cells, look)
        ink = Ink.MUTED if text.reason else Ink.TEXT
        segments = [
            Segment(mark + " ", look.style(Ink.ACCENT, paper)),
            Segment(
                name + " " * (self._name_cells - cell_width(name)) + f" {_signs(text.cutoff, look):>7} ",
                look.style(ink, paper),
            ),
        ]
        drawn = self._drawn_cells(width)
        if text.reason:
            why = fit("no local estimate", max(drawn, 0), look)
            segments.append(Segment(f"{why:<{max(drawn, 0)}}", look.style(Ink.MUTED, paper)))
        else:
            segments += self._drawing(text, drawn, look, paper)
        numbers = f" {_signs(text.estimate or '–', look):>8} {text.rows:>13} {_signs(text.share, look):>7}"
        return [*segments, Segment(numbers, look.style(ink, paper))]

    def _drawn_cells(self, width: int) -> int:
        # Two for the cursor's mark; then name, cutoff, drawing, effect, rows and share with a blank between.
        return width - 2 - self._name_cells - 8 - 1 - 9 - 14 - 8

    def _drawing(self, text: SiteText, cells: int, look: Look, paper: Paper) -> list[Segment]:
        if cells < _LEAST_DRAWN:
            return [Segment(" " * max(cells, 0), look.style(Ink.TEXT, paper))]
        marks, inks = [" "] * cells, [Ink.FAINT] * cells
        for value, sign in ((0.0, _RULES[0]), (self._pooled, _RULES[1])):
            at = self._place(value, cells)
            if at is not None and 0 <= at < cells:
                marks[at] = _ascii(sign) if look.ascii_only else sign
        estimate, low, high = text.numbers
        first, last = self._place(low, cells), self._place(high, cells)
        start, stop = (
            max(first if first is not None else 0, 0),
            min(last if last is not None else cells, cells - 1),
        )
        for at in range(start, stop + 1):
            marks[at], inks[at] = "-" if look.ascii_only else "─", Ink.MUTED
        for end, at, sign in ((first, 0, _CLIPPED[0]), (last, cells - 1, _CLIPPED[1])):
            if end is None or not 0 <= end < cells:
                marks[at] = _ascii(sign) if look.ascii_only else sign
        for value, sign, ink in ((text.drawn, "◇", Ink.TEXT), (estimate, "●", Ink.ACCENT)):
            at_value = self._place(value, cells)
            if at_value is not None and 0 <= at_value < cells:
                marks[at_value], inks[at_value] = _ascii(sign) if look.ascii_only else sign, ink
        return [Segment(mark, look.style(ink, paper)) for mark, ink in zip(marks, inks)]

    def _place(self, value: float, cells: int) -> int | None:
        """The cell of a value, which may lie outside; None where there is none."""
        low, high = self._axis
        if not math.isfinite(value):
            return None
        return round((value - low) / (high - low) * (cells - 1))


_PLAIN = str.maketrans(
    {"│": "|", "┊": ":", "‹": "<", "›": ">", "◇": "o", "●": "*", "−": "-", "–": "-", "\u00a0": " "}
)


def _ascii(sign: str) -> str:
    return sign.translate(_PLAIN)


def _signs(words: str, look: Look) -> str:
    return words.translate(_PLAIN) if look.ascii_only else words
