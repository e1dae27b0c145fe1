"""`cutbank [STUDY]`: the bench on the terminal."""

from __future__ import annotations

import importlib
import sys
from pathlib import Path

from study.errors import BAD_STUDY, StudyError


def open_bench(path: Path | None, *, mouse: bool, ascii_only: bool) -> int:
    """Open the bench.

    Raises
    ------
    StudyError
        Status 2 without a terminal; else whatever keeps the study from being opened.
    """
    if not (sys.stdin.isatty() and sys.stdout.isatty()):
        raise StudyError(
            "The bench needs a terminal for its input and its output.",
            "Without one use: cutbank run STUDY",
            BAD_STUDY,
        )
    # The one way up: screens stand above the study, so they are named here and not imported.
    app = importlib.import_module("tui.app")
    status: int = app.run(path, mouse=mouse, ascii_only=ascii_only)
    return status
