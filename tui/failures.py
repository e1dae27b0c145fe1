"""A record of the program's own faults: which lines of code, in which order, and no variable's value."""

from __future__ import annotations

import time
import traceback
from pathlib import Path

from study.errors import StudyError
from study.saving import write_whole
from tui.memory import state_folder


def failure_text(doing: str, error: BaseException) -> str:
    """Where an error came from: kinds of errors and lines of code only.

    Messages of errors are left out: they often quote the value that they stumbled over, which may be a row of data.
    """
    parts = [f"{time.strftime('%Y-%m-%d %H:%M:%S')} while {doing}"]
    seen: BaseException | None = error
    while seen is not None:
        parts.append(f"{type(seen).__module__}.{type(seen).__qualname__}")
        parts += [
            f"  {Path(frame.filename).name}:{frame.lineno} in {frame.name}"
            for frame in traceback.extract_tb(seen.__traceback__)
        ]
        seen = seen.__cause__ or (None if seen.__suppress_context__ else seen.__context__)
    return "\n".join(parts) + "\n"


def write_failure(doing: str, error: BaseException) -> Path:
    """Write the record to the person's state folder and return its file."""
    path = state_folder() / "fault.txt"
    try:
        path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        write_whole(path, failure_text(doing, error).encode())
    except (OSError, StudyError):
        pass  # a home that can't be written to: the message on screen has to do
    return path
