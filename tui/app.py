"""The bench: six screens over one study.

Nothing heavy is imported before the first screen stands: numpy and the readers come in a thread, with the data.
"""

from __future__ import annotations

import asyncio
import os
import signal
from collections.abc import Callable, Mapping
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar

from textual.app import App
from textual.binding import Binding, BindingType
from textual.message import Message
from textual.timer import Timer

from study.document import Study
from study.errors import StudyError
from study.readiness import missing_parts
from tui.everywhere import EverywhereApp
from tui.failures import write_failure
from tui.lock import BEAT_S
from tui.look import THEME_NAMES, Look, detect_look
from tui.memory import remember_study
from tui.opening import bare_folder, desk_for, first_place
from tui.screens.assignment import AssignmentScreen
from tui.screens.awaiting import DoubtsScreen, ReleaseScreen
from tui.screens.compare import CompareScreen
from tui.screens.data import DataScreen
from tui.screens.effect import EffectScreen
from tui.screens.room import Room
from tui.slot import Slot
from tui.state import Desk, StudyEdited, StudySaved, WorkbenchFailed, WorkbenchReady
from tui.walk import walk_is_due

if TYPE_CHECKING:
    from study.analysis import Workbench

_ROOMS: dict[str, Callable[[], Room]] = {
    "data": DataScreen,
    "assignment": AssignmentScreen,
    "effect": EffectScreen,
    "compare": CompareScreen,
    "doubts": DoubtsScreen,
    "release": ReleaseScreen,
}
_VIEW_RESTS_S = 1.0  # after the last key, the view is written down


