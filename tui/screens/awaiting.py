"""A screen that this version does not have yet says in one sentence what it will hold."""

from __future__ import annotations

from collections.abc import Iterator
from typing import ClassVar

from textual.binding import BindingType
from textual.widget import Widget

from tui.keys import bindings_of
from tui.look import Ink
from tui.screens.lines import Lines, wrapped
from tui.screens.room import Room


class _Awaiting(Room):
    def body(self) -> Iterator[Widget]:
        """One sentence."""
        yield Lines(id="awaits")

    def refresh_view(self) -> None:
        """Set the sentence for this width."""
        words = wrapped(self._sentence(), min(self.size.width - 2, 76))
        self.query_one("#awaits", Lines).show([[""], *[[(line, Ink.MUTED)] for line in words]])

    def text(self) -> list[str]:
        """The sentence."""
        return [self._sentence()]

    def _sentence(self) -> str:
        return f"{self.about.awaits} This version does not have it yet."


class DoubtsScreen(_Awaiting):
    """Falsification questions."""

    place = "doubts"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("doubts")]


class ReleaseScreen(_Awaiting):
    """What may leave."""

    place = "release"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("release")]
