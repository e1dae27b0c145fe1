"""Pages that open on top of a screen and close with Escape: help, plain text, a table, a list to pick from."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar, Final, cast

from textual import events, on
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Vertical
from textual.screen import Screen
from textual.widget import Widget

from tui.keys import IN_LISTS, PLACES, Key, Place, keys_of
from tui.look import Ink
from tui.screens.lines import Line, Lines, Part, wrapped
from tui.widgets.table import Cell, Column, Rows, VTable

if TYPE_CHECKING:
    from tui.app import CutbankApp
    from tui.screens.room import Room


_KEY_CELLS: Final = 10


class Page(Screen[None]):
    """A page over a screen: a title, a body, and at the bottom how to leave."""

    AUTO_FOCUS = "VTable, Scroll"
    DEFAULT_CSS = """
    Page { background: $background; }
    Page > #title { padding: 0 1; height: auto; margin-bottom: 1; }
    Page > #inside { height: 1fr; padding: 0 1; }
    Page > #leave { padding: 0 1; height: 1; }
    """
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("escape,q", "leave", "back", show=False),
        Binding("question_mark,f1", "leave", "back", show=False),
    ]
    leave_keys: tuple[tuple[str, str], ...] = (("Esc", "back"),)

    def __init__(self, title: str) -> None:
        super().__init__()
        self._heading = title

    def compose(self) -> ComposeResult:
        """Title, body, keys."""
        yield Lines(id="title")
        with Vertical(id="inside"):
            yield from self.inside()
        yield Lines(id="leave")

    def inside(self) -> Iterator[Widget]:
        """The widgets of the body."""
        raise NotImplementedError

    @property
    def bench(self) -> CutbankApp:
        """The app."""
        return cast("CutbankApp", self.app)

    def on_mount(self) -> None:
        """Write the title and the keys."""
        self.query_one("#title", Lines).show(self.title_lines())
        parts: list[Part] = []
        for shown, label in self.leave_keys:
            parts += [(shown, Ink.ACCENT), (f" {label}  ", Ink.MUTED)]
        self.query_one("#leave", Lines).show([parts])

    def title_lines(self) -> list[Line]:
        """What stands on top."""
        return [[(self._heading, Ink.STRONG)]]

    def action_leave(self) -> None:
        """Go back to the screen below."""
        self.dismiss()


class Scroll(Lines, can_focus=True):
    """Lines that are scrolled by keys when there are more than fit; one refresh a key, nothing moves by itself."""

    DEFAULT_CSS = "Scroll { height: 1fr; }"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("up,k", "move(-1)", show=False),
        Binding("down,j,enter", "move(1)", show=False),
        Binding("pageup", "page(-1)", show=False),
        Binding("pagedown,space", "page(1)", show=False),
        Binding("home,g", "move(-100000)", show=False),
        Binding("end,G", "move(100000)", show=False),
    ]

    def __init__(self, *, id: str | None = None) -> None:
        super().__init__(id=id)
        self._all: list[Line] = []
        self._top = 0

    def fill(self, lines: Sequence[Line]) -> None:
        """Show these lines from the first."""
        self._all, self._top = list(lines), 0
        self._cut()

    def whole(self) -> list[Line]:
        """All lines, also those out of sight."""
        return self._all

    def on_resize(self, event: events.Resize) -> None:
        """Keep as many lines in sight as fit."""
        self._cut()

    def action_move(self, lines: int) -> None:
        """Scroll by some lines."""
        self._top += lines
        self._cut()

    def action_page(self, pages: int) -> None:
        """Scroll by screenfuls, leaving one line of the old one."""
        self.action_move(pages * max(1, self.size.height - 1))

    def _cut(self) -> None:
        height = max(1, self.size.height)
        self._top = max(0, min(self._top, len(self._all) - height))
        self.show(self._all[self._top : self._top + height])


class TextPage(Page):
    """Plain text: for a screen reader, for selecting with the terminal's own means, for reading what is long.

    Parameters
    ----------
    title : str
        What it is.
    lines : sequence of str
        Any text; it is shown literally and wrapped to the width.
    """

    leave_keys = (("↑↓", "scroll"), ("Esc", "back"))
    BINDINGS: ClassVar[list[BindingType]] = [Binding("v", "leave", "back", show=False)]

    def __init__(self, title: str, lines: Sequence[str]) -> None:
        super().__init__(title)
        self._text = list(lines)

    def inside(self) -> Iterator[Widget]:
        """The text."""
        yield Scroll()

    def on_resize(self, event: events.Resize) -> None:
        """Wrap anew."""
        width = max(20, event.size.width - 2)
        lines: list[Line] = []
        for line in self._text:
            # Drawn or tabulated lines fit already; only sentences that are too long are broken.
            lines += [[part] for part in ([line] if len(line) <= width else wrapped(line, width))]
        self.query_one(Scroll).fill(lines)


class HelpPage(Page):
    """The keys of a screen from the one table, and its words explained."""

    leave_keys = (("↑↓", "scroll"), ("Esc", "back"))

    def __init__(self, room: Room) -> None:
        super().__init__(f"{room.about.title}: {room.about.about}")
        self._room = room

    def inside(self) -> Iterator[Widget]:
        """The help."""
        yield Scroll()

    def on_resize(self, event: events.Resize) -> None:
        """Set the help for this width."""
        self.query_one(Scroll).fill(
            help_lines(self._room.about, self._room.why_not_key, event.size.width - 2)
        )


def help_lines(place: Place, why_not: Callable[[Key], str], width: int) -> list[Line]:
    """The help of one screen: its keys, its words explained, the keys of every screen. A key that can't work now says why.

    Parameters
    ----------
    place : Place
        The screen.
    why_not : callable
        Why a key can't work now, or "".
    width : int
        Cells there are.
    """
    own, everywhere = place.keys, [key for key in keys_of(place.name) if key not in place.keys]
    lines = [line for key in own for line in _key_lines(key, why_not(key), width)]
    if own:
        lines.append([""])
    widest = max((len(concept.word) for concept in place.concepts), default=0) + 2
    for concept in place.concepts:
        said = wrapped(concept.said, min(width, 100) - widest)
        lines.append([(concept.word.ljust(widest), Ink.STRONG), said[0]])
        lines += [[" " * widest + more] for more in said[1:]]
    if place.concepts:
        lines.append([""])
    digits = "  ".join(f"{other.digit} {other.title}" for other in PLACES)
    lines.append([("1 to 6".ljust(_KEY_CELLS), Ink.ACCENT), f"Go to a screen: {digits}."])
    lines += [line for key in everywhere for line in _key_lines(key, why_not(key), width)]
    in_lists = ", ".join(f"{shown}: {said}" for shown, said in IN_LISTS) + "."
    lines.append([("in lists".ljust(_KEY_CELLS), Ink.ACCENT), in_lists])
    return lines


def _key_lines(key: Key, reason: str, width: int) -> list[Line]:
    words = key.help if not reason else f"{key.help} Not now: {reason[:1].lower()}{reason[1:]}."
    said = wrapped(words, min(width, 100) - _KEY_CELLS)
    ink = Ink.MUTED if reason else Ink.TEXT
    first: Line = [(key.shown.ljust(_KEY_CELLS), Ink.FAINT if reason else Ink.ACCENT), (said[0], ink)]
    return [first, *[[(" " * _KEY_CELLS + more, ink)] for more in said[1:]]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Numbers:
    """One table of a page: its title, and columns and rows as `VTable.set_rows` takes them."""

    title: str
    columns: Sequence[Column]
    rows: Rows | Sequence[Sequence[Cell]]
    empty: str = ""


class TablePage(Page):
    """Numbers as a table; with several tables Tab goes from one to the next.

    Parameters
    ----------
    tables : sequence of Numbers
        At least one.
    chosen : callable, optional
        Called with the row on Enter, after the page has closed.
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("t", "leave", "back", show=False),
        Binding("tab", "other(1)", "next table", show=False, priority=True),
        Binding("shift+tab", "other(-1)", "table before", show=False, priority=True),
    ]

    def __init__(self, tables: Sequence[Numbers], *, chosen: Callable[[int], None] | None = None) -> None:
        super().__init__("")
        self._tables, self._chosen, self._here = tuple(tables), chosen, 0
        keys = [("↑↓", "row")]
        keys += [("Tab", "the other table")] if len(self._tables) > 1 else []
        keys += [("Enter", "go there")] if chosen is not None else []
        self.leave_keys = (*keys, ("Esc", "back"))

    def inside(self) -> Iterator[Widget]:
        """The table."""
        yield VTable(empty=self._tables[0].empty)

    def title_lines(self) -> list[Line]:
        """The table's title."""
        return [[(self._tables[self._here].title, Ink.STRONG)]]

    def on_mount(self) -> None:
        """Fill the table."""
        self._fill()

    def action_other(self, steps: int) -> None:
        """Show another of the tables."""
        self._here = (self._here + steps) % len(self._tables)
        self.query_one("#title", Lines).show(self.title_lines())
        self._fill()

    def _fill(self) -> None:
        table = self._tables[self._here]
        self.query_one(VTable).set_rows(table.columns, table.rows, cursor=0)

    @on(VTable.RowChosen)
    def _row_chosen(self, event: VTable.RowChosen) -> None:
        if self._chosen is not None:
            chosen = self._chosen
            self.dismiss()
            chosen(event.row)


def titled(title: str, lines: Sequence[str]) -> list[str]:
    """A heading over lines, as the plain-text views set it."""
    return [title, "-" * len(title), *lines, ""]
