"""What the drawn widgets share: build a canvas for the size there is, and repaint the rows that changed."""

from __future__ import annotations

from textual.strip import Strip
from textual.widget import Widget

from study.literal import clean
from tui.canvas import Canvas, narrow
from tui.look import Ink, Look
from tui.wire import look_of

_SMALLEST = (24, 6)


class PlotWidget(Widget):
    """A widget that draws on a canvas. Subclasses give `draw`."""

    DEFAULT_CSS = """
    PlotWidget { height: 1fr; background: transparent; }
    """

    smallest = _SMALLEST

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=id, classes=classes)
        self._canvas: Canvas | None = None
        self._drawn_for: tuple[int, int, Look] | None = None
        self._strips: list[Strip] = []
        self._message = ""

    def draw(self, canvas: Canvas) -> None:
        """Draw on an empty canvas of the widget's size."""
        raise NotImplementedError

    @property
    def has_data(self) -> bool:
        """Whether there is something to draw."""
        return False

    def say(self, message: str) -> None:
        """Show one sentence instead of the picture, until data come again."""
        self._message = narrow(clean(message))
        self.repaint()

    def repaint(self) -> None:
        """Draw anew and ask for the rows that changed."""
        before = self._canvas
        if not self._build():
            return
        assert self._canvas is not None
        regions = self._canvas.changes(before)
        if regions is None:
            self.refresh()
        elif regions:
            self.refresh(*regions)

    def to_text(self) -> list[str]:
        """The picture as plain lines, as it stands on the screen."""
        return [] if self._canvas is None else self._canvas.to_text()

    def picture(self, width: int, height: int, *, ascii_only: bool = False) -> Canvas:
        """Draw on a new canvas of any size (for the plain-text view, copies and tests)."""
        canvas = Canvas(width, height, ascii_only=ascii_only)
        smallest_width, smallest_height = self.smallest
        if self._message or not self.has_data:
            _sentence(canvas, self._message)
        elif width < smallest_width or height < smallest_height:
            _sentence(canvas, f"needs {smallest_width} x {smallest_height} cells")
        else:
            self.draw(canvas)
        return canvas

    def _build(self) -> bool:
        width, height = self.size
        if not self.is_mounted or width <= 0 or height <= 0:
            return False
        look = look_of(self)
        self._canvas = self.picture(width, height, ascii_only=look.ascii_only)
        self._strips = self._canvas.strips(look)
        self._drawn_for = (width, height, look)
        return True

    def render_line(self, y: int) -> Strip:
        """Return one row of the picture."""
        look = look_of(self)
        if self._drawn_for != (self.size.width, self.size.height, look):
            self._build()
        if y < len(self._strips):
            return self._strips[y]
        return Strip.blank(self.size.width, look.style(Ink.TEXT))


def _sentence(canvas: Canvas, words: str) -> None:
    line = 0
    room = max(1, canvas.width)
    while words and line < canvas.height:
        cut = len(words) if len(words) <= room else words.rfind(" ", 0, room + 1)
        cut = room if cut <= 0 else cut
        canvas.text(0, line, words[:cut], Ink.MUTED)
        words, line = words[cut:].lstrip(), line + 1
