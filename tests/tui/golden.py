"""Golden screens: what is on the screen as text, and under it one letter a cell for how it is drawn.

A difference fails with a unified diff; `UPDATE_GOLDEN=1` writes the files anew, to be looked at before they are committed.
"""

from __future__ import annotations

import difflib
import os
import string
from pathlib import Path
from typing import Any

from rich.style import Style
from textual.app import App
from textual.strip import Strip

FOLDER = Path(__file__).parent / "golden"
_LETTERS = string.ascii_lowercase + string.ascii_uppercase


def screen_strips(app: App[Any]) -> list[Strip]:
    """What the app shows, one strip a row. The compositor is private: it is used here only."""
    return app.screen._compositor.render_strips(app.size)


def describe(strips: list[Strip]) -> str:
    """The screen as text, its styles as letters, and the legend of the letters."""
    legend: dict[str, str] = {}
    text, styles = [], []
    for strip in strips:
        text.append("".join(segment.text for segment in strip).rstrip())
        letters = ""
        for segment in strip:
            for character in segment.text:
                letters += legend.setdefault(_name(segment.style, character), _next(legend))
        styles.append(letters.rstrip("."))
    words = [f"{letter} {name}" for name, letter in legend.items() if letter != "."]
    return "\n".join([*text, "-" * 8, *styles, "-" * 8, *words, ""])


def _next(legend: dict[str, str]) -> str:
    return _LETTERS[len(legend)]


def _name(style: Style | None, character: str) -> str:
    """The style in words; the foreground of a blank cannot be seen and does not count."""
    if style is None:
        return "plain"
    parts = [name for name in ("bold", "dim", "italic", "underline", "reverse") if getattr(style, name)]
    if character != " " and style.color is not None and not style.color.is_default:
        parts.append(style.color.name)
    if style.bgcolor is not None and not style.bgcolor.is_default:
        parts.append(f"on {style.bgcolor.name}")
    if character == " ":
        parts = [part for part in parts if part not in ("bold", "dim", "italic")]
    return " ".join(parts) or "plain"


def check(app: App[Any], name: str) -> None:
    """Compare what the app shows with the golden file of this name."""
    found, path = describe(screen_strips(app)), FOLDER / f"{name}.txt"
    if os.environ.get("UPDATE_GOLDEN"):
        path.parent.mkdir(exist_ok=True)
        path.write_text(found, encoding="utf-8")
        return
    assert path.exists(), f"no golden file {path.name}: write it with UPDATE_GOLDEN=1 and look at it"
    wanted = path.read_text(encoding="utf-8")
    if found != wanted:
        lines = difflib.unified_diff(
            wanted.splitlines(), found.splitlines(), "golden", "found", lineterm="", n=1
        )
        raise AssertionError(f"{name} looks different:\n" + "\n".join(lines))
