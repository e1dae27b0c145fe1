"""A page to open a file: folders, what can be read in them, and the studies that were open of late."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import ClassVar, Final

from textual import on
from textual.binding import Binding, BindingType
from textual.widget import Widget

from tui.look import Ink
from tui.memory import recent_studies
from tui.screens.lines import Line
from tui.screens.pages import Page
from tui.widgets.table import Cell, Column, VTable

STUDY_ENDING: Final = ".toml"
_LARGEST_STUDY: Final = 4 * 2**20
_COLUMNS: Final = (
    Column(key="name", title="name", widest=60),
    Column(key="kind", title="what it is", widest=30),
    Column(key="size", title="size", align="right"),
    Column(key="where", title="where", widest=200),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """Something that can be opened, or a folder to look into."""

    path: Path
    name: str
    kind: str
    size: str = ""
    where: str = ""


class Browse(Page):
    """A folder's readable files. Calls `opened(path)` with the file that was chosen.

    Parameters
    ----------
    folder : Path
        Where to begin.
    opened : callable
        Takes the path of a study or data file.
    """

    leave_keys = (("Enter", "open"), ("←", "folder above"), (".", "hidden files"), ("Esc", "back"))
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("left,h,backspace", "above", show=False, priority=True),
        Binding("full_stop", "hidden", show=False),
    ]

    def __init__(self, folder: Path, opened: Callable[[Path], None]) -> None:
        super().__init__("Open a study or a data file")
        self._folder = folder.resolve()
        self._opened = opened
        self._hidden = False
        self._found: list[Found] = []
        self._problem = ""

    def inside(self) -> Iterator[Widget]:
        """The list."""
        yield VTable(empty="Nothing here can be read.")

    def on_mount(self) -> None:
        """Begin in the first folder."""
        self._look_into(self._folder)

    def title_lines(self) -> list[Line]:
        """Which folder it is."""
        lines: list[Line] = [[(self._heading, Ink.STRONG), ("  " + str(self._folder), Ink.MUTED)]]
        return [*lines, [(self._problem, Ink.WARNING)]] if self._problem else lines

    def _look_into(self, folder: Path, *, cursor_on: str = "") -> None:
        try:
            found = list_folder(folder, hidden=self._hidden)
        except OSError as error:
            self._problem = (
                f"{folder.name}: can't be looked into ({(error.strerror or 'unknown reason').lower()})."
            )
        else:
            self._folder, self._problem = folder, ""
            recent = [] if self._hidden else _recent()
            self._found = [*recent, *found]
            rows = [_row(each) for each in self._found]
            names = [each.name for each in self._found]
            self.query_one(VTable).set_rows(
                _COLUMNS, rows, cursor=names.index(cursor_on) if cursor_on in names else 0
            )
        self.query_one("#title").show(self.title_lines())  # type: ignore[attr-defined]

    def action_above(self) -> None:
        """Look into the folder above."""
        self._look_into(self._folder.parent, cursor_on=self._folder.name + "/")

    def action_hidden(self) -> None:
        """Show hidden files, or hide them again."""
        self._hidden = not self._hidden
        self._look_into(self._folder)

    @on(VTable.RowChosen)
    def _row_chosen(self, event: VTable.RowChosen) -> None:
        found = self._found[event.row]
        if found.kind == "folder":
            self._look_into(found.path)
        else:
            self.dismiss()
            self._opened(found.path)


def list_folder(folder: Path, *, hidden: bool = False) -> list[Found]:
    """Folders first, then the files that can be read: studies and data.

    Raises
    ------
    OSError
        When the folder can't be looked into.
    """
    from study.data_files import kind_of_file  # what can be read is the readers' own knowledge

    folders, files = [], []
    with os.scandir(folder) as entries:
        for entry in entries:
            if entry.name.startswith(".") and not hidden:
                continue
            path = Path(entry.path)
            try:
                if entry.is_dir():
                    folders.append(Found(path=path, name=entry.name + "/", kind="folder"))
                    continue
                if not entry.is_file():
                    continue  # a pipe or a device would wait for ever
                size = entry.stat().st_size
            except OSError:
                continue  # gone meanwhile, or a link to nowhere
            kind = _study_kind(path, size) or kind_of_file(path)
            if kind and os.access(path, os.R_OK):
                files.append(Found(path=path, name=entry.name, kind=kind, size=size_said(size)))
    folders.sort(key=lambda found: found.name.casefold())
    files.sort(key=lambda found: (found.kind != "study", found.name.casefold()))
    return [*folders, *files]


def size_said(size: int) -> str:
    """A file's size in words, such as "3.1 MB"."""
    if size < 1000:
        return f"{size} B"
    amount, unit = size / 1e3, "kB"
    for larger in ("MB", "GB"):
        if amount >= 999.95:
            amount, unit = amount / 1e3, larger
    return f"{amount:.1f} {unit}"


def _study_kind(path: Path, size: int) -> str:
    """Whether a TOML file is a study of ours: a project's other TOML files are not offered."""
    if path.suffix.lower() != STUDY_ENDING or size > _LARGEST_STUDY:
        return ""
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError):
        return ""
    return "study" if any(line.strip() in ("[study]", "[assignment]") for line in text.splitlines()) else ""


def _recent() -> list[Found]:
    return [
        Found(path=path, name=path.name, kind="study, open of late", where=str(path.parent))
        for path in recent_studies()[:5]
    ]


def _row(found: Found) -> list[Cell]:
    ink = Ink.ACCENT if found.kind.startswith("study") else Ink.MUTED if found.kind == "folder" else Ink.TEXT
    return [(found.name, ink), (found.kind, Ink.MUTED), (found.size, Ink.MUTED), (found.where, Ink.MUTED)]
