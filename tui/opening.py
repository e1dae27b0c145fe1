"""Which study a path means, and on which screen it opens."""

from __future__ import annotations

from pathlib import Path

from study.document import load_study, new_study
from study.errors import BAD_DATA, StudyError
from study.readiness import missing_parts
from tui.keys import BY_NAME
from tui.state import Desk


def first_place(desk: Desk | None) -> str:
    """The screen to begin on: where the person stood, else the effect when there is one to see, else the data."""
    if desk is None:
        return "data"
    if desk.view.screen in BY_NAME:
        return desk.view.screen
    return "data" if missing_parts(desk.study) else "effect"


def desk_for(path: Path) -> Desk:
    """The desk of a study file, of a folder with a study.toml, or of a data file.

    A data file gets the study that lies beside it, or a new one that is written with its first change.

    Raises
    ------
    StudyError
        When there is no such file, or it can't be read as a study.
    """
    if path.is_dir() and (path / "study.toml").is_file():
        path = path / "study.toml"
    if path.suffix.lower() == ".toml" or path.is_dir():
        return Desk(load_study(path))
    if not path.is_file():
        raise StudyError(f"{path}: there is no such file.", "Check the name.", BAD_DATA)
    beside = path.with_name("study.toml")
    own = path.with_name(f"{path.stem}.study.toml")
    for candidate in (beside, own):
        if candidate.is_file():
            study = load_study(candidate)
            if study.data_file.resolve() == path.resolve():
                return Desk(study)
    return Desk(new_study(path, own if beside.exists() else beside))


def bare_folder(path: Path) -> bool:
    """Whether a path is a folder without a study.toml: then the file browser begins in it."""
    return path.is_dir() and not (path / "study.toml").is_file()
