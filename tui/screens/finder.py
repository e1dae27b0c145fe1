"""Find any action by name: type a few letters of it, Enter does it."""

from __future__ import annotations

from collections.abc import Iterator
from typing import ClassVar

from textual import on
from textual.binding import Binding, BindingType
from textual.widget import Widget
from textual.widgets import Input

from tui.keys import PLACES, Key, keys_of
from tui.look import Ink
from tui.safe import Entry
from tui.screens.pages import Page
from tui.screens.room import Room
from tui.widgets.table import Cell, Column, VTable

_COLUMNS = (Column(key="key", title="key"), Column(key="does", title="does", widest=200))


class Finder(Page):
    """Every action of the screen below, and the six screens; those that can't run now are dimmed and say why."""

    AUTO_FOCUS = "Entry"
    DEFAULT_CSS = """
    Finder Entry { padding: 0; background: transparent; margin-bottom: 1; }
    """
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("up", "move(-1)", show=False, priority=True),
        Binding("down", "move(1)", show=False, priority=True),
        Binding("f2", "leave", show=False),
    ]
    leave_keys = (("type", "to find"), ("↑↓", "row"), ("Enter", "do it"), ("Esc", "back"))

    def __init__(self, room: Room) -> None:
        super().__init__("Find an action")
        self._room = room
        self._found: list[Key] = []

    def inside(self) -> Iterator[Widget]:
        """The field and what it finds."""
        yield Entry(placeholder="a word of what you want to do", compact=True)
        yield VTable(empty="Nothing is called that; try another word.")

    def on_mount(self) -> None:
        """Show everything at first."""
        self._look_for("")

    @on(Input.Changed)
    def _typed(self, event: Input.Changed) -> None:
        self._look_for(event.value)

    def _look_for(self, text: str) -> None:
        words = text.casefold().split()
        places = [
            Key(id=f"go.{p.name}", keys=(p.digit,), shown=p.digit, label=p.title, help=f"Go to {p.title}. {p.about}")
            for p in PLACES
        ]  # fmt: skip
        keys = [key for key in (*keys_of(self._room.place), *places) if key.id != "everywhere.find"]
        self._found = [
            key for key in keys if all(word in f"{key.label} {key.help}".casefold() for word in words)
        ]
        self.query_one(VTable).set_rows(_COLUMNS, [self._row(key) for key in self._found], cursor=0)

    def _row(self, key: Key) -> list[Cell]:
        reason = "" if key.id.startswith("go.") else self._room.why_not_key(key)
        if reason:
            return [
                (key.shown, Ink.FAINT),
                (f"{key.help} Not now: {reason[:1].lower()}{reason[1:]}.", Ink.FAINT),
            ]
        return [(key.shown, Ink.ACCENT), key.help]

    def action_move(self, rows: int) -> None:
        """Move the cursor of the list while the field has the keys."""
        self.query_one(VTable).action_move(rows)

    @on(Input.Submitted)
    def _do_it(self) -> None:
        if not self._found:
            return
        key = self._found[self.query_one(VTable).cursor]
        self.dismiss()
        place = key.id.removeprefix("go.")
        if place != key.id:
            self.bench.action_stand(place)
        else:
            self.bench.call_later(self._room.action_key, key.id)
