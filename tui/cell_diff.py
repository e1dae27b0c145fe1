"""The difference between the screen that is wanted and the one that is shown, as a sequence for the terminal."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence

from rich.cells import cell_len, split_graphemes
from rich.color import ColorSystem
from rich.style import Style
from textual.strip import Strip

# Characters that take one cell everywhere and combine with nothing; other text is divided with care.
_SIMPLE = re.compile(
    "[ -~\u00a0-\u02ff\u2010-\u2027\u2030-\u205e\u2190-\u22ff\u2500-\u25fc\u2800-\u28ff\ufffd]*"
)
_CLEAR = "\x1b[m\x1b[2J"
_SHORT_GAP = 4  # unchanged cells that are cheaper to send again than to jump over
_FARTHEST_SCROLL = 3
_WORTH_SCROLLING = 150  # cells that scrolling must save


class Picture:
    """A screen of cells, each a grapheme and a style code; the right half of a wide character is "".

    The wanted screen and the shown one are kept, and `frame` turns the difference into a sequence.
    """

    def __init__(self, width: int, height: int) -> None:
        self.width, self.height = width, height
        self._codes: dict[Style, tuple[str, str]] = {}
        self._seen_on_blank = {"": ""}  # style code -> the part of it that shows on a blank
        self._wanted = [[" "] * width for _ in range(height)]
        self._wanted_style = [[""] * width for _ in range(height)]
        self._shown: list[list[str]] = []
        self._shown_style: list[list[str]] = []
        self._dirty: set[int] = set()
        self.forget()

    def forget(self) -> None:
        """Trust nothing the terminal shows: the next frame clears it and sends all that is not blank."""
        self._shown = [[" "] * self.width for _ in range(self.height)]
        self._shown_style = [[""] * self.width for _ in range(self.height)]
        self._dirty.update(range(self.height))
        self._clear = True

    def put(self, y: int, x: int, strip: Strip, system: ColorSystem, first: int, last: int) -> None:
        """Write the part of a strip that lies in the columns from `first` up to `last` into the wanted screen."""
        first, last = max(first, x, 0), min(last, self.width)
        if not 0 <= y < self.height or first >= last:
            return
        words, styles = self._expand(strip, system)
        words, styles = words[first - x : last - x], styles[first - x : last - x]
        end = first + len(words)
        _mend(words)
        row = self._wanted[y]
        if row[first] == "" and first:  # half of a wide character is overwritten: the other half goes too
            row[first - 1] = " "
        if end < self.width and row[end] == "":
            row[end] = " "
        self._wanted[y][first:end] = words
        self._wanted_style[y][first:end] = styles
        self._dirty.add(y)

    def _expand(self, strip: Strip, system: ColorSystem) -> tuple[list[str], list[str]]:
        words: list[str] = []
        styles: list[str] = []
        for text, style, control in strip:
            if control:
                continue
            code, blank = ("", "") if style is None else self._code(style, system)
            if _SIMPLE.fullmatch(text):
                words.extend(text)
                if blank == code or " " not in text:
                    styles.extend([code] * len(text))
                else:
                    styles.extend([blank if character == " " else code for character in text])
                continue
            for start, end, cells in split_graphemes(text)[0]:
                if cells:
                    words.extend([text[start:end], *[""] * (cells - 1)])
                    styles.extend([code] * cells)
        return words, styles

    def _code(self, style: Style, system: ColorSystem) -> tuple[str, str]:
        """Return the codes of a style, and those of them that can be seen on a blank."""
        found = self._codes.get(style)
        if found is None:
            # Links are left out on purpose: no address from data reaches the terminal.
            code = Strip.render_ansi(style, system)
            shows_ink = style.reverse or style.underline or style.strike
            blank = code if shows_ink else Strip.render_ansi(Style(bgcolor=style.bgcolor), system)
            found = self._codes[style] = (code, blank)
            self._seen_on_blank[code] = blank
            self._seen_on_blank[blank] = blank
        return found

    def frame(self) -> str:
        """Return what turns the shown screen into the wanted one, and take it as shown; "" when nothing changed."""
        if not self._dirty:
            return ""
        out: list[str] = [_CLEAR] if self._clear else []
        pen = "" if self._scroll(out) or self._clear else None
        self._clear = False
        for y in sorted(self._dirty):
            for first, last in self._runs(y):
                out.append(f"\x1b[{y + 1};{first + 1}H")
                pen = self._write(out, y, first, last, pen)
        self._dirty.clear()
        if pen:
            out.append("\x1b[m")
        return "".join(out)

    # ---- scrolling --------------------------------------------------------------------------------------------

    def _scroll(self, out: list[str]) -> bool:
        """Let the terminal move rows up or down where that saves many cells; return whether it does."""
        best = (_WORTH_SCROLLING, 0, 0, 0)
        if len(self._dirty) >= 4:
            for up in range(-_FARTHEST_SCROLL, _FARTHEST_SCROLL + 1):
                if up and self._rows_found_again(up) >= 3:
                    best = max(best, self._best_region(up))
        _, up, top, bottom = best
        if not up:
            return False
        step = f"\x1b[{bottom + 1};1H" + up * "\x1bD" if up > 0 else f"\x1b[{top + 1};1H" + -up * "\x1bM"
        out.append(f"\x1b[m\x1b[{top + 1};{bottom + 1}r{step}\x1b[r")
        for rows, blank in ((self._shown, " "), (self._shown_style, "")):
            region = rows[top : bottom + 1]
            new = [[blank] * self.width for _ in range(abs(up))]
            rows[top : bottom + 1] = region[up:] + new if up > 0 else new + region[:up]
        self._dirty.update(range(top, bottom + 1))
        return True

    def _rows_found_again(self, up: int) -> int:
        """Count the changed rows that are shown, as they are wanted, so many rows further down."""
        wanted, shown = self._wanted, self._shown
        rows = range(max(0, -up), self.height - max(0, up))
        return sum(wanted[y] == shown[y + up] and wanted[y] != shown[y] for y in rows)

    def _best_region(self, up: int) -> tuple[int, int, int, int]:
        """Return the most cells that scrolling by `up` rows saves, with `up` and the first and last row of the region."""
        blank = ([" "] * self.width, [""] * self.width)
        staying = [self._differing(y, self._shown[y], self._shown_style[y]) for y in range(self.height)]
        # What each row would save when it takes what is `up` rows further down, and when it becomes a fresh blank one.
        moved = [
            staying[y] - self._differing(y, self._shown[y + up], self._shown_style[y + up])
            if 0 <= y + up < self.height
            else -self.width
            for y in range(self.height)
        ]
        fresh = [staying[y] - self._differing(y, *blank) for y in range(self.height)]
        if up < 0:
            saved, top, bottom = _best_run(moved[::-1], fresh[::-1], -up)
            top, bottom = self.height - 1 - bottom, self.height - 1 - top
        else:
            saved, top, bottom = _best_run(moved, fresh, up)
        return saved, up, top, bottom

    def _differing(self, y: int, row: Sequence[str], styles: Sequence[str]) -> int:
        wanted, wanted_styles = self._wanted[y], self._wanted_style[y]
        if wanted == row and wanted_styles == styles:
            return 0
        return sum(a != b or c != d for a, b, c, d in zip(wanted, row, wanted_styles, styles, strict=True))

    # ---- runs -------------------------------------------------------------------------------------------------

    def _runs(self, y: int) -> Iterable[tuple[int, int]]:
        """Yield the changed column ranges of a row, near ones joined, none beginning inside a wide character."""
        wanted, styles = self._wanted[y], self._wanted_style[y]
        shown, shown_styles = self._shown[y], self._shown_style[y]
        if wanted == shown and styles == shown_styles:
            return
        first = last = -1
        for x in range(self.width):
            if wanted[x] == shown[x] and styles[x] == shown_styles[x]:
                continue
            if first >= 0 and x - last > _SHORT_GAP:
                yield self._whole(wanted, first, last)
                first = -1
            if first < 0:
                first = x
            last = x + 1
        if first >= 0:
            yield self._whole(wanted, first, last)

    def _whole(self, wanted: list[str], first: int, last: int) -> tuple[int, int]:
        while first > 0 and wanted[first] == "":
            first -= 1
        while last < self.width and wanted[last] == "":
            last += 1
        return first, last

    def _write(self, out: list[str], y: int, first: int, last: int, pen: str | None) -> str | None:
        wanted, styles = self._wanted[y], self._wanted_style[y]
        jump = False
        for x in range(first, last):
            word, code = wanted[x], styles[x]
            if jump and word:
                # Terminals disagree about the width of some characters; after one, say where we are.
                out.append(f"\x1b[{y + 1};{x + 1}H")
                jump = False
            if word == " " and pen is not None and self._seen_on_blank[pen] == code:
                out.append(word)  # any ink will do on a blank
                continue
            if code != pen and word:
                out.append(f"\x1b[0;{code}m" if code else "\x1b[m")
                pen = code
            out.append(word)
            jump = jump or len(word) > 1 or word == ""
        self._shown[y][first:last] = wanted[first:last]
        self._shown_style[y][first:last] = styles[first:last]
        return pen


def _mend(words: list[str]) -> None:
    """Replace the halves of wide characters that a cut has left at either end."""
    if words and words[0] == "":
        words[0] = " "
    if words and not words[-1].isascii() and cell_len(words[-1]) > 1:
        words[-1] = " "


def _best_run(moved: Sequence[int], fresh: Sequence[int], steps: int) -> tuple[int, int, int]:
    """Return the run of rows whose scrolling by `steps` saves most: its saving, first and last row.

    All rows of a run but the last `steps` take what was below them; those become blank.
    """
    best, start, total = (0, 0, 0), 0, 0
    for row in range(len(moved) - steps):
        if total <= 0:
            start, total = row, 0
        total += moved[row]
        saved = total + sum(fresh[row + 1 : row + 1 + steps])
        best = max(best, (saved, start, row + steps))
    return best
