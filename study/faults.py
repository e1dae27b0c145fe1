"""A record of the program's own faults: which lines of code, in which order, and no variable's value."""

from __future__ import annotations

import os
import time
import traceback
from pathlib import Path

from study.errors import StudyError
from study.saving import write_whole


def fault_text(doing: str, error: BaseException) -> str:
    """Where an error came from: kinds of errors and lines of code only.

    Messages are left out: they often quote the value that an error stumbled over, which may be a row of data.
    """
    lines = [f"{time.strftime('%Y-%m-%d %H:%M:%S')} while {doing}"]
    link: BaseException | None = error
    while link is not None:
        lines.append(f"{type(link).__module__}.{type(link).__qualname__}")
        for frame in traceback.extract_tb(link.__traceback__):
            lines.append(f"  {Path(frame.filename).name}:{frame.lineno} in {frame.name}")
        link = link.__cause__ or (None if link.__suppress_context__ else link.__context__)
    return "\n".join(lines) + "\n"


def record_fault(doing: str, error: BaseException) -> Path | None:
    """Write the record to the person's state folder; its file, or None where it can't be written."""
    kept = os.environ.get("XDG_STATE_HOME", "")
    try:
        state = Path(kept) if Path(kept).is_absolute() else Path.home() / ".local" / "state"
        path = state / "cutbank" / "fault.txt"
        path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        write_whole(path, fault_text(doing, error).encode())
    except (OSError, RuntimeError, StudyError):
        return None
    return path
