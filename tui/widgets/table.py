"""A table of any number of rows, of which only the visible ones are ever asked for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar, Protocol, runtime_checkable

from rich.segment import Segment
from textual.binding import Binding, BindingType
from textual.strip import Strip

from study.literal import clean
from tui.look import Ink, Look, Paper
from tui.widgets.cells import cell_width, fit, pad_decimal
from tui.widgets.cursor_view import CursorView
from tui.wire import look_of

Cell = str | tuple[str, Ink]
"""What stands in a cell: words, or words and what they are drawn in."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One column of a table.

    Parameters
    ----------
    key, title : str
        Name for the program and words for the header (any text: it is cleaned).
    align : str
        "left", "right" or "decimal" (numbers under each other by their point).
    widest : int
        Cells it takes at most; longer text ends in an ellipsis.
    """

    key: str
    title: str
    align: str = "left"
    widest: int = 40


@runtime_checkable
class Rows(Protocol):
    """Where a table reads from."""

    def __len__(self) -> int:
        """Return the number of rows."""
        ...

    def row(self, index: int, /) -> Sequence[Cell]:
        """Return the cells of one row, in the order of the columns."""
        ...


class ListedRows:
    """Rows that are already there as a sequence."""

    def __init__(self, rows: Sequence[Sequence[Cell]]) -> None:
        self._rows = rows

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(self._rows)

    def row(self, index: int) -> Sequence[Cell]:
        """Return the cells of one row."""
        return self._rows[index]


_GAP = 2
_MARK = 2  # the cursor's mark and a space
_LOOKED_AT = 200  # rows that decide the widths before anything is shown


class VTable(CursorView):
    """A table under one header line.

    Call `set_rows(columns, rows)`. It posts `VTable.RowHighlighted(view, row)` and `VTable.RowChosen(view, row)`.
    """

    header_lines: ClassVar[int] = 1

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("left,h", "sideways(-8)", "Left", show=False, id="rows.left"),
        Binding("right,l", "sideways(8)", "Right", show=False, id="rows.right"),
    ]

    def __init__(self, *, empty: str = "", id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._columns: tuple[Column, ...] = ()
        self._source: Rows = ListedRows([])
        self._layout: list[_Width] = []
        self._empty = empty

    def set_rows(
        self, columns: Sequence[Column], rows: Rows | Sequence[Sequence[Cell]], *, cursor: int | None = None
    ) -> None:
        """Show these rows; the cursor keeps its place unless one is given."""
        self._columns = tuple(columns)
        self._source = rows if isinstance(rows, Rows) else ListedRows(rows)
        self._layout = [_Width(column) for column in self._columns]
        count = len(self._source)
        step = max(1, count // _LOOKED_AT)
        for index in range(0, count, step):
            self._measure(index)
        self.set_row_count(count, cursor=cursor)

    def update_row(self, row: int) -> None:
        """Ask for one row again and repaint it."""
        if self._measure(row):
            self.refresh()
        else:
            self.refresh_row(row)

    def to_text(self) -> list[str]:
        """The header and all rows as plain lines (for the plain-text view)."""
        width = self.content_columns()
        look = Look(ascii_only=True)
        lines = [self.draw_header(0, look, 0)]
        lines += [self.draw_row(row, look, width, Paper.PLAIN) for row in range(self.row_count)]
        return ["".join(segment.text for segment in line)[_MARK:].rstrip() for line in lines]

    def content_columns(self) -> int:
        """Width of a row in cells."""
        return _MARK + sum(width.cells + _GAP for width in self._layout)

    def action_sideways(self, columns: int) -> None:
        """Scroll sideways."""
        most = max(0, self.content_columns() - self.size.width)
        self.scroll_to(
            x=max(0, min(most, int(self.scroll_offset.x) + columns)),
            animate=False,
            immediate=True,
            force=True,
        )

    def _measure(self, index: int) -> bool:
        grown = False
        for width, cell in zip(self._layout, self._source.row(index), strict=True):
            grown |= width.take(_words(cell))
        return grown

    def draw_header(self, line: int, look: Look, width: int) -> list[Segment]:
        """Draw the titles, and at the right end where the cursor stands."""
        style = look.style(Ink.MUTED)
        segments = [Segment(" " * _MARK, style)]
        for layout in self._layout:
            title = fit(clean(layout.column.title), layout.cells, look)
            room = " " * (layout.cells - cell_width(title))
            left = layout.column.align == "left"
            segments.append(Segment((title + room if left else room + title) + " " * _GAP, style))
        place = f" {self.cursor + 1:,} of {self.row_count:,}" if self.row_count > self._visible_rows() else ""
        if place and width:
            titles = Strip(segments).crop_extend(0, width - len(place) + int(self.scroll_offset.x), style)
            segments = [*titles, Segment(place, style)]
        return segments

    def draw_row(self, row: int, look: Look, width: int, paper: Paper) -> list[Segment]:
        """Draw one row: the cursor's mark, then the cells."""
        marked = row == self.cursor
        mark = (">" if look.ascii_only else "▸") if marked else " "
        segments = [Segment(mark + " ", look.style(Ink.ACCENT, paper))]
        for layout, cell in zip(self._layout, self._source.row(row), strict=True):
            words = layout.place(_words(cell), look)
            ink = cell[1] if isinstance(cell, tuple) else Ink.TEXT
            segments.append(Segment(words + " " * _GAP, look.style(ink, paper)))
        return segments

    def render_line(self, y: int) -> Strip:
        """Draw one line; an empty table says why it is empty."""
        if not self.row_count and y == 1 and self._empty:
            look = look_of(self)
            words = Segment("  " + clean(self._empty), look.style(Ink.MUTED))
            return self._strip([words], self.size.width, look.style(Ink.MUTED))
        return super().render_line(y)


class _Width:
    """How wide a column has become, and how its cells are placed in it."""

    def __init__(self, column: Column) -> None:
        self.column = column
        self._before = self._after = 0
        self.cells = min(column.widest, cell_width(clean(column.title)))

    def take(self, words: str) -> bool:
        """Make room for these words; return whether the column grew."""
        wide = cell_width(words)
        if self.column.align == "decimal":
            whole, point, rest = words.partition(".")
            self._before = max(self._before, cell_width(whole))
            self._after = max(self._after, cell_width(point + rest))
            wide = self._before + self._after
        grown = min(self.column.widest, wide) > self.cells
        self.cells = max(self.cells, min(self.column.widest, wide))
        return grown

    def place(self, words: str, look: Look) -> str:
        """Return the words as wide as the column."""
        if self.column.align == "decimal":
            words = pad_decimal(words, self._after)
        words = fit(words, self.cells, look)
        room = " " * (self.cells - cell_width(words))
        return words + room if self.column.align == "left" else room + words


def _words(cell: Cell) -> str:
    return clean(cell[0] if isinstance(cell, tuple) else cell)
