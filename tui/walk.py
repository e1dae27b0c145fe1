"""Five hints on the first run: one at a time at the bottom of the screen, gone for good at a key."""

from __future__ import annotations

from typing import Final

from study.errors import StudyError
from study.saving import write_whole
from tui.memory import state_folder

HINTS: Final = (
    "Left and right make the bandwidth narrower or wider: the effect, its interval, the fit and the counts follow at once.",
    "The lower picture shows the effect at every width. An answer that holds at one width only is no finding.",
    "The three answers rest on different assumptions. v says in words why they differ here.",
    "Enter makes the width you stand at the study's own, f shows every choice, u takes a change back. All of it is saved.",
    "1 and 2 show the columns and the line behind this effect. ? explains the keys and the words of any screen.",
)


def walk_is_due() -> bool:
    """Whether this person has not yet seen the hints to their end."""
    return not (state_folder() / "hints-seen").exists()


def end_walk() -> None:
    """Never show the hints again; where nothing can be written they come again next time."""
    try:
        state_folder().mkdir(parents=True, exist_ok=True, mode=0o700)
        write_whole(state_folder() / "hints-seen", b"")
    except (OSError, StudyError):
        return
