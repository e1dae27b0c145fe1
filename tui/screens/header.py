"""The two lines at the top of a screen: which study, in which state, and where we are."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Final

from study.document import Study
from study.errors import StudyError
from study.plan import departures, plan_path
from tui.keys import PLACES
from tui.look import Ink
from tui.screens.lines import Line, Part

if TYPE_CHECKING:
    from tui.app import CutbankApp

LEAST_WIDTH: Final = 80
LEAST_HEIGHT: Final = 24


def header(bench: CutbankApp, place: str, width: int, height: int) -> list[Line]:
    """The two lines at the top: which study, its state, and where we are among the screens."""
    desk = bench.desk
    if width < LEAST_WIDTH or height < LEAST_HEIGHT:
        first: Line = [(f"{width}×{height} here: made for {LEAST_WIDTH}×{LEAST_HEIGHT} or more", Ink.WARNING)]
    elif desk is None:
        first = [("Cutbank", Ink.STRONG), ("  no study is open", Ink.MUTED)]
    else:
        title = desk.study.title or desk.study.path.parent.name
        state = [(f"{data_name(bench)}  ", Ink.MUTED), *_state(bench)]
        first = ([(title, Ink.STRONG)], state)
    return [first, _names(place, width)]


def _names(place: str, width: int) -> Line:
    parts: list[Part] = []
    for other in PLACES:
        here = other.name == place
        ink = Ink.ACCENT if here else Ink.FAINT if other.awaits else Ink.MUTED
        # The mark, not only the colour, says where we are; it stands where a blank stands otherwise, so nothing jumps.
        words = f"{'▸' if here else ' '}{other.digit} {other.title}"
        if width < LEAST_WIDTH:
            words = f"{'▸' if here else ' '}{other.digit}" + (f" {other.title}" if here else "")
        parts.append((words + " ", ink))
    return parts


def data_name(bench: CutbankApp) -> str:
    """The data file's name."""
    return Path(bench.desk.study.data.path).name if bench.desk is not None else ""


def _state(bench: CutbankApp) -> list[Part]:
    """Progress, and whether the plan is sealed and the study saved, for the header."""
    desk = bench.desk
    if desk is None:
        return []
    # In the place of the plan's state, not beside it: a title that shrinks and grows with every read would flicker.
    parts: list[Part] = [
        (f"{bench.progress} ...", Ink.ACCENT) if bench.progress else _plan_state(bench, desk.study)
    ]
    if desk.why_read_only:
        parts.append(("  read only", Ink.WARNING))
    elif desk.problem:
        parts.append(("  not saved", Ink.WARNING))
    elif desk.saved is None:
        parts.append(("  not yet saved", Ink.MUTED))
    else:
        parts.append(("  saved" if desk.is_saved else "  saving", Ink.MUTED))
    return parts


def _plan_state(bench: CutbankApp, study: Study) -> Part:
    """Whether the plan is sealed, and once the data are there whether the study still says what it says."""
    if not plan_path(study).exists():
        return "unsealed", Ink.MUTED
    if bench.workbench is None:
        return "sealed", Ink.MUTED
    try:
        changed = departures(study, bench.workbench.assigned.fingerprint)
    except StudyError:
        return "plan unusable", Ink.WARNING
    return ("departs from plan", Ink.WARNING) if changed else ("as planned", Ink.MUTED)
