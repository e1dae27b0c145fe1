"""What goes over the line: only cells that changed, and no faster than the terminal takes them.

Textual repaints whole regions, and from their widget's left edge. Here every update is written into a picture of the wanted screen
first; a frame is the difference between that and what the terminal already shows. After each frame the terminal is asked where its
cursor is (``CSI 6 n``); the next frame waits for the answer. What changes meanwhile only changes the wanted picture, so on a slow
line the newest state wins and nothing queues up.

Private parts of Textual are used in this module only, and only in versions it was tested with. With any other version
`WireApp` leaves painting to Textual: widgets still ask for no more than changed rows.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from time import monotonic
from typing import TYPE_CHECKING, Any, TypeVar

import textual
from rich.cells import cell_len, split_graphemes
from rich.color import ColorSystem
from rich.style import Style
from textual import events, on
from textual._compositor import ChopsUpdate, LayoutUpdate
from textual.app import App
from textual.driver import Driver
from textual.strip import Strip

from tui.look import THEMES, Look, detect_look

if TYPE_CHECKING:
    from rich.console import RenderableType
    from textual.dom import DOMNode
    from textual.screen import Screen

TESTED_VERSIONS = ("8.2",)
WORKS_HERE = textual.__version__.rpartition(".")[0] in TESTED_VERSIONS

# Characters that take one cell everywhere and combine with nothing; other text is divided with care.
_SIMPLE = re.compile(
    "[ -~\u00a0-\u02ff\u2010-\u2027\u2030-\u205e\u2190-\u22ff\u2500-\u25fc\u2800-\u28ff\ufffd]*"
)
_CLEAR = "\x1b[m\x1b[2J"
_QUERY = "\x1b[6n"
_PATIENCE_S = 1.0
_SILENCES = 3  # unanswered queries after which the terminal is taken to be one that never answers
_SHORT_GAP = 4  # unchanged cells that are cheaper to send again than to jump over


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
        self._clear = False
        pen = None
        for y in sorted(self._dirty):
            for first, last in self._runs(y):
                out.append(f"\x1b[{y + 1};{first + 1}H")
                pen = self._write(out, y, first, last, pen)
        self._dirty.clear()
        if pen:
            out.append("\x1b[m")
        return "".join(out)

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


class Pace:
    """When the next frame may go: after the terminal has answered the last one, or after a second without answer."""

    def __init__(self) -> None:
        self._outstanding = 0
        self._silences = 0
        self._sent_at = 0.0

    @property
    def asks(self) -> bool:
        """Whether frames end in the question; not for a terminal that never answers."""
        return self._silences < _SILENCES

    def ready(self, now: float) -> bool:
        """Whether a frame may be sent now."""
        if self._outstanding == 0:
            return True
        if now - self._sent_at < _PATIENCE_S:
            return False
        self._silences += 1
        self._outstanding = 0
        return True

    def sent(self, now: float) -> None:
        """A frame has gone out."""
        if self.asks:
            self._outstanding += 1
            self._sent_at = now

    def answered(self) -> None:
        """The terminal has told where its cursor is: it has drawn all that came before."""
        self._outstanding = max(0, self._outstanding - 1)
        self._silences = 0

    @property
    def patience_s(self) -> float:
        """Seconds after which a frame that waits is sent anyway."""
        return _PATIENCE_S


Result = TypeVar("Result")


class WireApp(App[Result]):
    """An app that sends only changed cells and keeps pace with its terminal.

    Parameters
    ----------
    look : Look, optional
        How the program looks; `set_look` changes it later. Detected from the environment when left out.
    """

    def __init__(self, *, look: Look | None = None, **options: Any) -> None:
        # The terminal's own colours pass through as they are, also where NO_COLOR is decided: in the constructor.
        super().__init__(ansi_color=True, **options)
        self._picture: Picture | None = None
        self._pace = Pace()
        self._waiting = False
        for theme in THEMES:
            self.register_theme(theme)
        self.look = look or _look_of_environment()
        self.theme = self.look.theme

    def set_look(self, look: Look) -> None:
        """Change how the program looks, and repaint."""
        self.look = look
        self.theme = look.theme
        self.refresh_css(animate=False)

    def action_redraw(self) -> None:
        """Send the whole screen again (after something else wrote on the terminal)."""
        self._came_back()

    # ---- Textual's private parts ------------------------------------------------------------------------------

    def _display(self, screen: Screen[Any], renderable: RenderableType | None) -> None:
        ours = WORKS_HERE and isinstance(renderable, (ChopsUpdate, LayoutUpdate))
        live = self._running and not self._closed and not self.is_headless and self._driver is not None
        if not ours or not live or self._batch_count or (self._driver is not None and self._driver.is_inline):
            super()._display(screen, renderable)
            return
        try:
            self._take(renderable)  # type: ignore[arg-type]
            self._send()
        except Exception as error:  # noqa: BLE001 - as Textual does: a failure while painting is the app's failure
            self._handle_exception(error)
        finally:
            self.post_display_hook()

    def _take(self, update: ChopsUpdate | LayoutUpdate) -> None:
        picture = self._picture_now()
        system = self.console._color_system or ColorSystem.TRUECOLOR
        if isinstance(update, LayoutUpdate):
            for y, strips in enumerate(update.strips, update.region.y):
                x = update.region.x
                for strip in strips:
                    picture.put(y, x, strip, system, x, picture.width)
                    x += strip.cell_length
            return
        for y, first, last in update.spans:
            for end, (x, part) in zip(update.chop_ends[y], update.chops[y].items(), strict=False):
                if part is not None and x < last and end > first:
                    picture.put(y, x, part, system, first, min(last, end))

    def _picture_now(self) -> Picture:
        width, height = self.size
        if self._picture is None or (self._picture.width, self._picture.height) != (width, height):
            self._picture = Picture(width, height)
        return self._picture

    def _send(self) -> None:
        """Send a frame if the terminal is ready for one; else see to it that one is sent later."""
        driver, picture = self._driver, self._picture
        if driver is None or picture is None:
            return
        if not self._pace.ready(monotonic()):
            if not self._waiting:
                self._waiting = True
                self.set_timer(self._pace.patience_s, self._patience_over)
            return
        frame = picture.frame()
        if not frame:
            return
        x, y = self.screen.outer_size.clamp_offset(self.cursor_position)
        begin, end = ("\x1b[?2026h", "\x1b[?2026l") if self._sync_available else ("", "")
        query = _QUERY if self._pace.asks else ""
        # One write a frame: the writer's queue blocks the event loop when it is full.
        driver.write(f"{begin}{frame}\x1b[{y + 1};{x + 1}H{end}{query}")
        driver.flush()
        self._pace.sent(monotonic())

    def _patience_over(self) -> None:
        self._waiting = False
        self._send()

    def _on_cursor_position(self, event: events.CursorPosition) -> None:
        self._pace.answered()
        self._send()

    def _forget_shown(self) -> None:
        if self._picture is not None:
            self._picture.forget()

    async def _on_resize(self, event: events.Resize) -> None:
        # Terminals reflow or cut what they show: after that nothing is known about it.
        self._forget_shown()
        await super()._on_resize(event)

    @on(Driver.SignalResume)
    def _came_back(self) -> None:
        """Send everything again after the program was stopped and continued: others have written meanwhile."""
        self._pace = Pace()  # an answer that was due went to the shell
        self._forget_shown()
        self._send()

    def _resume_signal(self) -> None:
        # After `suspend()` Textual calls this by name; a handler of ours for it would never run.
        super()._resume_signal()
        self._came_back()


_NO_APP = Look()


def look_of(node: DOMNode) -> Look:
    """Return the look of the app a widget lives in."""
    return getattr(node.app, "look", _NO_APP)


def _look_of_environment() -> Look:
    import os

    return detect_look(os.environ)
