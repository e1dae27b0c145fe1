"""What goes over the line: only cells that changed, and no faster than the terminal takes them.

Textual repaints whole regions, and from their widget's left edge. Here every update is written into a picture of the wanted screen
first; a frame is the difference between that and what the terminal already shows. After each frame the terminal is asked where its
cursor is (``CSI 6 n``); the next frame waits for the answer. What changes meanwhile only changes the wanted picture, so on a slow
line the newest state wins and nothing queues up.

Private parts of Textual are used in this module only, and only in versions it was tested with. With any other version
`WireApp` leaves painting to Textual: widgets still ask for no more than changed rows.
"""

from __future__ import annotations

from time import monotonic
from typing import TYPE_CHECKING, Any, TypeVar

import textual
from rich.color import ColorSystem
from textual import events, on
from textual._compositor import ChopsUpdate, LayoutUpdate
from textual.app import App
from textual.driver import Driver

from tui.cell_diff import Picture
from tui.look import THEMES, Look, detect_look

if TYPE_CHECKING:
    from rich.console import RenderableType
    from textual.dom import DOMNode
    from textual.screen import Screen

TESTED_VERSIONS = ("8.2",)
WORKS_HERE = textual.__version__.rpartition(".")[0] in TESTED_VERSIONS

_QUERY = "\x1b[6n"
_PATIENCE_S = 1.0
_SILENCES = 3  # unanswered queries after which the terminal is taken to be one that never answers


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