class CutbankApp(EverywhereApp):
    """The bench.

    Parameters
    ----------
    desk : Desk, optional
        The study to work on; without one the Data screen asks for a file.
    look : Look, optional
        How it looks; detected from the environment when left out.
    """

    TITLE = "Cutbank"
    ENABLE_COMMAND_PALETTE = False
    AUTO_FOCUS = ""
    BINDINGS: ClassVar[list[BindingType]] = [
        # Textual's own ctrl+q would quit where a terminal means "go on"; ctrl+c is what people press to get out.
        Binding("ctrl+c", "quit_hint", show=False, priority=True),
        Binding("ctrl+q", "quit_hint", show=False, priority=True),
    ]
    CSS = """
    Screen { background: $background; color: $foreground; scrollbar-size: 0 0; }
    """

    def __init__(self, desk: Desk | None = None, *, look: Look | None = None) -> None:
        # Each of the six screens is a mode of its own; the toolkit reads which one is first in its constructor.
        self.DEFAULT_MODE = first_place(desk)  # type: ignore[misc]
        super().__init__(look=look)
        self._rooms: dict[str, Room] = {}
        for name in _ROOMS:
            self.add_mode(name, partial(self._new_room, name))
        self.desk = desk
        self.workbench: Workbench | None = None
        self.trouble: tuple[str, str] | None = None
        self.progress = ""
        self.doing = ""  # the stage of the reading, in words
        self.started = False  # once true the first screen stands, and heavy things may be loaded
        self.browse_from: Path | None = None
        self._saving: Slot[Study, Study] = Slot("save", self._save, show=self._saved, failed=self._not_saved)
        self._opening: Slot[Study, Workbench] = Slot(
            "data", self._open, show=self._opened, failed=self._not_opened
        )
        self._view_timer: Timer | None = None
        self._failure_log: Path | None = None
        if desk is not None and desk.view.colours in THEME_NAMES and look is None:
            self.look = replace(self.look, theme=desk.view.colours)

    # ---- beginning and end ------------------------------------------------------------------------------------

    def _new_room(self, name: str) -> Room:
        self._rooms[name] = _ROOMS[name]()
        return self._rooms[name]

    def on_mount(self) -> None:
        """Catch the signals of a lost connection; then bring the data, once the first screen has been drawn."""
        loop = self._loop_of_bench = asyncio.get_running_loop()
        for number in (signal.SIGHUP, signal.SIGTERM):
            try:
                loop.add_signal_handler(number, self._told_to_end, number)
            except (ValueError, RuntimeError, NotImplementedError):
                break  # not the main thread (tests), where no signal arrives
        self.set_theme_of_look()
        self.set_interval(BEAT_S, self._beat)
        self.call_after_refresh(self._begin)

    def set_theme_of_look(self) -> None:
        """Let the toolkit's theme follow the look."""
        self.set_look(self.look)

    def _begin(self) -> None:
        self.started = True
        if self.desk is None:
            from tui.screens.browse import Browse

            self.push_screen(Browse(self.browse_from or Path.cwd(), self.open_path))
            return
        if self.desk.why_read_only:
            self.tell(self.desk.why_read_only + ".", warning=True)
        self._fetch()
        self._refresh_room()

    def _told_to_end(self, number: int) -> None:
        """The connection was lost, or somebody ends the process: save and give the terminal back."""
        self.leave(128 + number)

    def leave(self, code: int = 0) -> None:
        """Save, and end."""
        self._opening.forget()
        if self.desk is not None:
            self.desk.close()
        self.exit(code, return_code=code)

    def action_quit_hint(self) -> None:
        """Control-C and control-Q: say how one leaves."""
        self.tell("q leaves; everything is saved already.")

    def _beat(self) -> None:
        if self.desk is not None:
            self.desk.beat()

    # ---- the study --------------------------------------------------------------------------------------------

    def open_path(self, path: Path) -> None:
        """Open a study, or begin one on a data file; the study that is open is saved and closed."""
        try:
            desk = desk_for(path)
        except StudyError as error:
            self.tell(f"{error.what} {error.do}", warning=True)
            return
        if self.desk is not None:
            self.desk.close()
        self.desk, self.workbench, self.trouble = desk, None, None
        self._opening.forget()
        self.tell(desk.why_read_only + "." if desk.why_read_only else "")
        remember_study(desk.study.path)
        self._fetch()
        self.action_stand(first_place(desk))
        self._refresh_room()

    def try_change(self, changes: Mapping[str, object]) -> str:
        """Change the study; return why not, or ""."""
        desk = self.desk
        if desk is None:
            return "No study is open."
        before = desk.study
        try:
            if desk.change(changes):
                self._study_edited(before)
        except StudyError as error:
            return f"{error.what} {error.do}"
        return ""

    def change(self, changes: Mapping[str, object]) -> bool:
        """Change the study and tell what it refuses; return whether it was taken."""
        refusal = self.try_change(changes)
        if refusal:
            self.tell(refusal, warning=True)
        return not refusal

    def do_undo(self) -> None:
        """Key u."""
        self._travel(Desk.undo, "Taken back")

    def do_redo(self) -> None:
        """Key U."""
        self._travel(Desk.redo, "Made again")

    def _travel(self, move: Callable[[Desk], str], word: str) -> None:
        assert self.desk is not None
        before = self.desk.study
        try:
            said = move(self.desk)
        except StudyError as error:
            self.tell(str(error), warning=True)
            return
        self._study_edited(before)
        self.tell(f"{word}: {said}.")

    def _study_edited(self, before: Study) -> None:
        assert self.desk is not None
        self._saving.ask(self.desk.study)
        self._fetch()
        self.post_to_rooms(lambda: StudyEdited(before, self.desk.study if self.desk is not None else before))
        self._refresh_room()

    def post_to_rooms(self, message: Callable[[], Message]) -> None:
        """Tell every screen that stands."""
        for room in self._rooms.values():
            if room.is_running:
                room.post_message(message())

    # ---- saving -----------------------------------------------------------------------------------------------

    def _save(self, study: Study, should_stop: Callable[[], bool]) -> Study:
        assert self.desk is not None
        self.desk.save(study)
        return study

    def _saved(self, request: Study, study: Study) -> None:
        self._saving_ended(study, "")

    def _not_saved(self, request: Study, error: Exception) -> None:
        if not isinstance(error, StudyError):
            self.record_failure("saving", error)
        said = (
            f"{error.what} {error.do}" if isinstance(error, StudyError) else "The study could not be saved."
        )
        self._saving_ended(request, said)
        self.tell(said, warning=True)

    def _saving_ended(self, study: Study, problem: str) -> None:
        if self.desk is not None:
            self.desk.problem = problem
        self.post_to_rooms(lambda: StudySaved(study, problem))
        self._refresh_top()

    def view_moved(self) -> None:
        """The view has changed: it is written down when the keys rest."""
        if self._view_timer is not None:
            self._view_timer.stop()
        self._view_timer = self.set_timer(_VIEW_RESTS_S, self._keep_view)

    def _keep_view(self) -> None:
        if self.desk is not None:
            self.desk.keep_view()

    def see_site(self, site: str, outcome: str, width: float | None) -> None:
        """Open one site on the Effect screen, at the width that all sites stood at (None for its own)."""
        self.action_stand("effect")
        room = self._rooms.get("effect")
        if isinstance(room, EffectScreen):
            room.look_at(outcome, site=site, width=width)

    # ---- the data ---------------------------------------------------------------------------------------------

    def _fetch(self) -> None:
        """Make the data of the study ready, in a thread; a newer study replaces an older request."""
        assert self.desk is not None
        missing = missing_parts(self.desk.study)
        if missing:
            self._opening.forget()
            self.workbench, self.trouble, self.progress = None, ("", ""), ""
            return
        self.progress = "reading" if self.workbench is None else "working"
        self._opening.supersede(self.desk.study)
        self._refresh_top()

    def read_again(self) -> None:
        """Make the bench anew for the same study: something beside its file has changed, such as its seal."""
        self._fetch()

    def _open(self, study: Study, should_stop: Callable[[], bool]) -> Workbench:
        from study.analysis import Workbench  # numpy, scipy and DuckDB, only once the first screen stands

        workbench = self.workbench
        if workbench is not None:
            return workbench.with_study(study)
        return Workbench.open(study, progress=self._report)

    def _report(self, doing: str) -> None:
        """What the reading thread is at; a handful of stages, so a line each is quiet enough."""
        try:
            self._loop_of_bench.call_soon_threadsafe(self._show_progress, doing)
        except RuntimeError:
            return  # the program has ended meanwhile

    def _show_progress(self, doing: str) -> None:
        self.doing = doing
        if self.progress and self.workbench is None:
            self._refresh_room()

    def _opened(self, request: Study, workbench: Workbench) -> None:
        self.workbench, self.trouble, self.progress = workbench, None, ""
        self.post_to_rooms(lambda: WorkbenchReady(workbench))
        self._refresh_room()

    def _not_opened(self, request: Study, error: Exception) -> None:
        if isinstance(error, StudyError):
            what, do = error.what, error.do
        elif hasattr(error, "sentence") and hasattr(error, "remedy"):
            what, do = str(error.sentence), str(error.remedy)
        else:
            self.record_failure("reading the data", error)
            what, do = "The data could not be made ready.", f"What happened is in {self._failure_log}."
        self.workbench, self.trouble, self.progress = None, (what, do), ""
        self.post_to_rooms(lambda: WorkbenchFailed(what, do))
        self._refresh_room()

    @property
    def busy(self) -> bool:
        """Whether something is being read, saved or estimated."""
        return any(slot.pending for slot in self._slots())

    async def settle(self) -> None:
        """Wait until nothing is being read, saved or estimated (for leaving tidily, and for tests)."""
        for slot in self._slots():
            await slot.settle()

    def _slots(self) -> list[Slot[Any, Any]]:
        return [
            self._saving,
            self._opening,
            *(slot for room in self._rooms.values() for slot in room.slots()),
        ]

    # ---- where we are -----------------------------------------------------------------------------------------

    def action_stand(self, place: str) -> None:
        """Go to one of the six screens."""
        while len(self.screen_stack) > 1:
            self.pop_screen()
        if self.desk is not None and self.desk.view.screen != place:
            self.desk.view = replace(self.desk.view, screen=place)
            self.view_moved()
        if self.current_mode != place:
            self.switch_mode(place)

    @property
    def room(self) -> Room | None:
        """The screen of the six that stands, also when a page lies over it."""
        return self._rooms.get(self.current_mode)

    def tell(self, words: str, *, warning: bool = False) -> None:
        """Say something at the bottom of the screen, until the next key."""
        if words and self.room is not None and self.room.is_attached:
            self.room.tell(words, warning=warning)

    def _refresh_room(self) -> None:
        if self.room is not None:
            self.room.refresh_all()

    def _refresh_top(self) -> None:
        if self.room is not None and self.room.is_attached:
            self.room.refresh_top()

    # ---- safety -----------------------------------------------------------------------------------------------

    def record_failure(self, doing: str, error: BaseException) -> None:
        """Write down where the program failed: the lines of code, never what was in their variables."""
        self._failure_log = write_failure(doing, error)

    def _fatal_error(self) -> None:
        if self.desk is not None:
            self.desk.close()
        super()._fatal_error()

    def _write_crash(self, error: BaseException | None) -> Path | None:
        if error is not None:
            self.record_failure("running", error)
        return self._failure_log


