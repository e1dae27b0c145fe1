"""Text from data on screen: shown literally, and harmless.

Three layers. `study.literal.clean` replaces control characters where text enters; the constructors here switch the toolkit's markup
off; and `ControlGuard` looks at every segment once more before it leaves for the terminal. The raw classes are
forbidden elsewhere in this package, which a test enforces.
"""

from __future__ import annotations

import asyncio
import sys
import traceback
from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import Any

from rich.segment import Segment
from rich.style import Style
from rich.text import Text as RichText
from textual.color import Color
from textual.content import Content
from textual.filter import LineFilter
from textual.notifications import SeverityLevel
from textual.widgets import Input, OptionList, Static
from textual.widgets.option_list import Option

from study.literal import clean
from tui.wire import Result, WireApp

_NO_STYLE = Style()


def literal(text: object) -> Content:
    """Return text as content without markup and without control characters."""
    return Content(clean(str(text)))


class Words(Static):
    """A place for words: a `Static` that takes text literally.

    Parameters
    ----------
    text : str or Content
        A string is cleaned and shown literally; a `Content` was built on purpose and is taken as it is.
    """

    def __init__(self, text: str | Content = "", **options: Any) -> None:
        super().__init__(_content(text), markup=False, **options)

    def show(self, text: str | Content) -> None:
        """Change the words; nothing is repainted when they are the same."""
        content = _content(text)
        if content != self.content:
            self.update(content)


class Choices(OptionList):
    """A list to pick from, whose entries are literal."""

    def __init__(self, entries: Sequence[tuple[str, str]] = (), **options: Any) -> None:
        super().__init__(*_options(entries), markup=False, **options)

    def show(self, entries: Sequence[tuple[str, str]]) -> None:
        """Replace the entries by (key, words) pairs."""
        self.clear_options()
        self.add_options(_options(entries))


class Entry(Input):
    """A one-line field without a blinking cursor, which would send bytes from an idle screen."""

    def __init__(self, value: str = "", *, placeholder: str = "", **options: Any) -> None:
        super().__init__(value, placeholder=clean(placeholder), **options)
        self.cursor_blink = False


class ControlGuard(LineFilter):
    """The last layer: no control character leaves in a segment, and each segment has a style.

    The second half is for Textual's own filters, which fail on a segment whose style is None.
    """

    def apply(self, segments: list[Segment], background: Color) -> list[Segment]:
        """Return the segments, harmless."""
        return [
            segment
            if segment.style is not None and clean(segment.text) == segment.text
            else Segment(clean(segment.text), segment.style or _NO_STYLE, segment.control)
            for segment in segments
        ]


class SafeApp(WireApp[Result]):
    """An app on which text from data can do no harm.

    Notices are literal, every segment passes the guard, and a crash says that it happened and where its report is:
    the report names files and lines, never values, because values are data.
    """

    crash_folder: Path | None = None
    """Where a crash report is written; None writes none."""

    def __init__(self, **options: Any) -> None:
        super().__init__(**options)
        self._guard = ControlGuard()

    def get_line_filters(self) -> Sequence[LineFilter]:
        """Return the filters every line passes, the guard first."""
        return [self._guard, *super().get_line_filters()]

    def notify(
        self,
        message: str,
        *,
        title: str = "",
        severity: SeverityLevel = "information",
        timeout: float | None = None,
        markup: bool = False,
    ) -> None:
        """Show a notice, literally; `markup` is accepted for the toolkit's own calls and ignored."""
        super().notify(clean(message), title=clean(title), severity=severity, timeout=timeout, markup=False)

    def on_mount(self) -> None:
        """A fault in a task or a callback that nobody waits for is the app's fault too: it must not die unseen."""
        asyncio.get_running_loop().set_exception_handler(self._fault_in_loop)

    def _fault_in_loop(self, loop: asyncio.AbstractEventLoop, context: dict[str, Any]) -> None:
        error = context.get("exception")
        if isinstance(error, Exception) and self._running and not self._exit:  # widgets go first when leaving
            self.call_later(partial(_raise, error))  # in the app's own queue, where every fault ends alike
        # Anything else is the loop's talk about its own affairs; its default would write over the screen.

    def _fatal_error(self) -> None:
        # Textual's own screen prints the values of local variables, which here are somebody's records.
        self.bell()
        error = sys.exc_info()[1]
        where = self._write_crash(error)
        said = f"Cutbank stopped because of a mistake in the program ({type(error).__name__}).\n"
        said += (
            f"What happened is in {where}; it holds no data.\n"
            if where
            else "Your study is saved as it was.\n"
        )
        self._exit_renderables.append(RichText(said))
        self._close_messages_no_wait()

    def _write_crash(self, error: BaseException | None) -> Path | None:
        if self.crash_folder is None or error is None:
            return None
        path = self.crash_folder / "crash.txt"
        lines = [f"{frame.filename}:{frame.lineno} in {frame.name}" for frame in _frames(error)]
        try:
            path.write_text("\n".join([type(error).__name__, *lines]) + "\n", encoding="utf-8")
        except OSError:
            return None
        return path


def _raise(error: Exception) -> None:
    raise error


def _frames(error: BaseException) -> traceback.StackSummary:
    return traceback.extract_tb(error.__traceback__)


def _content(text: str | Content) -> Content:
    return text if isinstance(text, Content) else literal(text)


def _options(entries: Sequence[tuple[str, str]]) -> list[Option]:
    return [Option(literal(words), id=key) for key, words in entries]
