"""A sheet of terminal cells to draw on: fine lines in braille dots, tints, marks and words.

Painter's order: what is drawn later lies on top. A cell never mixes two things, so a fitted line does not drown in the band it
lies in. Cells hold meanings (`Ink`, `Paper`), not colours; `strips` asks the look for those.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from typing import Final

import numpy as np
import numpy.typing as npt
from rich.segment import Segment
from rich.style import Style
from textual.geometry import Region
from textual.strip import Strip

from tui.look import Ink, Look, Paper
from tui.widgets.cells import cell_width

Mask = npt.NDArray[np.bool_]

_BLANK: Final = 0x20
_BRAILLE: Final = 0x2800
# Row, column and bit of each of the 4 x 2 dots of a braille cell.
_DOT_BITS: Final = (
    (0, 0, 1),
    (1, 0, 2),
    (2, 0, 4),
    (0, 1, 8),
    (1, 1, 16),
    (2, 1, 32),
    (3, 0, 64),
    (3, 1, 128),
)

ASCII_MARKS: Final = {
    "○": "o", "■": "#", "●": "*", "◆": "*", "◇": "o", "▲": "^", "△": "v", "▼": "v", "▸": ">",
    "┊": ":", "╌": "-", "─": "-", "━": "=", "┬": "+", "┯": "+", "│": "|", "┃": "|", "├": "|", "┤": "|",
    "┝": "[", "┥": "]", "┿": "+", "…": "~", "–": "-", "−": "-", "×": "x", "·": ".",
    "▁": ".", "▂": ".", "▃": ":", "▄": ":", "▅": ":", "▆": ":", "▇": "#", "█": "#",
}  # fmt: skip
"""The ASCII stand-in of every mark that is drawn."""


class Canvas:
    """A grid of `height` x `width` cells.

    Attributes
    ----------
    glyph : ndarray of uint32, shape (height, width)
        Code points.
    ink, paper, bold : ndarrays of the same shape
        What each cell is drawn in (`Ink`, `Paper` as integers, bool).
    """

    def __init__(self, width: int, height: int, *, ascii_only: bool = False) -> None:
        self.width, self.height = max(0, width), max(0, height)
        self.ascii_only = ascii_only
        shape = (self.height, self.width)
        self.glyph = np.full(shape, _BLANK, dtype=np.uint32)
        self.ink = np.zeros(shape, dtype=np.uint8)
        self.paper = np.zeros(shape, dtype=np.uint8)
        self.bold = np.zeros(shape, dtype=np.bool_)

    def put(self, other: Canvas) -> None:
        """Take over all that is on another canvas of the same size."""
        for name in ("glyph", "ink", "paper", "bold"):
            np.copyto(getattr(self, name), getattr(other, name))

    # ---- drawing --------------------------------------------------------------------------------------------

    def dots(self, mask: Mask, ink: Ink, *, x: int = 0, y: int = 0) -> None:
        """Draw dots: each cell with a dot in it becomes theirs.

        Parameters
        ----------
        mask : ndarray of bool, shape (4 rows, 2 columns)
            Dots of a block of rows x columns cells; it must lie on the canvas.
        x, y : int
            Cell of the block's upper left corner.
        """
        rows, columns = mask.shape[0] // 4, mask.shape[1] // 2
        bits = np.zeros((rows, columns), dtype=np.uint8)
        for (
            row,
            column,
            bit,
        ) in _DOT_BITS:  # eight strided slices: a quarter of the time of a reduction over two axes
            bits |= mask[row::4, column::2].view(np.uint8) * np.uint8(bit)
        hit = bits != 0
        code = _ASCII_CELLS[bits] if self.ascii_only else bits.astype(np.uint32) + _BRAILLE
        block = np.s_[y : y + rows, x : x + columns]
        self.glyph[block][hit] = code[hit]
        self.ink[block][hit] = ink
        self.bold[block][hit] = False

    def tint(self, mask: Mask, paper: Paper, *, x: int = 0, y: int = 0) -> None:
        """Put a paper under the cells of a block where the mask (rows, columns) is true."""
        rows, columns = mask.shape
        self.paper[y : y + rows, x : x + columns][mask] = paper

    def marks(
        self,
        column: npt.NDArray[np.intp],
        row: npt.NDArray[np.intp],
        mark: str,
        ink: Ink | npt.NDArray[np.uint8],
        *,
        only_blank: bool = False,
    ) -> None:
        """Put one mark into many cells; those off the canvas are left out.

        Parameters
        ----------
        column, row : ndarrays of int, shape (n,)
            The cells.
        mark : str
            One character of one cell's width.
        ink : Ink or ndarray of uint8, shape (n,)
            What the mark is drawn in.
        only_blank : bool
            Draw only where nothing has been drawn.
        """
        inside = (column >= 0) & (column < self.width) & (row >= 0) & (row < self.height)
        column, row = column[inside], row[inside]
        inks = np.broadcast_to(np.asarray(ink, dtype=np.uint8), inside.shape)[inside]
        if only_blank:
            blank = self.glyph[row, column] == _BLANK
            column, row, inks = column[blank], row[blank], inks[blank]
        self.glyph[row, column] = ord(self._plain(mark))
        self.ink[row, column] = inks
        self.bold[row, column] = False

    def text(self, x: int, y: int, words: str, ink: Ink = Ink.TEXT, *, bold: bool = False) -> int:
        """Write words and return the column after them; what does not fit is left out.

        The words must take one cell a character (`cells.narrow` sees to that for text from data).
        """
        if not 0 <= y < self.height:
            return x + len(words)
        words = words.replace("\N{NO-BREAK SPACE}", " ")  # nothing is ever broken here
        if self.ascii_only:
            words = "".join(self._plain(character) for character in words)
        skip = max(0, -x)
        shown = words[skip : max(skip, self.width - x)]
        if shown:
            place = np.s_[y, x + skip : x + skip + len(shown)]
            self.glyph[place] = np.frombuffer(shown.encode("utf-32-le"), dtype=np.uint32)
            self.ink[place] = ink
            self.bold[place] = bold
        return x + len(words)

    def vertical(self, x: int, rows: Iterable[int], mark: str, ink: Ink, *, only_blank: bool = True) -> None:
        """Draw a column of marks."""
        row = np.array(list(rows), dtype=np.intp)
        self.marks(np.full(row.shape, x, dtype=np.intp), row, mark, ink, only_blank=only_blank)

    def horizontal(
        self, y: int, columns: Iterable[int], mark: str, ink: Ink, *, only_blank: bool = True
    ) -> None:
        """Draw a row of marks."""
        column = np.array(list(columns), dtype=np.intp)
        self.marks(column, np.full(column.shape, y, dtype=np.intp), mark, ink, only_blank=only_blank)

    def _plain(self, mark: str) -> str:
        if not self.ascii_only or mark.isascii():
            return mark
        return ASCII_MARKS.get(mark, "?")

    # ---- reading --------------------------------------------------------------------------------------------

    def drawn(self, y: int) -> Mask:
        """Return which cells of a row hold something, shape (width,)."""
        return np.asarray(self.glyph[y] != _BLANK, dtype=np.bool_)

    def to_text(self) -> list[str]:
        """Return the rows as plain text without blanks at their ends."""
        return [row.rstrip() for row in self._rows()]

    def strips(self, look: Look) -> list[Strip]:
        """Return the rows as Textual strips; every segment has a style."""
        if not self.width:
            return [Strip([], 0) for _ in range(self.height)]
        key = self._key()
        cuts = key[:, 1:] != key[:, :-1]
        styles: dict[int, Style] = {}
        out = []
        for y, words in enumerate(self._rows()):
            starts = [0, *(np.flatnonzero(cuts[y]) + 1).tolist(), self.width]
            row = key[y]
            segments = []
            for start, end in itertools.pairwise(starts):
                packed = int(row[start])
                style = styles.get(packed)
                if style is None:
                    style = styles[packed] = _unpack(packed, look)
                segments.append(Segment(words[start:end], style))
            out.append(Strip(segments, self.width))
        return out

    def changes(self, before: Canvas | None) -> list[Region] | None:
        """Return the regions, one a changed row, in which this canvas differs; None when all of it does."""
        if before is None or before.glyph.shape != self.glyph.shape:
            return None
        differs = (
            (self.glyph != before.glyph)
            | (self.ink != before.ink)
            | (self.paper != before.paper)
            | (self.bold != before.bold)
        )
        regions = []
        for y in np.flatnonzero(differs.any(axis=1)).tolist():
            columns = np.flatnonzero(differs[y])
            first, last = int(columns[0]), int(columns[-1])
            regions.append(Region(first, y, last - first + 1, 1))
        return regions

    def _rows(self) -> list[str]:
        # One decoding for the whole grid: 3,000 separate chr() calls would cost more than all drawing.
        everything = self.glyph.tobytes().decode("utf-32-le")
        return [
            everything[start : start + self.width]
            for start in range(0, self.height * self.width, self.width or 1)
        ] or ([""] * self.height)

    def _key(self) -> npt.NDArray[np.int64]:
        """Pack ink, paper and weight; a blank cell takes the ink to its left, so that it cuts no run."""
        ink = self.ink.astype(np.int64) | (self.bold.astype(np.int64) << 4)
        column = np.arange(self.width)
        last_drawn = np.maximum.accumulate(np.where(self.glyph != _BLANK, column, 0), axis=1)
        return np.take_along_axis(ink, last_drawn, axis=1) | (self.paper.astype(np.int64) << 8)


def _unpack(packed: int, look: Look) -> Style:
    return look.style(Ink(packed & 0xF), Paper(packed >> 8), bold=bool(packed & 0x10))


def _ascii_stand_in(bits: int) -> int:
    """The stand-in of a braille cell: the height of its dots decides between ``'``, ``-`` and ``.``; a steep one is ``|``."""
    rows = sorted({row for row, _, bit in _DOT_BITS if bits & bit})
    if len(rows) >= 3:
        return ord("|")
    middle = sum(rows) / max(1, len(rows))
    return ord("'") if middle < 1 else ord("-") if middle <= 2 else ord(".")


_ASCII_CELLS: Final = np.array([_ascii_stand_in(bits) for bits in range(256)], dtype=np.uint32)


def narrow(words: str) -> str:
    """Return the words with every character that does not take exactly one cell replaced by ``?``.

    A canvas has one code point a cell; names in wide scripts are shown in full by tables and sentences.
    """
    if words.isascii():
        return words
    return "".join(character if cell_width(character) == 1 else "?" for character in words)
