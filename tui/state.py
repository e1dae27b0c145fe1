"""The study on the desk: one frozen object, the ones it was before, and what the screens are told when it changes.

No widget holds a part of the study. A screen posts an intent, the desk makes a new study or refuses, and every screen is told.
"""

from __future__ import annotations

import threading
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from textual.message import Message

from study.document import Study, edit, load_study, save_study, values_of
from study.errors import StudyError
from study.literal import clean
from tui.lock import Holder, Lock
from tui.memory import View, load_view, save_view

if TYPE_CHECKING:  # numpy comes with it, and the first screen must not wait for that
    from study.analysis import Workbench


class StudyEdited(Message):
    """The study on the desk is another one than before."""

    def __init__(self, before: Study, study: Study) -> None:
        super().__init__()
        self.before = before
        self.study = study


class WorkbenchReady(Message):
    """The data of the study on the desk is in memory and can be asked."""

    def __init__(self, workbench: Workbench) -> None:
        super().__init__()
        self.workbench = workbench


class WorkbenchFailed(Message):
    """The data of the study on the desk could not be made ready, and why."""

    def __init__(self, what: str, do: str) -> None:
        super().__init__()
        self.what = what
        self.do = do


class StudySaved(Message):
    """An autosave ended; `problem` is empty when the file holds the study."""

    def __init__(self, study: Study, problem: str = "") -> None:
        super().__init__()
        self.study = study
        self.problem = problem


class Desk:
    """One open study with its past, its view and its lock.

    Parameters
    ----------
    study : Study
        As it was read, or a new one that has no file yet.
    """

    def __init__(self, study: Study) -> None:
        self.study = study
        self.view: View = load_view(study.path)
        self.saved: Study | None = study if study.path.exists() else None
        self.problem = ""
        self._past: list[Study] = []
        self._undone: list[Study] = []
        self._kept_view = self.view
        self._one_at_a_time = threading.Lock()
        self._lock = Lock(study.path)
        self.holder: Holder | None = self._lock.take()

    @property
    def why_read_only(self) -> str:
        """Why nothing can be changed, or ""."""
        if self.holder is None:
            return ""
        return clean(f"{self.holder.said} has this study open, so you can look but not change it")

    @property
    def can_undo(self) -> bool:
        """Whether a change can be taken back."""
        return bool(self._past)

    @property
    def can_redo(self) -> bool:
        """Whether a change was taken back."""
        return bool(self._undone)

    def change(self, changes: Mapping[str, object]) -> bool:
        """Put a changed study on the desk; return False when nothing would change.

        Raises
        ------
        StudyError
            When the study does not take the change, or somebody else has it open.
        """
        self._require_writable()
        new = edit(self.study, changes)
        if new == self.study:
            return False
        self._past.append(self.study)
        self._undone.clear()
        self.study = new
        return True

    def undo(self) -> str:
        """Put the study before the last change back; return what that did, in words.

        Raises
        ------
        StudyError
            When somebody else has the study open.
        """
        return self._travel(self._past, self._undone)

    def redo(self) -> str:
        """Make the change again that was taken back; return what that did, in words.

        Raises
        ------
        StudyError
            When somebody else has the study open.
        """
        return self._travel(self._undone, self._past)

    def _travel(self, source: list[Study], other: list[Study]) -> str:
        self._require_writable()
        other.append(self.study)
        before, self.study = self.study, source.pop()
        return changes_said(before, self.study)

    def _require_writable(self) -> None:
        if self.holder is not None:
            raise StudyError(self.why_read_only + ".", "Ask them to close it, then open it again.")

    def save(self, study: Study) -> None:
        """Write a study of this desk to its file; safe in a thread, one call at a time.

        Raises
        ------
        StudyError
            When the file can't be written.
        """
        with (
            self._one_at_a_time
        ):  # closing waits for a save under way: else the older study would be written last
            if self.holder is None:
                save_study(study)
                self.saved = study

    @property
    def is_saved(self) -> bool:
        """Whether the file holds the study on the desk."""
        return self.saved == self.study

    def keep_view(self) -> None:
        """Write the view down if it changed; a person who may only look leaves no trace beside the study."""
        if self.view != self._kept_view and self.holder is None:
            save_view(self.study.path, self.view)
            self._kept_view = self.view

    def beat(self) -> None:
        """Show others that this process is still there."""
        self._lock.beat()

    def close(self) -> None:
        """Save what is not saved, keep the view and give the lock back; never raises."""
        try:
            if not self.is_saved and (self.saved is not None or self._past):
                self.save(self.study)
        except StudyError as error:
            self.problem = str(error)
        self.keep_view()
        self._lock.leave()


def open_desk(path: Path) -> Desk:
    """Read a study file and take its lock.

    Raises
    ------
    StudyError
        When the file can't be read as a study.
    """
    return Desk(load_study(path))


def changes_said(before: Study, after: Study) -> str:
    """What differs between two studies, in words, such as `estimate.kernel is now "uniform"`."""
    old, new = values_of(before), values_of(after)
    changed = [name for name in new if new[name] != old[name]]
    said = [f"{name.partition('.')[2]} is now {_value_said(new[name])}" for name in changed[:3]]
    more = f" and {len(changed) - 3} more" if len(changed) > 3 else ""
    return clean(", ".join(said) + more)


def _value_said(value: object) -> str:
    if value is None or value == () or value == {}:
        return "not given"
    if isinstance(value, tuple):
        return ", ".join(str(item) for item in value)
    return f"{value:g}" if isinstance(value, float) else str(value)
