"""What a table and a form share: rows one line high, a cursor among them, and repainting of no more than changed.

Drawn line by line, so a million rows cost what the visible ones cost.
"""

from __future__ import annotations

from typing import ClassVar

from rich.segment import Segment
from textual import events
from textual.binding import Binding, BindingType
from textual.geometry import Size
from textual.message import Message
from textual.scroll_view import ScrollView
from textual.strip import Strip

from tui.look import Ink, Look, Paper
from tui.wire import look_of


class CursorView(ScrollView, can_focus=True):
    """Rows under a fixed header, with a cursor. Subclasses draw the rows."""

    DEFAULT_CSS = """
    CursorView { height: 1fr; overflow: hidden hidden; scrollbar-size: 0 0; background: transparent; }
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("up,k", "move(-1)", "Up", show=False, id="rows.up"),
        Binding("down,j", "move(1)", "Down", show=False, id="rows.down"),
        Binding("pageup", "page(-1)", "Page up", show=False, id="rows.page_up"),
        Binding("pagedown", "page(1)", "Page down", show=False, id="rows.page_down"),
        Binding("home,g", "first", "First", show=False, id="rows.first"),
        Binding("end,G", "last", "Last", show=False, id="rows.last"),
        Binding("enter", "choose", "Choose", show=False, id="rows.choose"),
    ]

    class RowHighlighted(Message):
        """The cursor has come to a row."""

        def __init__(self, view: CursorView, row: int) -> None:
            super().__init__()
            self.view = view
            self.row = row

        @property
        def control(self) -> CursorView:
            """The view that sent it, for `@on(..., "#id")`."""
            return self.view

    class RowChosen(Message):
        """Enter was pressed on a row."""

        def __init__(self, view: CursorView, row: int) -> None:
            super().__init__()
            self.view = view
            self.row = row

        @property
        def control(self) -> CursorView:
            """The view that sent it, for `@on(..., "#id")`."""
            return self.view

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._cursor = 0
        self._rows = 0

    # ---- for subclasses -------------------------------------------------------------------------------------

    header_lines: ClassVar[int] = 0

    def draw_header(self, line: int, look: Look, width: int) -> list[Segment]:
        """Draw one header line."""
        return []

    def draw_row(self, row: int, look: Look, width: int, paper: Paper) -> list[Segment]:
        """Draw one row on the given paper."""
        raise NotImplementedError

    def set_row_count(self, rows: int, *, cursor: int | None = None) -> None:
        """Tell how many rows there are; the cursor stays where it is when it can."""
        self._rows = rows
        wanted = self._cursor if cursor is None else cursor
        self._cursor = max(0, min(wanted, rows - 1))
        self.virtual_size = Size(self.content_columns(), rows + self.header_lines)
        self._keep_cursor_visible()
        self.refresh()

    def content_columns(self) -> int:
        """Width of a row in cells, for scrolling sideways."""
        return 0

    # ---- cursor ---------------------------------------------------------------------------------------------

    @property
    def cursor(self) -> int:
        """The row under the cursor; 0 when there are none."""
        return self._cursor

    @property
    def row_count(self) -> int:
        """How many rows there are."""
        return self._rows

    def move_to(self, row: int) -> None:
        """Put the cursor on a row, clipped to the rows there are."""
        row = max(0, min(row, self._rows - 1))
        if row == self._cursor or not self._rows:
            return
        before, self._cursor = self._cursor, row
        if not self._keep_cursor_visible():
            self.refresh_row(before)
            self.refresh_row(row)
            if self.header_lines:
                self.refresh_lines(int(self.scroll_offset.y), self.header_lines)
        self.cursor_moved()
        self.post_message(self.RowHighlighted(self, row))

    def cursor_moved(self) -> None:
        """Called after the cursor has moved and before anybody is told."""

    def refresh_row(self, row: int) -> None:
        """Repaint one row."""
        self.refresh_lines(row + self.header_lines, 1)

    def action_move(self, rows: int) -> None:
        """Move the cursor by some rows."""
        self.move_to(self._cursor + rows)

    def action_page(self, pages: int) -> None:
        """Move the cursor by screenfuls, leaving one row of the old one."""
        self.move_to(self._cursor + pages * max(1, self._visible_rows() - 1))

    def action_first(self) -> None:
        """Move the cursor to the first row."""
        self.move_to(0)

    def action_last(self) -> None:
        """Move the cursor to the last row."""
        self.move_to(self._rows - 1)

    def action_choose(self) -> None:
        """Tell that the row under the cursor was chosen."""
        if self._rows:
            self.post_message(self.RowChosen(self, self._cursor))

    def _visible_rows(self) -> int:
        return max(1, self.size.height - self.header_lines)

    def _keep_cursor_visible(self) -> bool:
        """Scroll when the cursor is outside; return whether it was."""
        top, visible = int(self.scroll_offset.y), self._visible_rows()
        wanted = min(max(top, self._cursor - visible + 1), self._cursor)
        if wanted == top:
            return False
        self.scroll_to(y=wanted, animate=False, immediate=True, force=True)
        self.refresh()
        return True

    # ---- drawing --------------------------------------------------------------------------------------------

    def render_line(self, y: int) -> Strip:
        """Draw one line of the widget: header lines stay, rows scroll under them."""
        width, look = self.size.width, look_of(self)
        if y < self.header_lines:
            return self._strip(self.draw_header(y, look, width), width, look.style(Ink.MUTED))
        row = int(self.scroll_offset.y) + y - self.header_lines
        if row >= self._rows:
            return self._strip([], width, look.style(Ink.TEXT))
        here = row == self._cursor and self.has_focus
        paper = Paper.CURSOR if here else Paper.PLAIN
        return self._strip(self.draw_row(row, look, width, paper), width, look.style(Ink.TEXT, paper))

    def _strip(self, segments: list[Segment], width: int, blank: object) -> Strip:
        strip = Strip(segments)
        left = int(self.scroll_offset.x)
        return strip.crop_extend(left, left + width, blank)  # type: ignore[arg-type]

    def _on_focus(self, event: events.Focus) -> None:
        super()._on_focus(event)
        self.refresh_row(self._cursor)

    def _on_blur(self, event: events.Blur) -> None:
        super()._on_blur(event)
        self.refresh_row(self._cursor)

    def on_resize(self) -> None:
        """Keep the cursor in sight when the terminal shrinks."""
        self._keep_cursor_visible()
