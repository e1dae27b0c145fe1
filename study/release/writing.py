"""A release as a folder: written whole or not at all, what leaves apart from what the checker keeps."""

from __future__ import annotations

import os
import platform
import secrets
import shutil
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Final

from study.document import Study
from study.errors import BAD_STUDY, StudyError
from study.guard.decisions import Decision
from study.ledger import record_act
from study.literal import clean
from study.release.earlier import Earlier, add_to_list, differences, entry_of
from study.release.escaping import file_name
from study.release.figure_files import figure_files
from study.release.material import Release, Table
from study.release.report_files import html_report, markdown_report
from study.release.table_files import csv_text, html_text, latex_text, markdown_text

LEAVES: Final = "outputs"
CHECKER: Final = "checker"
_PACKAGES: Final = ("numpy", "scipy", "duckdb", "pyreadstat", "shapely", "pyproj", "matplotlib")


def release_files(release: Release, earlier: tuple[Earlier, ...] = ()) -> dict[str, bytes]:
    """Every file of a release by its place in the folder."""
    names = _file_names(release)
    figures = {picture.name: figure_files(picture) for picture in release.pictures}
    texts: dict[str, str] = {
        "report.html": html_report(release, {name: files["svg"] for name, files in figures.items()}),
        "report.md": markdown_report(release, {name: f"figures/{names[name]}.png" for name in figures}),
        "versions.txt": versions_text(release),
        **release.texts,
    }
    for table in release.tables:
        place = f"tables/{names[table.name]}"
        texts |= {
            f"{place}.csv": csv_text(table),
            f"{place}.md": markdown_text(table),
            f"{place}.tex": latex_text(table),
            f"{place}.html": f'<!doctype html>\n<meta charset="utf-8">\n{html_text(table)}',
        }
    if earlier:
        texts["differences.csv"] = csv_text(_differences_table(release, earlier[-1]))
    files = {f"{LEAVES}/{name}": text.encode("utf-8", "replace") for name, text in texts.items()}
    for name, kinds in figures.items():
        files |= {f"{LEAVES}/figures/{names[name]}.{kind}": content for kind, content in kinds.items()}
    files[f"{CHECKER}/checkers-sheet.csv"] = csv_text(checkers_table(release.decisions)).encode(
        "utf-8", "replace"
    )
    files[f"{CHECKER}/READ-ME.txt"] = (
        f"For the person who checks this release. The sheet holds unrounded counts: it stays inside.\n"
        f"What is meant to leave is in the folder {LEAVES}.\n"
    ).encode()
    return files


def checkers_table(decisions: tuple[Decision, ...]) -> Table:
    """Each number with its unrounded rows and what was done to it."""
    return Table(
        name="checkers-sheet",
        title="For the checker",
        head=("number", "as it leaves", "rows, unrounded", "done", "why"),
        rows=tuple((d.what, d.released, d.rows, d.did, d.why) for d in decisions),
    )


def versions_text(release: Release) -> str:
    """What the numbers were made with."""
    lines = [f"cutbank {release.version}", f"python {platform.python_version()}"]
    for name in _PACKAGES:
        try:
            lines.append(f"{name} {version(name)}")
        except PackageNotFoundError:
            continue
    return "\n".join(lines) + "\n"


def write_release(
    release: Release, folder: Path, study: Study, fingerprint: str, earlier: tuple[Earlier, ...] = ()
) -> dict[str, bytes]:
    """Write the folder, and the release into the list of releases and the ledger.

    Everything is written beside the folder under another name first, and takes its place in one step. The list comes
    before that step: a release that might have left is never forgotten.

    Raises
    ------
    StudyError
        When the folder exists and is not empty, or something can't be written.
    """
    files = release_files(release, earlier)
    target = Path(os.path.realpath(folder))
    shown = clean(str(folder))
    try:
        if target.is_symlink() or (target.exists() and (not target.is_dir() or any(target.iterdir()))):
            raise StudyError(
                f"{shown}: is there already and not an empty folder.", "Choose another folder.", BAD_STUDY
            )
        temporary = target.with_name(f".{target.name}.{secrets.token_hex(4)}.part")
        temporary.mkdir(mode=0o700)
    except OSError as error:
        raise _unwritable(shown, error) from None
    try:
        for name, content in files.items():
            _write(temporary / name, content)
        _sync(temporary)
        line = entry_of(release, study, fingerprint, target)
        add_to_list(study, line)
        record_act(
            study,
            "release",
            {"folder": target.name, "numbers": len(release.numbers)},
            version=release.version,
        )
        temporary.replace(target)
        _sync(target.parent)
    except OSError as error:
        raise _unwritable(shown, error) from None
    finally:
        shutil.rmtree(temporary, ignore_errors=True)
    return files


def _write(path: Path, content: bytes) -> None:
    path.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
    descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_NOFOLLOW, 0o600)
    with os.fdopen(descriptor, "wb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())


def _sync(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    except OSError:
        pass  # some file systems can't sync a folder
    finally:
        os.close(descriptor)


def _file_names(release: Release) -> dict[str, str]:
    """A different file name for each table and picture, whatever the columns are called."""
    found: dict[str, str] = {}
    for thing in (*release.tables, *release.pictures):
        if thing.name in found:
            continue
        plain, number = file_name(thing.name), 1
        name = plain
        while name.casefold() in {other.casefold() for other in found.values()}:
            number += 1
            name = f"{plain}-{number}"
        found[thing.name] = name
    return found


def _differences_table(release: Release, last: Earlier) -> Table:
    return Table(
        name="differences",
        title="Against the last release",
        head=("number", "then", "now"),
        rows=tuple((d.where, d.before, d.now) for d in differences(last.numbers, release.numbers)),
    )


def _unwritable(shown: str, error: OSError) -> StudyError:
    return StudyError(
        f"{shown}: can't be written ({(error.strerror or 'unknown reason').lower()}).",
        "Choose a new folder in one that exists and that you may write to.",
        BAD_STUDY,
    )
