"""Where the person stood, kept beside the study, and which studies were open of late, kept in the person's state folder.

Both files hold names and numbers of the study only, never a row, and are readable by their owner alone.
"""

from __future__ import annotations

import json
import math
import os
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any, Final

from study.errors import StudyError
from study.saving import write_whole

_FORMAT: Final = "cutbank-view"
_KEPT: Final = 12


@dataclass(frozen=True, slots=True, kw_only=True)
class View:
    """Where the person stands; nothing in it changes an answer.

    Attributes
    ----------
    screen
        Name of the screen, "" before any was chosen.
    outcome
        The outcome on the Effect screen, "" for the first.
    widths
        By outcome, the width stood at when it is not the study's own.
    data_row
        The row of the column table.
    zoom
        Step of the Assignment screen's zoom.
    colours
        The theme that was chosen, "" for the one that fits the terminal.
    """

    screen: str = ""
    outcome: str = ""
    widths: Mapping[str, float]
    data_row: int = 0
    zoom: int = 0
    colours: str = ""

    def at_width(self, outcome: str, width: float | None) -> View:
        """The view with another width for an outcome; None stands at the study's own."""
        widths = {name: kept for name, kept in self.widths.items() if name != outcome}
        return replace(self, widths=widths if width is None else {**widths, outcome: width})


FRESH: Final = View(widths={})


def view_file(study_path: Path) -> Path:
    """The file beside the study that holds its view."""
    real = Path(os.path.realpath(study_path))
    return real.with_name(f".{real.name}.view")


def load_view(study_path: Path) -> View:
    """Read where the person stood; whatever is missing or unusable is as on a first opening."""
    kept = _read_json(view_file(study_path))
    if not isinstance(kept, dict) or kept.get("format") != _FORMAT:
        return FRESH
    widths = kept.get("widths")
    return View(
        screen=_text(kept.get("screen")),
        outcome=_text(kept.get("outcome")),
        widths={
            str(name): float(width)
            for name, width in (widths.items() if isinstance(widths, dict) else ())
            if isinstance(width, int | float) and not isinstance(width, bool) and math.isfinite(width) and width > 0
        },
        data_row=_count(kept.get("data_row")),
        zoom=_count(kept.get("zoom")),
        colours=_text(kept.get("colours")),
    )  # fmt: skip


def save_view(study_path: Path, view: View) -> None:
    """Keep where the person stands. A folder that can't be written to forgets it; that is not worth a message."""
    content = {"format": _FORMAT, "version": 1, **asdict(view)}
    try:
        write_whole(view_file(study_path), json.dumps(content, indent=1).encode())
    except StudyError:
        return


def state_folder() -> Path:
    """The person's folder for the program's state, by the XDG convention."""
    kept = os.environ.get("XDG_STATE_HOME", "")
    return (Path(kept) if Path(kept).is_absolute() else Path.home() / ".local" / "state") / "cutbank"


def recent_studies() -> tuple[Path, ...]:
    """Studies opened of late that are still there, the latest first."""
    kept = _read_json(state_folder() / "recent.json")
    paths = [Path(name) for name in kept if isinstance(name, str)] if isinstance(kept, list) else []
    return tuple(path for path in paths if path.is_file())


def remember_study(study_path: Path) -> None:
    """Put a study first among the recent ones."""
    here = study_path.absolute()
    paths = [here, *(path for path in recent_studies() if path != here)][:_KEPT]
    folder = state_folder()
    try:
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        write_whole(folder / "recent.json", json.dumps([str(path) for path in paths], indent=1).encode())
    except (OSError, StudyError):
        return  # a home that can't be written to only means that nothing is remembered


def _read_json(path: Path) -> Any:
    try:
        return json.loads(path.read_bytes())
    except (OSError, ValueError):
        return None


def _text(kept: object) -> str:
    return kept if isinstance(kept, str) else ""


def _count(kept: object) -> int:
    return kept if isinstance(kept, int) and not isinstance(kept, bool) and kept >= 0 else 0
