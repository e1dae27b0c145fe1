"""Run a program in a pseudo-terminal, watch its screen through a terminal emulator, and count what it sends."""

from __future__ import annotations

import contextlib
import fcntl
import os
import pty
import select
import signal
import struct
import sys
import termios
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from types import TracebackType

import pyte

ROOT = Path(__file__).resolve().parents[2]


class Terminal:
    """A program in a terminal of `size` = (columns, rows). Use it as a context; it ends the program it started.

    Attributes
    ----------
    sent : int
        Bytes the program has sent so far.
    screen : pyte.Screen
        What a person would see.
    answers : bool
        Whether the terminal answers questions (where the cursor is); set to False for one that does not.
    """

    def __init__(
        self,
        command: Sequence[str],
        *,
        size: tuple[int, int] = (100, 30),
        environment: Mapping[str, str] | None = None,
        answers: bool = True,
    ) -> None:
        self.sent = 0
        self.raw = bytearray()
        self.answers = answers
        self.screen = pyte.Screen(*size)
        self.screen.write_process_input = self._answer  # type: ignore[method-assign]
        self._stream = pyte.ByteStream(self.screen)
        plain = {
            "TERM": "xterm-256color",
            "LANG": "C.UTF-8",
            "PYTHONPATH": f"{ROOT}:{ROOT / 'tests' / 'tui'}",
        }
        kept = {key: os.environ[key] for key in ("PATH", "HOME") if key in os.environ}
        self._pid, self._fd = pty.fork()
        if self._pid == 0:  # the child: nothing of the test runs here
            try:
                os.chdir(ROOT)
                os.execve(command[0], list(command), {**kept, **plain, **(environment or {})})
            finally:
                os._exit(127)
        self.resize(*size)

    def __enter__(self) -> Terminal:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        with contextlib.suppress(ProcessLookupError):
            os.kill(self._pid, signal.SIGKILL)
        os.waitpid(self._pid, 0)
        os.close(self._fd)

    def resize(self, columns: int, rows: int) -> None:
        """Change the terminal's size."""
        fcntl.ioctl(self._fd, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))
        self.screen.resize(rows, columns)

    def _answer(self, words: str) -> None:
        if self.answers:
            os.write(self._fd, words.encode())

    def type(self, keys: str) -> None:
        """Send keys as the terminal would."""
        os.write(self._fd, keys.encode())

    def signal(self, number: int) -> None:
        """Send the program a signal."""
        os.kill(self._pid, number)

    def show(self, words: str | bytes) -> None:
        """Write on the screen as another program would."""
        self._stream.feed(words.encode() if isinstance(words, str) else words)

    def fileno(self) -> int:
        """The terminal's side of the line."""
        return self._fd

    def read(self, seconds: float) -> int:
        """Read for so long and return how many bytes came."""
        before, end = self.sent, time.monotonic() + seconds
        while (left := end - time.monotonic()) > 0:
            if not select.select([self._fd], [], [], left)[0]:
                break
            try:
                part = os.read(self._fd, 65536)
            except OSError:  # the program has closed its side
                break
            self.sent += len(part)
            self.raw += part
            self._stream.feed(part)
        return self.sent - before

    def settle(self, *, quiet: float = 0.25, patience: float = 10.0) -> int:
        """Read until nothing has come for `quiet` seconds; return how many bytes came."""
        before, end = self.sent, time.monotonic() + patience
        while self.read(quiet) and time.monotonic() < end:
            pass
        return self.sent - before

    def wait_for(self, condition: Callable[[str], bool] | str, *, patience: float = 15.0) -> str:
        """Read until the screen's text fulfils a condition (or holds some words); return the text."""
        fulfilled = (lambda text: condition in text) if isinstance(condition, str) else condition
        end = time.monotonic() + patience
        while not fulfilled(self.text()):
            if time.monotonic() > end:
                raise AssertionError(f"not on the screen within {patience:g} s: {condition}\n{self.text()}")
            self.read(0.05)
        return self.text()

    def text(self) -> str:
        """The screen as text."""
        return "\n".join(line.rstrip() for line in self.screen.display)

    def cells(self) -> list[list[tuple[object, ...]]]:
        """The screen cell by cell: character, colours and attributes (a blank has no foreground)."""
        rows = []
        for y in range(self.screen.lines):
            row = []
            for x in range(self.screen.columns):
                cell = self.screen.buffer[y][x]
                ink = () if cell.data == " " else (cell.fg, cell.bold, cell.italics)
                row.append((cell.data, cell.bg, cell.reverse, cell.underscore, *ink))
            rows.append(row)
        return rows


def python(*words: str) -> list[str]:
    """The command line that runs Python with these arguments."""
    return [sys.executable, *words]
