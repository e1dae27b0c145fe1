"""How commands speak: results on standard output, progress on standard error when somebody looks."""

from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Protocol


class Reporter(Protocol):
    """Says what is being done, in a short line."""

    def __call__(self, line: str, /) -> None:
        """Show the line in place of the last one."""


@contextmanager
def progress() -> Iterator[Reporter]:
    """A reporter that shows one line on a terminal's standard error, and nothing elsewhere."""
    if not sys.stderr.isatty():
        yield lambda _line: None
        return
    if os.environ.get("TERM", "dumb") == "dumb":  # can't go back over a line
        yield lambda line: print(line, file=sys.stderr, flush=True)
        return
    width = max(shutil.get_terminal_size().columns - 1, 1)
    try:
        yield lambda line: print(f"\r{line[:width]:<{width}}", end="", file=sys.stderr, flush=True)
    finally:
        print(f"\r{'':<{width}}\r", end="", file=sys.stderr, flush=True)


def page_width() -> int:
    """Columns for text on standard output: the terminal's up to 100, else 80."""
    return min(shutil.get_terminal_size().columns, 100) if sys.stdout.isatty() else 80


def needs_plain_marks(ascii_only: bool) -> bool:
    """Whether pictures must do with ASCII: asked for, or all that standard output can carry."""
    encoding = (sys.stdout.encoding or "ascii").lower().replace("-", "").replace("_", "")
    return ascii_only or encoding not in ("utf8", "utf8mb4", "utf16", "utf32")
