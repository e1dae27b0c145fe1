"""`cutbank demo`: an invented study, in a fresh copy of its folder."""

from __future__ import annotations

import os
import shutil
import sys
import tempfile
from pathlib import Path
from typing import Final

from study.errors import BAD_STUDY, StudyError
from study.literal import clean, nearest, quoted

DEFAULT: Final = "hulls"  # one score with one cutoff


def demo_folder(name: str) -> Path:
    """The demo's folder as it was shipped: beside the packages in a checkout, inside this one when installed.

    Raises
    ------
    StudyError
        Status 2 when there is no such demo.
    """
    package = Path(__file__).resolve().parent.parent
    for folder in (package / "sample_data", package.parent / "sample_data"):
        names = sorted(entry.parent.name for entry in folder.glob("*/study.toml"))
        if name in names:
            return folder / name
        if names:
            near = nearest(name, names)
            raise StudyError(
                f"There is no demo named {quoted(name)}.",
                f"Did you mean {quoted(near)}?" if near else f"The demos are {', '.join(names)}.",
                BAD_STUDY,
            )
    raise StudyError("The demo studies are not installed.", "Install Cutbank again.", BAD_STUDY)


def open_demo(name: str, *, mouse: bool, ascii_only: bool) -> int:
    """Open a demo on the bench; without a terminal, run it and print the result.

    The bench works in a copy that stays, so that it can be opened again; a run without a terminal leaves nothing
    behind.

    Raises
    ------
    StudyError
        When there is no such demo, or no place for its copy.
    """
    shipped = demo_folder(name)
    if sys.stdin.isatty() and sys.stdout.isatty():
        from study.commands.bench import open_bench

        folder = fresh_copy(shipped, demos_folder())
        status = open_bench(folder / "study.toml", mouse=mouse, ascii_only=ascii_only)
        print(f"The demo's copy is in {clean(str(folder))}")
        return status
    from study.commands.run import run_study

    with tempfile.TemporaryDirectory(prefix="cutbank-demo-") as place:
        folder = fresh_copy(shipped, Path(place))
        return run_study(folder / "study.toml", out=None, as_json=False, ascii_only=ascii_only)


def demos_folder() -> Path:
    """Where copies of demos are kept: the person's data folder by the XDG convention."""
    kept = os.environ.get("XDG_DATA_HOME", "")
    data = Path(kept) if Path(kept).is_absolute() else Path.home() / ".local" / "share"
    return data / "cutbank" / "demo"


def fresh_copy(shipped: Path, place: Path) -> Path:
    """A copy of the demo's folder under a name not used before: hulls, hulls-2, hulls-3…

    Raises
    ------
    StudyError
        Status 2 when it can't be written.
    """
    try:
        place.mkdir(parents=True, exist_ok=True, mode=0o700)
        number = 1
        while True:
            folder = place / (shipped.name if number == 1 else f"{shipped.name}-{number}")
            try:
                folder.mkdir(mode=0o700)
                break
            except FileExistsError:
                number += 1
        for source in sorted(shipped.iterdir()):
            # What a run left beside the shipped study is no part of the demo.
            if source.is_file() and not source.name.endswith((".jsonl", ".plan.json")):
                shutil.copyfile(source, folder / source.name)
    except OSError as error:
        raise StudyError(
            f"{clean(str(place))}: the demo can't be copied there ({(error.strerror or 'unknown reason').lower()}).",
            "Set XDG_DATA_HOME to a folder that you may write to.",
            BAD_STUDY,
        ) from None
    return folder
