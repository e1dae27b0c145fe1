"""The keys that work on every screen."""

from __future__ import annotations

import os
import re
from collections.abc import Iterable
from dataclasses import replace

from study.errors import StudyError
from study.literal import clean
from study.saving import write_whole
from tui.look import THEME_NAMES
from tui.memory import state_folder
from tui.safe import SafeApp
from tui.screens.finder import Finder
from tui.screens.pages import HelpPage, TextPage, titled
from tui.screens.room import Room
from tui.state import Desk
from tui.walk import HINTS, end_walk


class EverywhereApp(SafeApp[int]):
    """What the keys of every screen do; the bench itself is the subclass.

    Attributes
    ----------
    desk
        The study on the desk, None before one is opened.
    hint
        Which of the hints for a first run is shown, None for none.
    """

    desk: Desk | None
    hint: int | None = None

    @property
    def room(self) -> Room | None:
        """The screen of the six that stands, also when a page lies over it."""
        raise NotImplementedError

    def tell(self, words: str, *, warning: bool = False) -> None:
        """Say something at the bottom of the screen, until the next key."""
        raise NotImplementedError

    def view_moved(self) -> None:
        """The view has changed."""
        raise NotImplementedError

    def leave(self, code: int = 0) -> None:
        """Save, and end."""
        raise NotImplementedError

    def do_help(self) -> None:
        """Key ?."""
        if self.room is not None:
            self.push_screen(HelpPage(self.room))

    def do_find(self) -> None:
        """Key F2."""
        if self.room is not None:
            self.push_screen(Finder(self.room))

    def do_text(self) -> None:
        """Key v."""
        if self.room is not None:
            self.push_screen(TextPage(f"{self.room.about.title} as text", self.room.text()))

    def do_copy(self) -> None:
        """Key y: to a file beside the person's other state, and to the terminal's clipboard if it takes that."""
        room = self.room
        if room is None:
            return
        lines = room.copied()
        if not any(line.strip() for line in lines):
            self.tell("There is nothing to copy here yet.")
            return
        title = self.desk.study.title if self.desk is not None else ""
        text = _copied(titled(title or "Cutbank", lines))
        path = state_folder() / "copied.txt"
        try:
            path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
            write_whole(path, text.encode())
        except (OSError, StudyError):
            self.tell("Sent to the terminal's clipboard; no file could be written.", warning=True)
        else:
            self.tell(f"Sent to the terminal's clipboard; also in {path}.")
        if not os.environ.get("CUTBANK_NO_CLIPBOARD"):
            self.copy_to_clipboard(text)

    def do_picture(self) -> None:
        """Key F9: the picture names no font on a network and holds what the screen shows, nothing more."""
        path = state_folder() / "screen.svg"
        picture = re.sub(
            r"@font-face\s*\{[^}]*\}", "", self.export_screenshot(title="Cutbank", simplify=True)
        )
        try:
            path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
            write_whole(path, picture.replace("Fira Code", "DejaVu Sans Mono").encode())
        except (OSError, StudyError):
            self.tell("The picture could not be written to your state folder.", warning=True)
        else:
            self.tell(f"This screen is kept as a picture in {path}.")

    def do_looks(self) -> None:
        """Key F3."""
        here = THEME_NAMES.index(self.look.theme) if self.look.theme in THEME_NAMES else 0
        name = THEME_NAMES[(here + 1) % len(THEME_NAMES)]
        self.set_look(replace(self.look, theme=name))
        if self.desk is not None:
            self.desk.view = replace(self.desk.view, colours=name)
            self.view_moved()
        self.action_redraw()
        if self.room is not None:
            self.room.refresh_all()
        self.tell(f"Colours: {name.removeprefix('cutbank-')}.")

    def do_next_hint(self) -> None:
        """Key F4: the hints can be called again when they are gone."""
        self.hint = 0 if self.hint is None else self.hint + 1
        if self.hint >= len(HINTS):
            self.do_end_hints()
        elif self.room is not None:
            self.room.refresh_keys()

    def do_end_hints(self) -> None:
        """Key F6."""
        self.hint = None
        end_walk()
        if self.room is not None:
            self.room.refresh_keys()

    def do_redraw(self) -> None:
        """Key F5."""
        self.action_redraw()

    def do_quit(self) -> None:
        """Key q."""
        self.leave(0)


def _copied(lines: Iterable[str]) -> str:
    return "\n".join(clean(line) for line in lines)