def run(study_path: Path | None, *, mouse: bool = False, ascii_only: bool = False) -> int:
    """Open the bench and return the exit status.

    Parameters
    ----------
    study_path : Path or None
        A study file, a folder with one, or a data file; None asks for one.
    mouse : bool
        Report the mouse to the program. Off by default: then the terminal's own selecting works.
    ascii_only : bool
        Draw with ASCII characters only.

    Raises
    ------
    StudyError
        When the study can't be opened.
    """
    from multiprocessing import resource_tracker

    # A process can't be spawned while the screen has taken stderr over, unless this runs already.
    resource_tracker.ensure_running()
    browse_from = study_path if study_path is not None and bare_folder(study_path) else None
    desk = None if study_path is None or browse_from is not None else desk_for(study_path)
    chosen = desk.view.colours if desk is not None and desk.view.colours in THEME_NAMES else None
    look = detect_look(os.environ, theme=chosen, ascii_only=ascii_only)
    if desk is not None:
        remember_study(desk.study.path)
    app = CutbankApp(desk, look=look)
    app.browse_from = browse_from
    app.hint = 0 if desk is not None and walk_is_due() else None
    try:
        status = App.run(app, mouse=mouse)
    finally:
        if app.desk is not None:
            app.desk.close()
    if app.return_code:
        return app.return_code
    return status or 0
