"""Lines of words in the program's inks: what every screen writes its sentences, answers and headers with."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from typing import Final

from rich.segment import Segment
from textual.geometry import Region, Size
from textual.strip import Strip
from textual.widget import Widget

from study.literal import clean
from tui.look import Ink, Look
from tui.widgets.cells import cell_width, fit
from tui.wire import look_of

Part = str | tuple[str, Ink]
"""Words, or words and the ink they are written in."""
Line = Sequence[Part] | tuple[Sequence[Part], Sequence[Part]]
"""Parts set from the left; or two such lists, the second set flush right."""

_ELLIPSIS: Final = 1


class Lines(Widget):
    """Some lines of words, as high as they are many. Text is shown literally and cut where it does not fit."""

    DEFAULT_CSS = "Lines { height: auto; width: 1fr; }"

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._lines: tuple[tuple[list[Part], list[Part]], ...] = ()

    def show(self, lines: Sequence[Line]) -> None:
        """Change the lines; rows that stay the same are not repainted."""
        new = tuple(_sides(line) for line in lines)
        before, self._lines = self._lines, new
        if len(before) != len(new):
            self.refresh(layout=True)
            return
        for row, (old, now) in enumerate(zip(before, new, strict=True)):
            if old != now:
                self.refresh(Region(0, row, self.outer_size.width, 1))

    def to_text(self) -> list[str]:
        """The lines as plain text."""
        return [
            (_plain(left) + ("    " + _plain(right) if right else "")).rstrip() for left, right in self._lines
        ]

    def get_content_height(self, container: Size, viewport: Size, width: int) -> int:
        """As many rows as there are lines."""
        return len(self._lines)

    def render_line(self, y: int) -> Strip:
        """Draw one line: what is flush right stays, what is on the left is cut."""
        look, width = look_of(self), self.size.width
        if y >= len(self._lines):
            return Strip([Segment(" " * width, look.style(Ink.TEXT))])
        left, right = self._lines[y]
        reserved = cell_width(_plain(right))
        room = max(0, width - reserved - (2 if right else 0))
        segments = list(_drawn(left, room, look))
        used = sum(cell_width(segment.text) for segment in segments)
        segments.append(Segment(" " * max(0, width - reserved - used), look.style(Ink.TEXT)))
        segments += _drawn(right, width, look)
        return Strip(segments).crop_extend(0, width, look.style(Ink.TEXT))


def wrapped(text: str, width: int, *, indent: str = "") -> list[str]:
    """The text in lines of at most so many characters, later ones indented."""
    return textwrap.wrap(clean(text), max(10, width), subsequent_indent=indent, break_long_words=True) or [""]


def _sides(line: Line) -> tuple[list[Part], list[Part]]:
    # A line with a right half is a pair of lists; a part is a word or a pair that begins with a word.
    if isinstance(line, tuple) and len(line) == 2 and isinstance(line[0], list):
        return list(line[0]), list(line[1])
    return list(line), []


def _plain(parts: Sequence[Part]) -> str:
    return "".join(clean(part if isinstance(part, str) else part[0]) for part in parts)


def _drawn(parts: Sequence[Part], room: int, look: Look) -> list[Segment]:
    segments = []
    for part in parts:
        words, ink = (part, Ink.TEXT) if isinstance(part, str) else part
        words = clean(words)
        if look.ascii_only:
            words = _in_ascii(words)
        cut = fit(words, room, look)
        if cut:
            segments.append(Segment(cut, look.style(ink)))
        room -= cell_width(cut)
        if cut != words:
            break
    return segments


_ASCII: Final = str.maketrans(
    {"−": "-", "–": "-", "—": "-", "→": ">", "←": "<", "↑": "^", "↓": "v", "·": "|", "×": "x", "≥": ">", "≤": "<",
     "▸": ">", "…": ".", "“": '"', "”": '"', "‘": "'", "’": "'", "○": "o", "■": "#", "●": "*", "±": "~", "²": "2", "\u00a0": " "}
)  # fmt: skip


def _in_ascii(words: str) -> str:
    """The program's own signs as ASCII; letters of any alphabet stay, they are the person's own."""
    return words.translate(_ASCII)
